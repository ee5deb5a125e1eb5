"""A beam tabulated over the sphere as a bicubic spline: coefficients, quadrature and the kernel that reads them.

The table's theta runs on over the poles: theta and phi become -theta and phi + 180 degrees, so that
every meridian and its opposite make one smooth curve. The tensor product of cubic B-splines in theta and phi
(de Boor 1978, A Practical Guide to Splines) has then no seam and no pole. A table of the upper half ends at
90 degrees with one polynomial over the last two steps, and there is nothing below: the pattern may jump there.
`sims.beam_grid` makes a beam of it; the engine's kernel calls `grid_gain` or `add_grid`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray
from scipy.interpolate import make_interp_spline

from sims.errors import raise_if_any

FloatArray = NDArray[np.float64]
FEWEST_THETA = 5
FEWEST_PHI = 8
LARGEST_STEP_DEG = 45.0
SMALLEST_STEP_DEG = 0.25
EVEN = 1e-3
"""Steps that differ by less than this part of a step are taken as equal when the spline's own grid is laid."""
LOWEST_ANYWHERE = -2.0


@dataclass(frozen=True, eq=False)
class AngularSpline:
    """Linear maps from a table in theta and phi to spline coefficients and to its mean over the sphere.

    Attributes
    ----------
    straight, across : ndarray[theta cell + 3, theta]
        From values on a meridian, and on the opposite one, to coefficients.
    around : ndarray[phi cell + 3, phi]
        From values round a parallel to coefficients; the first and the last two repeat others, so that a kernel
        needs no modulo.
    opposite : ndarray[phi cell + 3] of int
        Which coefficient lies half a turn away.
    theta_weight : ndarray[theta]
        Weights of the mean over the sphere; with those of phi they integrate the spline exactly.
    phi_weight : ndarray[phi]
        Their sum is one.
    layout : ndarray[5]
        For the kernel: start, rad, and cells per rad in theta; the same in phi; lowest z with anything above zero.
    """

    straight: FloatArray
    across: FloatArray
    around: FloatArray
    opposite: NDArray[np.int64]
    theta_weight: FloatArray
    phi_weight: FloatArray
    layout: FloatArray

    def mean(self, power: FloatArray) -> FloatArray:
        """Mean over the sphere: ndarray[frequency] of a table ndarray[frequency, theta, phi]."""
        return np.asarray((power @ self.phi_weight) @ self.theta_weight)

    def coefficients(self, power: FloatArray) -> FloatArray:
        """Coefficients for the kernel.

        Parameters
        ----------
        power : ndarray[frequency, theta, phi]

        Returns
        -------
        ndarray[theta cell + 3, phi cell + 3, frequency]
            C-contiguous.
        """
        along = power @ self.around.T
        both = np.matmul(self.straight, along)
        both += np.matmul(self.across, along[..., self.opposite])
        return np.ascontiguousarray(np.moveaxis(both, 0, -1))


def angular_spline(theta_deg: FloatArray, phi_deg: FloatArray, *, upper_half: bool) -> AngularSpline:
    """Lay the spline over a table.

    A grid of equal steps (in theta from a pole or half a step beside it, in phi from anywhere) is interpolated
    exactly; any other is interpolated by a spline on its own nodes, which is carried over to equal steps
    as fine as its finest.

    Parameters
    ----------
    theta_deg : ndarray[theta]
        Rising, within 0 to 180, deg; to 90 for an upper half.
    phi_deg : ndarray[phi]
        Rising within a turn, deg, no direction twice.
    upper_half : bool
        True where nothing is radiated below 90 deg.

    Returns
    -------
    AngularSpline

    Raises
    ------
    InputError
        If the grid is too coarse or does not cover the sphere or the upper half.
    """
    raise_if_any(_grid_problems(theta_deg, phi_deg, upper_half))
    theta_deg = _on_the_poles(theta_deg)
    theta_start, theta_step, theta_cells = _theta_cells(theta_deg, upper_half)
    theta_at = theta_start + theta_step * np.arange(-1.0, theta_cells + 2.0)
    straight, across = _theta_matrices(theta_deg, upper_half, theta_at, theta_step)
    phi_cells = _phi_cells(phi_deg)
    phi_step = 360.0 / phi_cells
    phi_start = phi_deg[0] % phi_step
    cell = np.arange(-1, phi_cells + 2)
    around = _phi_matrix(phi_deg, phi_start + phi_step * cell, phi_step)
    basis_weight = _theta_basis_weights(theta_start, theta_step, theta_cells, 90.0 if upper_half else 180.0)
    per_rad = 180.0 / np.pi
    layout = [np.radians(theta_start), per_rad / theta_step, np.radians(phi_start), per_rad / phi_step]
    return AngularSpline(
        straight=straight,
        across=across,
        around=around,
        opposite=(cell + phi_cells // 2) % phi_cells + 1,
        theta_weight=(straight + across).T @ basis_weight,
        phi_weight=around[1 : phi_cells + 1].mean(axis=0),
        layout=np.array([*layout, 0.0 if upper_half else LOWEST_ANYWHERE]),
    )


def value_matrices(
    theta_deg: FloatArray, phi_deg: FloatArray, upper_half: bool, theta_at_deg: FloatArray, phi_at_deg: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Maps to the spline's values on another grid: straight @ f @ near.T + across @ f @ far.T.

    Returns
    -------
    straight, across : ndarray[theta at, theta]
    near, far : ndarray[phi at, phi]
    """
    straight, across = _theta_matrices(_on_the_poles(theta_deg), upper_half, theta_at_deg, 0.0)
    return straight, across, _phi_matrix(phi_deg, phi_at_deg, 0.0), _phi_matrix(phi_deg, phi_at_deg + 180.0, 0.0)


def _grid_problems(theta_deg: FloatArray, phi_deg: FloatArray, upper_half: bool) -> list[str]:
    problems = []
    if len(theta_deg) < FEWEST_THETA or len(phi_deg) < FEWEST_PHI:
        got = f"{len(theta_deg)} thetas and {len(phi_deg)} phis"
        problems.append(f"beam.files: a grid of {got}; at least {FEWEST_THETA} and {FEWEST_PHI} are needed")
        return problems
    if not (np.all(np.diff(theta_deg) > 0.0) and theta_deg[0] >= 0.0 and theta_deg[-1] <= 180.0 + 1e-6):
        problems.append("beam.files: theta must rise within 0 to 180 deg")
    if not (np.all(np.diff(phi_deg) > 0.0) and phi_deg[-1] - phi_deg[0] < 360.0):
        problems.append("beam.files: phi must rise within one turn")
    steps = {
        "theta": max(float(np.diff(theta_deg).max()), 2.0 * float(theta_deg[0])),
        "phi": max(float(np.diff(phi_deg).max()), 360.0 - float(phi_deg[-1] - phi_deg[0])),
    }
    if not upper_half:
        steps["theta"] = max(steps["theta"], 2.0 * float(180.0 - theta_deg[-1]))
    elif abs(theta_deg[-1] - 90.0) > 1e-6:
        problems.append(f"beam.files: an upper half must end at theta 90 deg; this one ends at {theta_deg[-1]:g} deg")
    problems += [
        f"beam.files: a gap of {step:g} deg in {name}; at most {LARGEST_STEP_DEG:g} deg can be interpolated"
        for name, step in steps.items()
        if step > LARGEST_STEP_DEG
    ]
    return problems


def _on_the_poles(theta_deg: FloatArray) -> FloatArray:
    """Directions that miss a pole or the horizon by a trifle put there; else they and their mirror image make a step
    so short that rounding of the table would be its slope."""
    trifle = EVEN * float(np.diff(theta_deg).min())
    special = 90.0 * np.round(theta_deg / 90.0)
    return np.where(np.abs(theta_deg - special) < trifle, special, theta_deg)


def _theta_cells(theta_deg: FloatArray, upper_half: bool) -> tuple[float, float, int]:
    """Start, step and number of the spline's cells in theta, deg."""
    steps = np.diff(_over_the_poles(theta_deg, upper_half)[0])
    if np.ptp(steps) > EVEN * steps.mean():
        stop = 90.0 if upper_half else 180.0
        cells = int(np.ceil(stop / max(float(steps.min()), SMALLEST_STEP_DEG) - EVEN))
        return 0.0, stop / cells, cells
    if upper_half:
        step = float(steps.mean())
        cells = int(np.ceil(90.0 / step - EVEN))
        return 90.0 - cells * step, step, cells
    step = 360.0 / round(360.0 / float(steps.mean()))
    start = -step / 2.0 if theta_deg[0] > step / 4.0 else 0.0
    return start, step, int(np.ceil((180.0 - start) / step - EVEN))


def _phi_cells(phi_deg: FloatArray) -> int:
    """Number of the spline's cells round a parallel; even, so that each has one half a turn away."""
    steps = np.diff(phi_deg, append=phi_deg[0] + 360.0)
    if np.ptp(steps) <= EVEN * steps.mean():
        return len(phi_deg) * (1 if len(phi_deg) % 2 == 0 else 2)
    return 2 * int(np.ceil(180.0 / max(float(steps.min()), SMALLEST_STEP_DEG) - EVEN))


def _over_the_poles(theta_deg: FloatArray, upper_half: bool) -> tuple[FloatArray, NDArray[np.int64], int]:
    """Nodes of a meridian continued over the poles, deg; which row each takes; where the opposite one starts.

    A full sphere closes: the first node is repeated a turn later. An upper half starts on the far horizon.
    """
    rows = np.arange(len(theta_deg))
    if upper_half:
        beyond = rows[theta_deg > 0.0][::-1]
        return np.concatenate([-theta_deg[beyond], theta_deg]), np.concatenate([beyond, rows]), len(beyond)
    beyond = rows[(theta_deg > 0.0) & (theta_deg < 180.0)][::-1]
    nodes = np.concatenate([theta_deg, 360.0 - theta_deg[beyond], [theta_deg[0] + 360.0]])
    return nodes, np.concatenate([rows, beyond]), len(rows)


def _theta_matrices(
    theta_deg: FloatArray, upper_half: bool, at_deg: FloatArray, step_deg: float
) -> tuple[FloatArray, FloatArray]:
    nodes, row, turn = _over_the_poles(theta_deg, upper_half)
    matrix = _spline_matrix(nodes, at_deg, step_deg, periodic=not upper_half)
    first, second = np.zeros((2, len(at_deg), len(theta_deg)))
    first[:, row[:turn]], second[:, row[turn:]] = matrix[:, :turn], matrix[:, turn:]
    return (second, first) if upper_half else (first, second)


def _phi_matrix(phi_deg: FloatArray, at_deg: FloatArray, step_deg: float) -> FloatArray:
    return _spline_matrix(np.append(phi_deg, phi_deg[0] + 360.0), at_deg, step_deg, periodic=True)


def _spline_matrix(nodes_deg: FloatArray, at_deg: FloatArray, step_deg: float, *, periodic: bool) -> FloatArray:
    """Values (step zero) or B-spline coefficients on equal steps of the cubic spline through each unit vector.

    A cubic spline with knots at equal steps has the coefficients s - h^2 s''/6 at its knots, since the basis weighs
    three neighbours by 1/6, 4/6, 1/6. On other knots the same rule is exact for cubics.
    """
    unit = np.eye(len(nodes_deg) - 1 if periodic else len(nodes_deg))
    if periodic:
        spline = make_interp_spline(nodes_deg, np.vstack([unit, unit[:1]]), k=3, bc_type="periodic")
        at_deg = nodes_deg[0] + (at_deg - nodes_deg[0]) % 360.0
    else:
        spline = make_interp_spline(nodes_deg, unit, k=3)
    values = spline(at_deg)
    return np.asarray(values if step_deg == 0.0 else values - step_deg**2 / 6.0 * spline.derivative(2)(at_deg))


def _theta_basis_weights(start_deg: float, step_deg: float, cells: int, stop_deg: float) -> FloatArray:
    """Half the integral of each basis function times sin theta, ndarray[theta cell + 3]."""
    x, weight = np.polynomial.legendre.leggauss(12)
    total = np.zeros(cells + 3)
    for cell in range(cells):
        lower, upper = np.radians(np.clip(start_deg + step_deg * (cell + np.array([0.0, 1.0])), 0.0, stop_deg))
        theta = 0.5 * (lower + upper) + 0.5 * (upper - lower) * x
        t = (np.degrees(theta) - start_deg) / step_deg - cell
        basis = np.array([(1.0 - t) ** 3, 3.0 * t**3 - 6.0 * t**2 + 4.0, 0.0 * t, t**3]) / 6.0
        basis[2] = 1.0 - basis.sum(axis=0)
        total[cell : cell + 4] += 0.25 * (upper - lower) * (basis @ (weight * np.sin(theta)))
    return total


@njit(inline="always")
def _taps(t):  # type: ignore[no-untyped-def]
    """The four cubic B-splines that meet in a cell; their sum is one."""
    rest = 1.0 - t
    first, last = rest * rest * rest * (1.0 / 6.0), t * t * t * (1.0 / 6.0)
    second = (2.0 / 3.0) - 0.5 * t * t * (2.0 - t)
    return first, second, 1.0 - first - second - last, last


@njit(inline="always")
def _place(coefficients, layout, x, y, z):  # type: ignore[no-untyped-def]
    """Cell of a direction in the antenna frame, and how far into it."""
    cells = coefficients.shape[1] - 3
    u = (np.arctan2(np.sqrt(x * x + y * y), z) - layout[0]) * layout[1]
    v = (np.arctan2(y, x) - layout[2]) * layout[3]
    if v < 0.0:
        v += cells
    row = min(max(int(u), 0), coefficients.shape[0] - 4)
    column = min(max(int(v), 0), cells - 1)
    return row, column, u - row, v - column


@njit(error_model="numpy", fastmath={"contract"})
def grid_gain(coefficients, layout, x, y, z, gain):  # type: ignore[no-untyped-def]
    """Beam towards a direction at all frequencies, into `gain`; zero below an upper half."""
    if z < layout[4]:
        for j in range(len(gain)):
            gain[j] = 0.0
        return
    row, column, t, s = _place(coefficients, layout, x, y, z)
    a0, a1, a2, a3 = _taps(t)
    b0, b1, b2, b3 = _taps(s)
    c0, c1, c2, c3 = coefficients[row], coefficients[row + 1], coefficients[row + 2], coefficients[row + 3]
    p0, p1, p2, p3 = c0[column], c0[column + 1], c0[column + 2], c0[column + 3]
    q0, q1, q2, q3 = c1[column], c1[column + 1], c1[column + 2], c1[column + 3]
    r0, r1, r2, r3 = c2[column], c2[column + 1], c2[column + 2], c2[column + 3]
    s0, s1, s2, s3 = c3[column], c3[column + 1], c3[column + 2], c3[column + 3]
    for j in range(len(gain)):
        one = b0 * p0[j] + b1 * p1[j] + b2 * p2[j] + b3 * p3[j]
        two = b0 * q0[j] + b1 * q1[j] + b2 * q2[j] + b3 * q3[j]
        three = b0 * r0[j] + b1 * r1[j] + b2 * r2[j] + b3 * r3[j]
        four = b0 * s0[j] + b1 * s1[j] + b2 * s2[j] + b3 * s3[j]
        gain[j] = a0 * one + a1 * two + a2 * three + a3 * four


@njit(inline="always")
def add_grid(coefficients, layout, x, y, z, whole, weight, brightness_k, gain, sums):  # type: ignore[no-untyped-def]
    """Add a direction to the sums: whole beam, part that meets the sky, sky. `gain` is room to work in."""
    if z >= layout[4]:
        grid_gain(coefficients, layout, x, y, z, gain)
        for j in range(len(gain)):
            sums[0, j] += whole * gain[j]
            sums[1, j] += weight * gain[j]
            sums[2, j] += weight * gain[j] * brightness_k[j]


@njit(parallel=True, cache=True, error_model="numpy", fastmath={"contract"})
def evaluate_grid(coefficients, layout, direction, values):  # type: ignore[no-untyped-def]
    """Beam towards many directions: `values` ndarray[point, frequency] of `direction` ndarray[point, 3]."""
    for p in prange(len(direction)):
        grid_gain(coefficients, layout, direction[p, 0], direction[p, 1], direction[p, 2], values[p])
