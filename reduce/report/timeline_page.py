"""The timeline as a page for the terminal and as tables; what ``quietlimb timeline`` writes.

Times are UTC. A window that the span cuts off is marked, and left out of longest, median and shortest.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Sequence
from pathlib import Path

import numpy as np

from reduce.report.files import claim, write_all
from reduce.report.style import look, png
from reduce.report.timeline_plot import timeline_figure
from reduce.timeline import Timeline, timeline
from sims.config import Config
from sims.config_load import load_config
from sims.windows import Windows

TABLE, PICTURE = "timeline.csv", "timeline.png"
TURN_TABLES = {"orbit": "timeline_orbits.csv", "day": "timeline_days.csv"}
MOST_LISTED = 24
_HIDDEN_MEANS = {
    "orbit": (
        "Hidden: the whole disk behind the limb of a spherical Moon, in straight lines. "
        "Relief moves an edge by seconds; waves bend round the limb."
    ),
    "day": "Below horizon: the whole disk, in straight lines; air would lift it by half a degree on Earth.",
}


def report_timeline(config_path: Path, out: Path, *, update: bool) -> str:
    """Find the quiet windows of a campaign and write table and picture.

    Parameters
    ----------
    config_path : Path
        TOML configuration.
    out : Path
        Folder; made if it is not there. What else it holds is left alone.
    update : bool
        Allow files of these names to be replaced.

    Returns
    -------
    str
        The page for the terminal.

    Raises
    ------
    InputError
        With every problem of the configuration, if files are in the way, or if the folder
        cannot be made or written to.
    """
    config = load_config(config_path)
    found = timeline(config)
    names = (TABLE, TURN_TABLES[found.turns.unit], PICTURE)
    claim(out, names, update=update)
    with look():
        picture = png(timeline_figure(found, config))
    write_all(out, dict(zip(names, (windows_csv(found), turns_csv(found), picture), strict=True)))
    return f"{timeline_page(found, config)}\n\nwrote {', '.join(names)} to {out}"


def windows_csv(found: Timeline) -> str:
    """All windows, one a line, kind after kind."""
    in_orbit = found.turns.unit == "orbit"
    lines: list[list[object]] = [["kind", "start_utc", "stop_utc", "minutes", "cut", *(["orbit"] if in_orbit else [])]]
    rows = [(row.title, row.windows) for row in found.rows]
    if found.day_below is not None:
        rows.append(("Sun up at the point below", found.day_below))
    for title, windows in rows:
        numbers = found.turns.number(windows.middle)
        for at, minutes in enumerate(windows.duration_s / 60.0):
            line = [title, _stamp(windows.start[at], 3), _stamp(windows.stop[at], 3), f"{minutes:.4f}"]
            lines.append([*line, _cut(windows, at), *([int(numbers[at])] if in_orbit else [])])
    return _csv(lines)


def turns_csv(found: Timeline) -> str:
    """Minutes of each kind in each orbit or day."""
    turns = found.turns
    minutes = np.stack([row.windows.share_s(turns.edges) / 60.0 for row in found.rows], axis=1)
    heads = ["minutes_" + row.title.lower().replace(" ", "_") for row in found.rows]
    lines: list[list[object]] = [[turns.unit, "start_utc", "stop_utc", "cut", *heads]]
    for at, whole in enumerate(turns.whole):
        edges = [_stamp(turns.edges[at], 3), _stamp(turns.edges[at + 1], 3)]
        lines.append([at + 1, *edges, "" if whole else "cut", *(f"{value:.4f}" for value in minutes[at])])
    return _csv(lines)


def _csv(lines: Iterable[Sequence[object]]) -> str:
    text = io.StringIO()
    csv.writer(text, lineterminator="\n").writerows(lines)
    return text.getvalue()


def timeline_page(found: Timeline, config: Config) -> str:
    """The page for the terminal: sums, months, orbits or days, and windows as far as they fit."""
    parts = [_head(found, config), _sums(found), _months(found), _per_turn(found), _sun(found)]
    return "\n\n".join(part for part in [*parts, _listed(found)] if part)


def _head(found: Timeline, config: Config) -> str:
    turns = found.turns
    cut = int((~turns.whole).sum())
    return "\n".join(
        [
            f"Timeline of {config.run.name}",
            f"  {config.vantage.kind.replace('-', ' ')}, {_stamp(found.first)} to {_stamp(found.last)} UTC, "
            f"{found.span_s / 3600.0:.2f} h",
            f"  {len(turns.whole)} {turns.unit}s{f', {cut} of them cut' if cut else ''}; "
            f"geometry every {found.step_s:g} s, edges between by cubic",
            f"  {_HIDDEN_MEANS[turns.unit]}",
        ]
    )


def _unit(found: Timeline) -> tuple[str, float]:
    """Unit for the length of a window, and its seconds."""
    longest_s = max(float(row.windows.duration_s.max(initial=0.0)) for row in found.rows)
    return ("minutes", 60.0) if longest_s < 300 * 60.0 else ("hours", 3600.0)


def _sums(found: Timeline) -> str:
    width = max(len(row.title) for row in found.rows)
    unit, size_s = _unit(found)
    lines = [f"{'Windows':{width + 2}}    hours   share  number   cut  longest   median shortest, {unit}"]
    for row in found.rows:
        windows = row.windows
        lengths = windows.duration_s[windows.whole] / size_s
        sizes = (lengths.max(), np.median(lengths), lengths.min()) if len(lengths) else (None, None, None)
        lines.append(
            f"  {row.title:{width}}{windows.total_s / 3600.0:9.2f}{windows.total_s / found.span_s:8.1%}"
            f"{len(windows.start):8d}{int((~windows.whole).sum()):6d}{''.join(map(_number, sizes))}"
        )
    for row in found.rows:
        if row.partly is not None and row.partly.total_s > 0.0:
            partly_s = row.partly.total_s - row.windows.total_s
            lines.append(f"  beside that, {row.title} in part: {partly_s / 3600.0:.2f} h")
    return "\n".join(lines)


def _number(value: float | None) -> str:
    return f"{'-':>9}" if value is None else f"{value:9.2f}"


def _months(found: Timeline) -> str:
    months = found.months
    width = max(len(row.title) for row in found.rows)
    unit, size_s = _unit(found)
    lines = [f"{'Months':{11 + width}}    hours   share  number  longest, {unit}"]
    span_s = np.diff(months.edges) / np.timedelta64(1, "s")
    for at, whole in enumerate(months.whole):
        name = str(months.edges[at].astype("datetime64[M]")) + (" " if whole else "*")
        for row in found.rows:
            spent_s = row.windows.share_s(months.edges)[at]
            here = months.number(row.windows.middle) == at + 1
            lengths = row.windows.duration_s[here & row.windows.whole] / size_s
            lines.append(
                f"  {name} {row.title:{width}}{spent_s / 3600.0:9.2f}{spent_s / span_s[at]:8.1%}"
                f"{int(here.sum()):8d}{_number(lengths.max() if len(lengths) else None)}"
            )
            name = " " * len(name)
    if not months.whole.all():
        lines.append("  * only part of it lies within the span; a window counts where its middle lies")
    return "\n".join(lines)


def _per_turn(found: Timeline) -> str:
    turns = found.turns
    if not turns.whole.any():
        return ""
    width = max(len(row.title) for row in found.rows)
    unit, size_s = _unit(found)
    head = f"Each whole {turns.unit}"
    lines = [f"{head:{max(width + 2, len(head))}}   lowest   median  highest, {unit}"]
    for row in found.rows:
        spent = row.windows.share_s(turns.edges)[turns.whole] / size_s
        lines.append(f"  {row.title:{width}}{spent.min():9.2f}{np.median(spent):9.2f}{spent.max():9.2f}")
    return "\n".join(lines)


def _sun(found: Timeline) -> str:
    """Beta and terminators, where there is an orbit."""
    if found.beta_deg is None or found.day_below is None:
        return ""
    day = found.day_below
    into_day, into_night = int((~day.cut_at_start).sum()), int((~day.cut_at_end).sum())
    return "\n".join(
        [
            "The Sun",
            f"  beta angle            {found.beta_deg[0]:+.2f} deg at the start, {found.beta_deg[-1]:+.2f} at the end, "
            f"{found.beta_deg.min():+.2f} to {found.beta_deg.max():+.2f} between",
            f"  terminator crossings  {into_day} into day and {into_night} into night, by the point below",
        ]
    )


def _listed(found: Timeline) -> str:
    """The windows of the last kind, the one that asks most."""
    row = found.rows[-1]
    count = len(row.windows.start)
    if not count:
        return f"{row.title}: never"
    numbered = found.turns.unit == "orbit"
    unit, size_s = _unit(found)
    head = f"{row.title}" + ("" if count <= MOST_LISTED else f": the first {MOST_LISTED} of {count}")
    lines = [head, f"  start, UTC           stop, UTC          {unit:>10}{'   orbit' if numbered else ''}"]
    numbers = found.turns.number(row.windows.middle)
    for at in range(min(count, MOST_LISTED)):
        cut = _cut(row.windows, at)
        length = row.windows.duration_s[at] / size_s
        line = f"  {_stamp(row.windows.start[at])}  {_stamp(row.windows.stop[at])}{length:9.2f}"
        lines.append(line + (f"{numbers[at]:8d}" if numbered else "") + (f"  cut at {cut}" if cut else ""))
    return "\n".join(lines)


def _cut(windows: Windows, at: int) -> str:
    ends = [name for name, cut in (("start", windows.cut_at_start), ("end", windows.cut_at_end)) if cut[at]]
    return " and ".join(ends)


def _stamp(instant: np.datetime64, decimals: int = 0) -> str:
    """UTC as ISO 8601, rounded; for tables with decimals and a T, for the page without either."""
    unit, size = ("ms", 3) if decimals else ("s", 0)
    half = np.timedelta64(500_000 if size else 500_000_000, "ns")
    text = str((instant + half).astype(f"datetime64[{unit}]"))
    return text if size else text.replace("T", " ")
