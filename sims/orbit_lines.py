"""The lines of an Orbit Ephemeris Message: what each one is, and what is wrong with it by itself.

CCSDS 502.0-B, Orbit Data Messages, the OEM as text of keywords and values (KVN). Stands before
`sims.orbit_message`, which makes segments of what is sorted here.
"""

from __future__ import annotations

import calendar
import re
import warnings
from collections.abc import Sequence
from dataclasses import dataclass, field
from datetime import date, timedelta
from typing import NamedTuple

import erfa
from astropy.time import Time, TimeDelta

from sims.csv_table import finite_number
from sims.ephemeris import offline_time_scales

HEADER = ("CCSDS_OEM_VERS", "CREATION_DATE", "ORIGINATOR")
HEADER_OPTIONAL = ("CLASSIFICATION", "MESSAGE_ID")
META = ("OBJECT_NAME", "OBJECT_ID", "CENTER_NAME", "REF_FRAME", "TIME_SYSTEM", "START_TIME", "STOP_TIME")
META_OPTIONAL = ("USEABLE_START_TIME", "USEABLE_STOP_TIME", "INTERPOLATION", "INTERPOLATION_DEGREE")
SCALES = {"UTC": "utc", "TAI": "tai", "TT": "tt", "TDB": "tdb", "GPS": "tai"}
GPS_BEHIND_TAI_S = 19.0  # since its epoch; IS-GPS-200
_CALENDAR = re.compile(r"^\d{4}-\d{2}-\d{2}T\d{2}:\d{2}:\d{2}(\.\d*)?Z?$", re.ASCII)
_DAY_OF_YEAR = re.compile(r"^(\d{4})-(\d{3})T(\d{2}:\d{2}:\d{2}(\.\d*)?)Z?$", re.ASCII)
_MARKS = ("META_START", "META_STOP", "COVARIANCE_START", "COVARIANCE_STOP")


class Entry(NamedTuple):
    """Something written in a line, or said of it: the line's number and the text."""

    line: int
    text: str


class StateLine(NamedTuple):
    """A state as written: the line's number, its time, and place and motion (None where they cannot be read)."""

    line: int
    time: str
    numbers: tuple[float, ...] | None


@dataclass
class Block:
    """Lines of a segment: where it begins, its metadata by keyword, and its states."""

    line: int
    meta: dict[str, Entry] = field(default_factory=dict)
    states: list[StateLine] = field(default_factory=list)


def sort_lines(lines: Sequence[str], faults: list[Entry]) -> tuple[dict[str, Entry], list[Block]]:
    """Sort the lines of a message.

    Parameters
    ----------
    lines : sequence of str
        The file. Empty lines, comments and covariances are passed over.
    faults : list of Entry
        What is wrong is added to it.

    Returns
    -------
    header : dict
        Entry by keyword.
    blocks : list of Block
        The segments.
    """
    header: dict[str, Entry] = {}
    blocks: list[Block] = []
    where, opened = "header", 0
    for number, raw in enumerate(lines, start=1):
        line = raw.strip()
        if not line or line.split(maxsplit=1)[0] == "COMMENT":
            continue
        if line == "META_START" and where in ("header", "states"):
            blocks.append(Block(number))
            where, opened = "metadata", number
        elif line == "META_STOP" and where == "metadata":
            where = "states"
        elif line == "COVARIANCE_START" and where == "states":
            where, opened = "covariance", number
        elif line == "COVARIANCE_STOP" and where == "covariance":
            where = "states"
        elif line in _MARKS:
            faults.append(Entry(number, f"{line} does not belong into the {where}"))
        elif where == "header":
            _keep(line, number, header, (*HEADER, *HEADER_OPTIONAL), faults)
        elif where == "metadata":
            _keep(line, number, blocks[-1].meta, (*META, *META_OPTIONAL), faults)
        elif where == "states":
            blocks[-1].states.append(_state(line, number, faults))
    if where in ("metadata", "covariance"):
        mark = "META" if where == "metadata" else "COVARIANCE"
        faults.append(Entry(opened, f"{mark}_START without {mark}_STOP"))
    return header, blocks


def _keep(line: str, number: int, kept: dict[str, Entry], known: Sequence[str], faults: list[Entry]) -> None:
    key, equals, value = (part.strip() for part in line.partition("="))
    if not equals or not value:
        faults.append(Entry(number, f"not of the form KEYWORD = value, got {line!r}"))
    elif key not in known:
        faults.append(Entry(number, f"unknown keyword {key!r}; allowed here are {', '.join(known)}"))
    elif key in kept:
        faults.append(Entry(number, f"{key} is given twice, first in line {kept[key].line}"))
    else:
        kept[key] = Entry(number, value)


def _state(line: str, number: int, faults: list[Entry]) -> StateLine:
    time, *fields = line.split()
    if len(fields) not in (6, 9):
        wanted = "a state is a time and 6 numbers, or 9 with accelerations"
        faults.append(Entry(number, f"{wanted}; got {len(fields)} after {time!r}"))
        return StateLine(number, time, None)
    numbers = tuple(finite_number(text) for text in fields)
    wrong = [text for text, value in zip(fields, numbers, strict=True) if value is None]
    if wrong:
        faults.append(Entry(number, f"not all of the state are finite numbers, got {', '.join(wrong)}"))
        return StateLine(number, time, None)
    return StateLine(number, time, tuple(value for value in numbers[:6] if value is not None))


def times_on_tt(stamps: Sequence[Entry], scale: str, faults: list[Entry]) -> Time | None:
    """Times of a message on TT.

    Parameters
    ----------
    stamps : sequence of Entry
        Dates by month and day or by day of the year; both forms may be mixed.
    scale : str
        One of `SCALES`.
    faults : list of Entry
        What is wrong is added to it.

    Returns
    -------
    Time[stamp] or None
        None where one of them cannot be read.
    """
    texts = [_calendar_form(text) for _, text in stamps]
    try:
        return _on_tt([text or "" for text in texts], scale)
    except (ValueError, erfa.ErfaWarning):
        wrong = [
            stamp for stamp, text in zip(stamps, texts, strict=True) if text is None or not _is_instant(text, scale)
        ]
        if not wrong:
            raise
    faults += [
        Entry(line, f"not an instant on {scale}, got {text!r}; write 2027-06-01T00:00:00 or 2027-152T00:00:00")
        for line, text in wrong
    ]
    return None


def _calendar_form(text: str) -> str | None:
    """A date by month and day without its Z, or None where the text is no date."""
    if _CALENDAR.match(text):
        return text.removesuffix("Z")
    match = _DAY_OF_YEAR.match(text)
    if match is None or match[1] == "0000":
        return None
    year, day = int(match[1]), int(match[2])
    if not 1 <= day <= 365 + calendar.isleap(year):
        return None
    return f"{date(year, 1, 1) + timedelta(days=day - 1)}T{match[3]}"


def _on_tt(texts: list[str], scale: str) -> Time:
    with warnings.catch_warnings():
        # A second that does not exist, such as the 60th where no leap second is, is only warned of.
        warnings.simplefilter("error", erfa.ErfaWarning)
        with offline_time_scales():
            times = Time(texts, scale=SCALES[scale])
            if scale == "GPS":
                times = times + TimeDelta(GPS_BEHIND_TAI_S, format="sec")
            return times.tt


def _is_instant(text: str, scale: str) -> bool:
    try:
        _on_tt([text], scale)
    except (ValueError, erfa.ErfaWarning):
        return False
    return True
