"""What a foreground model takes of a signal, and what it leaves.

A foreground that is fitted to the data imitates part of any signal: its free terms wholly, its known modes as far
as their prior lets them. What is left, as a spectrum and as a share of the signal-to-noise ratio, is computed
here from the fit of `reduce.subtract`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.covariance import DiagonalLowRank, factor_basis
from reduce.foreground.protocol import Family
from reduce.subtract import Subtraction
from sims.errors import InputError


@dataclass(frozen=True, eq=False)
class RemovedSignal:
    """What a foreground fit leaves of a signal.

    Parameters
    ----------
    left_k : ndarray[bin, channel]
        Residual, K, that the signal alone leaves after the same joint projection; NaN where flagged.
    surviving_fraction : float
        Signal-to-noise ratio of the signal with the foreground and all systematic errors allowed for,
        over that under the noise alone, were its shape known; 0 to 1.
    second_order_k : ndarray[bin, channel]
        What the tangent neglects, K: the change of the foreground by the coefficients that imitate
        the signal, minus its linear part. For a log polynomial delta^2 / 2T, delta the imitation.
    """

    left_k: NDArray[np.float64]
    surviving_fraction: float
    second_order_k: NDArray[np.float64]


def removed_from_signal(
    subtraction: Subtraction,
    *,
    frequency_mhz: NDArray[np.float64],
    family: Family,
    signal_response: NDArray[np.float64],
    signal_k: NDArray[np.float64],
    known_modes: int = 0,
) -> RemovedSignal:
    """What the foreground fit leaves of a signal, to first order in the signal.

    Parameters
    ----------
    subtraction : Subtraction
        The fit.
    frequency_mhz : ndarray[channel] or ndarray[bin, channel]
        Frequency, MHz, as fitted.
    family : Family
        The family, as fitted.
    signal_response : ndarray[bin, channel]
        w, the share of a signal filling the sky that reaches each bin.
    signal_k : ndarray[channel]
        Signal, K.
    known_modes : int
        How many of the covariance's modes, the last ones, are the foreground's own, with their prior:
        what they imitate is taken from `left_k` too, as far as the prior lets them.

    Returns
    -------
    RemovedSignal
        Residual of the signal, surviving fraction, and what the tangent neglects.

    Raises
    ------
    InputError
        If shapes disagree, or the signal is zero or not finite on the good samples.
    """
    good, covariance = subtraction.good, subtraction.covariance
    response, signal = np.asarray(signal_response, float), np.asarray(signal_k, float)
    if response.shape != good.shape or signal.shape != good.shape[1:]:
        raise InputError(
            f"signal_response and signal_k: got shapes {response.shape} and {signal.shape}; allowed are "
            f"{good.shape} [bin, channel] and {good.shape[1:]} [channel]"
        )
    seen = (response * signal)[good]
    if not np.isfinite(seen).all() or not seen.any():
        raise InputError("signal_response * signal_k: zero or not finite on the good samples; allowed is any signal")
    white = covariance.whiten(seen)
    factor = factor_basis(covariance.whiten(subtraction.basis), "foreground basis")
    taken = factor.orthonormal.T @ white
    shift = np.linalg.solve(factor.triangle, taken)
    left = np.full(good.shape, np.nan)
    left[good] = without_known(covariance, known_modes, seen - subtraction.basis @ shift)
    remainder = white - factor.orthonormal @ taken
    remainder -= factor.orthonormal @ (factor.orthonormal.T @ remainder)  # the second pass clears the rounding
    frequency = np.broadcast_to(np.asarray(frequency_mhz, float), good.shape)
    moves = shift.reshape(subtraction.coefficients.shape)
    second_order = np.array(
        [
            family.evaluate(f, a + move) - family.evaluate(f, a) - family.basis(f, a) @ move
            for f, a, move in zip(frequency, subtraction.coefficients, moves, strict=True)
        ]
    )
    fraction = float(np.linalg.norm(remainder) / np.linalg.norm(seen / covariance.sigma_k))
    return RemovedSignal(left_k=left, surviving_fraction=fraction, second_order_k=second_order)


def without_known(covariance: DiagonalLowRank, known_modes: int, left_k: NDArray[np.float64]) -> NDArray[np.float64]:
    """What a foreground with a prior leaves of residuals of the free one.

    Parameters
    ----------
    covariance : DiagonalLowRank
        Its last `known_modes` modes are the foreground's.
    known_modes : int
    left_k : ndarray[row, ...]
        Residuals of the generalised fit of the free terms, K.

    Returns
    -------
    ndarray[row, ...]
        Residuals less the mean of the modes given them, U U' C^-1 r.
    """
    if not known_modes:
        return left_k
    modes = covariance.modes_k[:, -known_modes:]
    return np.asarray(left_k - np.tensordot(modes, covariance.scores(left_k)[-known_modes:], axes=(1, 0)))
