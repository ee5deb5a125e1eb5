"""A far field as every reader of beam files hands it on: one grid, one scale, checked.

The readers (`sims.beam_nec` and its neighbours) turn their files into plain arrays; `far_field`
sorts, closes and judges these, all problems together, and `sims.beam_grid` makes a beam of
what comes out. Antenna frame and angles: see there.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sims.beam_smooth import frequency_spline
from sims.beam_spline import angular_spline
from sims.errors import InputError, raise_if_any

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
ANGLE_TOLERANCE_DEG = 1e-4  # as solvers print angles
TRIFLE = 1e-3  # of a step: what rounded radians miss a pole, or the end of the turn, by
AGREEMENT = 1e-3  # of the largest power: what is given twice must agree to this
NOTHING = 1e-9  # of the largest power: what goes below the horizon up to this is none; solvers print -100 dBi for zero
STEEP = 0.4  # of the power beside it: what the horizon may fall short of what the rows above it lead to
_MOST_CELLS_NAMED = 5


@dataclass(frozen=True, eq=False)
class FarField:
    """Radiated power over directions and frequencies.

    Parameters
    ----------
    frequency_mhz : ndarray[frequency]
        Rising, MHz.
    theta_deg : ndarray[theta]
        Rising within 0 to 180, from the boresight, deg; to 90 for an upper half.
    phi_deg : ndarray[phi]
        Rising within 0 to below 360, from x towards y, deg; no direction twice.
    power : ndarray[frequency, theta, phi]
        Gain, linear: its mean over the sphere is the share radiated of what went in.
    e_theta, e_phi : ndarray[frequency, theta, phi] or None
        Complex fields where the file has them, |e_theta|^2 + |e_phi|^2 = power.
    upper_half : bool
        Nothing is radiated below theta = 90 deg, and the table ends there.
    radiated_fraction : ndarray[frequency]
        Mean of the power over the sphere.
    source : str
        The file or files, for messages.
    notes : tuple of str
        What was put right on the way, and gaps in frequency.
    """

    frequency_mhz: FloatArray
    theta_deg: FloatArray
    phi_deg: FloatArray
    power: FloatArray
    e_theta: ComplexArray | None
    e_phi: ComplexArray | None
    upper_half: bool
    radiated_fraction: FloatArray
    source: str
    notes: tuple[str, ...]


def far_field(
    frequency_mhz: FloatArray,
    theta_deg: FloatArray,
    phi_deg: FloatArray,
    power: FloatArray,
    source: str,
    *,
    fields: tuple[ComplexArray, ComplexArray] | None = None,
    notes: tuple[str, ...] = (),
) -> FarField:
    """Judge a far field and bring it to one form.

    Parameters
    ----------
    frequency_mhz : ndarray[frequency]
        MHz; in any order.
    theta_deg, phi_deg : ndarray[theta], ndarray[phi]
        Axes of the grid, deg; in any order. Phi may run from -180, and may hold both ends of
        the turn; a table whose thetas end at 90, or that holds nothing below, is an upper half.
    power : ndarray[frequency, theta, phi]
        Linear; of any scale that the caller means.
    source : str
        The file or files.
    fields : tuple of ndarray[frequency, theta, phi]
        Complex e_theta and e_phi, where known.
    notes : tuple of str
        What the reader put right already.

    Returns
    -------
    FarField

    Raises
    ------
    InputError
        If a cell is not finite or negative, a frequency or angle is given twice, what is
        given twice (the ends of the turn, the poles) disagrees, the grid is too coarse or leaves
        a gap, a frequency has no power, or nothing goes below the horizon and the row on it is missing or
        lies below the jump. All problems together, each with its cell.
    """
    frequency = np.asarray(frequency_mhz, dtype=float)
    theta, phi = np.asarray(theta_deg, dtype=float), np.asarray(phi_deg, dtype=float)
    problems = [f"{source}: {line}" for line in _turn_problems(phi)]
    phi = np.mod(phi, 360.0, where=np.isfinite(phi), out=phi.copy())
    phi = np.where(360.0 - phi < _trifle_deg(phi), 0.0, phi)
    if power.shape != (len(frequency), len(theta), len(phi)):
        raise InputError(
            f"{source}: power of shape {power.shape} for {len(frequency)} frequencies, {len(theta)} thetas and "
            f"{len(phi)} phis"
        )
    problems += [f"{source}: {line}" for line in _axis_problems(frequency, theta)]
    problems += [f"{source}: {line}" for line in _cell_problems(frequency, theta, phi, power)]
    raise_if_any(problems)
    special = 90.0 * np.round(theta / 90.0)  # the poles and the horizon, where a solver's rounding misses them
    theta = np.where(np.abs(theta - special) < _trifle_deg(theta), special, theta)
    table = _Table(frequency, theta, phi, power, fields, notes)
    table = _gaps_noted(_sorted(table))
    problems = []
    table = _closed(table, source, problems)
    table = _one_pole(table, source, problems)
    table = _dark_half_cut(table, source, problems)
    problems += [
        f"{source}: the power at {table.frequency_mhz[number]:g} MHz is zero everywhere"
        for number in np.flatnonzero(~(table.power > 0.0).any(axis=(1, 2)))
    ]
    raise_if_any(problems)
    upper_half = bool(abs(table.theta_deg[-1] - 90.0) < ANGLE_TOLERANCE_DEG)
    try:
        sphere = angular_spline(table.theta_deg, table.phi_deg, upper_half=upper_half)
    except InputError as error:
        raise InputError([problem.replace("beam.files", source) for problem in error.problems]) from None
    return FarField(
        table.frequency_mhz, table.theta_deg, table.phi_deg, table.power,
        None if table.fields is None else table.fields[0], None if table.fields is None else table.fields[1],
        upper_half, sphere.mean(table.power), source, table.notes,
    )  # fmt: skip


@dataclass(frozen=True, eq=False)
class _Table:
    """A far field on its way."""

    frequency_mhz: FloatArray
    theta_deg: FloatArray
    phi_deg: FloatArray
    power: FloatArray
    fields: tuple[ComplexArray, ComplexArray] | None
    notes: tuple[str, ...]

    def taken(self, axis: int, rows: NDArray[np.int64]) -> _Table:
        """Some rows of an axis, in their order."""
        frequency, theta, phi = (
            values[rows] if number == axis else values
            for number, values in enumerate((self.frequency_mhz, self.theta_deg, self.phi_deg))
        )
        fields = self.fields
        if fields is not None:
            fields = (np.take(fields[0], rows, axis=axis), np.take(fields[1], rows, axis=axis))
        return _Table(frequency, theta, phi, np.take(self.power, rows, axis=axis), fields, self.notes)

    def noted(self, note: str) -> _Table:
        return _Table(self.frequency_mhz, self.theta_deg, self.phi_deg, self.power, self.fields, (*self.notes, note))


def _turn_problems(phi: FloatArray) -> list[str]:
    """Phis that are none, or run on over more than a turn, as of degrees taken for radians."""
    finite = np.isfinite(phi)
    if not finite.all():
        return [f"phi must be finite, got {phi[~finite][0]:g} as number {int(finite.argmin()) + 1}"]
    span = float(np.ptp(phi)) if len(phi) else 0.0
    if span >= 360.0 + _trifle_deg(phi):
        return [f"phi must stay within one turn, got {phi.min():.8g} to {phi.max():.8g} deg: is its unit right?"]
    return []


def _axis_problems(frequency: FloatArray, theta: FloatArray) -> list[str]:
    problems = []
    wrong = frequency[~(np.isfinite(frequency) & (frequency > 0.0))]
    if len(wrong):
        problems.append(f"frequencies must be finite and positive, got {wrong[:3].tolist()} MHz")
    twice = np.sort(frequency)[:-1][np.diff(np.sort(frequency)) == 0.0]
    if len(twice):
        problems.append(f"given twice: {', '.join(f'{value:g}' for value in np.unique(twice))} MHz")
    trifle = _trifle_deg(theta)
    outside = theta[~((theta > -trifle) & (theta < 180.0 + trifle))]
    if len(outside):
        problems.append(f"theta must lie within 0 to 180 deg, got {outside[0]:.8g}")
    close = np.diff(np.sort(theta)) < ANGLE_TOLERANCE_DEG
    if close.any():
        problems.append(f"theta {np.sort(theta)[:-1][close][0]:g} deg is given twice")
    return problems


def _cell_problems(frequency: FloatArray, theta: FloatArray, phi: FloatArray, power: FloatArray) -> list[str]:
    problems = []
    for name, wrong in (("not finite", ~np.isfinite(power)), ("negative", power < 0.0)):
        if not wrong.any():
            continue
        cells = np.argwhere(wrong)
        named = "; ".join(
            f"{frequency[i]:g} MHz, theta {theta[j]:g}, phi {phi[k]:g}: {power[i, j, k]:g}"
            for i, j, k in cells[:_MOST_CELLS_NAMED]
        )
        problems.append(f"power {name} in {len(cells)} of {power.size} cells: {named}")
    return problems


def _sorted(table: _Table) -> _Table:
    """Axes in rising order."""
    for axis, values in enumerate((table.frequency_mhz, table.theta_deg, table.phi_deg)):
        order = np.argsort(values, kind="stable")
        if (np.diff(order) != 1).any():
            table = table.taken(axis, order).noted(f"{('frequency', 'theta', 'phi')[axis]} put into rising order")
    return table


def _trifle_deg(angle_deg: FloatArray) -> float:
    """What two angles of an axis may differ by and be one."""
    step = np.diff(np.unique(angle_deg[np.isfinite(angle_deg)]))
    step = step[step > ANGLE_TOLERANCE_DEG]
    return max(ANGLE_TOLERANCE_DEG, TRIFLE * float(np.median(step))) if len(step) else ANGLE_TOLERANCE_DEG


def _gaps_noted(table: _Table) -> _Table:
    """Frequencies that seem left out are no fault, since steps may be uneven, but are told."""
    for low, high in frequency_spline(table.frequency_mhz, None).gaps_mhz:
        table = table.noted(f"a gap in frequency: none between {low:g} and {high:g} MHz, joined by the spline")
    return table


def _dark_half_cut(table: _Table, source: str, problems: list[str]) -> _Table:
    """Without the rows of nothing below the horizon: a spline through the jump to them would ring on both sides."""
    theta, power = table.theta_deg, table.power
    below = theta > 90.0
    if not below.any() or below.all() or (power[:, below].max(axis=(1, 2)) > NOTHING * power.max(axis=(1, 2))).any():
        return table
    if 90.0 not in theta:
        beside = power[:, np.flatnonzero(~below)[-1]]
        if (beside.max(axis=1) <= AGREEMENT * power.max(axis=(1, 2))).all():
            return table  # it fades away by itself
        problems.append(
            f"{source}: nothing is radiated below theta 90 deg, and no row stands there; the pattern may jump at the "
            "horizon: give a row at 90 deg with what is radiated just above it"
        )
        return table
    note = "nothing is radiated below theta 90 deg: taken as an upper half"
    table = table.taken(1, np.flatnonzero(~below)).noted(note)
    problems += [f"{source}: {line}" for line in _horizon_problems(table)]
    return table


def _horizon_problems(table: _Table) -> list[str]:
    """A row on the horizon that belongs to the dark side of a jump, or stands halfway: zero, or the mean of both.

    It is held against the parabola through the three rows above, as means over phi. The steep fall over real ground is
    no such jump: it bends down towards the horizon.
    """
    if len(table.theta_deg) < 4:
        return []
    at = table.theta_deg[-4:]
    rows = table.power[:, -4:].mean(axis=2)
    weight = [np.prod([(90.0 - other) / (one - other) for other in at[:3] if other != one]) for one in at[:3]]
    expected, beside, horizon = rows[:, :3] @ np.array(weight), rows[:, 2], rows[:, 3]
    peak = table.power.max(axis=(1, 2))
    jumps = (expected - horizon > STEEP * beside) & (horizon < beside) & (beside > AGREEMENT * peak)
    if not jumps.any():
        return []
    worst = int(np.argmax(np.where(jumps, (expected - horizon) / np.where(beside > 0.0, beside, 1.0), 0.0)))
    return [
        f"nothing is radiated below theta 90 deg, and the power falls from {beside[worst]:.3g} at theta {at[2]:g} to "
        f"{horizon[worst]:.3g} at 90 deg ({table.frequency_mhz[worst]:g} MHz, means over phi), where the rows above "
        f"lead to {expected[worst]:.3g}: the row at 90 deg must hold what is radiated just above the horizon; if it "
        "does, give finer steps there"
    ]


def _closed(table: _Table, source: str, problems: list[str]) -> _Table:
    """The turn held once: directions that stand twice, as at 0 and 360 deg, must agree."""
    repeat = np.flatnonzero(np.diff(table.phi_deg) < _trifle_deg(table.phi_deg)) + 1
    if not len(repeat):
        return table
    apart = np.abs(table.power[:, :, repeat] - table.power[:, :, repeat - 1]).max() / table.power.max()
    if apart > AGREEMENT:
        problems.append(
            f"{source}: phi {table.phi_deg[repeat[0]]:g} deg is given twice, as at the two ends of a turn, and the "
            f"power differs by {apart:.1e} of its largest; allowed is {AGREEMENT:g}"
        )
    kept = np.setdiff1d(np.arange(len(table.phi_deg)), repeat)
    return table.taken(2, kept).noted(f"phi {table.phi_deg[repeat[0]]:g} deg, given twice, taken once")


def _one_pole(table: _Table, source: str, problems: list[str]) -> _Table:
    """At a pole all phis are one direction: their power must agree, and is averaged."""
    power = table.power
    for row in (0, len(table.theta_deg) - 1):
        theta = table.theta_deg[row]
        if min(abs(theta), abs(theta - 180.0)) > ANGLE_TOLERANCE_DEG:
            continue
        values = power[:, row]
        apart = np.ptp(values, axis=1).max() / power.max()
        if apart > AGREEMENT:
            problems.append(
                f"{source}: at theta {theta:g} deg, one direction, the power differs over phi by {apart:.1e} of its "
                f"largest; allowed is {AGREEMENT:g}"
            )
        elif apart > 0.0:
            power = power.copy() if power is table.power else power
            power[:, row] = values.mean(axis=1, keepdims=True)
    if power is table.power:
        return table
    return _Table(
        table.frequency_mhz, table.theta_deg, table.phi_deg, power, table.fields,
        (*table.notes, "power at the poles averaged over phi"),
    )  # fmt: skip
