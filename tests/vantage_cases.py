"""Vantages and observations to test the geometry with, and the Earth and Sun by DE421."""

from __future__ import annotations

from datetime import UTC, datetime
from typing import Any

import de421
import numpy as np
import xarray as xr
from astropy.time import Time
from jplephem import Ephemeris
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from sims.config import Boresight, FixedBoresight, GroundSite, LunarOrbit, LunarSurface, Observation, VerticalBoresight
from sims.moon_frame import lunar_equator_axes

START = datetime(2027, 6, 1, tzinfo=UTC)
LIMB_DEG = 71.00998  # angular radius of the Moon from 100 km: asin(1737.4/1837.4)
MOON_RADIUS_KM = 1737.4
UP = VerticalBoresight(kind="vertical", azimuth_deg=0.0)
TWO_FIELDS = FixedBoresight(kind="fixed", directions_deg=((80.0, -30.0), (200.0, 45.0)), roll_deg=25.0, dwell_s=600.0)
Vector = NDArray[np.float64]


def observation(**changes: Any) -> Observation:
    settings: dict[str, Any] = {
        "start": START,
        "step_s": 10.0,
        "count": 707,
        "integration_hours": 100.0,
        "duty_cycle": 0.5,
        "require": (),
    }
    return Observation(**(settings | changes))


def orbit(boresight: Boresight = UP, **changes: float) -> LunarOrbit:
    elements = {"altitude_km": 100.0, "inclination_deg": 70.0, "node_deg": 15.0, "phase_deg": 0.0} | changes
    return LunarOrbit(kind="lunar-orbit", boresight=boresight, oblateness=False, **elements)


def site(boresight: Boresight = UP, **changes: float) -> GroundSite:
    place = {"latitude_deg": -26.7, "longitude_deg": 116.6, "height_m": 380.0, "horizon_deg": 0.0} | changes
    return GroundSite(kind="ground", boresight=boresight, **place)


def lander(boresight: Boresight = UP, **changes: float) -> LunarSurface:
    place = {"latitude_deg": -20.0, "longitude_deg": 110.0, "height_m": 0.0} | changes
    return LunarSurface(kind="lunar-surface", boresight=boresight, **place)


def orbit_about(normal: Vector, towards: Vector) -> LunarOrbit:
    """The orbit about a given normal (ICRS) that starts above a given direction in its plane."""
    axes = lunar_equator_axes(Time(START))
    x, y, z = axes @ normal
    node_rad = np.arctan2(x, -y)
    to_node = np.array([np.cos(node_rad), np.sin(node_rad), 0.0]) @ axes
    phase_rad = np.arctan2(towards @ np.cross(normal, to_node), towards @ to_node)
    return orbit(
        inclination_deg=float(np.rad2deg(np.arccos(z))),
        node_deg=float(np.rad2deg(node_rad)),
        phase_deg=float(np.rad2deg(phase_rad)),
    )


def unit(vectors: Vector) -> Vector:
    return np.asarray(vectors / np.linalg.norm(vectors, axis=-1, keepdims=True))


def de421_earth_sun_from_moon_km(labels: NDArray[np.datetime64]) -> Vector:
    jd = Time(labels, scale="utc").tdb.jd
    ephemeris = Ephemeris(de421)
    moon_from_earth = ephemeris.position("moon", jd).T
    moon = ephemeris.position("earthmoon", jd).T + moon_from_earth * ephemeris.moon_share
    return np.stack([-moon_from_earth, ephemeris.position("sun", jd).T - moon], axis=1)


def earth_and_sun_at(instant: datetime) -> Vector:
    label = np.array([instant.replace(tzinfo=None)], dtype="datetime64[ns]")
    return np.asarray(de421_earth_sun_from_moon_km(label)[0])


def antenna_axes(geometry: xr.Dataset) -> Vector:
    """ICRS directions of the antenna's x, y and z, one row each: ndarray[time, antenna axis, axis]."""
    return np.swapaxes(Rotation.from_quat(geometry["attitude"].values).as_matrix(), 1, 2)
