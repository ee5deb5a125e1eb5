"""The least squares of the reduction against other people's: statsmodels, and arithmetic with sixty digits."""

from __future__ import annotations

from typing import Any

import mpmath
import numpy as np
import pytest
import statsmodels.api as sm

from reduce.foreground.galaxy_ionosphere import GalaxyIonosphere
from reduce.foreground.log_polynomial import LogPolynomial
from reduce.foreground.power_series import PowerSeries
from reduce.foreground.protocol import Family
from reduce.subtract import Subtraction, subtract

FREQUENCY_MHZ = np.linspace(40.0, 120.0, 48)
NOISE_K = 1e-5  # beside 1e4 K: nine decades


def fitted(family: Family, temperature_k: np.ndarray, modes_k: np.ndarray | None = None) -> Subtraction:
    shape = temperature_k.shape
    return subtract(
        frequency_mhz=FREQUENCY_MHZ, temperature_k=temperature_k, noise_variance_k2=np.full(shape, NOISE_K**2),
        modes_k=np.zeros((*shape, 0)) if modes_k is None else modes_k, good=np.ones(shape, dtype=bool), family=family,
    )  # fmt: skip


def exact_log_polynomial(coefficients: np.ndarray) -> list[Any]:
    """ln T = sum a_k P_k(x) with 60 digits."""
    low, high = mpmath.log(40), mpmath.log(120)
    values = []
    for frequency in FREQUENCY_MHZ:
        x = (2 * mpmath.log(mpmath.mpf(float(frequency))) - low - high) / (high - low)
        values.append(mpmath.exp(sum(mpmath.mpf(float(a)) * mpmath.legendre(k, x) for k, a in enumerate(coefficients))))
    return values


def exact_linear(family: Family, coefficients: np.ndarray) -> list[Any]:
    """A linear family's member with 60 digits, its columns taken as the doubles that they are."""
    columns = family.basis(FREQUENCY_MHZ, coefficients)
    return [sum(mpmath.mpf(float(c)) * mpmath.mpf(float(a)) for c, a in zip(row, coefficients, strict=True))
            for row in columns]  # fmt: skip


@pytest.mark.parametrize(
    ("family", "coefficients"),
    [
        (LogPolynomial(8, 40.0, 120.0), np.array([8.0, -1.4, 0.02, 5e-3, -1e-3, 2e-4, -5e-5, 1e-5])),
        (PowerSeries(8, 2.5, 69.3, 40.0, 120.0), np.array([2000.0, 20.0, -5.0, 1.0, 0.3, -0.1, 0.03, 0.01])),
        (GalaxyIonosphere(7, 2.55, 40.0, 120.0), np.array([-3000.0, 20.0, -5.0, 1.0, 0.3, 0.02, 0.01])),
    ],
)
def test_members_are_recovered_to_rounding_at_nine_decades(family: Family, coefficients: np.ndarray) -> None:
    with mpmath.workdps(60):
        linear = family.linear
        exact = exact_linear(family, coefficients) if linear else exact_log_polynomial(coefficients)
        data = np.array([float(value) for value in exact])
        result = fitted(family, data[None])
        off = max(
            abs(float(mpmath.mpf(float(value)) - wanted))
            for value, wanted in zip(result.foreground_k[0], exact, strict=True)
        )
    # Data are good to half a rounding; sums of eight terms and the exponential of them cost some ten more.
    assert off < 20 * np.finfo(float).eps * np.abs(data).max()
    assert off < 1e-5 * NOISE_K * 1e2
    assert result.chi_squared < 1e-6


def test_residual_of_a_signal_on_nine_decades_of_foreground_against_sixty_digits() -> None:
    """Data are foreground and a trough; the judge solves the weighted least squares with mpmath's QR."""
    family = PowerSeries(9, 2.5, 69.3, 40.0, 120.0)
    trough_k = -0.1 * np.exp(-0.5 * ((FREQUENCY_MHZ - 70.0) / 8.0) ** 2)
    coefficients = 1e4 * 0.2 ** np.arange(9.0)
    data = family.evaluate(FREQUENCY_MHZ, coefficients) + trough_k
    result = fitted(family, data[None])
    x = (2 * FREQUENCY_MHZ - 160.0) / 80.0
    with mpmath.workdps(60):
        slope = [(mpmath.mpf(float(f)) / mpmath.mpf("69.3")) ** mpmath.mpf("-2.5") for f in FREQUENCY_MHZ]
        columns = mpmath.matrix(
            [[slope[row] * mpmath.legendre(k, mpmath.mpf(float(x[row]))) for k in range(9)] for row in range(len(x))]
        )
        wanted = mpmath.matrix([mpmath.mpf(float(value)) for value in data])
        solution = mpmath.lu_solve(columns.T * columns, columns.T * wanted)  # 60 digits forgive normal equations
        left = wanted - columns * solution
        reference = np.array([float(value) for value in left])
    # A few roundings of the largest datum, added up by the projection: parts in a million of the noise.
    assert np.abs(result.residual_k[0] - reference).max() < 5 * np.finfo(float).eps * data.max()
    assert np.abs(reference).max() > 1e-3


def test_generalised_least_squares_against_statsmodels() -> None:
    rng = np.random.default_rng(1)
    family = PowerSeries(4, 2.5, 69.3, 40.0, 120.0)
    bins, channels = 2, len(FREQUENCY_MHZ)
    modes = rng.standard_normal((bins, channels, 3)) * np.array([3e-5, 1e-4, 1e-3])
    truth = np.array([[2000.0, 20.0, -5.0, 1.0], [1500.0, 10.0, 3.0, -1.0]])
    data = np.array([family.evaluate(FREQUENCY_MHZ, row) for row in truth])
    data = data + NOISE_K * rng.standard_normal(data.shape) + modes @ rng.standard_normal(3)
    result = fitted(family, data, modes)
    columns = family.basis(FREQUENCY_MHZ, truth[0])
    design = np.zeros((bins * channels, 8))
    design[:channels, :4], design[channels:, 4:] = columns, columns
    flat = modes.reshape(-1, 3)
    covariance = NOISE_K**2 * np.eye(bins * channels) + flat @ flat.T
    theirs = sm.GLS(data.ravel(), design, sigma=covariance / NOISE_K**2).fit()
    # Their whitening by Cholesky of a matrix whose eigenvalues span 1e4 keeps ten digits.
    np.testing.assert_allclose(result.coefficients.ravel(), theirs.params, rtol=1e-9)
    assert result.chi_squared == pytest.approx(theirs.ssr / NOISE_K**2, rel=1e-6)
    assert result.degrees_of_freedom == int(theirs.df_resid)
    white = result.covariance.whiten(result.basis)
    triangle = np.linalg.qr(white, mode="r")
    own = np.linalg.inv(triangle.T @ triangle)
    np.testing.assert_allclose(np.diag(own), np.diag(theirs.normalized_cov_params) * NOISE_K**2, rtol=1e-6)
