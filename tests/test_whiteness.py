"""Whiteness: the textbook's statistics on series without a fit, and true chances on residuals of one."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import kstest
from statsmodels.sandbox.stats.runs import runstest_1samp
from statsmodels.tsa.stattools import acf

from reduce.whiteness import lag_one_parts, run_count, runs_expected, statistics, whiteness

NOTHING = np.zeros((400, 0))
ALL = (slice(0, 400),)


def autoregressive(rng: np.random.Generator, share: float, count: int = 400) -> np.ndarray:
    found = np.zeros(count)
    for number, step in enumerate(rng.standard_normal(count)):
        found[number] = step + share * found[number - 1] if number else step
    return found


@pytest.mark.parametrize("share", [0.0, 0.3, -0.5])
def test_runs_and_autocorrelation_are_those_of_an_independent_code(share: float) -> None:
    values = autoregressive(np.random.default_rng(3), share)
    positive = int((values >= 0.0).sum())
    mean, variance = runs_expected(positive, len(values) - positive)
    deviation = (run_count(values) - mean) / np.sqrt(variance)
    assert deviation == pytest.approx(runstest_1samp(values, cutoff=0.0, correction=False)[0], abs=1e-12)
    centred = values - values.mean()
    products, squares = lag_one_parts(centred)
    assert products / squares == pytest.approx(acf(values, nlags=1, fft=False)[1], abs=1e-12)


def test_without_a_fit_the_calibration_is_the_textbook() -> None:
    values = np.random.default_rng(4).standard_normal(400)
    found = whiteness(values, NOTHING, ALL, np.random.default_rng(5), draws=20_000)
    # Signs of equal chance: 1 + 399/2 runs, a variance of 399/4; of the autocorrelation 1/n to order 1/n^2.
    assert found.runs.expected == pytest.approx(200.5, abs=4.0 * found.runs.error / np.sqrt(20_000))
    assert found.runs.error == pytest.approx(np.sqrt(399.0 / 4.0), rel=0.02)  # 4 sigma of 20,000 draws
    assert found.lag_one.error == pytest.approx(1.0 / np.sqrt(400.0), rel=0.03)
    assert found.chi_squared == pytest.approx((values**2).sum())


def test_an_autoregressive_series_is_found_and_white_noise_is_not() -> None:
    rng = np.random.default_rng(6)
    coloured = whiteness(autoregressive(rng, 0.4), NOTHING, ALL, rng)
    # Lag one is 0.4 with an error of 0.05; the runs of a sign correlation 2 asin(0.4)/pi = 0.26 are 5 sigma short.
    assert coloured.lag_one.deviation > 5.0
    assert coloured.runs.deviation < -3.0
    white = whiteness(rng.standard_normal(400), NOTHING, ALL, rng)
    assert abs(white.lag_one.deviation) < 3.5
    assert abs(white.runs.deviation) < 3.5


def test_residuals_of_a_fit_are_held_against_residuals_of_a_fit() -> None:
    rng = np.random.default_rng(7)
    axes, _ = np.linalg.qr(np.polynomial.legendre.legvander(np.linspace(-1.0, 1.0, 100), 19))
    pieces = (slice(0, 50), slice(50, 100))
    chances, offsets = [], []
    for _ in range(150):
        noise = rng.standard_normal(100)
        noise -= axes @ (axes.T @ noise)
        found = whiteness(noise, axes, pieces, rng)
        chances.append(found.lag_one.probability)
        offsets.append(found.lag_one.expected)
    # Twenty terms on a hundred rows push the autocorrelation far below zero, and the chances stay uniform all the same.
    assert np.mean(offsets) < -0.15
    assert kstest(chances, "uniform").pvalue > 0.01


def test_pieces_do_not_touch() -> None:
    values = np.array([1.0, 1.0, -1.0, -1.0])
    runs, lag = statistics(values, (slice(0, 2), slice(2, 4)))
    assert (runs, lag) == (2.0, 0.5)
    runs, lag = statistics(values, (slice(0, 4),))
    assert (runs, lag) == (2.0, 0.25)
