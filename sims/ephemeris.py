"""Time scales, and where the Earth and the Sun are as seen from the Moon.

Stands at the foot of the geometry: orbits, sites and frames take their time from here.
Vectors are on ICRS axes, in km. Places of bodies are geometric: neither light time nor
aberration is applied, which leaves up to 21 arcsec in the direction of the Sun and 1 arcsec
in that of the Earth.
"""

from __future__ import annotations

import struct
import warnings
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import astropy.units as u
import erfa
import numpy as np
from astropy.coordinates import get_body_barycentric
from astropy.time import Time
from astropy.utils import iers
from jplephem.spk import SPK
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline

from sims.errors import InputError, raise_if_any

NODE_STEP_S = 21_600.0  # between nodes of slow functions of time; the error this leaves is in `smooth_in_time`
_FEWEST_NODES = 8
# NAIF numbers: solar-system barycentre, Earth-Moon barycentre, Sun, Moon, Earth; frame 1 has the axes of ICRS.
_SSB, _EMB, _SUN, _MOON, _EARTH = 0, 3, 10, 301, 399
_ICRS_FRAME = 1
# Common knowledge, rounded outwards: perigee 356 400, apogee 406 700 km; perihelion 147.1, aphelion 152.1 million km.
_DISTANCE_KM = {"Earth": (350_000.0, 412_000.0), "Sun": (146.0e6, 153.5e6)}


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
    with offline_time_scales():
        tt = times.tt
    return np.asarray(((tt.jd1 - tt.jd1[0]) + (tt.jd2 - tt.jd2[0])) * 86_400.0)


def smooth_in_time(
    function: Callable[[Time], NDArray[np.float64]], times: Time, node_step_s: float = NODE_STEP_S
) -> NDArray[np.float64]:
    """Evaluate a slow function of time at many instants through a cubic spline.

    Where there are no more instants than nodes, or they all coincide, the function itself is
    called. With the default step the directions of the Earth and Sun from the Moon are
    within 0.05 arcsec of the function itself (the tests measure it).

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
    with offline_time_scales():
        tt = times.tt
    elapsed = elapsed_s(tt)
    first, last = float(elapsed.min()), float(elapsed.max())
    count = max(int(np.ceil((last - first) / node_step_s)) + 1, _FEWEST_NODES)
    if elapsed.size <= count or first == last:
        return function(times)
    nodes = np.linspace(first, last, count)
    values = function(Time(tt.jd1[0], tt.jd2[0] + nodes / 86_400.0, format="jd", scale="tt"))
    return np.asarray(CubicSpline(nodes, values)(elapsed))


def earth_sun_from_moon_km(times: Time, kernel: Path | None) -> NDArray[np.float64]:
    """Geometric places of the Earth's and the Sun's centre from the Moon's.

    Parameters
    ----------
    times : Time[time]
        Instants in any scale.
    kernel : Path or None
        JPL ephemeris (SPK, ``.bsp``); None for astropy's built-in one (ERFA epv00 and moon98).

    Returns
    -------
    ndarray[time, body, axis]
        Earth (body 0) and Sun (body 1), ICRS axes, km. The built-in one is within 12 arcsec
        (20 km) of DE421 for the Earth and 0.1 arcsec for the Sun, 2027 to 2030.

    Raises
    ------
    InputError
        If the kernel cannot be read, lacks a body, or does not cover the instants.
    """
    with offline_time_scales():
        tdb = times.tdb
    if kernel is not None:
        return _from_kernel(tdb, kernel)
    earth, moon, sun = (
        get_body_barycentric(body, tdb, ephemeris="builtin").xyz.to_value(u.km).T for body in ("earth", "moon", "sun")
    )
    return np.stack([earth - moon, sun - moon], axis=1)


def _from_kernel(tdb: Time, path: Path) -> NDArray[np.float64]:
    problems: list[str] = []
    try:
        with SPK.open(str(path)) as kernel:
            earth, moon, emb, sun = (
                _segment_km(kernel, tdb, *pair, problems)
                for pair in ((_EMB, _EARTH), (_EMB, _MOON), (_SSB, _EMB), (_SSB, _SUN))
            )
    # What jplephem lets through of a file that is none, is cut short or is damaged.
    except (OSError, ValueError, TypeError, IndexError, struct.error) as error:
        raise InputError(
            f"observation.ephemeris: {path} cannot be read as a JPL kernel (.bsp) of Earth, Moon and Sun: {error}"
        ) from None
    raise_if_any([f"observation.ephemeris: {path} {problem}" for problem in problems])
    places = np.stack([earth - moon, sun - emb - moon], axis=1)
    for body, (name, (least, most)) in enumerate(_DISTANCE_KM.items()):
        distance = np.linalg.norm(places[:, body], axis=-1)
        if not ((distance > least) & (distance < most)).all():
            problems.append(
                f"is damaged or no ephemeris of the Moon: the {name} lies {distance.min():.0f} to "
                f"{distance.max():.0f} km from it; {least:.0f} to {most:.0f} km are possible"
            )
    raise_if_any([f"observation.ephemeris: {path} {problem}" for problem in problems])
    return places


def _segment_km(kernel: SPK, tdb: Time, centre: int, body: int, problems: list[str]) -> NDArray[np.float64]:
    """Place of a body from a centre; several segments of a pair may follow one another in time."""
    segments = [
        segment
        for segment in kernel.segments
        if (segment.center, segment.target, segment.frame) == (centre, body, _ICRS_FRAME)
    ]
    jd1, jd2 = np.atleast_1d(tdb.jd1), np.atleast_1d(tdb.jd2)
    days = jd1 + jd2
    place_km = np.zeros((len(days), 3))
    covered = np.zeros(len(days), dtype=bool)
    for segment in segments:
        inside = (days >= segment.start_jd) & (days <= segment.end_jd)
        if inside.any():
            place_km[inside] = segment.compute(jd1[inside], jd2[inside])[:3].T
            covered |= inside
    if not segments:
        problems.append(f"has no segment of body {body} from {centre} (NAIF numbers) on ICRS axes")
    elif not covered.all():
        spans = " and ".join(f"{_date(segment.start_jd)} to {_date(segment.end_jd)}" for segment in segments)
        problem = f"covers {spans} (TDB); the samples reach from {_date(days.min())} to {_date(days.max())}"
        # All bodies of a kernel mostly share one span: it is told once.
        problems += [] if problem in problems else [problem]
    return place_km


def _date(jd: float) -> str:
    return str(Time(jd, format="jd", scale="tdb").iso[:16])
