"""Reader of beams in delimited text, whatever solver wrote it: columns, units and angles are declared.

One of the readers behind `sims.beam_files`. Rows may stand in any order; together they must fill a
grid of frequency, theta and phi. NumPy's own parser reads the columns that are declared; lines
are looked at one by one only where it fails, to say which.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sims.config_beam import TableSource
from sims.errors import InputError, raise_if_any
from sims.far_field import FarField, far_field

FloatArray = NDArray[np.float64]
DELIMITERS = {"comma": ",", "semicolon": ";", "tab": "\t", "space": None}
MHZ = {"Hz": 1e-6, "kHz": 1e-3, "MHz": 1.0, "GHz": 1e3}
_ANGLE_DIGITS = 5  # angles that print the same to a hundred-thousandth of a degree are one
_FREQUENCY_DIGITS = 6
_MOST_NAMED = 5


@dataclass(frozen=True, eq=False)
class _Rows:
    """Columns of all files: frequency MHz, theta and phi deg, and the values."""

    frequency_mhz: FloatArray
    theta_deg: FloatArray
    phi_deg: FloatArray
    values: FloatArray


def read_table_files(source: TableSource) -> FarField:
    """Read a beam from delimited text.

    Parameters
    ----------
    source : TableSource
        Files, delimiter, columns (by name in the last header line, or by number from 1), units
        and angle conventions.

    Returns
    -------
    FarField

    Raises
    ------
    InputError
        If a file cannot be read, a column is not there, a line does not parse, or the rows leave
        cells of the grid empty or fill one twice. All problems together.
    """
    problems: list[str] = []
    parts = []
    for number, path in enumerate(source.files):
        columns = _columns(source, path, problems)
        if columns is not None:
            table = _table(source, path, columns, problems)
            if table is not None:
                parts.append(_converted(source, table, number))
    raise_if_any(problems)
    rows = _Rows(*(np.concatenate([getattr(part, name) for part in parts]) for name in _Rows.__dataclass_fields__))
    name = ", ".join(str(path) for path in source.files)
    return _on_a_grid(source, rows, name)


def _columns(source: TableSource, path: Path, problems: list[str]) -> list[int] | None:
    """Numbers, from 0, of the columns asked for: theta, phi, frequency if any, values."""
    asked: list[str | int] = [source.theta, source.phi]
    if source.frequency is not None:
        asked.append(source.frequency)
    if source.power is not None:
        asked.append(source.power.column)
    else:
        assert source.fields is not None
        asked += list(source.fields.columns)
    try:
        with path.open(encoding="utf-8") as file:
            header = [next(file, "") for _ in range(source.header_lines)]
    except (OSError, UnicodeDecodeError) as error:
        problems.append(f"{path}: cannot be read as a text file ({error})")
        return None
    names = [name.strip().strip('"') for name in header[-1].split(DELIMITERS[source.delimiter])] if header else []
    found = []
    for column in asked:
        if isinstance(column, int):
            if column < 1:
                problems.append(f"{path}: column {column}: columns are numbered from 1")
            found.append(column - 1)
        elif column in names:
            found.append(names.index(column))
        else:
            told = f"line {source.header_lines} names {', '.join(names)}" if names else "header_lines is 0"
            problems.append(f"{path}: no column {column!r}; {told}")
    return found if len(found) == len(asked) else None


def _table(source: TableSource, path: Path, columns: list[int], problems: list[str]) -> FloatArray | None:
    try:
        table = np.loadtxt(
            path, delimiter=DELIMITERS[source.delimiter], skiprows=source.header_lines, usecols=columns, ndmin=2
        )
    except (ValueError, OSError, IndexError):
        before = len(problems)
        problems += _bad_lines(source, path, columns)
        if len(problems) == before:
            problems.append(f"{path}: cannot be read as columns of numbers")
        return None
    if not len(table):
        problems.append(f"{path}: no row after {source.header_lines} header lines")
        return None
    return table


def _bad_lines(source: TableSource, path: Path, columns: list[int]) -> list[str]:
    """The first lines that do not hold a number in each column."""
    found = []
    with path.open(encoding="utf-8", errors="replace") as file:
        for number, line in enumerate(file, start=1):
            text = line.split("#")[0].strip()
            if number <= source.header_lines or not text:
                continue
            cells = text.split(DELIMITERS[source.delimiter])
            for column in columns:
                cell = cells[column].strip() if column < len(cells) else None
                if cell is None:
                    found.append(f"{path}: line {number}: {len(cells)} columns; column {column + 1} is needed")
                elif not _is_number(cell):
                    found.append(f"{path}: line {number}, column {column + 1}: {cell!r} is not a number")
            if len(found) >= _MOST_NAMED:
                return [*found[:_MOST_NAMED], f"{path}: and perhaps more"]
    return found


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def _converted(source: TableSource, table: FloatArray, number: int) -> _Rows:
    """Columns in our units and by our angles."""
    to_deg = 180.0 / np.pi if source.angle_unit == "rad" else 1.0
    theta, phi = to_deg * table[:, 0], to_deg * table[:, 1]
    if source.theta_from == "horizon":
        theta = 90.0 - theta
    if source.phi_sense == "compass":
        phi = 90.0 - phi  # x to the east and y to the north, so that azimuth 0 is phi 90
    if source.frequencies_mhz is not None:
        return _Rows(np.full(len(table), source.frequencies_mhz[number]), theta, phi, table[:, 2:])
    return _Rows(MHZ[source.frequency_unit] * table[:, 2], theta, phi, table[:, 3:])


def _on_a_grid(source: TableSource, rows: _Rows, name: str) -> FarField:
    problems = []
    if not all(np.isfinite(values).all() for values in (rows.frequency_mhz, rows.theta_deg, rows.phi_deg)):
        raise InputError(f"{name}: frequencies and angles must be finite")
    frequency, i = np.unique(np.round(rows.frequency_mhz, _FREQUENCY_DIGITS), return_inverse=True)
    theta, j = np.unique(np.round(rows.theta_deg, _ANGLE_DIGITS), return_inverse=True)
    phi, k = np.unique(np.round(rows.phi_deg, _ANGLE_DIGITS), return_inverse=True)
    shape = (len(frequency), len(theta), len(phi))
    cell = np.ravel_multi_index((i, j, k), shape)
    counts = np.bincount(cell, minlength=int(np.prod(shape)))
    for wrong, told in ((counts == 0, "is missing"), (counts > 1, "is given twice")):
        cells = np.flatnonzero(wrong)
        if len(cells):
            named = "; ".join(
                f"{frequency[a]:g} MHz, theta {theta[b]:g}, phi {phi[c]:g} deg"
                for a, b, c in zip(*np.unravel_index(cells[:_MOST_NAMED], shape), strict=True)
            )
            problems.append(f"{name}: {len(cells)} of {counts.size} cells of the grid: {named} {told}")
    raise_if_any(problems)
    flat = np.empty((counts.size, rows.values.shape[1]))
    flat[cell] = rows.values
    values = flat.reshape(*shape, -1)
    if source.power is not None:
        power = 10.0 ** (values[..., 0] / 10.0) if source.power.unit == "dBi" else values[..., 0]
        return far_field(frequency, theta, phi, power, name)
    assert source.fields is not None
    first, second = values[..., 0::2], values[..., 1::2]
    polar = source.fields.parts == "magnitude-phase"
    complex_value = first * np.exp(1j * np.radians(second)) if polar else first + 1j * second
    field = np.asarray(complex_value, dtype=np.complex128)
    power = (np.abs(field) ** 2).sum(axis=-1)
    return far_field(frequency, theta, phi, power, name, fields=(field[..., 0], field[..., 1]))
