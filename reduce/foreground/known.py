"""Foreground that is known beforehand: a mean spectrum and modes with a prior, all bins jointly.

The other half of a foreground model: a `Family` (`reduce.foreground.protocol`) is free and projected out, what is
here has a prior and goes into the mean and the covariance of the data. `reduce.ensemble` and
`reduce.foreground.gaussian_process` make these; `reduce.joint_fit` puts both halves together.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sims.errors import raise_if_any

FloatArray = NDArray[np.float64]

SMALLEST_OF_NOISE = 0.01  # a mode that nowhere rises above this part of the noise is left out


@dataclass(frozen=True, eq=False)
class KnownForeground:
    """Mean and modes of a foreground, and of the signal response that goes with it.

    Parameters
    ----------
    mean_k : ndarray[bin, channel]
        Mean spectrum, K.
    modes_k : ndarray[mode, bin, channel]
        Independent deviations of one standard deviation each, K.
    response : ndarray[mode, bin, channel]
        Change of the signal response that goes with each.
    draws : int or None
        Number of draws that these were estimated from; None if they were not.

    Raises
    ------
    InputError
        If shapes disagree or a value is not finite.
    """

    mean_k: FloatArray
    modes_k: FloatArray
    response: FloatArray
    draws: int | None = None

    def __post_init__(self) -> None:
        problems = []
        for name, values in (("modes_k", self.modes_k), ("response", self.response)):
            if values.ndim != 3 or values.shape[1:] != self.mean_k.shape:
                problems.append(
                    f"known foreground: {name} has shape {values.shape}; allowed is [mode, bin, channel] of "
                    f"{self.mean_k.shape} [bin, channel]"
                )
        if self.modes_k.shape != self.response.shape:
            problems.append(f"known foreground: {self.modes_k.shape} modes, but {self.response.shape} of the response")
        for name, values in (("mean_k", self.mean_k), ("modes_k", self.modes_k), ("response", self.response)):
            if not np.isfinite(values).all():
                problems.append(f"known foreground: {name} is not finite everywhere; allowed are kelvin")
        raise_if_any(problems)

    def beside(self, other: KnownForeground) -> KnownForeground:
        """Both together, independent of each other: the means add, the modes stand side by side.

        The number of draws is the one that is known.
        """
        return KnownForeground(
            self.mean_k + other.mean_k,
            np.concatenate([self.modes_k, other.modes_k]),
            np.concatenate([self.response, other.response]),
            other.draws if self.draws is None else self.draws,
        )


@dataclass(frozen=True)
class NoFamily:
    """The free half where there is none: a family of no term."""

    terms: int = 0
    linear: bool = True

    def problems(self, frequency_mhz: FloatArray, temperature_k: FloatArray) -> list[str]:
        """Nothing is refused."""
        return []

    def start(self, frequency_mhz: FloatArray, temperature_k: FloatArray, noise_variance_k2: FloatArray) -> FloatArray:
        """No coefficient."""
        return np.zeros(0)

    def evaluate(self, frequency_mhz: FloatArray, coefficients: FloatArray) -> FloatArray:
        """Zero K at every channel."""
        return np.zeros(len(frequency_mhz))

    def basis(self, frequency_mhz: FloatArray, coefficients: FloatArray) -> FloatArray:
        """No column: ndarray[channel, 0]."""
        return np.zeros((len(frequency_mhz), 0))


def smooth_safety(level_k: FloatArray, frequency_mhz: FloatArray, terms: int, relative_sd: float) -> KnownForeground:
    """A small smooth polynomial in each bin on its own, for what an ensemble may have left out.

    Parameters
    ----------
    level_k : ndarray[bin, channel]
        Level that the deviation is a fraction of, K.
    frequency_mhz : ndarray[channel]
        Frequency, MHz.
    terms : int
        Terms of the polynomial in ln f.
    relative_sd : float
        Standard deviation of each term's coefficient, a fraction of the level.

    Returns
    -------
    KnownForeground
        Mean zero; level times Legendre polynomials of ln f over the band.
    """
    bins, channels = level_k.shape
    x = np.log(frequency_mhz)
    x = (2.0 * x - x[0] - x[-1]) / (x[-1] - x[0])
    polynomials = np.polynomial.legendre.legvander(x, terms - 1).T
    modes_k = np.zeros((bins, terms, bins, channels))
    for number, level in enumerate(level_k):
        modes_k[number, :, number] = relative_sd * level * polynomials
    flat = modes_k.reshape(bins * terms, bins, channels)
    return KnownForeground(np.zeros_like(level_k), flat, np.zeros_like(flat))
