"""The quiet Sun and the Earth as radio sources: brightness, size, flux density, and what an antenna receives.

The Sun is a disk of even brightness. Its brightness is a straight line in ln T over ln f through
what has been published at metre waves (below), its edge the level where the corona's plasma
frequency is the frequency itself. Bursts, which outshine the quiet Sun by orders of magnitude,
and man-made or auroral noise of the Earth are no part of it. For a source behind the limb the
transmission comes from `sims.diffraction`.

Published brightness at the disk's centre:

* 34.5 MHz: 1.0e5 to 4.5e5 K (Subramanian 2004), disk of 39 to 66 arcmin
* 38.5 to 73.8 MHz: 0.6e5 to 2.5e5 K at solar minimum (Clark Lake 1986)
* 127 MHz: 9e5 K (Borkowski 1982)
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from sims.constants import (
    AU_KM,
    BOLTZMANN_J_PER_K,
    EARTH_EQUATORIAL_RADIUS_KM,
    SPEED_OF_LIGHT_M_PER_S,
    SUN_RADIUS_KM,
)
from sims.errors import InputError

FloatArray = NDArray[np.float64]
LOWEST_MHZ, HIGHEST_MHZ = 20.0, 200.0  # of use here; the published values lie within 34.5 to 127 MHz
JANSKY = 1e-26  # W m^-2 Hz^-1

# Frequency, MHz, and the published range of brightness, K; the range of 1986 stands at both ends of its band.
PUBLISHED_SUN = np.array([(34.5, 1.0e5, 4.5e5), (38.5, 0.6e5, 2.5e5), (73.8, 0.6e5, 2.5e5), (127.0, 9e5, 9e5)])
_LN_MIDDLE = 0.5 * np.log(PUBLISHED_SUN[:, 1:]).sum(axis=1)
_SLOPE, _LEVEL = np.polyfit(np.log(PUBLISHED_SUN[:, 0]), _LN_MIDDLE, 1)
_LN_ENDS = np.log(PUBLISHED_SUN[:, 1:]) - (_LEVEL + _SLOPE * np.log(PUBLISHED_SUN[:, :1]))
# Root mean square distance of the ends of the published ranges from the line, 2.3 either way: the cycle of the Sun and
# the spread between authors.
SUN_FACTOR = float(np.exp(np.sqrt(np.mean(_LN_ENDS**2))))

# Electron density of the corona, 4.2e4 x 10^(4.32 / rho) cm^-3 at rho solar radii: Newkirk 1961, ApJ 133, 983 (from
# memory; the tests hold the radius it gives against Subramanian 2004).
_DENSITY_PER_CM3, _DENSITY_DECADES = 4.2e4, 4.32
_PLASMA_MHZ = 8.97866e-3  # plasma frequency of one electron per cm^3 (CODATA 2018)

EARTH_DISK_K = 270.0
EARTH_DISK_RANGE_K = (250.0, 290.0)


@dataclass(frozen=True)
class SunDisk:
    """The quiet Sun at some frequencies.

    Attributes
    ----------
    brightness_k, lowest_k, highest_k : ndarray[...]
        Rayleigh-Jeans brightness temperature, K, and the range about it to one standard
        deviation of what is published (a factor of 2.3 either way).
    radius_rad : ndarray[...]
        Angular radius, rad; good to a quarter (39 to 66 arcmin published at 34.5 MHz).
    solid_angle_sr : ndarray[...]
        Of the disk, sr.
    flux_density_jy : ndarray[...]
        Both polarisations together, Jy.
    """

    brightness_k: FloatArray
    lowest_k: FloatArray
    highest_k: FloatArray
    radius_rad: FloatArray
    solid_angle_sr: FloatArray
    flux_density_jy: FloatArray


def quiet_sun(frequency_mhz: ArrayLike, distance_km: ArrayLike = AU_KM) -> SunDisk:
    """The quiet Sun at some frequencies.

    Parameters
    ----------
    frequency_mhz : array_like[...]
        Frequency, MHz, within 20 to 200; outside 34.5 to 127 nothing published is used.
    distance_km : array_like[...]
        From the Sun's centre, km; broadcast against `frequency_mhz`.

    Returns
    -------
    SunDisk

    Raises
    ------
    InputError
        If a frequency lies outside 20 to 200 MHz or a distance inside the disk.
    """
    frequency, distance = np.broadcast_arrays(_checked_mhz(frequency_mhz), np.asarray(distance_km, dtype=float))
    brightness = np.exp(_LEVEL + _SLOPE * np.log(frequency))
    density = (frequency / _PLASMA_MHZ) ** 2
    solar_radii = _DENSITY_DECADES / np.log10(density / _DENSITY_PER_CM3)
    radius = _angular_radius_rad(solar_radii * SUN_RADIUS_KM, distance)
    solid_angle = disk_solid_angle_sr(radius)
    return SunDisk(
        brightness_k=brightness,
        lowest_k=brightness / SUN_FACTOR,
        highest_k=brightness * SUN_FACTOR,
        radius_rad=radius,
        solid_angle_sr=solid_angle,
        flux_density_jy=flux_density_jy(frequency, brightness, solid_angle),
    )


def _checked_mhz(frequency_mhz: ArrayLike) -> FloatArray:
    frequency = np.asarray(frequency_mhz, dtype=float)
    outside = frequency[~((frequency >= LOWEST_MHZ) & (frequency <= HIGHEST_MHZ))]
    if outside.size:
        raise InputError(
            f"frequency_mhz: {outside.size} values, the first {outside.flat[0]:g}, lie outside {LOWEST_MHZ:g} to "
            f"{HIGHEST_MHZ:g} MHz, where the Sun's and the Earth's disks are described"
        )
    return frequency


def _angular_radius_rad(radius_km: ArrayLike, distance_km: FloatArray) -> FloatArray:
    radius = np.asarray(radius_km, dtype=float)
    if not np.all((distance_km > radius) & (distance_km < np.inf)):
        raise InputError("distance_km: every distance must be finite and greater than the radius of the body")
    return np.asarray(np.arcsin(radius / distance_km))


def disk_solid_angle_sr(radius_rad: ArrayLike) -> FloatArray:
    """Solid angle of a disk of this angular radius, sr: 4 pi sin^2(radius / 2)."""
    return np.asarray(4.0 * np.pi * np.sin(0.5 * np.asarray(radius_rad, dtype=float)) ** 2)


def flux_density_jy(frequency_mhz: ArrayLike, brightness_k: ArrayLike, solid_angle_sr: ArrayLike) -> FloatArray:
    """Flux density of a small source, Jy: 2 k T f^2 / c^2 times its solid angle (Rayleigh-Jeans)."""
    per_metre = np.asarray(frequency_mhz, dtype=float) * 1e6 / SPEED_OF_LIGHT_M_PER_S
    spectral = 2.0 * BOLTZMANN_J_PER_K * np.asarray(brightness_k, dtype=float) * per_metre**2
    return np.asarray(spectral * np.asarray(solid_angle_sr, dtype=float) / JANSKY)


def earth_solid_angle_sr(distance_km: ArrayLike) -> FloatArray:
    """Solid angle of the Earth's disk, of its equatorial radius, from this distance of its centre, sr."""
    return disk_solid_angle_sr(_angular_radius_rad(EARTH_EQUATORIAL_RADIUS_KM, np.asarray(distance_km, dtype=float)))


def earth_disk_k(frequency_mhz: ArrayLike) -> FloatArray:
    """Thermal brightness of the Earth's disk.

    Parameters
    ----------
    frequency_mhz : array_like[...]
        Frequency, MHz, within 20 to 200.

    Returns
    -------
    ndarray[...]
        270 K at all of them: a black disk at the temperature of its land, 250 to 290 K. The
        sea is no black body there: by Fresnel's law it mirrors some nine tenths of the sky, so
        that below 100 MHz the disk is really the brighter, up to the sky's own brightness; and
        transmitters outshine all of it by orders of magnitude. Neither is included.

    Raises
    ------
    InputError
        If a frequency lies outside 20 to 200 MHz.
    """
    return np.full_like(_checked_mhz(frequency_mhz), EARTH_DISK_K)


def source_temperature_k(
    directivity: ArrayLike, excess_k: ArrayLike, solid_angle_sr: ArrayLike, transmission: ArrayLike = 1.0
) -> FloatArray:
    """Antenna temperature a small source adds (Kraus, Radio Astronomy).

    Parameters
    ----------
    directivity : array_like[...]
        Of the antenna towards the source; its mean over the sphere is 1.
    excess_k : array_like[...]
        Brightness temperature of the source less that of what it covers, K.
    solid_angle_sr : array_like[...]
        Of the source, sr; small beside the beam.
    transmission : array_like[...]
        Power that comes round the limb, or past it, over that without it: 1 in full view,
        10^(-loss/10) with the loss of `sims.diffraction`.

    Returns
    -------
    ndarray[...]
        directivity x excess x solid angle / (4 pi) x transmission, K.
    """
    gain, excess, solid_angle, share = (
        np.asarray(value, dtype=float) for value in (directivity, excess_k, solid_angle_sr, transmission)
    )
    if not np.all((gain >= 0.0) & (solid_angle >= 0.0) & (share >= 0.0)):
        raise InputError("directivity, solid_angle_sr and transmission: every value must be a number of at least 0")
    return np.asarray(gain * excess * solid_angle * share / (4.0 * np.pi))
