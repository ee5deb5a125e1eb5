"""Tables of numbers in CSV files: the lines that count, their fields, and what is wrong with them.

`sims.horizon` and `sims.attitude_table` read their files with it.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path
from typing import NamedTuple

from sims.errors import InputError


class CsvRow(NamedTuple):
    """Number of a line in its file, and its fields without the space round them."""

    line: int
    fields: tuple[str, ...]


def read_csv_rows(path: Path, columns: Sequence[str], least_rows: int) -> tuple[list[CsvRow], list[str]]:
    """Split a CSV file into rows; empty lines and lines that begin with ``#`` are passed over.

    Parameters
    ----------
    path : Path
        The file, UTF-8.
    columns : sequence of str
        The heading, in order.
    least_rows : int
        Fewest rows.

    Returns
    -------
    rows : list of CsvRow
        Those that have all columns.
    problems : list of str
        One for each other line, and for too few of them.

    Raises
    ------
    InputError
        If the file cannot be read or its heading is another.
    """
    try:
        lines = path.read_text(encoding="utf-8-sig").splitlines()
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"{path}: cannot be read as UTF-8 text: {error}") from None
    content = [
        CsvRow(number, tuple(field.strip() for field in line.split(",")))
        for number, line in enumerate(lines, start=1)
        if line.strip() and not line.lstrip().startswith("#")
    ]
    heading = ",".join(columns)
    if not content:
        raise InputError(f"{path}: no lines; the heading {heading} and at least {least_rows} rows are needed")
    if content[0].fields != tuple(columns):
        raise InputError(
            f"{path}: line {content[0].line}: heading {','.join(content[0].fields)!r}; it must be {heading}"
        )
    rows = [row for row in content[1:] if len(row.fields) == len(columns)]
    problems = [
        f"{path}: line {row.line}: {len(row.fields)} columns; {len(columns)} are needed, with a point for the decimals"
        for row in content[1:]
        if len(row.fields) != len(columns)
    ]
    if len(content) - 1 < least_rows:
        problems.append(f"{path}: {len(content) - 1} rows; at least {least_rows} are needed")
    return rows, problems


def finite_number(text: str) -> float | None:
    """The number a field holds, or None; 1_0 is a slip, not ten."""
    try:
        value = math.nan if "_" in text else float(text)
    except ValueError:
        return None
    return value if math.isfinite(value) else None
