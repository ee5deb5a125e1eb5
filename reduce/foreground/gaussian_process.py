"""Foreground family: a free power law in each bin, and a smooth Gaussian process for how far it errs.

T = L(f) (1 + g(f)), L a log polynomial of a few terms without prior, g of mean zero and covariance
A^2 exp(-(x - x')^2 / (2 l^2)) in x = ln f, each bin on its own. L is a free family; the rest is written
as modes of the covariance at the fitted L, to a stated part of the noise.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from reduce.foreground.known import SMALLEST_OF_NOISE, KnownForeground

FloatArray = NDArray[np.float64]


def process_modes(
    level_k: FloatArray,
    frequency_mhz: FloatArray,
    noise_variance_k2: FloatArray,
    amplitude: float,
    length: float,
) -> KnownForeground:
    """Modes of the process at a given level.

    Parameters
    ----------
    level_k : ndarray[bin, channel]
        L, K.
    frequency_mhz : ndarray[channel]
        Frequency, MHz.
    noise_variance_k2 : ndarray[bin, channel]
        Noise variance, K^2; not finite where there are no data.
    amplitude : float
        A, a fraction of the level.
    length : float
        Correlation length l in ln f.

    Returns
    -------
    KnownForeground
        Mean zero. A mode is kept in a bin if anywhere there it is above a hundredth of the noise.
    """
    x = np.log(frequency_mhz)
    kernel = np.exp(-((x[:, None] - x[None, :]) ** 2) / (2.0 * length**2))
    values, vectors = np.linalg.eigh(kernel)
    # Below rounding of the largest eigenvalue nothing of the kernel is known.
    known = values > values[-1] * len(x) * np.finfo(float).eps
    relative = amplitude * (np.sqrt(values[known]) * vectors[:, known]).T[::-1]
    modes = []
    for number, level in enumerate(level_k):
        scaled = relative * level
        sigma_k = np.sqrt(np.where(np.isfinite(noise_variance_k2[number]), noise_variance_k2[number], np.inf))
        for mode in scaled[(np.abs(scaled) > SMALLEST_OF_NOISE * sigma_k).any(axis=1)]:
            whole = np.zeros_like(level_k)
            whole[number] = mode
            modes.append(whole)
    stacked = np.array(modes).reshape(-1, *level_k.shape)
    return KnownForeground(np.zeros_like(level_k), stacked, np.zeros_like(stacked))
