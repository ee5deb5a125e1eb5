"""How the Moon is turned: its pole, its equator and the axes fixed in it.

The IAU rotation model (Archinal et al. 2018): mean-Earth axes, the x axis towards the mean
sub-Earth point and z along the mean axis of rotation. From the principal axes of DE421,
turned to mean-Earth axes, they are 15.5 arcsec off at most in 2027 to 2030 and 18.4 in 1974 to
2050, by rotation about any axis (measured in the tests): 130 and 155 m on the ground.
"""

from __future__ import annotations

import numpy as np
from astropy.time import Time
from numpy.typing import NDArray

from sims.ephemeris import offline_time_scales, smooth_in_time

FloatArray = NDArray[np.float64]
_J2000 = 2_451_545.0

# Rotation series of the Moon, Archinal et al. 2018, Celest. Mech. Dyn. Astron. 130, 22 (from memory; the tests hold it
# against the librations of DE421): angles E1 to E13 at J2000 and their rates per day, and the terms of the
# pole and of the meridian.
_ANGLE_DEG = np.array(
    [125.045, 250.089, 260.008, 176.625, 357.529, 311.589, 134.963, 276.617, 34.226, 15.134, 119.743, 239.961, 25.053]
)
_RATE_DEG_PER_DAY = np.array(
    [
        *(-0.0529921, -0.1059842, 13.0120009, 13.3407154, 0.9856003, 26.4057084, 13.0649930),
        *(0.3287146, 1.7484877, -0.1589763, 0.0036096, 0.1643573, 12.9590088),
    ]
)
_RA_SIN_DEG = np.array([-3.8787, -0.1204, 0.0700, -0.0172, 0, 0.0072, 0, 0, 0, -0.0052, 0, 0, 0.0043])
_DEC_COS_DEG = np.array([1.5419, 0.0239, -0.0278, 0.0068, 0, -0.0029, 0.0009, 0, 0, 0.0008, 0, 0, -0.0009])
_W_SIN_DEG = np.array(
    [3.5610, 0.1208, -0.0642, 0.0158, 0.0252, -0.0066, -0.0047, -0.0046, 0.0028, 0.0052, 0.0040, 0.0019, -0.0044]
)
_W_DEG = (38.3213, 13.17635815, -1.4e-12)  # at J2000, a day, a day squared


def _days(times: Time) -> FloatArray:
    with offline_time_scales():
        tdb = times.tdb
    return np.asarray((tdb.jd1 - _J2000) + tdb.jd2)


def moon_pole_deg(times: Time) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """The Moon's north pole of rotation.

    Parameters
    ----------
    times : Time[...]
        Instants in any scale.

    Returns
    -------
    right_ascension_deg, declination_deg : ndarray[...]
        ICRS, deg; the rotation series of Archinal et al. 2018, Celest. Mech. Dyn. Astron.
        130, 22, within 20 arcsec of DE421's.
    """
    days = _days(times)
    centuries = days / 36_525.0
    angles = np.deg2rad(_ANGLE_DEG + days[..., None] * _RATE_DEG_PER_DAY)
    right_ascension = 269.9949 + 0.0031 * centuries + np.sin(angles) @ _RA_SIN_DEG
    declination = 66.5392 + 0.0130 * centuries + np.cos(angles) @ _DEC_COS_DEG
    return np.asarray(right_ascension), np.asarray(declination)


def moon_fixed_axes(times: Time) -> FloatArray:
    """Axes fixed in the Moon.

    Parameters
    ----------
    times : Time[time]
        Instants in any scale.

    Returns
    -------
    ndarray[time, axis of the Moon, axis]
        Mean-Earth axes in rows, ICRS: to longitude and latitude zero, to 90 deg east, to the
        north pole. The pole and the librations of the series go through a spline, which
        leaves less than 0.001 arcsec; the even rotation does not.
    """
    slow = smooth_in_time(_slow_angles_deg, times)
    ra, dec, wobble = np.deg2rad(slow).T
    days = _days(times)
    turned = np.deg2rad(np.mod(_W_DEG[0] + _W_DEG[1] * days + _W_DEG[2] * days**2, 360.0)) + wobble
    node = np.stack([-np.sin(ra), np.cos(ra), np.zeros_like(ra)], axis=-1)
    pole = np.stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)], axis=-1)
    across = np.cross(pole, node)
    cosine, sine = np.cos(turned)[:, None], np.sin(turned)[:, None]
    return np.stack([cosine * node + sine * across, cosine * across - sine * node, pole], axis=1)


def _slow_angles_deg(times: Time) -> FloatArray:
    """Right ascension and declination of the pole, and what the meridian runs ahead of its mean: ndarray[time, 3]."""
    ra, dec = moon_pole_deg(times)
    angles = np.deg2rad(_ANGLE_DEG + _days(times)[:, None] * _RATE_DEG_PER_DAY)
    return np.stack([ra, dec, np.sin(angles) @ _W_SIN_DEG], axis=-1)


def selenographic(place: FloatArray, axes: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Latitude and longitude below a place.

    Parameters
    ----------
    place : ndarray[time, axis]
        From the Moon's centre, ICRS axes, of any length.
    axes : ndarray[time, axis of the Moon, axis]
        From `moon_fixed_axes`.

    Returns
    -------
    latitude_deg, longitude_deg : ndarray[time]
        Latitude of a sphere; longitude east, -180 to 180.
    """
    x, y, z = np.einsum("tij,tj->it", axes, place)
    return np.degrees(np.arctan2(z, np.hypot(x, y))), np.degrees(np.arctan2(y, x))


def lunar_equator_axes(instant: Time) -> NDArray[np.float64]:
    """Axes of the Moon's mean equator: first to its ascending node on the ICRS equator, third to its pole.

    Parameters
    ----------
    instant : Time
        One instant.

    Returns
    -------
    ndarray[axis of the equator, axis]
        Unit vectors in rows, ICRS axes. The first is the IAU node, at right ascension of
        the pole + 90 deg and declination 0.
    """
    right_ascension_deg, declination_deg = moon_pole_deg(instant)
    ra, dec = np.deg2rad(float(right_ascension_deg)), np.deg2rad(float(declination_deg))
    node = np.array([-np.sin(ra), np.cos(ra), 0.0])
    pole = np.array([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)])
    return np.stack([node, np.cross(pole, node), pole])
