"""Reader of beams from print-outs of NEC-2 (Burke and Poggio 1981): fields on the scale of gain, on one grid.

One of the readers behind `sims.beam_files`; `sims.nec_printout` takes the files apart. The power
comes from the columns of the field: the printed gain is rounded to 0.01 dB. NEC-2 prints a field
far away without its factor exp(-jkr)/r, thus in volts, unless a range was asked for. Its angles
and the phase exp(+j omega t) are those of `sims.beam_grid`.
"""

from __future__ import annotations

from array import array
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from sims.config_beam import NecSource
from sims.constants import FREE_SPACE_IMPEDANCE_OHM
from sims.errors import InputError, raise_if_any
from sims.far_field import FarField, far_field
from sims.nec_printout import COLUMNS, NecPattern, nec_patterns

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
GAIN_TOLERANCE_DB = 0.02  # the printed gain is rounded to 0.01 dB, the fields and the power to five digits
_TOTAL_GAIN, _E_THETA, _E_PHI = 4, 7, 9
_MOST_NAMED = 5
_FAINT_DB = 20.0  # below the peak by more, the printed gain is not compared: there its field has lost digits
_PHI_ROUNDING_DEG = 0.02  # angles are printed to 0.01 deg


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
    patterns = [pattern for path in source.files for pattern in nec_patterns(path, problems)]
    raise_if_any(problems)
    notes: list[str] = []
    cells: dict[float, list[_Cells]] = {}
    alone = [pattern.where for pattern in patterns if pattern.free_space]
    for pattern in patterns:
        cells.setdefault(pattern.frequency_mhz, []).append(_scaled(pattern, problems, notes))
        pattern.rows = array("d")  # memory for the next
    raise_if_any(problems)
    name = ", ".join(str(path) for path in source.files)
    table = _on_a_grid(cells, name, tuple(notes))
    if table.upper_half and alone:
        raise InputError(f"{alone[0]}: an antenna in FREE SPACE radiates below theta 90 deg too, where the table ends")
    return table


def _scaled(pattern: NecPattern, problems: list[str], notes: list[str]) -> _Cells:
    """Fields on the scale of gain: their squares sum to 4 pi r^2 |E|^2 / (2 eta P), with E the peak value."""
    rows = np.array(pattern.rows).reshape(-1, COLUMNS)
    e_theta = rows[:, _E_THETA] * np.exp(1j * np.radians(rows[:, _E_THETA + 1]))
    e_phi = rows[:, _E_PHI] * np.exp(1j * np.radians(rows[:, _E_PHI + 1]))
    range_m = 1.0 if pattern.range_m is None else pattern.range_m
    with np.errstate(over="ignore"):
        squared = range_m**2 * (rows[:, _E_THETA] ** 2 + rows[:, _E_PHI] ** 2)
    scale = 1.0
    if squared.max() > 0.0:
        problems += _negative_problems(pattern, rows)
        scale = _gain_scale(pattern, rows[:, _TOTAL_GAIN], squared, problems, notes)
    else:
        problems.append(f"{pattern.where}: the fields at {pattern.frequency_mhz:g} MHz are zero everywhere")
    root = range_m * np.sqrt(scale)
    path, line = np.full(len(rows), pattern.path, dtype=object), np.array(pattern.lines)
    return _Cells(rows[:, 0], rows[:, 1], root * e_theta, root * e_phi, path, line)


def _negative_problems(pattern: NecPattern, rows: FloatArray) -> list[str]:
    wrong = np.flatnonzero((rows[:, _E_THETA] < 0.0) | (rows[:, _E_PHI] < 0.0))
    return [
        f"{pattern.path}: line {pattern.lines[row]}: the magnitude of a field must not be negative, got "
        f"{min(rows[row, _E_THETA], rows[row, _E_PHI]):g}; {len(wrong)} such rows in this table"
        for row in wrong[:_MOST_NAMED]
    ]


def _gain_scale(
    pattern: NecPattern, printed_db: FloatArray, squared: FloatArray, problems: list[str], notes: list[str]
) -> float:
    """Gain over the square of the field; where both are printed, one must bear out the other in every bright row."""
    with np.errstate(divide="ignore"):
        field_db = 10.0 * np.log10(squared)
    bright = np.flatnonzero((field_db > field_db.max() - _FAINT_DB) | (printed_db > printed_db.max() - _FAINT_DB))
    per_field = printed_db[bright] - field_db[bright]
    level_db = float(np.median(per_field))
    problems += [
        f"{pattern.path}: line {pattern.lines[row]}: the printed gain lies "
        f"{printed_db[row] - field_db[row] - level_db:+.2f} dB from that of the fields, by the scale of the rest of "
        f"the table; allowed is {GAIN_TOLERANCE_DB:g}"
        for row in bright[np.abs(per_field - level_db) > GAIN_TOLERANCE_DB][:_MOST_NAMED]
    ]
    if pattern.input_power_w is None:
        kind = "directive" if pattern.directive else "power"
        notes.append(
            f"{pattern.where}: no INPUT POWER at {pattern.frequency_mhz:g} MHz; the fields are scaled to the printed "
            f"{kind} gain, whose rounding is worth {0.01 / np.sqrt(12.0 * len(per_field)):.1e} dB"
        )
        return float(10.0 ** (per_field.mean() / 10.0))
    scale = 4.0 * np.pi / (2.0 * FREE_SPACE_IMPEDANCE_OHM * pattern.input_power_w)
    apart = level_db - 10.0 * np.log10(scale)
    if not (pattern.directive or abs(apart) <= GAIN_TOLERANCE_DB):
        problems.append(
            f"{pattern.where}: at {pattern.frequency_mhz:g} MHz the printed gain lies {apart:+.2f} dB from that "
            f"of the fields and the INPUT POWER; allowed is {GAIN_TOLERANCE_DB:g}"
        )
    return float(scale)


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
        problems += _cover_problems(frequency, theta, phi, table, row * len(phi) + column)
        e_theta[number, row, column], e_phi[number, row, column] = table.e_theta, table.e_phi
    problems = problems or _cut_problems(phi, next(iter(tables.values())))
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
    frequency_mhz: float, theta_deg: FloatArray, phi_deg: FloatArray, table: _Cells, cell: NDArray[np.int64]
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
            f"{place(-1)}: the table ends, and {len(empty)} of {counts.size} directions are missing at "
            f"{frequency_mhz:g} MHz: {named}; all frequencies must stand on one full grid"
        )
    return problems


def _cut_problems(phi_deg: FloatArray, table: _Cells) -> list[str]:
    """A wider gap after the last phi than between the others: phi runs slowest, so that a cut takes the last."""
    if len(phi_deg) < 2:
        return []
    gap, step = 360.0 - (phi_deg[-1] - phi_deg[0]), float(np.diff(phi_deg).max())
    if gap <= step + _PHI_ROUNDING_DEG:
        return []
    return [
        f"{table.path[-1]}: line {table.line[-1]}: phi ends at {phi_deg[-1]:g} deg, {gap:g} deg before the turn "
        f"closes, and its steps are {step:g} deg at most; is the print-out cut short?"
    ]
