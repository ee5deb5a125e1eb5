"""What the tests of maximally smooth foregrounds share: skies, troughs, modes, and designs of them."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from reduce.covariance import DiagonalLowRank
from reduce.foreground.maximally_smooth import MaximallySmooth
from reduce.foreground.smooth_fit import SmoothDesign

FloatArray = NDArray[np.float64]

LOW_MHZ, HIGH_MHZ = 40.0, 120.0
FREQUENCY_MHZ = np.linspace(LOW_MHZ, HIGH_MHZ, 81)
NOISE_K = 0.01
TROUGH_K = -0.1 * np.exp(-0.5 * ((FREQUENCY_MHZ - 72.0) / 6.0) ** 2)


def galaxy_k(bins: int) -> FloatArray:
    """Sums of power laws, another one in each bin: ndarray[bin, channel]."""
    scaled = FREQUENCY_MHZ / 60.0
    return np.array([(3000 + 400 * b) * scaled ** -(2.5 + 0.02 * b) + 20 * scaled**-2.1 + 4 for b in range(bins)])


def systematic_modes_k(bins: int) -> FloatArray:
    """A scale, a tilt and a ripple common to all bins, and a curvature of each: ndarray[bin, channel, mode]."""
    level, log = galaxy_k(bins), np.log(FREQUENCY_MHZ / 70.0)
    modes = [0.02 * level, 0.02 * level * log, 1e-3 * level * np.cos(FREQUENCY_MHZ / 5.0)]
    for number in range(bins):
        own = np.zeros_like(level)
        own[number] = 0.01 * level[number] * log**2
        modes.append(own)
    return np.stack(modes, axis=-1)


def observed(bins: int, with_modes: bool, seed: int, sigma_k: float = NOISE_K) -> tuple[SmoothDesign, FloatArray]:
    """Design and data: galaxy, trough, noise of 10 mK and the errors that the modes describe; some channels flagged."""
    good = np.ones((bins, FREQUENCY_MHZ.size), bool)
    good[:, 30:33] = good[0, :4] = False
    modes = systematic_modes_k(bins) if with_modes else np.zeros((*good.shape, 0))
    covariance = DiagonalLowRank.from_bins(np.full(good.shape, sigma_k**2), modes, good)
    data_k = galaxy_k(bins) + TROUGH_K
    data_k[good] += covariance.draw(np.random.default_rng(seed), 1)[0]
    data_k[~good] = np.nan
    return SmoothDesign(FREQUENCY_MHZ, good, covariance, MaximallySmooth(12, LOW_MHZ, HIGH_MHZ)), data_k


def one_bin(family: MaximallySmooth | int, sigma_k: float = NOISE_K) -> SmoothDesign:
    """Design of all channels of one bin without modes, of a family or of the default one with a number of terms."""
    if isinstance(family, int):
        family = MaximallySmooth(family, LOW_MHZ, HIGH_MHZ)
    channels = FREQUENCY_MHZ.size
    covariance = DiagonalLowRank(np.full(channels, sigma_k**2), np.zeros((channels, 0)))
    return SmoothDesign(FREQUENCY_MHZ, np.ones((1, channels), bool), covariance, family)
