"""Print-outs of NEC-2, the public-domain method-of-moments code (Burke and Poggio 1981), taken apart line by line.

A file holds one frequency or many; each table headed RADIATION PATTERNS belongs to the FREQUENCY, INPUT POWER and
RANGE printed before it. `sims.beam_nec` makes a far field of the tables. The code was translated more than once:
spacing, case and dashes differ, the order of the columns does not.
"""

from __future__ import annotations

import re
from array import array
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from math import isfinite, nan
from pathlib import Path

COLUMNS = 11
"""Theta, phi, three gains, axial ratio, tilt, magnitude and phase of both fields; the sense is a word among them."""
_SENSE = 7
_SENSES = frozenset({"LINEAR", "RIGHT", "LEFT"})
_WHOLE_NUMBER = re.compile(r"[-+]?(?:\d+\.?\d*|\.\d+)(?:[EeDd]?[-+]\d+)?", re.ASCII)


def _named(name: str) -> re.Pattern[str]:
    """A name, its value and its unit, which may touch the value."""
    return re.compile(rf"^{name}\s*[:=]\s*([-+.\dED]+|\S*)\s*(\S*)", re.IGNORECASE)


_FREQUENCY = _named("FREQUENCY")
_INPUT_POWER = _named("INPUT POWER")
_RANGE = _named("RANGE")
_HEADING = re.compile(r"^(?:- ?){2}|(?:- ?){2}$")
_TABLE = re.compile(r"^[-\s]*RADIATION PATTERNS[-\s]*$", re.IGNORECASE)
_COMMENTS = re.compile(r"^[-\s]*COMMENTS[-\s]*$", re.IGNORECASE)


@dataclass
class NecPattern:
    """A table headed RADIATION PATTERNS, and what was printed before it.

    Attributes
    ----------
    path : Path
    line : int
        Of the heading.
    frequency_mhz : float
        MHz.
    input_power_w : float or None
        W; None where no INPUT POWER was printed.
    free_space : bool
        Whether the print-out says that there is no ground.
    directive : bool
        Whether the printed gains are directive gains.
    range_m : float or None
        Distance of the fields, m; None where they are printed without their factor exp(-jkr)/r.
    rows : array of float
        `COLUMNS` numbers a row, rows one after the other.
    lines : array of int
        Line of each row.
    """

    path: Path
    line: int
    frequency_mhz: float
    input_power_w: float | None
    free_space: bool
    directive: bool = False
    range_m: float | None = None
    rows: array[float] = field(default_factory=lambda: array("d"))
    lines: array[int] = field(default_factory=lambda: array("q"))

    @property
    def where(self) -> str:
        """Place of the table, for messages."""
        return f"{self.path}: line {self.line}"


def nec_patterns(path: Path, problems: list[str]) -> list[NecPattern]:
    """Tables of a file, read line by line: print-outs of many frequencies are large.

    Parameters
    ----------
    path : Path
        The file.
    problems : list of str
        Every fault of the file is added, with its line; the tables hold only where there is none.

    Returns
    -------
    list of NecPattern
    """
    try:
        with path.open(encoding="utf-8", errors="replace") as lines:
            return _PrintOut(path).read(lines, problems)
    except OSError as error:
        problems.append(f"{path}: cannot be read as a text file ({error})")
        return []


class _PrintOut:
    """What was printed so far: the tables, and what holds for the next of them."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self.found: list[NecPattern] = []
        self.frequency_mhz: float | None = None
        self.frequency_printed = False
        self.input_power_w: float | None = None
        self.free_space = False
        self.announced: dict[float, int] = {}
        self.open_table: NecPattern | None = None

    def read(self, lines: Iterable[str], problems: list[str]) -> list[NecPattern]:
        before = len(problems)
        in_comments = False
        for number, text in _spoken(lines):
            if self.open_table is not None and _taken_at_once(self.open_table, number, text):
                continue
            if _HEADING.search(text):
                in_comments = _COMMENTS.match(text) is not None
            if not in_comments:
                self._take(number, text, problems)
        if len(problems) == before:
            problems += self._missing()
        return self.found

    def _take(self, number: int, text: str, problems: list[str]) -> None:
        """A line that is no plain row."""
        where = f"{self.path}: line {number}"
        if _TABLE.match(text):
            self._begin(number, problems)
        elif match := _FREQUENCY.match(text):
            self.frequency_mhz = _positive(match, "a frequency", ("MHZ",), where, problems)
            self.frequency_printed = True
            self.input_power_w, self.free_space, self.open_table = None, False, None
            if self.frequency_mhz is not None:
                self.announced.setdefault(self.frequency_mhz, number)
        elif match := _INPUT_POWER.match(text):
            self.input_power_w = _positive(match, "an input power", ("WATTS", ""), where, problems)
        elif text.upper() == "FREE SPACE":
            self.free_space = True
        elif self.open_table is not None and not _taken(self.open_table, number, text, problems):
            self.open_table = None

    def _begin(self, number: int, problems: list[str]) -> None:
        if not self.frequency_printed:
            problems.append(f"{self.path}: line {number}: a table of radiation patterns without a FREQUENCY before it")
        # Where the frequency is at fault, the rows are still looked through for faults of their own.
        frequency_mhz = nan if self.frequency_mhz is None else self.frequency_mhz
        self.open_table = NecPattern(self.path, number, frequency_mhz, self.input_power_w, self.free_space)
        self.found.append(self.open_table)

    def _missing(self) -> list[str]:
        if not self.found:
            return [f"{self.path}: holds no table headed RADIATION PATTERNS; is it the print-out of NEC-2?"]
        problems = [
            f"{pattern.where}: a table of radiation patterns without a row"
            for pattern in self.found
            if not pattern.rows
        ]
        has_table = {pattern.frequency_mhz for pattern in self.found}
        problems += [
            f"{self.path}: line {number}: no table of radiation patterns at {frequency_mhz:g} MHz; is the print-out "
            "cut short?"
            for frequency_mhz, number in self.announced.items()
            if frequency_mhz not in has_table
        ]
        return problems


def _spoken(lines: Iterable[str]) -> Iterator[tuple[int, str]]:
    """Lines that say something, with their numbers."""
    for number, line in enumerate(lines, start=1):
        text = line.strip()
        if text:
            yield number, text


def _taken_at_once(table: NecPattern, number: int, text: str) -> bool:
    """Whether a line is a plain row, as nearly all are; its numbers are taken."""
    words = text.split()
    if len(words) == COLUMNS + 1 and words[_SENSE] in _SENSES:
        del words[_SENSE]
    if len(words) != COLUMNS or "_" in text or not text.isascii():  # Python takes 1_0 for ten, and digits of any script
        return False
    try:
        values = [float(word) for word in words]
    except ValueError:
        return False
    if not isfinite(sum(values)):
        return False
    table.rows.extend(values)
    table.lines.append(number)
    return True


def _taken(table: NecPattern, number: int, text: str, problems: list[str]) -> bool:
    """Whether a line still belongs to the table; its numbers are taken."""
    where = f"{table.path}: line {number}"
    words = text.split()
    has_sense = len(words) == COLUMNS + 1 and words[_SENSE].upper() in _SENSES
    numbers = [*words[:_SENSE], *words[_SENSE + 1 :]] if has_sense else words
    values = [_value(word) for word in numbers]
    # A row whose angle is unreadable is still a row: its columns are complete and most of them numbers.
    mostly_numbers = 2 * sum(value is not None for value in values) > COLUMNS
    is_row = values[0] is not None or (len(numbers) == COLUMNS and mostly_numbers)
    if not is_row:
        if match := _RANGE.match(text):
            table.range_m = _positive(match, "a range", ("METERS", "M", ""), where, problems)
        table.directive = table.directive or "DIRECTIVE" in text.upper()
        return not table.rows
    if len(numbers) != COLUMNS:
        problems.append(
            f"{where}: {len(words)} columns; a row of radiation patterns has {COLUMNS} numbers and the sense"
        )
    elif None in values:
        problems.append(f"{where}: {numbers[values.index(None)]!r} is not a number")
    else:
        table.rows.extend(value for value in values if value is not None)
        table.lines.append(number)
    return True


def _value(word: str) -> float | None:
    """A finite number as Fortran or C print it; three-digit exponents stand without their letter."""
    if _WHOLE_NUMBER.fullmatch(word) is None:
        return None
    value = float(re.sub(r"(?<=[\d.])[DdEe]?([-+]\d+)$", r"e\1", word))
    return value if isfinite(value) else None


def _positive(match: re.Match[str], what: str, units: tuple[str, ...], where: str, problems: list[str]) -> float | None:
    value = _value(match[1])
    if value is None or not value > 0.0:
        problems.append(f"{where}: {what} must be a positive number, got {match[1]!r}")
        return None
    if match[2].upper() not in units:
        problems.append(f"{where}: {what} in {match[2]!r}; NEC-2 prints {units[0]}")
        return None
    return value
