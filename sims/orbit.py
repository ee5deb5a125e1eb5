"""Where things are round the Moon: its pole, the Earth and the Sun seen from it, and a circular orbit.

Stands below `sims.vantage`, which turns these places into what the antenna sees and what is
hidden from it. Vectors are on ICRS axes, in km, from the Moon's centre. Places of bodies are
geometric: neither light time nor aberration is applied, which leaves up to 21 arcsec in the
direction of the Sun and 1 arcsec in that of the Earth.
"""

from __future__ import annotations

import warnings
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass

import astropy.units as u
import erfa
import numpy as np
from astropy.coordinates import get_body_barycentric
from astropy.time import Time
from astropy.utils import iers
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline

from sims.config import LunarOrbit
from sims.constants import MOON_GM_KM3_PER_S2, MOON_MEAN_RADIUS_KM

NODE_STEP_S = 21_600.0  # between nodes of slow functions of time; the error this leaves is in `smooth_in_time`
_FEWEST_NODES = 8
_J2000 = 2_451_545.0

# Rotation series of the Moon, Archinal et al. 2018, Celest. Mech. Dyn. Astron. 130, 22 (from memory; the tests hold it
# against the librations of DE421): angles E1 to E13 at J2000 and their rates per day, and the terms of the pole.
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


@dataclass(frozen=True)
class OrbitTrack:
    """A spacecraft along its orbit.

    Parameters
    ----------
    position_km : ndarray[time, axis]
        From the Moon's centre, ICRS axes, km.
    forward : ndarray[time, axis]
        Unit vector of the motion relative to the Moon's centre, ICRS axes.
    phase : ndarray[time]
        Argument of latitude over a whole turn, 0 to 1 (below 1), from the ascending node.
    """

    position_km: NDArray[np.float64]
    forward: NDArray[np.float64]
    phase: NDArray[np.float64]


@contextmanager
def offline_time_scales() -> Iterator[None]:
    """Convert time scales with the installed leap seconds alone: nothing is fetched, far years pass in silence.

    At the first use of UTC astropy would fetch a new table once the installed one nears its
    end, and ERFA calls years well beyond it dubious at each conversion; the geometry product
    states instead, once, that no further leap second is assumed.
    """
    with warnings.catch_warnings(), iers.conf.set_temp("auto_download", False):
        warnings.filterwarnings("ignore", message=".*dubious year", category=erfa.ErfaWarning)
        yield


def elapsed_s(times: Time) -> NDArray[np.float64]:
    """Seconds (TT) since the first of `times`.

    Parameters
    ----------
    times : Time[time]
        Instants in any scale.

    Returns
    -------
    ndarray[time]
        Elapsed time, s.
    """
    tt = times.tt
    return np.asarray(((tt.jd1 - tt.jd1[0]) + (tt.jd2 - tt.jd2[0])) * 86_400.0)


def smooth_in_time(
    function: Callable[[Time], NDArray[np.float64]], times: Time, node_step_s: float = NODE_STEP_S
) -> NDArray[np.float64]:
    """Evaluate a slow function of time at many instants through a cubic spline.

    Where there are no more instants than nodes the function itself is called. With the
    default step the directions of the Earth and Sun from the Moon are within 0.05 arcsec of
    the function itself (the tests measure it).

    Parameters
    ----------
    function : callable
        Takes a Time[node] and returns ndarray[node, ...].
    times : Time[time]
        Instants in any scale and order.
    node_step_s : float
        Greatest step between nodes, s.

    Returns
    -------
    ndarray[time, ...]
        The function's values.
    """
    tt = times.tt
    elapsed = elapsed_s(times)
    first, last = float(elapsed.min()), float(elapsed.max())
    count = max(int(np.ceil((last - first) / node_step_s)) + 1, _FEWEST_NODES)
    if elapsed.size <= count:
        return function(times)
    nodes = np.linspace(first, last, count)
    values = function(Time(tt.jd1[0], tt.jd2[0] + nodes / 86_400.0, format="jd", scale="tt"))
    return np.asarray(CubicSpline(nodes, values)(elapsed))


def earth_sun_from_moon_km(times: Time) -> NDArray[np.float64]:
    """Geometric places of the Earth's and the Sun's centre from the Moon's.

    Parameters
    ----------
    times : Time[time]
        Instants in any scale.

    Returns
    -------
    ndarray[time, body, axis]
        Earth (body 0) and Sun (body 1), ICRS axes, km. From astropy's built-in ephemeris
        (ERFA epv00 and moon98); against DE421 the Earth is within 12 arcsec and the Sun
        within 0.1 arcsec.
    """
    with offline_time_scales():
        tdb = times.tdb
    earth, moon, sun = (
        get_body_barycentric(body, tdb, ephemeris="builtin").xyz.to_value(u.km).T for body in ("earth", "moon", "sun")
    )
    return np.stack([earth - moon, sun - moon], axis=1)


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
        130, 22, good to about 15 arcsec.
    """
    with offline_time_scales():
        tdb = times.tdb
    days = np.asarray((tdb.jd1 - _J2000) + tdb.jd2)
    centuries = days / 36_525.0
    angles = np.deg2rad(_ANGLE_DEG + days[..., None] * _RATE_DEG_PER_DAY)
    right_ascension = 269.9949 + 0.0031 * centuries + np.sin(angles) @ _RA_SIN_DEG
    declination = 66.5392 + 0.0130 * centuries + np.cos(angles) @ _DEC_COS_DEG
    return np.asarray(right_ascension), np.asarray(declination)


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


def circular_period_s(altitude_km: float) -> float:
    """Period of a circular orbit round a point-mass Moon.

    Parameters
    ----------
    altitude_km : float
        Height above the Moon's mean radius, km.

    Returns
    -------
    float
        Period, s; Kepler's third law.
    """
    return float(2.0 * np.pi * np.sqrt((MOON_MEAN_RADIUS_KM + altitude_km) ** 3 / MOON_GM_KM3_PER_S2))


def circular_orbit(orbit: LunarOrbit, times: Time) -> OrbitTrack:
    """Move along a circular orbit fixed in inertial space.

    Parameters
    ----------
    orbit : LunarOrbit
        Elements at the first of `times`. Inclination and node refer to the Moon's mean
        equator of that instant; the node is counted eastward along it from its ascending
        node on the ICRS equator, the phase from the orbit's ascending node.
    times : Time[time]
        Instants in any scale.

    Returns
    -------
    OrbitTrack
        Places, directions of motion and phases. The Moon is a point mass: nothing
        perturbs the orbit.
    """
    equator = lunar_equator_axes(times[0])
    node, inclination = np.deg2rad(orbit.node_deg), np.deg2rad(orbit.inclination_deg)
    to_node = np.array([np.cos(node), np.sin(node), 0.0]) @ equator
    to_crest = (
        np.array([-np.sin(node) * np.cos(inclination), np.cos(node) * np.cos(inclination), np.sin(inclination)])
        @ equator
    )
    turns = orbit.phase_deg / 360.0 + elapsed_s(times) / circular_period_s(orbit.altitude_km)
    phase = turns - np.floor(turns)
    phase = np.where(phase < 1.0, phase, 0.0)
    cosine, sine = np.cos(2.0 * np.pi * phase)[:, None], np.sin(2.0 * np.pi * phase)[:, None]
    return OrbitTrack(
        position_km=(MOON_MEAN_RADIUS_KM + orbit.altitude_km) * (cosine * to_node + sine * to_crest),
        forward=cosine * to_crest - sine * to_node,
        phase=phase,
    )
