"""Stretches of time in which something holds: found between samples, counted, overlapped, shared out.

Stands beside `sims.visibility`, whose depths below the limb go in here; `reduce.timeline`
builds the quiet windows of a campaign from what comes out.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline

from sims.errors import InputError, raise_if_any

FloatArray = NDArray[np.float64]
TimeArray = NDArray[np.datetime64]
_HALVINGS = 40  # of a step of hours: to well below a nanosecond


@dataclass(frozen=True)
class Windows:
    """Stretches of time, in order and apart.

    Parameters
    ----------
    start, stop : ndarray[window] of datetime64[ns]
        Of each window, UTC.
    first, last : datetime64[ns]
        The span that was looked at.
    """

    start: TimeArray
    stop: TimeArray
    first: np.datetime64
    last: np.datetime64

    @property
    def duration_s(self) -> FloatArray:
        """Length of each window, s; of one that is cut, the part within the span."""
        return _seconds(self.stop - self.start)

    @property
    def cut_at_start(self) -> NDArray[np.bool_]:
        """Whether a window was already open when the span began."""
        return np.asarray(self.start <= self.first)

    @property
    def cut_at_end(self) -> NDArray[np.bool_]:
        """Whether a window was still open when the span ended."""
        return np.asarray(self.stop >= self.last)

    @property
    def whole(self) -> NDArray[np.bool_]:
        """Whether both edges lie within the span."""
        return ~(self.cut_at_start | self.cut_at_end)

    @property
    def middle(self) -> TimeArray:
        """Middle of each window."""
        return np.asarray(self.start + (self.stop - self.start) // 2)

    @property
    def total_s(self) -> float:
        """Sum of all windows, s."""
        return float(self.duration_s.sum())

    def elapsed_s(self, times: TimeArray) -> FloatArray:
        """Time spent in windows from the start of the span to each of `times`, s."""
        since = _seconds(times - self.first)
        knots = _seconds(np.stack([self.start, self.stop], axis=1).ravel() - self.first)
        spent = np.stack([np.zeros(len(self.start)), self.duration_s], axis=1)
        spent += (np.cumsum(self.duration_s) - self.duration_s)[:, None]
        if not len(knots):
            return np.zeros(since.shape)
        return np.asarray(np.interp(since, knots, spent.ravel()))

    def share_s(self, edges: TimeArray) -> FloatArray:
        """Time in windows between each edge and the next, s: ndarray[edge] -> ndarray[edge - 1]."""
        # Where nothing is spent the interpolation may fall by its rounding.
        return np.maximum(np.diff(self.elapsed_s(edges)), 0.0)

    def overlap(self, other: Windows) -> Windows:
        """Stretches in which both hold, of two looked at over one span.

        Raises
        ------
        InputError
            If the spans differ.
        """
        if (self.first, self.last) != (other.first, other.last):
            raise InputError(
                f"windows: spans differ, {self.first} to {self.last} and {other.first} to {other.last}; give one"
            )
        edges = np.unique(np.concatenate([self.start, self.stop, other.start, other.stop]))
        middle = edges[:-1] + np.diff(edges) // 2
        both = self._hold(middle) & other._hold(middle)
        return Windows(edges[:-1][both], edges[1:][both], self.first, self.last)

    def _hold(self, times: TimeArray) -> NDArray[np.bool_]:
        begun = np.searchsorted(self.start, times, side="right")
        ended = np.searchsorted(self.stop, times, side="right")
        return np.asarray(begun > ended)


def windows(times: TimeArray, flag: NDArray[np.bool_]) -> Windows:
    """Windows of a condition of which only samples are known: edges halfway between them.

    Parameters
    ----------
    times : ndarray[time] of datetime64
        Instants of the samples, rising; at least two.
    flag : ndarray[time] of bool
        Whether the condition holds.

    Returns
    -------
    Windows
        Edges are up to half a step off; windows between samples are not seen.

    Raises
    ------
    InputError
        If times do not rise, or their number is not that of the flags or below two.
    """
    stamps = _checked(times, np.asarray(flag, dtype=float), "flag")
    at = np.flatnonzero(flag[1:] != flag[:-1])
    halfway = stamps[at] + (stamps[at + 1] - stamps[at]) // 2
    return _between(halfway, bool(flag[0]), stamps)


def depth_windows(times: TimeArray, depth: FloatArray) -> Windows:
    """Windows in which a smooth function of time is positive, such as a depth below the limb.

    Parameters
    ----------
    times : ndarray[time] of datetime64
        Instants of the samples, rising; at least two.
    depth : ndarray[time]
        Value of the function there, in any unit.

    Returns
    -------
    Windows
        Edges are roots of the cubic spline through the samples. Where three samples show a
        turn, its height between them is looked at as well, so that a window shorter than
        the step is found, except in the first and last step. From 100 km up, samples a
        minute apart give durations of eclipses to 0.2 s^2 over the duration, a millisecond
        for one of four minutes, where straight lines miss by over 5 s (the tests measure
        both). A kink, as of a tabulated horizon, costs up to a fifth of the step near it.

    Raises
    ------
    InputError
        As `windows`, or if a value is not finite.
    """
    stamps = _checked(times, depth, "depth")
    since = _seconds(stamps - stamps[0])
    curve = CubicSpline(since, depth)
    at, value = _with_turns(since, np.asarray(depth, dtype=float), curve)
    below = value > 0.0
    changes = np.flatnonzero(below[1:] != below[:-1])
    low, high, rising = at[changes], at[changes + 1], below[changes + 1]
    for _ in range(_HALVINGS):
        middle = 0.5 * (low + high)
        before = (curve(middle) > 0.0) != rising
        low, high = np.where(before, middle, low), np.where(before, high, middle)
    edges = stamps[0] + np.round(0.5 * (low + high) * 1e9).astype("timedelta64[ns]")
    return _between(edges, bool(below[0]), stamps)


def _with_turns(at: FloatArray, value: FloatArray, curve: CubicSpline) -> tuple[FloatArray, FloatArray]:
    """The samples, and between them the turns of the curve whose sign the samples beside them do not have."""
    before, after = value[1:-1] - value[:-2], value[2:] - value[1:-1]
    number = np.flatnonzero((before * after <= 0.0) & (before != after) & ((before > 0.0) != (value[1:-1] > 0.0))) + 1
    slope_before = before[number - 1] / (at[number] - at[number - 1])
    slope_after = after[number - 1] / (at[number + 1] - at[number])
    bend = (slope_after - slope_before) / (at[number + 1] - at[number - 1])
    # Vertex of the parabola through three samples, by Newton's divided differences.
    vertex = 0.5 * (at[number - 1] + at[number]) - slope_before / (2.0 * bend)
    height = curve(vertex)
    new = (height > 0.0) != (value[number] > 0.0)
    times, values = np.concatenate([at, vertex[new]]), np.concatenate([value, height[new]])
    order = np.argsort(times, kind="stable")
    return times[order], values[order]


def _between(edges: TimeArray, open_at_first: bool, stamps: TimeArray) -> Windows:
    """Windows from the instants of change; those open at an end of the span are closed there."""
    bounds = np.concatenate([stamps[:1] if open_at_first else stamps[:0], edges])
    if len(bounds) % 2:
        bounds = np.concatenate([bounds, stamps[-1:]])
    return Windows(bounds[0::2], bounds[1::2], stamps[0], stamps[-1])


def _checked(times: TimeArray, values: FloatArray, name: str) -> TimeArray:
    problems = []
    if len(times) != len(values) or len(times) < 2:
        problems.append(f"times, {name}: {len(times)} and {len(values)} samples; give as many of both, at least two")
    if np.isnat(times).any() or not (np.diff(times) > np.timedelta64(0)).all():
        problems.append("times: should rise from sample to sample")
    if not np.isfinite(values).all():
        problems.append(f"{name}: {int((~np.isfinite(values)).sum())} values are not finite")
    raise_if_any(problems)
    return np.asarray(times.astype("datetime64[ns]"))


def _seconds(difference: NDArray[np.timedelta64]) -> FloatArray:
    return np.asarray(difference / np.timedelta64(1, "ns") / 1e9)
