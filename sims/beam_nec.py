"""Reader of the print-outs of NEC-2, the public-domain method-of-moments code (Burke and Poggio 1981).

One of the readers behind `sims.beam_files`. A file holds one frequency or many; each table headed
RADIATION PATTERNS belongs to the FREQUENCY, INPUT POWER and RANGE printed before it. The power
comes from the columns of the field: the printed gain is rounded to 0.01 dB. NEC-2 prints a field
far away without its factor exp(-jkr)/r, thus in volts, unless a range was asked for. Its angles
and the phase exp(+j omega t) are those of `sims.beam_grid`.
"""

from __future__ import annotations

import re
from array import array
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field, fields
from math import isfinite
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sims.config_beam import NecSource
from sims.constants import FREE_SPACE_IMPEDANCE_OHM
from sims.errors import InputError, raise_if_any
from sims.far_field import FarField, far_field

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
GAIN_TOLERANCE_DB = 0.02  # the printed gain is rounded to 0.01 dB, the fields and the power to five digits
_NUMBER = r"([-+]?(?:\d+\.?\d*|\.\d+)(?:[EeDd]?[-+]\d+)?)(?![\w.])"
_FREQUENCY = re.compile(r"^FREQUENCY\s*[:=]\s*(\S+)\s*(\S*)", re.IGNORECASE)
_INPUT_POWER = re.compile(r"^INPUT POWER\s*[:=]\s*(\S+)\s*(\S*)", re.IGNORECASE)
_RANGE = re.compile(r"^RANGE\s*[:=]\s*(\S+)\s*(\S*)", re.IGNORECASE)
_WHOLE_NUMBER = re.compile(rf"^{_NUMBER}$")
_SENSES = frozenset({"LINEAR", "RIGHT", "LEFT"})
_COLUMNS = 11  # theta, phi, three gains, axial ratio, tilt, magnitude and phase of both fields; the sense is a word
_TOTAL_GAIN = 4
_SENSE = 7
_MOST_NAMED = 5
_FAINT_DB = 20.0  # below the peak by more, the printed gain is not compared: there its field has lost digits


@dataclass
class _Pattern:
    """A table headed RADIATION PATTERNS, and what was printed before it."""

    path: Path
    line: int
    frequency_mhz: float | None
    input_power_w: float | None
    free_space: bool
    directive: bool = False
    range_m: float | None = None
    rows: array[float] = field(default_factory=lambda: array("d"))
    lines: array[int] = field(default_factory=lambda: array("q"))

    @property
    def where(self) -> str:
        return f"{self.path}: line {self.line}"


@dataclass(frozen=True, eq=False)
class _Cells:
    """Directions of a frequency in any order, fields on the scale of gain, and the file and line of each."""

    theta_deg: FloatArray
    phi_deg: FloatArray
    e_theta: ComplexArray
    e_phi: ComplexArray
    path: NDArray[np.object_]
    line: NDArray[np.int64]


def read_nec_files(source: NecSource) -> FarField:
    """Read a beam from print-outs of NEC-2.

    Parameters
    ----------
    source : NecSource
        The files; together they hold each frequency on the same grid of angles.

    Returns
    -------
    FarField
        Gain against the power that the sources put in. A table over a ground that radiates nothing below
        theta = 90 deg becomes an upper half.

    Raises
    ------
    InputError
        If a file cannot be read, a line of a table does not parse, a frequency is missing or stands on another grid,
        or the fields contradict the printed gain. All problems together, each with its file and line.
    """
    problems: list[str] = []
    patterns = [pattern for path in source.files for pattern in _patterns(path, problems)]
    raise_if_any(problems)
    notes: list[str] = []
    cells: dict[float, list[_Cells]] = {}
    alone = [pattern.where for pattern in patterns if pattern.free_space]
    for pattern in patterns:
        assert pattern.frequency_mhz is not None
        cells.setdefault(pattern.frequency_mhz, []).append(_scaled(pattern, problems, notes))
        pattern.rows = array("d")  # memory for the next
    raise_if_any(problems)
    name = ", ".join(str(path) for path in source.files)
    table = _on_a_grid(cells, name, tuple(notes))
    if table.upper_half and alone:
        raise InputError(f"{alone[0]}: an antenna in FREE SPACE radiates below theta 90 deg too, where the table ends")
    return table


def _patterns(path: Path, problems: list[str]) -> list[_Pattern]:
    """The tables of a file, read line by line: print-outs of many frequencies are large."""
    try:
        with path.open(encoding="utf-8", errors="replace") as lines:
            return _tables(path, lines, problems)
    except OSError as error:
        problems.append(f"{path}: cannot be read as a text file ({error})")
        return []


def _tables(path: Path, lines: Iterable[str], problems: list[str]) -> list[_Pattern]:
    found: list[_Pattern] = []
    frequency: float | None = None
    power: float | None = None
    free_space = False
    open_table: _Pattern | None = None
    before = len(problems)
    for number, text in _spoken(lines):
        if open_table is not None and _taken_at_once(open_table, number, text):
            continue
        where = f"{path}: line {number}"
        if "RADIATION PATTERNS" in text.upper():
            open_table = _Pattern(path, number, frequency, power, free_space)
            found.append(open_table)
        elif match := _FREQUENCY.match(text):
            frequency, power, open_table = _positive(match, "a frequency", ("MHZ",), where, problems), None, None
            free_space = False
        elif text.upper() == "FREE SPACE":
            free_space = True
        elif match := _INPUT_POWER.match(text):
            power = _positive(match, "an input power", ("WATTS", ""), where, problems)
        elif open_table is not None and not _taken(open_table, number, text, problems):
            open_table = None
    if not found and len(problems) == before:
        problems.append(f"{path}: holds no table headed RADIATION PATTERNS; is it the print-out of NEC-2?")
    for pattern in found:
        if pattern.frequency_mhz is None and len(problems) == before:
            problems.append(f"{pattern.where}: a table of radiation patterns without a FREQUENCY before it")
        if not pattern.rows and len(problems) == before:
            problems.append(f"{pattern.where}: a table of radiation patterns without a row")
    return found


def _spoken(lines: Iterable[str]) -> Iterator[tuple[int, str]]:
    """Lines that say something, with their numbers."""
    for number, line in enumerate(lines, start=1):
        text = line.strip()
        if text:
            yield number, text


def _taken_at_once(table: _Pattern, number: int, text: str) -> bool:
    """Whether a line is a plain row, as nearly all are; its numbers are taken."""
    words = text.split()
    if len(words) == _COLUMNS + 1 and words[_SENSE] in _SENSES:
        del words[_SENSE]
    if len(words) != _COLUMNS:
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


def _taken(table: _Pattern, number: int, text: str, problems: list[str]) -> bool:
    """Whether a line still belongs to the table; its numbers are taken."""
    where = f"{table.path}: line {number}"
    words = text.split()
    if _value(words[0]) is None:
        if match := _RANGE.match(text):
            table.range_m = _positive(match, "a range", ("METERS", "M", ""), where, problems)
        table.directive = table.directive or "DIRECTIVE" in text.upper()
        return not table.rows
    has_sense = len(words) == _COLUMNS + 1 and words[_SENSE].upper() in _SENSES
    numbers = [*words[:_SENSE], *words[_SENSE + 1 :]] if has_sense else words
    values = [_value(word) for word in numbers]
    if len(numbers) != _COLUMNS:
        problems.append(
            f"{where}: {len(words)} columns; a row of radiation patterns has {_COLUMNS} numbers and the sense"
        )
    elif any(value is None for value in values):
        wrong = next(word for word, value in zip(numbers, values, strict=True) if value is None)
        problems.append(f"{where}: {wrong!r} is not a number")
    else:
        table.rows.extend(value for value in values if value is not None)
        table.lines.append(number)
    return True


def _value(word: str) -> float | None:
    """A number as Fortran or C print it; three-digit exponents stand without their letter."""
    match = _WHOLE_NUMBER.match(word)
    if match is None:
        return None
    plain = re.sub(r"(?<=[\d.])[DdEe]?([-+]\d+)$", r"e\1", match[1])
    return float(plain)


def _positive(match: re.Match[str], what: str, units: tuple[str, ...], where: str, problems: list[str]) -> float | None:
    value = _value(match[1])
    if value is None or not value > 0.0:
        problems.append(f"{where}: {what} must be a positive number, got {match[1]!r}")
        return None
    if match[2].upper() not in units:
        problems.append(f"{where}: {what} in {match[2]!r}; NEC-2 prints {units[0]}")
        return None
    return value


def _scaled(pattern: _Pattern, problems: list[str], notes: list[str]) -> _Cells:
    """Fields on the scale of gain: their squares sum to 4 pi r^2 |E|^2 / (2 eta P), with E the peak value."""
    rows = np.array(pattern.rows).reshape(-1, _COLUMNS)
    e_theta = rows[:, 7] * np.exp(1j * np.radians(rows[:, 8]))
    e_phi = rows[:, 9] * np.exp(1j * np.radians(rows[:, 10]))
    path, line = np.full(len(rows), pattern.path, dtype=object), np.array(pattern.lines)
    range_m = 1.0 if pattern.range_m is None else pattern.range_m
    squared = range_m**2 * (np.abs(e_theta) ** 2 + np.abs(e_phi) ** 2)
    if not squared.max() > 0.0:
        problems.append(f"{pattern.where}: the fields at {pattern.frequency_mhz:g} MHz are zero everywhere")
        return _Cells(rows[:, 0], rows[:, 1], e_theta, e_phi, path, line)
    bright = squared > squared.max() * 10.0 ** (-_FAINT_DB / 10.0)
    per_field = rows[bright, _TOTAL_GAIN] - 10.0 * np.log10(squared[bright])
    if pattern.input_power_w is None:
        scale = 10.0 ** (per_field.mean() / 10.0)
        kind = "directive" if pattern.directive else "power"
        notes.append(
            f"{pattern.where}: no INPUT POWER at {pattern.frequency_mhz:g} MHz; the fields are scaled to the printed "
            f"{kind} gain, whose rounding is worth {0.01 / np.sqrt(12.0 * len(per_field)):.1e} dB"
        )
    else:
        scale = 4.0 * np.pi / (2.0 * FREE_SPACE_IMPEDANCE_OHM * pattern.input_power_w)
        apart = float(np.median(per_field) - 10.0 * np.log10(scale))
        if not pattern.directive and abs(apart) > GAIN_TOLERANCE_DB:
            problems.append(
                f"{pattern.where}: at {pattern.frequency_mhz:g} MHz the printed gain lies {apart:+.2f} dB from that "
                f"of the fields and the INPUT POWER; allowed is {GAIN_TOLERANCE_DB:g}"
            )
    root = range_m * np.sqrt(scale)
    return _Cells(rows[:, 0], rows[:, 1], root * e_theta, root * e_phi, path, line)


def _on_a_grid(cells: dict[float, list[_Cells]], name: str, notes: tuple[str, ...]) -> FarField:
    """All frequencies on the angles that any of them has."""
    tables = {frequency: _joined(parts) for frequency, parts in cells.items()}
    theta = np.unique(np.concatenate([table.theta_deg for table in tables.values()]))
    phi = np.unique(np.concatenate([table.phi_deg for table in tables.values()]))
    shape = (len(tables), len(theta), len(phi))
    e_theta, e_phi = np.zeros(shape, complex), np.zeros(shape, complex)
    problems: list[str] = []
    for number, (frequency, table) in enumerate(tables.items()):
        row, column = np.searchsorted(theta, table.theta_deg), np.searchsorted(phi, table.phi_deg)
        problems += _cover_problems(frequency, theta, phi, table, row * len(phi) + column, name)
        e_theta[number, row, column], e_phi[number, row, column] = table.e_theta, table.e_phi
    raise_if_any(problems)
    power = np.abs(e_theta) ** 2 + np.abs(e_phi) ** 2
    below = theta > 90.0
    if below.any() and not power[:, below].any():
        if 90.0 not in theta:
            raise InputError(f"{name}: nothing is radiated below theta 90 deg, and no row stands there; print one")
        notes = (*notes, "nothing is radiated below theta 90 deg: taken as an upper half")
        theta, power, e_theta, e_phi = theta[~below], power[:, ~below], e_theta[:, ~below], e_phi[:, ~below]
    return far_field(np.array(list(tables)), theta, phi, power, name, fields=(e_theta, e_phi), notes=notes)


def _joined(parts: list[_Cells]) -> _Cells:
    """Tables of one frequency, as of two RP cards, in a row."""
    if len(parts) == 1:
        return parts[0]
    return _Cells(*(np.concatenate([getattr(part, one.name) for part in parts]) for one in fields(_Cells)))


def _cover_problems(
    frequency_mhz: float, theta_deg: FloatArray, phi_deg: FloatArray, table: _Cells, cell: NDArray[np.int64], name: str
) -> list[str]:
    """Cells that a frequency fills twice, with their lines, or leaves empty, with their angles."""
    counts = np.bincount(cell, minlength=len(theta_deg) * len(phi_deg))

    def angles(number: int) -> str:
        return f"theta {theta_deg[number // len(phi_deg)]:g}, phi {phi_deg[number % len(phi_deg)]:g} deg"

    def place(row: int) -> str:
        return f"{table.path[row]}: line {table.line[row]}"

    problems = []
    for number in np.flatnonzero(counts > 1)[:_MOST_NAMED]:
        first, second = np.flatnonzero(cell == number)[:2]
        problems.append(
            f"{place(second)}: {angles(number)} at {frequency_mhz:g} MHz is given twice; first at {place(first)}"
        )
    empty = np.flatnonzero(counts == 0)
    if len(empty):
        named = "; ".join(angles(number) for number in empty[:_MOST_NAMED])
        problems.append(
            f"{name}: {len(empty)} of {counts.size} directions missing at {frequency_mhz:g} MHz: {named}; all "
            "frequencies must stand on one full grid"
        )
    return problems
