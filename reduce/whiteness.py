"""Whiteness of residuals: runs, autocorrelation and chi-squared, with the fit's own effect allowed for.

Residuals are whitened by the full covariance first; then they would be independent standard normal numbers, had
nothing been fitted. A fit takes from each as many directions as it has terms, and leaves neighbours that differ more
in sign than chance would have it. So each statistic is held against its mean and spread over noise put
through the same projector, not against its textbook values (`runs_expected` gives those of the runs).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import norm

FloatArray = NDArray[np.float64]

NOISE_DRAWS = 200


@dataclass(frozen=True)
class Calibrated:
    """A statistic beside what the same fit leaves of pure noise.

    Parameters
    ----------
    value : float
        Of the residuals.
    expected, error : float
        Mean and standard deviation over draws of noise.
    """

    value: float
    expected: float
    error: float

    @property
    def deviation(self) -> float:
        """How many standard deviations the value is off."""
        return (self.value - self.expected) / self.error

    @property
    def probability(self) -> float:
        """Chance that noise alone is as far off on either side, by a normal law."""
        return float(2.0 * norm.sf(abs(self.deviation)))


@dataclass(frozen=True)
class Whiteness:
    """What is left in the residuals.

    Parameters
    ----------
    runs : Calibrated
        Number of runs of one sign along frequency, over all bins; too few is structure.
    lag_one : Calibrated
        Autocorrelation between neighbouring channels.
    chi_squared : float
        Sum of squares; its mean over noise is rows less terms, exactly.
    """

    runs: Calibrated
    lag_one: Calibrated
    chi_squared: float


def run_count(values: FloatArray) -> NDArray[np.int64]:
    """Runs of one sign along the last axis, ndarray[...]; zero counts as positive."""
    sign = values >= 0.0
    return np.asarray(1 + (sign[..., 1:] != sign[..., :-1]).sum(axis=-1))


def runs_expected(positive: int, negative: int) -> tuple[float, float]:
    """Mean and variance of the number of runs of independent signs (Wald and Wolfowitz 1940, Ann. Math. Stat. 11, 147).

    Parameters
    ----------
    positive, negative : int
        How many there are of each.
    """
    count, twice = positive + negative, 2.0 * positive * negative
    mean = 1.0 + twice / count
    return mean, twice * (twice - count) / (count**2 * (count - 1.0))


def lag_one_parts(values: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Sum of products of neighbours, and of squares, along the last axis: their ratio is the autocorrelation.

    The mean is not taken off: that of whitened residuals is zero.
    """
    return np.asarray((values[..., 1:] * values[..., :-1]).sum(axis=-1)), np.asarray((values**2).sum(axis=-1))


def statistics(values: FloatArray, pieces: tuple[slice, ...]) -> tuple[FloatArray, FloatArray]:
    """Runs and autocorrelation at lag one ndarray[...] each, over pieces of the last axis, never across their ends."""
    runs = sum(run_count(values[..., piece]) for piece in pieces)
    parts = [lag_one_parts(values[..., piece]) for piece in pieces]
    return np.asarray(runs, float), np.asarray(sum(p for p, _ in parts) / sum(s for _, s in parts))


def whiteness(
    white: FloatArray,
    fitted: FloatArray,
    pieces: tuple[slice, ...],
    rng: np.random.Generator,
    draws: int = NOISE_DRAWS,
) -> Whiteness:
    """Judge whitened residuals.

    Parameters
    ----------
    white : ndarray[row]
        Whitened residuals.
    fitted : ndarray[row, column]
        Orthonormal axes of all that was fitted to them, whitened.
    pieces : tuple of slice
        Rows that are neighbours in frequency: one piece a bin.
    rng : numpy.random.Generator
    draws : int
        Draws of noise that the statistics are held against.

    Returns
    -------
    Whiteness
    """
    noise = rng.standard_normal((draws, len(white)))
    noise -= (noise @ fitted) @ fitted.T
    found, chance = statistics(white, pieces), statistics(noise, pieces)
    runs, lag_one = (
        Calibrated(float(value), float(over.mean()), float(over.std(ddof=1)))
        for value, over in zip(found, chance, strict=True)
    )
    return Whiteness(runs, lag_one, float(white @ white))
