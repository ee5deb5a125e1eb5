"""Full statistical study: coverage of the turning points, and false alarms without a signal.

Run it as ``python tests/studies/coverage_study.py --mocks 1000``; it prints the table that
DEVELOPERS.md quotes. With ``--processes 2`` it takes about two seconds a mock on two cores.
"""

from __future__ import annotations

import argparse
from concurrent.futures import ProcessPoolExecutor
from functools import partial
from multiprocessing import get_context

import numpy as np
from mocks import Bench, Result, make_bench, reduce_mock
from numba import set_num_threads
from scipy import stats
from threadpoolctl import threadpool_limits

from reduce.trough_model import NAMES

LEVELS = {"68": (0.16, 0.84), "95": (0.025, 0.975)}
FAMILY_WISE = 0.99
FALSE_ALARMS = 0.01
NULL_OFFSET = 1_000_000  # signal-free mocks share no draw with the others


def _one_thread() -> None:
    """Each process keeps to one thread; more would wait for each other."""
    set_num_threads(1)
    threadpool_limits(1)


def run_mocks(bench: Bench, count: int, processes: int, *, signal: bool) -> list[Result]:
    """Reduce `count` mocks; those without a signal are others than those with one."""
    numbers = [index if signal else NULL_OFFSET + index for index in range(count)]
    with ProcessPoolExecutor(processes, mp_context=get_context("spawn"), initializer=_one_thread) as pool:
        return list(pool.map(partial(reduce_mock, bench, signal=signal), numbers, chunksize=5))


def coverage_table(ranks: np.ndarray) -> list[tuple[str, str, float, float, float, bool]]:
    """Parameter, level, coverage and its allowed band, for ndarray[mock, 6] ranks of the truth.

    The band is binomial, at 99 % for all twelve rows together (Bonferroni).
    """
    rows = []
    share = (1.0 - FAMILY_WISE) / (len(NAMES) * len(LEVELS))
    for number, name in enumerate(NAMES):
        for level, (low, high) in LEVELS.items():
            inside = (ranks[:, number] > low) & (ranks[:, number] < high)
            band = stats.binom.interval(1.0 - share, len(ranks), high - low)
            count = int(inside.sum())
            rows.append((name, level, count / len(ranks), band[0] / len(ranks), band[1] / len(ranks),
                         bool(band[0] <= count <= band[1])))  # fmt: skip
    return rows


def family_wise_p(ranks: np.ndarray) -> float:
    """Smallest two-sided binomial p of the twelve rows, times twelve, at most 1 (Bonferroni)."""
    smallest = 1.0
    for number in range(len(NAMES)):
        for low, high in LEVELS.values():
            inside = int(((ranks[:, number] > low) & (ranks[:, number] < high)).sum())
            smallest = min(smallest, float(stats.binomtest(inside, len(ranks), high - low).pvalue))
    return min(1.0, smallest * len(NAMES) * len(LEVELS))


def false_alarms(statistic: np.ndarray) -> tuple[float, int, int, tuple[float, float]]:
    """Threshold set on one half of signal-free mocks for 1 %, alarms on the other half, its size and the 99 % band.

    The band allows for the scatter of the threshold too: the number of alarms of m fresh
    mocks above the k-th largest of n is beta-binomial with parameters k and n - k + 1.
    """
    half = len(statistic) // 2
    first, second = np.sort(statistic[:half])[::-1], statistic[half:]
    k = max(1, round(FALSE_ALARMS * half))
    threshold = float(first[k - 1])
    band = stats.betabinom.interval(0.99, len(second), k, half - k + 1)
    return threshold, int(np.sum(second > threshold)), len(second), (float(band[0]), float(band[1]))


def main() -> None:
    """Run the study and print its tables."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--mocks", type=int, default=1000)
    parser.add_argument("--processes", type=int, default=2)
    options = parser.parse_args()
    bench = make_bench()
    with_signal = run_mocks(bench, options.mocks, options.processes, signal=True)
    ranks = np.array([result.rank for result in with_signal])
    print(f"{options.mocks} mocks, truths from the prior, antenna, sky and receiver from [knowledge]")
    print("parameter            level  coverage  band of 99 % for all together")
    for name, level, got, low, high, fine in coverage_table(ranks):
        print(f"{name:20} {level:>5} {got:9.3f}  {low:.3f} to {high:.3f}  {'inside' if fine else 'OUTSIDE'}")
    print(f"family-wise p-value {family_wise_p(ranks):.3f}")
    pulls = np.array([(r.mean - r.truth) / np.sqrt(np.diag(r.covariance)) for r in with_signal])
    print("mean pull  " + "  ".join(f"{value:+.3f}" for value in pulls.mean(axis=0)))
    print("pull width " + "  ".join(f"{value:.3f}" for value in pulls.std(axis=0)))
    freedom = with_signal[0].degrees_of_freedom
    chi_squared = np.array([result.chi_squared for result in with_signal])
    scatter = np.sqrt(2 * freedom)
    print(f"chi-squared {chi_squared.mean():.1f} of {freedom}, scatter {chi_squared.std():.1f} of {scatter:.1f}")
    null = run_mocks(bench, options.mocks, options.processes, signal=False)
    threshold, alarms, fresh, band = false_alarms(np.array([result.statistic for result in null]))
    print(
        f"{options.mocks} signal-free mocks: threshold {threshold:.2f} from one half; on the other half "
        f"{alarms} alarms of {fresh}, allowed {band[0]:.0f} to {band[1]:.0f}"
    )
    detected = np.mean([result.statistic > threshold for result in with_signal])
    print(f"mocks with a signal above the threshold: {detected:.1%}")


if __name__ == "__main__":
    main()
