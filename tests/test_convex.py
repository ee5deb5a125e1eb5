"""Least squares over a cone: against all active sets, against a library, and what a certificate lets pass."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import nnls

from reduce.foreground.convex import Certificate, CertificateError, ConeLeastSquares

FloatArray = NDArray[np.float64]


def brute_force(design: FloatArray, data: FloatArray, free: NDArray[np.bool_]) -> float:
    """Least of the objectives of all sets of columns whose free solution is allowed."""
    best = np.inf
    bound = np.flatnonzero(~free)
    for count in range(bound.size + 1):
        for chosen in combinations(bound, count):
            columns = [*np.flatnonzero(free), *chosen]
            found = np.linalg.lstsq(design[:, columns], data, rcond=None)[0]
            if (found[free.sum() :] >= 0).all():
                best = min(best, float(((data - design[:, columns] @ found) ** 2).sum()))
    return best


@pytest.mark.parametrize("seed", range(10))
def test_cone_against_all_active_sets_and_against_a_library(seed: int) -> None:
    rng = np.random.default_rng(seed)
    design, data = rng.standard_normal((12, 8)), 5.0 * rng.standard_normal(12)
    free = np.arange(8) < 2
    solution = ConeLeastSquares(design, free).solve(data)
    assert solution.objective == pytest.approx(brute_force(design, data, free), rel=1e-12)  # rounding
    none_free = ConeLeastSquares(design, np.zeros(8, bool)).solve(data)
    _, residual_norm = nnls(design, data)
    assert none_free.objective == pytest.approx(residual_norm**2, rel=1e-12)  # rounding


def test_a_warm_start_does_not_change_the_answer() -> None:
    rng = np.random.default_rng(3)
    design, many = rng.standard_normal((30, 20)), rng.standard_normal((30, 40))
    warm = ConeLeastSquares(design, np.arange(20) < 2).solve_many(many)
    for number, solution in enumerate(warm):
        cold = ConeLeastSquares(design, np.arange(20) < 2).solve(many[:, number])
        np.testing.assert_allclose(solution.coefficients, cold.coefficients, atol=1e-12)  # rounding


def test_an_answer_that_is_not_certified_is_refused() -> None:
    good = Certificate(primal=0.0, stationarity=1e-17, dual=0.0, slackness=1e-17, gap=1e-12, rounding=1e-12)
    good.check()
    for name in ("primal", "stationarity", "dual", "slackness", "gap"):
        with pytest.raises(CertificateError, match=name):
            Certificate(**{**good.__dict__, name: 1e-6}).check()
    with pytest.raises(CertificateError):
        Certificate(**{**good.__dict__, "gap": float("nan")}).check()


def test_certificate_sees_an_answer_that_is_not_optimal() -> None:
    """Half a coefficient, or a column too many held at zero, and it is refused; the true answer is not."""
    rng = np.random.default_rng(5)
    design, data = rng.uniform(0.0, 1.0, (20, 5)), rng.uniform(0.5, 1.0, 20)
    cone = ConeLeastSquares(design, np.zeros(5, bool))
    solution = cone.solve(data)
    length = np.linalg.norm(design, axis=0)
    for part in (1.0, 0.5, 0.0):
        changed = solution.coefficients.copy()
        changed[np.argmax(changed)] *= part
        residual = data - design @ changed
        square = float(residual @ residual)
        size = float(np.linalg.norm(data))
        arguments = (changed * length, (design / length).T @ residual, square, square, size, size)
        if part == 1.0:
            cone._certify(*arguments)
        else:
            with pytest.raises(CertificateError):
                cone._certify(*arguments)
