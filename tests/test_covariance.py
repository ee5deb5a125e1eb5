"""Covariances: whitening, solving, determinants and draws against dense linear algebra, and their limits."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg
from numpy.typing import NDArray

from reduce.covariance import DiagonalLowRank, factor_basis
from sims.errors import InputError


def make(rows: int, scales: list[float], seed: int) -> DiagonalLowRank:
    rng = np.random.default_rng(seed)
    variance = rng.uniform(0.5, 2.0, rows)
    return DiagonalLowRank(variance, rng.standard_normal((rows, len(scales))) * np.array(scales))


@pytest.mark.parametrize("scales", [[], [1.0], [1e-3, 1.0, 30.0], [3.0] * 12])
def test_against_dense(scales: list[float]) -> None:
    covariance = make(40, scales, seed=1)
    dense = covariance.dense()
    vectors = np.random.default_rng(2).standard_normal((40, 3))
    expected = scipy.linalg.cho_solve(scipy.linalg.cho_factor(dense), vectors)
    # The dense inverse loses the condition of C (1e5 with the strongest mode) in rounding, in units of the solution;
    # a handful of roundings is what it can confirm. Vectors have length sqrt(40).
    tolerance = 4 * np.finfo(float).eps * np.linalg.cond(dense) * np.abs(expected).max() + 1e-13
    np.testing.assert_allclose(covariance.solve(vectors), expected, rtol=0, atol=tolerance)
    white = covariance.whiten(vectors)
    np.testing.assert_allclose(white.T @ white, vectors.T @ expected, rtol=0, atol=tolerance * np.sqrt(40))
    assert covariance.log_det == pytest.approx(np.linalg.slogdet(dense)[1], abs=tolerance + 1e-12)
    # L C L^T = 1 for L the whitening of the unit vectors.
    unit = covariance.whiten(np.eye(40))
    np.testing.assert_allclose(unit @ dense @ unit.T, np.eye(40), atol=1e-9)


def test_repeated_mode_is_one_mode_of_double_variance() -> None:
    once = make(30, [2.0], seed=3)
    twice = once.with_modes(once.modes_k)
    single = DiagonalLowRank(once.noise_variance_k2, once.modes_k * np.sqrt(2.0))
    vector = np.linspace(-1, 1, 30)
    # Two factorisations of one matrix of condition about 100: rounding only.
    np.testing.assert_allclose(twice.solve(vector), single.solve(vector), rtol=1e-12, atol=1e-14)
    assert twice.log_det == pytest.approx(single.log_det, abs=1e-11)


def test_strong_mode_becomes_projection_as_inverse_square() -> None:
    """A mode of growing size takes its own direction out; what is left of it falls as 1/size^2."""
    rng = np.random.default_rng(4)
    variance, mode, vector = rng.uniform(0.5, 2, 25), rng.standard_normal((25, 1)), rng.standard_normal(25)
    scaled, axis = vector / np.sqrt(variance), mode[:, 0] / np.sqrt(variance)
    limit = scaled @ scaled - (axis @ scaled) ** 2 / (axis @ axis)
    sizes = np.array([10.0, 100.0, 1000.0])
    error = np.array([vector @ DiagonalLowRank(variance, mode * s).solve(vector) - limit for s in sizes])
    # Order two: a factor ten in size is a hundred in error, to the next order (1/size^2, 1 % at the first).
    np.testing.assert_allclose(error[:-1] / error[1:], 100.0, rtol=0.01)


def test_mode_far_above_noise_keeps_digits() -> None:
    """A mode of 1e9 noise: the dense matrix has lost the noise by then, the factored form has not."""
    variance = np.full(3, 1.0)
    covariance = DiagonalLowRank(variance, np.array([[1e9], [1e9], [1e9]]))
    difference = np.array([1.0, -1.0, 0.0])  # orthogonal to the mode: sees only noise
    # Rounding of a projection of unit vectors.
    np.testing.assert_allclose(covariance.solve(difference), difference, atol=1e-14)
    assert covariance.log_det == pytest.approx(np.log(1 + 3e18), rel=1e-14)  # closed form


def test_draws_have_the_covariance() -> None:
    covariance = make(12, [1.0, 0.3], seed=5)
    number = 40_000
    draws = covariance.draw(np.random.default_rng(6), number)
    dense = covariance.dense()
    estimate = draws.T @ draws / number
    # Wishart: variance of an element is (C_ij^2 + C_ii C_jj)/N. The largest of 78 normal deviates stays below 5.
    deviation = np.sqrt((dense**2 + np.outer(np.diag(dense), np.diag(dense))) / number)
    assert np.abs((estimate - dense) / deviation).max() < 5.0
    assert np.abs((estimate - dense) / deviation).max() > 0.5  # it is an estimate, not a copy


def test_chi_squared_of_draws() -> None:
    covariance = make(30, [5.0, 0.2, 1.0], seed=7)
    number = 20_000
    white = covariance.whiten(covariance.draw(np.random.default_rng(8), number).T)
    chi_squared = (white**2).sum(axis=0)
    # Mean n, variance 2n; their errors sqrt(2n/N) and about 2n sqrt(2/N) (1 + 6/n)^1/2; four of each.
    assert chi_squared.mean() == pytest.approx(30.0, abs=4 * np.sqrt(60 / number))
    assert chi_squared.var() == pytest.approx(60.0, abs=4 * 60 * np.sqrt(2.4 / number))


def test_flagging_is_marginalising() -> None:
    """Dropping rows gives the block of the whole covariance, the marginal of a Gaussian."""
    rng = np.random.default_rng(9)
    variance, modes = rng.uniform(1, 2, (3, 8)), rng.standard_normal((3, 8, 2))
    good = rng.random((3, 8)) > 0.3
    whole = DiagonalLowRank.from_bins(variance, modes, np.ones((3, 8), bool)).dense()
    spoiled = np.where(good, variance, np.nan)
    part = DiagonalLowRank.from_bins(spoiled, np.where(good[..., None], modes, np.inf), good)
    use = np.flatnonzero(good.ravel())
    # Sums of three products in another order: rounding.
    np.testing.assert_allclose(part.dense(), whole[np.ix_(use, use)], rtol=1e-14, atol=1e-15)


def test_bad_input_is_refused_whole() -> None:
    with pytest.raises(InputError) as caught:
        DiagonalLowRank(np.array([1.0, 0.0, np.nan]), np.array([[1.0], [np.inf], [0.0]]))
    assert len(caught.value.problems) == 2
    assert "row 1" in caught.value.problems[0]
    with pytest.raises(InputError, match=r"\[row, mode\]"):
        DiagonalLowRank(np.ones(3), np.ones((2, 1)))
    with pytest.raises(InputError, match="bin, channel, mode"):
        DiagonalLowRank.from_bins(np.ones((2, 3)), np.ones((2, 3)), np.ones((2, 3), bool))
    with pytest.raises(InputError, match="3 rows"):
        DiagonalLowRank(np.ones(3), np.ones((3, 0))).whiten(np.ones(4))


def basis_with(columns: list[NDArray[np.float64]]) -> NDArray[np.float64]:
    return np.column_stack(columns)


def test_basis_factor() -> None:
    x = np.linspace(-1, 1, 50)
    basis = basis_with([np.ones(50), 1e6 * x, 1e-6 * x**2])
    factor = factor_basis(basis, "test")
    np.testing.assert_allclose(factor.orthonormal @ factor.triangle, basis, rtol=1e-12, atol=1e-18)  # rounding
    scaled = basis / np.linalg.norm(basis, axis=0)
    assert factor.condition_number == pytest.approx(np.linalg.cond(scaled), rel=1e-10)
    # The scaled Gram matrix has condition 20, so its determinant is good to rounding.
    assert factor.log_det == pytest.approx(
        np.linalg.slogdet(scaled.T @ scaled)[1] + 2 * np.log(np.linalg.norm(basis, axis=0)).sum(), abs=1e-10
    )


def test_basis_that_cannot_be_factored() -> None:
    x = np.linspace(-1, 1, 20)
    with pytest.raises(InputError, match="condition number"):
        factor_basis(basis_with([x, x + 1e-14]), "test")
    with pytest.raises(InputError, match=r"columns \[1\]"):
        factor_basis(basis_with([x, 0 * x]), "test")
    with pytest.raises(InputError, match="3 terms for 2"):
        factor_basis(np.ones((2, 3)), "test")
