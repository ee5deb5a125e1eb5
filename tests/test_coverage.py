"""A sample of the statistical study of `tests/studies`: are the stated errors true?"""

from __future__ import annotations

import os
import sys
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

sys.path.insert(0, str(Path(__file__).parent / "studies"))

from coverage_study import coverage_table, false_alarms, family_wise_p, run_mocks
from mocks import make_bench

MOCKS = 40


@pytest.fixture(scope="module")
def bench() -> object:
    return make_bench()


@pytest.mark.slow
def test_intervals_cover_and_noise_alone_does_not_alarm(bench: object) -> None:
    processes = min(2, os.cpu_count() or 1)
    results = run_mocks(bench, MOCKS, processes, signal=True)
    ranks = np.array([result.rank for result in results])
    outside = [row for row in coverage_table(ranks) if not row[-1]]
    assert outside == []
    # Ranks of the truth are uniform (Talts et al. 2018): Kolmogorov-Smirnov, 1 in 1000 for six numbers together.
    assert min(stats.kstest(column, "uniform").pvalue for column in ranks.T) > 1e-3 / 6
    freedom = results[0].degrees_of_freedom
    chi_squared = np.mean([result.chi_squared for result in results])
    assert chi_squared == pytest.approx(freedom, abs=5 * np.sqrt(2 * freedom / MOCKS))
    null = run_mocks(bench, MOCKS, processes, signal=False)
    _, alarms, _, band = false_alarms(np.array([result.statistic for result in null]))
    assert band[0] <= alarms <= band[1]


def test_coverage_table_catches_intervals_that_are_too_narrow() -> None:
    rng = np.random.default_rng(1)
    honest = rng.random((1000, 6))
    assert all(row[-1] for row in coverage_table(honest))
    assert family_wise_p(honest) > 0.01
    narrow = stats.norm.cdf(1.2 * stats.norm.ppf(honest))
    assert not all(row[-1] for row in coverage_table(narrow))
    assert family_wise_p(narrow) < 0.01


def test_false_alarm_band_is_that_of_a_threshold_that_scatters() -> None:
    """By simulation: whatever the law of the statistic, alarms fall outside the band once in a hundred."""
    rng = np.random.default_rng(2)
    outside = 0
    for _ in range(2000):
        _, alarms, _, band = false_alarms(rng.standard_normal(400))
        outside += not band[0] <= alarms <= band[1]
    # At most 1 % by construction of a discrete interval; 2000 tries scatter by 0.22 %.
    assert outside / 2000 < 0.01 + 3 * 0.0022
