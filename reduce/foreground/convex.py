"""Least squares over a cone, some coefficients free and the others not negative, with a certificate of optimality.

The problem |A a - y|^2, a_j >= 0 but for the free columns, is convex: what meets the conditions of Karush, Kuhn and
Tucker is its minimum. It is solved by the active set method of Lawson and Hanson (1974, Solving Least Squares
Problems, ch. 23) on the triangle of a QR factorisation, beginning with the set that was last found free; normal
equations appear nowhere. No answer leaves without its certificate.

The bound on the gap: for r = y - A a and w = A^T r, any feasible a' has an objective of at least
|r|^2 / 2 + w a - w a'. Let the columns be of unit length beyond the free ones, d the point of their convex hull nearest
to zero, and a' the optimum; A a' is then no longer than y beyond the free columns, and the sum of a' no more than
|y| / |d|. So the gap is at most - w a + max(w, 0) |y| / |d|; nor is it more than what the columns with any signs
could take. It is that of data as rounded, which may be off by a part in 1e16.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_triangular

from reduce.covariance import factor_basis

FloatArray = NDArray[np.float64]

EPS = float(np.finfo(float).eps)
GAP_TOLERANCE = 1e-7  # of the objective; ten times below what is promised
ANGLE_TOLERANCE = 1e-9  # cosines between the residual and columns that should be, or nearly be, at right angles to it
ENTRY = 8.0 * EPS  # a cosine that no more than rounding separates from zero
DEPENDENT = 1e-13  # a column with no more of itself than this beyond the free ones adds rounding, not freedom
ROUNDING = 16.0 * EPS  # part of its size by which a data vector may be changed in the arithmetic


class CertificateError(RuntimeError):
    """A constrained fit could not be shown to be optimal; the message gives its numbers."""


@dataclass(frozen=True)
class Certificate:
    """How far an answer is from optimal; all numbers are free of scale, and zero is perfect.

    A residual of less than one standard deviation counts as one.

    Parameters
    ----------
    primal : float
        Most negative coefficient that may not be, its column over the data.
    stationarity : float
        Largest cosine, of either sign, between the residual and a column that is free to move.
    dual : float
        Largest cosine between the residual and a column held at zero that would lower the objective.
    slackness : float
        Largest product of a coefficient and its multiplier, over those of the data and the residual.
    gap : float
        Bound on the objective minus its minimum, over the objective.
    rounding : float
        Change of the objective, over itself, that the rounding of the data may cause.
    """

    primal: float
    stationarity: float
    dual: float
    slackness: float
    gap: float
    rounding: float

    def check(self) -> None:
        """Raise `CertificateError` unless every number is within its tolerance."""
        angles = max(self.primal, self.stationarity, self.dual, self.slackness)
        if not (angles <= ANGLE_TOLERANCE and self.gap <= GAP_TOLERANCE + self.rounding):
            raise CertificateError(
                f"constrained fit: not shown to be optimal: {self}; allowed are {ANGLE_TOLERANCE:.0e} and a gap of "
                f"{GAP_TOLERANCE:.0e} beyond rounding: whiten with weaker modes, or use fewer terms"
            )


@dataclass(frozen=True, eq=False)
class ConeSolution:
    """The minimum.

    Parameters
    ----------
    coefficients : ndarray[column]
        Of the columns as given.
    free : ndarray[column]
        True where a column is free to move: always, or because its coefficient is above zero.
    multipliers : ndarray[column]
        Cosine of the residual with each held column: minus the force that holds it. Zero for free ones.
    objective : float
        Sum of squares of the residual.
    certificate : Certificate
        Checked.
    """

    coefficients: FloatArray
    free: NDArray[np.bool_]
    multipliers: FloatArray
    objective: float
    certificate: Certificate


def _free_solution(columns: FloatArray, passive: list[int], target: FloatArray) -> tuple[FloatArray, FloatArray, float]:
    """Coefficients of some columns, the residual, and how much of the last column is its own."""
    if not passive:
        return np.zeros(0), target, 1.0
    orthonormal, triangle = np.linalg.qr(columns[:, passive])
    along = orthonormal.T @ target
    residual = target - orthonormal @ along
    again = orthonormal.T @ residual
    own = abs(float(triangle[-1, -1]))
    if not own > 0.0:
        return np.zeros(len(passive)), target, 0.0
    return solve_triangular(triangle, along + again), residual - orthonormal @ again, own


def _feasible_start(
    columns: FloatArray, passive: list[int], target: FloatArray
) -> tuple[list[int], FloatArray, FloatArray]:
    """Columns of a set, those dropped that come out negative, until none does."""
    while True:
        found, residual, _ = _free_solution(columns, passive, target)
        if (found > 0.0).all():
            return passive, found, residual
        passive = [index for index, value in zip(passive, found, strict=True) if value > 0.0]


def _let_in(
    columns: FloatArray, passive: list[int], values: FloatArray, entering: int, target: FloatArray
) -> tuple[list[int], FloatArray, FloatArray] | None:
    """Let a column in, those held that stand in the way; None if it cannot move."""
    trial, current = [*passive, entering], np.append(values, 0.0)
    first = True
    while True:
        found, residual, own = _free_solution(columns, trial, target)
        if first and (own <= DEPENDENT or found[-1] <= 0.0):
            return None
        first = False
        blocked = found <= 0.0
        if not blocked.any():
            return trial, found, residual
        share = np.full(found.shape, np.inf)
        share[blocked] = current[blocked] / (current[blocked] - found[blocked])
        current = current + share.min() * (found - current)
        stay = (share > share.min()) & (current > 0.0)
        trial, current = [index for index, keep in zip(trial, stay, strict=True) if keep], current[stay]


def _not_negative(
    columns: FloatArray, target: FloatArray, start: list[int]
) -> tuple[list[int], FloatArray, FloatArray]:
    """Lawson and Hanson's method on unit columns: the columns above zero, their coefficients, the residual."""
    passive, values, residual = _feasible_start(columns, start, target)
    refused: set[int] = set()
    floor = EPS * float(np.linalg.norm(target))
    while True:
        size = float(np.linalg.norm(residual))
        force = columns.T @ residual
        force[[*passive, *refused]] = -np.inf
        if size <= floor or force.size == 0 or not force.max() > ENTRY * size:
            return passive, values, residual
        entering = int(np.argmax(force))
        moved = _let_in(columns, passive, values, entering, target)
        # An objective that has to fall at each step can come back to no earlier set, whatever rounding does.
        if moved is None or not np.linalg.norm(moved[2]) < size:
            refused.add(entering)
            continue
        passive, values, residual = moved
        refused = set()


@dataclass(eq=False)
class ConeLeastSquares:
    """A design, factored once, for any number of data vectors.

    Parameters
    ----------
    design : ndarray[row, column]
        Whitened columns A.
    always_free : ndarray[column]
        True for a column whose coefficient may have either sign.

    Raises
    ------
    InputError
        If the columns that are always free are dependent, or more than there are rows.
    """

    design: FloatArray
    always_free: NDArray[np.bool_]
    _last: list[int] = field(default_factory=list, init=False)

    def __post_init__(self) -> None:
        self._factor = factor_basis(self.design[:, self.always_free], "free columns of a cone")
        beyond = self._beyond_free(self.design[:, ~self.always_free])
        length = np.linalg.norm(beyond, axis=0)
        whole = np.linalg.norm(self.design[:, ~self.always_free], axis=0)
        self._acts = length > DEPENDENT * np.maximum(whole, np.finfo(float).tiny)
        self._length = np.where(self._acts, length, 1.0)
        self._units = np.where(self._acts, beyond / self._length, 0.0)
        self._orthonormal, self._triangle = np.linalg.qr(self._units)
        self._pointedness = self._nearest_to_zero()

    def _beyond_free(self, values: FloatArray) -> FloatArray:
        basis = self._factor.orthonormal
        once = values - basis @ (basis.T @ values)
        return np.asarray(once - basis @ (basis.T @ once))

    def _nearest_to_zero(self) -> float:
        """Distance from zero of the convex hull of the unit columns: that of a pointed cone is positive."""
        units = self._triangle[:, self._acts]
        if units.shape[1] == 0:
            return 1.0
        raised = np.vstack([units, np.ones(units.shape[1])])
        length = np.linalg.norm(raised, axis=0)
        target = np.append(np.zeros(len(units)), 1.0)
        passive, values, _ = _not_negative(raised / length, target, [])
        weight = values / length[passive]
        return float(np.linalg.norm(units[:, passive] @ (weight / weight.sum())))

    def solve(self, data: FloatArray) -> ConeSolution:
        """Minimum for one data vector, ndarray[row], whitened.

        Raises
        ------
        CertificateError
            If it cannot be shown to be the minimum.
        """
        return self.solve_many(np.asarray(data, float)[:, None])[0]

    def solve_many(self, data: FloatArray) -> list[ConeSolution]:
        """Minimum for each column of ndarray[row, vector]; like vectors beside each other are solved fastest.

        Raises
        ------
        CertificateError
            If one cannot be shown to be the minimum.
        """
        beyond = self._beyond_free(data)
        targets = self._orthonormal.T @ beyond
        outside = beyond - self._orthonormal @ targets
        outside -= self._orthonormal @ (self._orthonormal.T @ outside)
        squares = (outside**2).sum(axis=0)
        return [self._one(data[:, n], targets[:, n], float(squares[n])) for n in range(data.shape[1])]

    def _one(self, data: FloatArray, target: FloatArray, outside: float) -> ConeSolution:
        passive, values, residual = _not_negative(self._triangle, target, self._last)
        self._last = passive
        unit = np.zeros(len(self._length))
        unit[passive] = values
        force = self._triangle.T @ residual
        inside = float(residual @ residual)
        objective = inside + outside
        norms = float(np.linalg.norm(data)), float(np.linalg.norm(target))
        certificate = self._certify(unit, force, inside, objective, *norms)
        coefficients = np.zeros(self.always_free.size)
        bound = ~self.always_free
        coefficients[bound] = unit / self._length
        left = data - self.design[:, bound] @ coefficients[bound]
        along = self._factor.orthonormal.T @ left
        if along.size:
            coefficients[self.always_free] = solve_triangular(self._factor.triangle, along)
        free = self.always_free.copy()
        free[np.flatnonzero(bound)[passive]] = True
        multipliers = np.zeros(free.size)
        multipliers[bound] = force / max(np.sqrt(objective), np.finfo(float).tiny)
        multipliers[free] = 0.0
        return ConeSolution(coefficients, free, multipliers, objective, certificate)

    def _certify(
        self,
        unit: FloatArray,
        force: FloatArray,
        inside: float,
        objective: float,
        data_norm: float,
        beyond_norm: float,
    ) -> Certificate:
        """The certificate of unit-column coefficients, checked."""
        size = max(float(np.sqrt(objective)), 1.0)
        moving = unit > 0.0
        lowering = float(np.max(force[~moving], initial=0.0))
        slope = float(np.abs(unit * force).sum())
        gap = slope + lowering * beyond_norm / max(self._pointedness, EPS)
        gap = min(gap, 0.5 * inside)
        whole = beyond_norm or 1.0
        certificate = Certificate(
            primal=float(np.max(-unit, initial=0.0)) / whole,
            stationarity=float(np.max(np.abs(force[moving]), initial=0.0)) / size,
            dual=lowering / size,
            slackness=float(np.max(np.abs(unit * force), initial=0.0)) / (whole * size),
            gap=gap / (0.5 * size**2),
            rounding=ROUNDING * data_norm / (0.5 * size),
        )
        certificate.check()
        return certificate
