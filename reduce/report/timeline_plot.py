"""timeline.png: when the Earth, the Sun and both are hidden, over hours and over months.

A span of few windows is drawn window by window with the depth below the limb under them; a
long one as its first windows, then minutes per orbit (hours per day), beta angle and the sum.
"""

from __future__ import annotations

from typing import Any

import matplotlib.dates
import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from reduce.report.style import BLACK, BLUE, DASHES, GREY, PALE, VERMILION, key, panels_with_key, sheet
from reduce.runner import Products
from reduce.timeline import Row, Timeline
from sims.config import Config
from sims.windows import TimeArray

MOST_SINGLE = 30
CLOSE_UP = 6  # windows
MOST_POINTS = 4000
ROOM = 0.036  # of the width, for the length of a window
_DATES: Any = matplotlib.dates  # it has no types
_COLOUR = {"earth": BLUE, "sun": VERMILION, "both": BLACK}
_DASHES = {"earth": DASHES[0], "sun": DASHES[1], "both": DASHES[3]}
_HATCH = {"earth": "//////", "sun": "......", "both": ""}
_UNITS = {"minutes": 60.0, "hours": 3600.0, "days": 86_400.0}


def timeline_figure(found: Timeline, config: Config) -> Figure:
    """Windows, sums and the Sun's place over the span.

    Parameters
    ----------
    found : Timeline
    config : Config
        Names the campaign.

    Returns
    -------
    matplotlib.figure.Figure
    """
    if max(len(row.windows.start) for row in found.rows) <= MOST_SINGLE:
        return _window_by_window(found, config)
    return _turn_by_turn(found, config)


def _window_by_window(found: Timeline, config: Config) -> Figure:
    below = "limb" if found.turns.unit == "orbit" else "horizon"
    caption = (
        f"Shaded: the whole disk out of sight; {_unit(found)} of each window that has room for them (top). Depth of "
        f"the centre below the {below}, hidden where positive (middle). Hours of each kind, summed (bottom)."
    )
    figure = _sheet(7.4, _title(found), caption, config)
    strip, panels = panels_with_key(figure, 3, 1, 0.3)
    bars, depth, total = panels[:, 0]
    _bars(bars, found, found.first, found.last)
    times, shown = _thinned(found.times)
    for body, values in found.depth_deg.items():
        depth.plot(times, values[shown], color=_COLOUR[body], linestyle=_DASHES[body])
    depth.axhline(0.0, color=GREY, linewidth=0.7)
    depth.axhspan(0.0, 200.0, facecolor="#EEEEEE", linewidth=0.0, zorder=0)
    largest = max(float(np.abs(values).max()) for values in found.depth_deg.values())
    depth.set_ylim(-1.08 * largest, 1.08 * largest)
    depth.set_ylabel(f"below the {below}, deg")
    _sums(total, found)
    for panel in (bars, depth, total):
        _dates(panel, found.first, found.last, label=panel is total)
    _key(strip, found)
    return figure


def _turn_by_turn(found: Timeline, config: Config) -> Figure:
    turns = found.turns
    first, last, title = _close_up(found)
    unit, size_s = ("minutes", 60.0) if turns.unit == "orbit" else ("hours", 3600.0)
    caption = (
        f"Shaded: the whole disk out of sight, around the longest window of “{title}”, with the {_unit(found)} of each "
        f"(top; grey bands below mark the place). Then, over the whole span: {unit} of each kind in every whole "
        f"{turns.unit}, {'angle between Sun and orbital plane, ' if found.beta_deg is not None else ''}and hours of "
        "each kind, summed."
    )
    figure = _sheet(8.8 if found.beta_deg is not None else 7.2, _title(found), caption, config)
    strip, panels = panels_with_key(figure, 3 if found.beta_deg is None else 4, 1, 0.3)
    bars, each, *beta, total = panels[:, 0]
    _bars(bars, found, first, last)
    _dates(bars, first, last, label=True)
    highest = 0.0
    for row in found.rows:
        spent = np.where(turns.whole, row.windows.share_s(turns.edges) / size_s, np.nan)
        highest = max(highest, float(np.nanmax(spent, initial=0.0)))
        each.plot(turns.middle, spent, color=_COLOUR[row.kind], linestyle=_DASHES[row.kind])
        if row.kind == "both":
            each.fill_between(turns.middle, 0.0, spent, color=PALE, linewidth=0.0, zorder=0)
    each.set_ylim(0.0, 1.08 * highest)
    each.set_ylabel(f"{unit} {'an' if turns.unit == 'orbit' else 'a'} {turns.unit}")
    if found.beta_deg is not None:
        times, thin = _thinned(found.times)
        beta[0].plot(times, found.beta_deg[thin], color=BLACK)
        beta[0].axhline(0.0, color=GREY, linewidth=0.7)
        beta[0].set_ylabel("beta angle, deg")
    _sums(total, found)
    for panel in (each, *beta, total):
        panel.axvspan(first, last, facecolor="#D9D9D9", linewidth=0.0, zorder=0.1)
        _dates(panel, found.first, found.last, label=panel is total)
    _key(strip, found)
    return figure


def _close_up(found: Timeline) -> tuple[np.datetime64, np.datetime64, str]:
    """Some windows' worth of time around the longest of the last kind that occurs, and that kind's title."""
    most = max(found.rows, key=lambda row: len(row.windows.start)).windows
    row = [row for row in found.rows if len(row.windows.start)][-1]
    middle = row.windows.middle[int(np.argmax(row.windows.duration_s))]
    number = int(np.clip(np.searchsorted(most.start, middle) - CLOSE_UP // 2, 0, len(most.start) - CLOSE_UP))
    first, last = most.start[number], most.stop[number + CLOSE_UP - 1]
    margin = (last - first) // 40
    return min(first - margin, middle), max(last + margin, middle), row.title


def _sheet(height_in: float, title: str, caption: str, config: Config) -> Figure:
    # The sheet asks spectra whether the sky is invented; a timeline has none, and the configuration decides.
    return sheet(height_in, title, caption, Products({"spectra.nc": xr.Dataset()}), config)


def _title(found: Timeline) -> str:
    days = found.span_s / 86_400.0
    return f"quiet windows of {days:.1f} days" if days >= 2.0 else f"quiet windows of {24.0 * days:.1f} hours"


def _unit(found: Timeline) -> str:
    """Unit in which the longest window is a handy number."""
    longest_s = max(float(row.windows.duration_s.max(initial=0.0)) for row in found.rows)
    return "minutes" if longest_s < 300 * 60.0 else "hours" if longest_s < 100 * 3600.0 else "days"


def _bars(axes: Axes, found: Timeline, first: np.datetime64, last: np.datetime64) -> None:
    """A row a kind, windows shaded, their length written where there is room."""
    size_s = _UNITS[_unit(found)]
    span_s = float((last - first) / np.timedelta64(1, "s"))
    for number, row in enumerate(reversed(found.rows)):
        shown = (row.windows.start < last) & (row.windows.stop > first)
        length_s = row.windows.duration_s[shown]
        spans = list(zip(_DATES.date2num(row.windows.start[shown]), length_s / 86_400.0, strict=True))
        axes.broken_barh(
            spans, (number - 0.36, 0.72), facecolor=_COLOUR[row.kind], edgecolor="white", hatch=_HATCH[row.kind],
            linewidth=0.0,
        )  # fmt: skip
        middles = row.windows.middle[shown]
        named = row.windows.whole[shown] & (middles > first) & (middles < last) & (length_s > ROOM * span_s)
        for middle, seconds in zip(middles[named], length_s[named], strict=True):
            axes.text(
                middle, number, f"{seconds / size_s:.1f}", ha="center", va="center", fontsize=7.0, clip_on=True,
                bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.8},
            )  # fmt: skip
    axes.set_yticks(range(len(found.rows)), [row.title for row in reversed(found.rows)])
    axes.tick_params(axis="y", length=0)
    axes.set_ylim(-0.55, len(found.rows) - 0.45)


def _sums(axes: Axes, found: Timeline) -> None:
    edges = np.unique(np.concatenate([*(w for row in found.rows for w in (row.windows.start, row.windows.stop))]))
    edges = np.concatenate([[found.first], edges, [found.last]])
    for row in found.rows:
        axes.plot(
            edges, row.windows.elapsed_s(edges) / 3600.0, color=_COLOUR[row.kind], linestyle=_DASHES[row.kind]
        )  # fmt: skip
    axes.set_ylim(bottom=0.0)
    axes.set_ylabel("hours, summed")


def _key(strip: Axes, found: Timeline) -> None:
    handles = [
        Line2D([], [], color=_COLOUR[row.kind], linestyle=_DASHES[row.kind], label=_summed(row, found))
        for row in found.rows
    ]
    key(strip, handles, len(handles))


def _summed(row: Row, found: Timeline) -> str:
    return f"{row.title}: {row.windows.total_s / 3600.0:.1f} h, {row.windows.total_s / found.span_s:.1%}"


def _thinned(times: TimeArray) -> tuple[TimeArray, slice]:
    shown = slice(None, None, max(1, len(times) // MOST_POINTS))
    return times[shown], shown


def _dates(axes: Axes, first: np.datetime64, last: np.datetime64, *, label: bool) -> None:
    days = float((last - first) / np.timedelta64(1, "s")) / 86_400.0
    axes.xaxis.set_major_locator(_DATES.AutoDateLocator(minticks=4, maxticks=9))
    pattern = "%H:%M\n%d %b" if days < 4.0 else "%d %b" if days < 200.0 else "%b %Y"
    axes.xaxis.set_major_formatter(_DATES.DateFormatter(pattern))
    ends: Any = (first, last)
    axes.set_xlim(*ends)
    axes.tick_params(axis="x", labelbottom=label)
    if label:
        years = sorted({str(end.astype("datetime64[Y]")) for end in (first, last)})
        axes.set_xlabel(f"UTC, {' to '.join(years)}")
