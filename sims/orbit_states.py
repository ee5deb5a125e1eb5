"""States of a spacecraft at any instant from an orbit file, interpolated as the file asks for.

Stands between the reader `sims.orbit_message` and `sims.view`.
"""

from __future__ import annotations

from math import factorial

import erfa
import numpy as np
from astropy.time import Time
from numpy.typing import NDArray

from sims.constants import MOON_GM_KM3_PER_S2
from sims.ephemeris import offline_time_scales
from sims.errors import raise_if_any
from sims.moon_frame import lunar_equator_axes
from sims.orbit import OrbitTrack, argument_of_latitude
from sims.orbit_message import OrbitMessage, OrbitSegment

FloatArray = NDArray[np.float64]
IndexArray = NDArray[np.intp]
LARGEST_ERROR_KM = 1.0  # of interpolation: less than a second of flight of a low orbiter
_J2000_JD = 2_451_545.0
_CHUNK = 65_536
_SLACK_S = 1e-6


def orbit_from_message(message: OrbitMessage, times: Time) -> OrbitTrack:
    """Follow an orbit file.

    Parameters
    ----------
    message : OrbitMessage
        From `sims.orbit_message.read_orbit_message`.
    times : Time[time]
        Instants in any scale.

    Returns
    -------
    OrbitTrack
        On ICRS axes; EME2000 is turned by the frame bias of IERS Conventions 2010, 23 mas. Each
        state lies on the polynomial through the nodes nearest to it in its segment. The
        phase is the argument of latitude of the orbit of the moment on the Moon's mean equator
        of the first instant.

    Raises
    ------
    InputError
        If an instant lies in no segment, or between states so far apart that the file's
        interpolation errs by an estimated kilometre or more (the estimate is good to a factor of
        three on ellipses of any shape, and exact on circles; the tests measure it).
    """
    with offline_time_scales():
        tt = times.tt
    position, velocity = np.full((2, len(tt), 3), np.nan)
    problems: list[str] = []
    for segment in message.segments:
        inside = (_seconds(tt, segment.start) >= -_SLACK_S) & (_seconds(tt, segment.stop) <= _SLACK_S)
        rows = np.flatnonzero(inside & np.isnan(position[:, 0]))
        if len(rows):
            position[rows], velocity[rows], error_km = _states(segment, tt[rows])
            problems += _wide_gaps(segment, tt[rows], error_km)
    outside = np.flatnonzero(np.isnan(position[:, 0]))
    if len(outside):
        problems.append(_uncovered(message, tt[outside]))
    raise_if_any([f"vantage.file: {message.path}: {problem}" for problem in problems])
    equator = lunar_equator_axes(tt[0])
    return OrbitTrack(position, velocity, argument_of_latitude(position, velocity, equator))


def _seconds(times: Time, zero: Time) -> FloatArray:
    return np.asarray(((times.jd1 - zero.jd1) + (times.jd2 - zero.jd2)) * 86_400.0)


def _uncovered(message: OrbitMessage, outside: Time) -> str:
    with offline_time_scales():
        spans = [
            f"{segment.start.utc.isot} to {segment.stop.utc.isot} (line {segment.line})" for segment in message.segments
        ]
        first, last = outside[0].utc.isot, outside[-1].utc.isot
    return (
        f"{len(outside)} samples from {first} to {last} UTC lie outside of its segments, which may be used from "
        f"{', '.join(spans)}; nothing is carried across or beyond"
    )


def _wide_gaps(segment: OrbitSegment, times: Time, error_km: FloatArray) -> list[str]:
    """What there is to say of states too far apart for the method, one line a gap."""
    at_s, nodes_s = _seconds(times, segment.times[0]), _seconds(segment.times, segment.times[0])
    wide = error_km > LARGEST_ERROR_KM
    gaps = np.clip(np.searchsorted(nodes_s, at_s[wide]) - 1, 0, len(nodes_s) - 2)
    return [
        f"line {segment.node_lines[gap + 1]}: {nodes_s[gap + 1] - nodes_s[gap]:.1f} s after the state of line "
        f"{segment.node_lines[gap]}, where {segment.method} of degree {segment.degree} errs by some "
        f"{error_km[wide][gaps == gap].max():.2g} km; up to {LARGEST_ERROR_KM:g} km is allowed: give closer states"
        for gap in np.unique(gaps)
    ]


def _states(segment: OrbitSegment, times: Time) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Place, motion and estimated error of the place, in chunks: memory stays in proportion to the samples."""
    nodes_s, at_s = _seconds(segment.times, segment.times[0]), _seconds(times, segment.times[0])
    position, velocity = np.empty((2, len(at_s), 3))
    error_km = np.empty(len(at_s))
    for start in range(0, len(at_s), _CHUNK):
        chunk = slice(start, start + _CHUNK)
        rows = _nearest_nodes(nodes_s, at_s[chunk], segment.nodes_needed)
        position[chunk], velocity[chunk] = _polynomial(segment, nodes_s, rows, at_s[chunk])
        error_km[chunk] = _error_km(segment, nodes_s, rows, at_s[chunk])
    if segment.frame in ("EME2000", "J2000"):
        bias = erfa.bp00(_J2000_JD, 0.0)[0]
        return position @ bias, velocity @ bias, error_km
    return position, velocity, error_km


def _nearest_nodes(nodes_s: FloatArray, at_s: FloatArray, count: int) -> IndexArray:
    """Indices of the window of nodes round each instant: ndarray[time, node]."""
    after = np.clip(np.searchsorted(nodes_s, at_s), 1, len(nodes_s) - 1)
    if count % 2:
        # An odd window has a node in its middle: the nearer one.
        middle = after - (at_s - nodes_s[after - 1] < nodes_s[after] - at_s)
        first = middle - count // 2
    else:
        first = after - count // 2
    return np.asarray(np.clip(first, 0, len(nodes_s) - count)[:, None] + np.arange(count))


def _polynomial(
    segment: OrbitSegment, nodes_s: FloatArray, rows: IndexArray, at_s: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Place and motion on the polynomial through the nodes of each window."""
    # Times in units of the window keep the products of many differences near one.
    unit_s = np.maximum(nodes_s[rows[:, -1]] - nodes_s[rows[:, 0]], 1e-9)[:, None]
    nodes, at = (nodes_s[rows] - nodes_s[rows[:, :1]]) / unit_s, (at_s[:, None] - nodes_s[rows[:, :1]]) / unit_s
    basis, slope = _lagrange(nodes, at)
    place, motion = segment.position_km[rows], segment.velocity_km_per_s[rows]
    if segment.method != "HERMITE":
        return np.einsum("tn,tna->ta", basis, place), np.einsum("tn,tna->ta", basis, motion)
    own_slope = _slope_at_own_node(nodes)
    away = at - nodes
    value, tangent = (1.0 - 2.0 * away * own_slope) * basis**2, away * basis**2
    value_rate = -2.0 * own_slope * basis**2 + (1.0 - 2.0 * away * own_slope) * 2.0 * basis * slope
    tangent_rate = basis**2 + away * 2.0 * basis * slope
    position = np.einsum("tn,tna->ta", value, place) + np.einsum("tn,tna->ta", tangent * unit_s, motion)
    velocity = np.einsum("tn,tna->ta", value_rate / unit_s, place) + np.einsum("tn,tna->ta", tangent_rate, motion)
    return position, velocity


def _error_km(segment: OrbitSegment, nodes_s: FloatArray, rows: IndexArray, at_s: FloatArray) -> FloatArray:
    """Estimated error of the interpolated place, km.

    Remainder of interpolation, prod (t - t_j) f^(n+1)/(n+1)!, each node twice for Hermite. The
    derivative is that of a circular orbit at the height of the lowest node or, if it is
    larger, what the states next to the window show: they should lie on its polynomial.
    """
    windows, window = np.unique(rows[:, 0], return_inverse=True)
    nodes = windows[:, None] + np.arange(rows.shape[1])
    radius_km = np.linalg.norm(segment.position_km[nodes], axis=-1).min(axis=1)
    unit_s = np.sqrt(radius_km**3 / MOON_GM_KM3_PER_S2)
    power = 2 if segment.method == "HERMITE" else 1

    def product(of: IndexArray, at: FloatArray) -> FloatArray:
        away = (at[:, None] - nodes_s[nodes[of]]) / unit_s[of, None]
        return np.asarray(np.prod(np.abs(away), axis=1) ** power)

    derivative_km = radius_km / factorial(segment.degree + 1)
    for beside in (windows - 1, windows + rows.shape[1]):
        there = np.flatnonzero((beside >= 0) & (beside < len(nodes_s)))
        if len(there):
            place, _ = _polynomial(segment, nodes_s, nodes[there], nodes_s[beside[there]])
            miss_km = np.linalg.norm(segment.position_km[beside[there]] - place, axis=1)
            seen_km = miss_km / product(there, nodes_s[beside[there]])
            derivative_km[there] = np.maximum(derivative_km[there], seen_km)
    return np.asarray(derivative_km[window] * product(window, at_s))


def _lagrange(nodes: FloatArray, at: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Lagrange's polynomials and their slopes: ndarray[time, node] twice."""
    count = nodes.shape[1]
    basis, slope = np.ones(nodes.shape), np.zeros(nodes.shape)
    for j in range(count):
        for k in range(count):
            if k == j:
                continue
            gap = nodes[:, j] - nodes[:, k]
            # The product's rule, before the factor itself is taken in.
            slope[:, j] = slope[:, j] * (at[:, 0] - nodes[:, k]) / gap + basis[:, j] / gap
            basis[:, j] *= (at[:, 0] - nodes[:, k]) / gap
    return basis, slope


def _slope_at_own_node(nodes: FloatArray) -> FloatArray:
    gaps = nodes[:, :, None] - nodes[:, None, :]
    own = np.eye(nodes.shape[1], dtype=bool)
    return np.asarray(np.where(own, 0.0, 1.0 / np.where(own, 1.0, gaps)).sum(axis=2))
