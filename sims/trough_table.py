"""A cosmic signal given as a table: read from a CSV file, joined by a smooth spline.

It stands beside `sims.trough` and feeds `sims.campaign`.
"""

from __future__ import annotations

import math
from itertools import pairwise
from pathlib import Path
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import CubicSpline

from sims.errors import InputError, raise_if_any

LEAST_TABLE_ROWS = 4  # a cubic spline without a knot next to its ends needs four points


class TroughTable(NamedTuple):
    """A trough as a table: frequency, MHz, strictly rising, and brightness, K."""

    frequency_mhz: NDArray[np.float64]
    temperature_k: NDArray[np.float64]


# Kelvin in one unit of the temperature column, by its heading.
_TEMPERATURE_COLUMNS = {"temperature_k": 1.0, "temperature_mk": 1e-3}


def read_trough_table(path: Path) -> TroughTable:
    """Read a trough from a CSV file.

    The heading is ``frequency_mhz,temperature_k`` or ``frequency_mhz,temperature_mk``. Empty lines and lines that
    begin with ``#`` are passed over. Frequencies rise or fall strictly.

    Parameters
    ----------
    path : Path
        The file, UTF-8.

    Returns
    -------
    TroughTable
        Frequency, MHz, rising, and brightness, K.

    Raises
    ------
    InputError
        If the file cannot be read, or anything in it is not allowed; lists each with its line.
    """
    try:
        lines = path.read_text(encoding="utf-8-sig").splitlines()
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"{path}: cannot be read as UTF-8 text: {error}") from None
    content = [(n, line) for n, line in enumerate(lines, start=1) if line.strip() and not line.lstrip().startswith("#")]
    if not content:
        raise InputError(f"{path}: no lines; a heading and at least {LEAST_TABLE_ROWS} rows are needed")
    heading_line, heading = content[0]
    names = [name.strip() for name in heading.split(",")]
    if len(names) != 2 or names[0] != "frequency_mhz" or names[1] not in _TEMPERATURE_COLUMNS:
        allowed = " or ".join(f"frequency_mhz,{name}" for name in _TEMPERATURE_COLUMNS)
        raise InputError(f"{path}: line {heading_line}: heading {heading.strip()!r}; it must be {allowed}")

    problems: list[str] = []
    rows: list[tuple[int, float, float]] = []
    for number, line in content[1:]:
        row, row_problems = _table_row(line, names)
        problems += [f"{path}: line {number}: {problem}" for problem in row_problems]
        if row is not None:
            rows.append((number, *row))
    problems += [f"{path}: {problem}" for problem in _axis_problems(rows)]
    if len(content) - 1 < LEAST_TABLE_ROWS:
        problems.append(f"{path}: {len(content) - 1} rows; at least {LEAST_TABLE_ROWS} are needed")
    raise_if_any(problems)
    frequency_mhz = np.array([row[1] for row in rows])
    temperature_k = np.array([row[2] for row in rows]) * _TEMPERATURE_COLUMNS[names[1]]
    order = np.argsort(frequency_mhz)
    return TroughTable(frequency_mhz[order], temperature_k[order])


def _table_row(line: str, names: list[str]) -> tuple[tuple[float, float] | None, list[str]]:
    """Numbers of a line, or None, and what is wrong with it."""
    fields = [field.strip() for field in line.split(",")]
    if len(fields) != len(names):
        return None, [f"{len(fields)} columns; {len(names)} are needed, with a point for the decimals"]
    problems: list[str] = []
    values = []
    for name, field in zip(names, fields, strict=True):
        try:
            # Python takes 1_0 for ten; in a table it is a slip.
            value = math.nan if "_" in field else float(field)
        except ValueError:
            value = math.nan
        if not math.isfinite(value) or (name == "frequency_mhz" and value <= 0):
            problems.append(f"{name} is {field!r}; it must be a finite number" + " above 0" * (name == "frequency_mhz"))
        values.append(value)
    return (None, problems) if problems else ((values[0], values[1]), [])


def _axis_problems(rows: list[tuple[int, float, float]]) -> list[str]:
    """Lines at which the frequency does not go on in the direction in which the table sets out."""
    if len(rows) < 2:
        return []
    direction = 1.0 if rows[-1][1] >= rows[0][1] else -1.0
    word = "rise" if direction > 0 else "fall"
    return [
        f"line {number}: frequency {f:g} MHz follows {previous:g}; in this table it must {word} strictly"
        for (_, previous, _), (number, f, _) in pairwise(rows)
        if not (f - previous) * direction > 0
    ]


def tabulated_trough_k(
    frequency_mhz: ArrayLike, table_frequency_mhz: ArrayLike, table_temperature_k: ArrayLike
) -> NDArray[np.float64]:
    """Trough from a table, by a cubic spline with continuous second derivative; never extrapolated.

    Parameters
    ----------
    frequency_mhz : array_like[...]
        Frequency, MHz; within the table.
    table_frequency_mhz : array_like[row]
        Frequency, MHz, strictly rising; at least 4.
    table_temperature_k : array_like[row]
        Brightness, K.

    Returns
    -------
    ndarray[...]
        Brightness, K.

    Raises
    ------
    InputError
        If the table is not of that form or a frequency lies outside it; lists each problem.
    """
    wanted = np.asarray(frequency_mhz, dtype=float)
    axis_mhz = np.asarray(table_frequency_mhz, dtype=float)
    values_k = np.asarray(table_temperature_k, dtype=float)
    if axis_mhz.ndim != 1 or axis_mhz.shape != values_k.shape or axis_mhz.size < LEAST_TABLE_ROWS:
        raise InputError(
            f"trough table: frequencies of shape {axis_mhz.shape} and temperatures of shape {values_k.shape}; both "
            f"must have one axis of the same length, at least {LEAST_TABLE_ROWS}"
        )
    problems = []
    if not np.all(np.isfinite(axis_mhz) & np.isfinite(values_k)):
        problems.append("trough table: every frequency and temperature must be finite")
    elif not np.all(np.diff(axis_mhz) > 0):
        row = int(np.argmin(np.diff(axis_mhz) > 0)) + 1
        problems.append(f"trough table: frequency {axis_mhz[row]:g} MHz (row {row}) does not exceed the one before it")
    raise_if_any(problems)
    outside = wanted[~((wanted >= axis_mhz[0]) & (wanted <= axis_mhz[-1]))]
    if outside.size:
        problems.append(
            f"frequency: {outside.size} values, the first {outside.flat[0]:g} MHz, lie outside the trough table, which "
            f"runs from {axis_mhz[0]:g} to {axis_mhz[-1]:g} MHz"
        )
    raise_if_any(problems)
    return np.asarray(CubicSpline(axis_mhz, values_k)(wanted))
