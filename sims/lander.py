"""A lander: a place on the Moon's surface among the stars, carried round by the Moon's rotation.

Stands below `sims.vantage`, beside `sims.site` for the Earth. The Moon is a sphere of its mean
radius, from which heights are counted: its flattening (1 in 830, 2 km) and the slope of the
ground are left out, so the zenith is the direction from the Moon's centre.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from astropy.time import Time
from numpy.typing import NDArray

from sims.config import LunarSurface
from sims.constants import MOON_MEAN_RADIUS_KM, MOON_ROTATION_DEG_PER_DAY
from sims.errors import InputError

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class LanderTrack:
    """A lander carried round by the Moon.

    Parameters
    ----------
    position_km, velocity_km_per_s : ndarray[time, axis]
        Relative to the Moon's centre, ICRS axes, km and km/s.
    zenith, north : ndarray[time, axis]
        Unit vectors up and to the Moon's north, ICRS axes.
    """

    position_km: FloatArray
    velocity_km_per_s: FloatArray
    zenith: FloatArray
    north: FloatArray


def lander_track(site: LunarSurface, times: Time, axes: FloatArray) -> LanderTrack:
    """Carry a lander round with the Moon.

    Parameters
    ----------
    site : LunarSurface
        Selenographic latitude and east longitude (mean-Earth axes), and height over the mean
        radius.
    times : Time[time]
        The instants of `axes`, in any scale.
    axes : ndarray[time, axis, axis]
        Rows are the Moon-fixed mean-Earth axes as ICRS unit vectors: towards longitude 0 and
        90 deg on the equator, and to the north pole.

    Returns
    -------
    LanderTrack
        The velocity is that of the mean rotation about the pole of the moment: the monthly
        nutation of the pole is left out, 5 parts in 10 000 or 2 mm/s against DE421.

    Raises
    ------
    InputError
        If there are not as many axes as instants.
    """
    if axes.shape != (*times.shape, 3, 3):
        raise InputError(f"axes: of shape {axes.shape} for {times.size} instants; each needs its own three axes")
    latitude, longitude = np.deg2rad(site.latitude_deg), np.deg2rad(site.longitude_deg)
    parallel = np.array([np.cos(longitude), np.sin(longitude), 0.0])
    pole = np.array([0.0, 0.0, 1.0])
    zenith = (np.cos(latitude) * parallel + np.sin(latitude) * pole) @ axes
    north = (np.cos(latitude) * pole - np.sin(latitude) * parallel) @ axes
    position_km = (MOON_MEAN_RADIUS_KM + site.height_m * 1e-3) * zenith
    rate_rad_per_s = np.deg2rad(MOON_ROTATION_DEG_PER_DAY) / 86_400.0
    return LanderTrack(
        position_km=position_km,
        velocity_km_per_s=np.cross(rate_rad_per_s * axes[:, 2], position_km),
        zenith=zenith,
        north=north,
    )
