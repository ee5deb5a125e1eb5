"""Statistics over many mocks, tried on posteriors that are right and on some that are wrong by a known amount."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from reduce.calibration import coverage_table, false_alarms, family_wise_p, pulls, uniformity_p
from reduce.trough_model import NAMES


def ranks(rng: np.random.Generator, mocks: int, factor: float) -> np.ndarray:
    """A truth from its prior, data, the posterior of a normal law in closed form, its width divided by `factor`.

    Prior of variance 1 and noise of variance 1: the posterior has half the data as its mean, and variance 1/2.
    """
    truth = rng.standard_normal((mocks, len(NAMES)))
    data = truth + rng.standard_normal(truth.shape)
    return stats.norm.cdf((truth - 0.5 * data) / (np.sqrt(0.5) / factor))


def test_a_correct_posterior_passes() -> None:
    rank = ranks(np.random.default_rng(1), 1000, 1.0)
    rows = coverage_table(rank, NAMES)
    assert [(row.name, row.level) for row in rows] == [(name, level) for name in NAMES for level in ("68", "95")]
    assert all(row.inside for row in rows)
    assert family_wise_p(rank) > 0.01
    assert uniformity_p(rank).min() > 1e-3


def test_errors_a_sixth_too_small_are_caught_at_a_thousand_mocks() -> None:
    """Stated errors 1.2 times too small hold the truth in 59.3 and 89.8 % of the cases (normal law)."""
    rank = ranks(np.random.default_rng(1), 1000, 1.2)
    rows = coverage_table(rank, NAMES)
    for row in rows:
        half = stats.norm.isf((1.0 - float(row.level) / 100.0) / 2.0)
        # 16 % below and above make the interval of 68 %: 0.9945 standard deviations.
        expected = 2.0 * stats.norm.cdf(half / 1.2) - 1.0
        # Binomial scatter of 1000 mocks, four times over for twelve numbers.
        assert row.found == pytest.approx(expected, abs=4.0 * np.sqrt(expected * (1.0 - expected) / 1000))
    assert not any(row.inside for row in rows)
    assert family_wise_p(rank) < 1e-6
    # Ranks are off by 0.044 at most, which 1000 mocks just see in one number and see well in the worst of six.
    assert 6 * uniformity_p(rank).min() < 0.01


def test_a_good_table_is_called_bad_once_in_a_hundred() -> None:
    rng = np.random.default_rng(3)
    tries, off, unlikely = 1000, 0, 0
    for _ in range(tries):
        rank = rng.random((200, len(NAMES)))
        off += not all(row.inside for row in coverage_table(rank, NAMES))
        unlikely += family_wise_p(rank) < 0.01
    # At most 1 % by Bonferroni, less as counts are discrete; 1000 tries scatter by 0.31 %.
    assert off / tries < 0.01 + 3 * 0.0031
    assert unlikely / tries < 0.01 + 3 * 0.0031


def test_band_is_the_binomial_one() -> None:
    row = coverage_table(np.full((100, 1), 0.5), ("x",))[0]
    assert row.found == 1.0
    assert not row.inside
    inside = [count for count in range(101) if row.low - 1e-9 <= count / 100 <= row.high + 1e-9]
    # Two rows share 1 %: half a per cent each, a quarter on each side.
    assert stats.binom.cdf(inside[0] - 1, 100, 0.68) <= 0.0025 < stats.binom.cdf(inside[0], 100, 0.68)
    assert stats.binom.sf(inside[-1], 100, 0.68) <= 0.0025 < stats.binom.sf(inside[-1] - 1, 100, 0.68)


def test_family_wise_p_is_the_smallest_of_all_times_their_number() -> None:
    rank = np.random.default_rng(5).random((400, 2))
    alone = [
        stats.binomtest(int(((column > low) & (column < high)).sum()), 400, high - low).pvalue
        for column in rank.T
        for low, high in ((0.16, 0.84), (0.025, 0.975))
    ]
    assert family_wise_p(rank) == pytest.approx(min(1.0, 4 * min(alone)))


def test_false_alarm_band_is_that_of_a_threshold_that_scatters() -> None:
    """By simulation: whatever the law of the statistic, alarms fall outside the band once in a hundred."""
    rng = np.random.default_rng(2)
    outside, alarms, fresh = 0, 0, 0
    for _ in range(2000):
        found = false_alarms(rng.standard_normal(400))
        outside += not found.inside
        alarms, fresh = alarms + found.alarms, fresh + found.fresh
    # At most 1 % by construction of a discrete interval; 2000 tries scatter by 0.22 %.
    assert outside / 2000 < 0.01 + 3 * 0.0022
    # The second largest of 200 lies below a fresh number in 2 of 201 cases, whatever the law.
    assert alarms / fresh == pytest.approx(2 / 201, rel=4 * np.sqrt(0.5 / 2000))


def test_a_statistic_that_drifts_gives_too_many_alarms() -> None:
    rng = np.random.default_rng(4)
    drifting = rng.standard_normal(400) + np.repeat([0.0, 2.0], 200)
    assert not false_alarms(drifting).inside


def test_pulls_of_truths_from_the_prior_have_mean_0_and_mean_square_1() -> None:
    rng = np.random.default_rng(6)
    truth = rng.standard_normal((4000, 1))
    data = truth + rng.standard_normal(truth.shape)
    pull = pulls(0.5 * data, np.full_like(data, np.sqrt(0.5)), truth)
    # Standard errors 1/sqrt(4000) and sqrt(2/4000), four times.
    assert pull.mean() == pytest.approx(0.0, abs=4 * 0.0158)
    assert (pull**2).mean() == pytest.approx(1.0, abs=4 * 0.0224)
