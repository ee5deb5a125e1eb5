"""Are stated errors true: statistics of ranks, intervals, pulls and false alarms over many mocks.

Plain functions of arrays. `reduce.trust` makes the mocks and `reduce.report.trust_page` words the verdict.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import stats

FloatArray = NDArray[np.float64]

LEVELS = {"68": (0.16, 0.84), "95": (0.025, 0.975)}
FAMILY_WISE = 0.99
FALSE_ALARMS = 0.01


@dataclass(frozen=True)
class Coverage:
    """How often an interval holds the truth.

    Attributes
    ----------
    name, level : str
        Parameter; "68" or "95".
    found, low, high : float
        Share of the mocks, and where it may lie: the binomial band, at 99 % for all rows of the table together
        (Bonferroni).
    inside : bool
        Whether it lies there.
    """

    name: str
    level: str
    found: float
    low: float
    high: float
    inside: bool


@dataclass(frozen=True)
class Alarms:
    """False alarms of signal-free mocks.

    Attributes
    ----------
    threshold : float
        Of the statistic, set on the first half for `FALSE_ALARMS`.
    alarms, fresh : int
        How many of the other half lie above it, of how many.
    low, high : float
        Where the number may lie, 99 %: the threshold scatters too, so the number of m fresh mocks above the k-th
        largest of n is beta-binomial with parameters k and n - k + 1.
    """

    threshold: float
    alarms: int
    fresh: int
    low: float
    high: float

    @property
    def inside(self) -> bool:
        """Whether there are neither too many nor too few."""
        return self.low <= self.alarms <= self.high


def coverage_table(rank: FloatArray, names: tuple[str, ...]) -> list[Coverage]:
    """Coverage of the 68 and 95 % intervals.

    Parameters
    ----------
    rank : ndarray[mock, parameter]
        Posterior probability below the truth.
    names : tuple of str

    Returns
    -------
    list of Coverage
    """
    rows = []
    share = (1.0 - FAMILY_WISE) / (len(names) * len(LEVELS))
    for number, name in enumerate(names):
        for level, (low, high) in LEVELS.items():
            count = _within(rank[:, number], low, high)
            band = stats.binom.interval(1.0 - share, len(rank), high - low)
            rows.append(
                Coverage(
                    name,
                    level,
                    count / len(rank),
                    float(band[0]) / len(rank),
                    float(band[1]) / len(rank),
                    bool(band[0] <= count <= band[1]),
                )
            )
    return rows


def family_wise_p(rank: FloatArray) -> float:
    """Smallest two-sided binomial p of all intervals of ndarray[mock, parameter], times their number (Bonferroni)."""
    tests = [
        float(stats.binomtest(_within(column, low, high), len(rank), high - low).pvalue)
        for column in rank.T
        for low, high in LEVELS.values()
    ]
    return min(1.0, min(tests) * len(tests))


def _within(rank: FloatArray, low: float, high: float) -> int:
    return int(((rank > low) & (rank < high)).sum())


def uniformity_p(rank: FloatArray) -> FloatArray:
    """Kolmogorov-Smirnov probability ndarray[parameter] of uniform ranks (Talts et al. 2018, arXiv:1804.06788)."""
    return np.array([float(stats.kstest(column, "uniform").pvalue) for column in rank.T])


def false_alarms(statistic: FloatArray) -> Alarms:
    """Threshold from the first half of ndarray[mock] of signal-free mocks, alarms in the second."""
    half = len(statistic) // 2
    first, second = np.sort(statistic[:half])[::-1], statistic[half:]
    k = max(1, round(FALSE_ALARMS * half))
    band = stats.betabinom.interval(0.99, len(second), k, half - k + 1)
    threshold = float(first[k - 1])
    return Alarms(threshold, int(np.sum(second > threshold)), len(second), float(band[0]), float(band[1]))


def pulls(mean: FloatArray, sd: FloatArray, truth: FloatArray) -> FloatArray:
    """(mean - truth) / sd, ndarray[mock, parameter]: of mean 0 and mean square 1 if truths are from the prior."""
    return np.asarray((mean - truth) / sd)
