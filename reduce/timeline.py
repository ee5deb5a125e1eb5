"""When it is quiet: windows in which the Earth, the Sun or both are hidden, by orbit, by day and by month.

`timeline` lays the geometry of a whole span out finely, whatever the step and the conditions of
the observation, and finds the windows between its samples. `reduce.report.timeline_page`
prints and writes what comes out, `reduce.report.timeline_plot` draws it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path
from typing import Literal

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from sims.config import Config, Observation
from sims.config_load import load_config
from sims.errors import InputError
from sims.vantage import full_geometry
from sims.windows import FloatArray, TimeArray, Windows, depth_windows

STEP_S = 60.0  # at this step the cubic between samples is good to a millisecond (tests of `sims.windows`)
MOST_SAMPLES = 3_000_000  # about 1 GB of geometry
_IN_ORBIT = {"earth": "Earth hidden", "sun": "Sun hidden", "both": "Both hidden"}
_ON_THE_MOON = {"earth": "Earth below horizon", "sun": "Sun below horizon", "both": "Both below horizon"}
_ON_EARTH = {"sun": "Sun below horizon"}
TITLES = {
    "lunar-orbit": _IN_ORBIT,
    "lunar-orbit-file": _IN_ORBIT,
    "lunar-surface": _ON_THE_MOON,
    "ground": _ON_EARTH,
}


@dataclass(frozen=True)
class Row:
    """One kind of quiet.

    Parameters
    ----------
    kind : str
        ``earth``, ``sun`` or ``both``.
    title : str
        What it means at this vantage.
    windows : Windows
        The whole disk (both whole disks) hidden.
    partly : Windows or None
        At least a part of the disk hidden; None for both bodies.
    """

    kind: str
    title: str
    windows: Windows
    partly: Windows | None


@dataclass(frozen=True)
class Turns:
    """The span cut into orbits, days or calendar months.

    Parameters
    ----------
    unit : str
        ``orbit``, ``day`` or ``month``.
    edges : ndarray[turn + 1] of datetime64[ns]
        From each edge to the next is a turn; the first is number 1. Orbits begin at the
        ascending node.
    whole : ndarray[turn] of bool
        Whether the turn lies wholly within the span.
    """

    unit: str
    edges: TimeArray
    whole: NDArray[np.bool_]

    def number(self, times: TimeArray) -> NDArray[np.int64]:
        """Number of the turn that each of `times` lies in."""
        found = np.searchsorted(self.edges, times, side="right")
        return np.clip(found, 1, len(self.whole)).astype(np.int64)

    @property
    def middle(self) -> TimeArray:
        """Middle of each turn."""
        return np.asarray(self.edges[:-1] + np.diff(self.edges) // 2)


@dataclass(frozen=True)
class Timeline:
    """The quiet windows of a span.

    Parameters
    ----------
    rows : tuple of Row
        Kinds that apply at the vantage, of one span.
    turns : Turns
        Orbits, or days (UTC) where there are none.
    months : Turns
        Calendar months (UTC).
    times : ndarray[time] of datetime64[ns]
        Samples of the span.
    depth_deg : mapping of str to ndarray[time]
        Depth of each body's centre below the limb or horizon, deg, by kind.
    beta_deg : ndarray[time] or None
        Angle between Sun and orbital plane, deg; None where there is no orbit.
    day_below : Windows or None
        The Sun's centre up at the point below; its edges are the terminator crossings.
        None where there is no orbit.
    step_s : float
        Between samples, s.
    """

    rows: tuple[Row, ...]
    turns: Turns
    months: Turns
    times: TimeArray
    depth_deg: dict[str, FloatArray]
    beta_deg: FloatArray | None
    day_below: Windows | None
    step_s: float

    @property
    def first(self) -> np.datetime64:
        """Start of the span."""
        return self.rows[0].windows.first

    @property
    def last(self) -> np.datetime64:
        """End of the span."""
        return self.rows[0].windows.last

    @property
    def span_s(self) -> float:
        """Length of the span, s."""
        return float((self.last - self.first) / np.timedelta64(1, "ns")) / 1e9


def timeline(config: Config | Path) -> Timeline:
    """Find the quiet windows of a campaign.

    Parameters
    ----------
    config : Config or Path
        Whole configuration, or the TOML file of one. Of ``[observation]`` only the span
        from the first to the last sample counts: neither its step, unless that is finer,
        nor what it requires.

    Returns
    -------
    Timeline

    Raises
    ------
    InputError
        With every problem of the file, or if the span is empty or too long.
    """
    settings = load_config(config) if isinstance(config, Path) else config
    geometry = full_geometry(settings.vantage, fine_observation(settings.observation))
    return timeline_of(geometry, settings.vantage.kind)


def fine_observation(observation: Observation) -> Observation:
    """The same span, first sample to last, in equal steps of at most `STEP_S`, without conditions.

    Raises
    ------
    InputError
        If there is one sample only, or more than `MOST_SAMPLES` steps would be needed.
    """
    span_s = observation.step_s * (observation.count - 1)
    if span_s <= 0.0:
        raise InputError(f"observation.count: a timeline needs a span, at least 2 samples (got {observation.count})")
    steps = max(observation.count - 1, math.ceil(span_s / STEP_S))
    if steps > MOST_SAMPLES:
        raise InputError(
            f"observation: a timeline of {span_s / 86400.0:.0f} days takes {steps} samples; at most {MOST_SAMPLES} "
            f"({MOST_SAMPLES * STEP_S / 86400.0:.0f} days at {STEP_S:g} s) are allowed: shorten the span"
        )
    return observation.model_copy(update={"step_s": span_s / steps, "count": steps + 1, "require": ()})


def timeline_of(geometry: xr.Dataset, vantage_kind: str) -> Timeline:
    """Find the quiet windows of a geometry.

    Parameters
    ----------
    geometry : Dataset
        All samples of `sims.vantage.full_geometry`, without conditions.
    vantage_kind : str
        ``vantage.kind`` of the configuration: it says what applies.

    Returns
    -------
    Timeline
    """
    times = geometry["time"].values.astype("datetime64[ns]")
    titles = TITLES[vantage_kind]
    rows = []
    depths: dict[str, FloatArray] = {}
    for body in ("earth", "sun"):
        if body in titles:
            depth, radius = geometry[f"{body}_depth_rad"].values, geometry[f"{body}_radius_rad"].values
            whole, partly = depth_windows(times, depth - radius), depth_windows(times, depth + radius)
            rows.append(Row(body, titles[body], whole, partly))
            depths[body] = np.rad2deg(depth)
    if "both" in titles:
        rows.append(Row("both", titles["both"], rows[0].windows.overlap(rows[1].windows), None))
    in_orbit = titles is _IN_ORBIT
    return Timeline(
        rows=tuple(rows),
        turns=_orbits(times, geometry["orbit_phase"].values)
        if in_orbit
        else _turns("day", _calendar(times, "D"), times),
        months=_turns("month", _calendar(times, "M"), times),
        times=times,
        depth_deg=depths,
        beta_deg=np.rad2deg(geometry["beta_angle_rad"].values) if in_orbit else None,
        day_below=depth_windows(times, geometry["sun_elevation_rad"].values) if in_orbit else None,
        step_s=float((times[1] - times[0]) / np.timedelta64(1, "ns")) / 1e9,
    )


def _orbits(times: TimeArray, phase: FloatArray) -> Turns:
    """Orbits from ascending node to ascending node, the outer ones as far as the span goes."""
    turned = phase[0] + np.concatenate([[0.0], np.cumsum(np.mod(np.diff(phase), 1.0))])
    nodes = np.arange(math.ceil(turned[0]), math.floor(turned[-1]) + 1)
    since_ns = (times - times[0]) / np.timedelta64(1, "ns")
    at = times[0] + np.round(np.interp(nodes, turned, since_ns)).astype("timedelta64[ns]")
    return _turns("orbit", at, times)


def _turns(unit: str, bounds: TimeArray, times: TimeArray) -> Turns:
    edges = np.unique(np.concatenate([times[:1], bounds, times[-1:]]))
    return Turns(unit, edges, np.isin(edges[:-1], bounds) & np.isin(edges[1:], bounds))


def _calendar(times: TimeArray, unit: Literal["M", "D"]) -> TimeArray:
    """Midnights (D), or those that begin a month (M), within the span."""
    first, last = times[0].astype(f"datetime64[{unit}]"), times[-1].astype(f"datetime64[{unit}]")
    midnights = np.arange(first, last + 1).astype("datetime64[ns]")
    return np.asarray(midnights[midnights >= times[0]])
