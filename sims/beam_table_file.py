"""Reader of beams in delimited text, whatever solver wrote it: columns, units and angles are declared.

One of the readers behind `sims.beam_files`. Rows may stand in any order; together they must fill a
grid of frequency, theta and phi. NumPy's own parser reads the columns that are declared; lines
are looked at one by one only where it fails, to say which.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from math import prod
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sims.config_beam import FieldColumns, PowerColumn, TableSource
from sims.errors import InputError, raise_if_any
from sims.far_field import FarField, far_field

FloatArray = NDArray[np.float64]
DELIMITERS = {"comma": ",", "semicolon": ";", "tab": "\t", "space": None}
MHZ = {"Hz": 1e-6, "kHz": 1e-3, "MHz": 1.0, "GHz": 1e3}
_DIGITS = (6, 5, 5)  # frequencies the same to a hertz, and angles to a hundred-thousandth of a degree, are one
_SPARSEST = 4  # cells of the grid for each row, beyond which the rows are no grid with a few left out
_MOST_NAMED = 5


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
        A pole told by one row is taken for every phi.

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
            table = _taken(source, path, number, columns, problems)
            if table is not None:
                parts.append(table)
    raise_if_any(problems)
    name = ", ".join(str(path) for path in source.files)
    return _on_a_grid(source, parts[0] if len(parts) == 1 else np.concatenate(parts), name)


def _columns(source: TableSource, path: Path, problems: list[str]) -> list[int] | None:
    """Numbers, from 0, of the columns asked for: frequency if any, theta, phi, values."""
    asked: list[str | int] = [] if source.frequency is None else [source.frequency]
    asked += [source.theta, source.phi]
    if source.power is not None:
        asked.append(source.power.column)
    else:
        assert source.fields is not None
        asked += list(source.fields.columns)
    try:
        with path.open("rb") as file:
            header = [next(file, b"") for _ in range(source.header_lines)]
    except OSError as error:
        problems.append(f"{path}: cannot be read as a text file ({error})")
        return None
    names = _names(header[-1], DELIMITERS[source.delimiter]) if header else []
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


def _names(heading: bytes, delimiter: str | None) -> list[str]:
    """Names of a heading, which may be marked as a comment and written in the encoding of an older solver."""
    try:
        text = heading.decode("utf-8-sig")
    except UnicodeDecodeError:
        text = heading.decode("latin-1")
    return [name.strip().strip('"') for name in text.strip().lstrip("#").split(delimiter)]


def _table(source: TableSource, path: Path, columns: list[int], problems: list[str]) -> FloatArray | None:
    try:
        with warnings.catch_warnings():
            warnings.filterwarnings("ignore", message="loadtxt: input contained no data")
            table = np.loadtxt(
                path, delimiter=DELIMITERS[source.delimiter], skiprows=source.header_lines, usecols=columns, ndmin=2,
                encoding=_encoding(path),
            )  # fmt: skip
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


def _encoding(path: Path) -> str:
    """The one that takes every byte, unless the file says at its start that it is another."""
    with path.open("rb") as file:
        return "utf-8-sig" if file.read(3) == b"\xef\xbb\xbf" else "latin-1"


def _bad_lines(source: TableSource, path: Path, columns: list[int]) -> list[str]:
    """The first lines that do not hold a number in each column."""
    found = []
    with path.open(encoding="utf-8-sig", errors="replace") as file:
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
    return "_" not in text  # Python takes 1_0 for ten


def _taken(source: TableSource, path: Path, number: int, columns: list[int], problems: list[str]) -> FloatArray | None:
    """Rows of a file: frequency MHz, theta and phi deg by our angles, then the values; None if there is a problem."""
    table = _table(source, path, columns, problems)
    if table is None:
        return None
    angle = 180.0 / np.pi if source.angle_unit == "rad" else 1.0
    if source.frequencies_mhz is not None:
        table = np.insert(table, 0, source.frequencies_mhz[number], axis=1)
    else:
        table[:, 0] *= MHZ[source.frequency_unit]
    table[:, 1:3] *= angle
    if source.theta_from == "horizon":
        table[:, 1] = 90.0 - table[:, 1]
    if source.phi_sense == "compass":
        table[:, 2] = 90.0 - table[:, 2]  # x to the east and y to the north, so that azimuth 0 is phi 90
    for column, digits in enumerate(_DIGITS):
        np.round(table[:, column], digits, out=table[:, column])
    return table


def _on_a_grid(source: TableSource, table: FloatArray, name: str) -> FarField:
    if not np.isfinite(table[:, :3]).all():
        raise InputError(f"{name}: frequencies and angles must be finite")
    axes = [np.unique(table[:, column]) for column in range(3)]
    shape = tuple(len(axis) for axis in axes)
    cells = prod(shape)
    if cells > _SPARSEST * len(table):
        frequencies, thetas, phis = shape
        raise InputError(
            f"{name}: {len(table)} rows hold {frequencies} frequencies, {thetas} thetas and {phis} phis, whose grid "
            f"has {cells} cells; all thetas are needed with all phis: are these the right columns?"
        )
    cell = np.zeros(len(table), dtype=np.intp)
    for column, axis in enumerate(axes):
        cell *= len(axis)
        cell += np.searchsorted(axis, table[:, column])
    values = np.full((cells, table.shape[1] - 3), np.nan)
    values[cell] = table[:, 3:]
    counts = np.bincount(cell, minlength=cells).reshape(shape)
    grid = _Grid(axes[0], axes[1], axes[2], counts, values.reshape(*shape, -1))
    if source.power is not None:
        return _power_table(source.power, grid, name)
    assert source.fields is not None
    return _field_table(source.fields, grid, name)


@dataclass(frozen=True, eq=False)
class _Grid:
    """Axes, how many rows fill each cell, and what they hold."""

    frequency_mhz: FloatArray
    theta_deg: FloatArray
    phi_deg: FloatArray
    counts: NDArray[np.int64]
    values: FloatArray

    def single_poles(self) -> list[tuple[int, int, int]]:
        """Poles of which a frequency has one row, without the others that stand for the same direction."""
        if len(self.phi_deg) == 1:
            return []
        return [
            (number, row, int(self.counts[number, row].argmax()))
            for row in np.flatnonzero(np.isin(self.theta_deg, (0.0, 180.0))).tolist()
            for number in np.flatnonzero(self.counts[:, row].sum(axis=1) == 1).tolist()
        ]

    def problems(self, name: str) -> list[str]:
        """Cells without a row, but for poles told once, and cells with more than one."""
        counts = self.counts
        poles = self.single_poles()
        if poles:
            counts = counts.copy()
            for number, row, _ in poles:
                counts[number, row] = 1
        found = []
        for wrong, told in ((counts == 0, "is missing"), (counts > 1, "is given twice")):
            if wrong.any():
                named = "; ".join(
                    f"{self.frequency_mhz[i]:g} MHz, theta {self.theta_deg[j]:g}, phi {self.phi_deg[k]:g} deg"
                    for i, j, k in np.argwhere(wrong)[:_MOST_NAMED]
                )
                found.append(f"{name}: {int(wrong.sum())} of {counts.size} cells of the grid: {named} {told}")
        return found


def _power_table(power: PowerColumn, grid: _Grid, name: str) -> FarField:
    raise_if_any(grid.problems(name))
    values, poles = grid.values[..., 0], grid.single_poles()
    for number, row, told in poles:
        values[number, row] = values[number, row, told]
    if power.unit == "dBi":
        values /= 10.0
        with np.errstate(over="ignore"):  # becomes a cell that is not finite, and is named as such
            np.power(10.0, values, out=values)
    return far_field(grid.frequency_mhz, grid.theta_deg, grid.phi_deg, values, name, notes=_pole_notes(poles))


def _field_table(fields: FieldColumns, grid: _Grid, name: str) -> FarField:
    raise_if_any(grid.problems(name))
    first, second = grid.values[..., 0::2], grid.values[..., 1::2]
    polar = fields.parts == "magnitude-phase"
    complex_value = first * np.exp(1j * np.radians(second)) if polar else first + 1j * second
    field = np.asarray(complex_value, dtype=np.complex128)
    e_theta, e_phi = field[..., 0], field[..., 1]
    poles = grid.single_poles()
    for number, row, told in poles:
        # One field, whose parts along theta and phi turn with the meridian; beyond the pole below, theta runs back.
        turned = np.radians(grid.phi_deg - grid.phi_deg[told])
        sign = 1.0 if grid.theta_deg[row] == 0.0 else -1.0
        one, two = sign * e_theta[number, row, told], e_phi[number, row, told]
        e_theta[number, row] = sign * (one * np.cos(turned) + two * np.sin(turned))
        e_phi[number, row] = two * np.cos(turned) - one * np.sin(turned)
    power = np.abs(e_theta) ** 2 + np.abs(e_phi) ** 2
    return far_field(
        grid.frequency_mhz, grid.theta_deg, grid.phi_deg, power, name, fields=(e_theta, e_phi), notes=_pole_notes(poles)
    )


def _pole_notes(poles: list[tuple[int, int, int]]) -> tuple[str, ...]:
    return ("a pole told once, by one row, taken for every phi",) if poles else ()
