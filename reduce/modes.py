"""The maxima of a posterior, each told apart by a valley, with the share of the draws that belongs to it.

A foreground that takes most of a trough away may leave several that fit. `local_maxima` climbs from draws of the
posterior and of the prior; of those it finds, two are one here unless the posterior dips between them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import logsumexp

from reduce.combine import Information
from reduce.local_maxima import local_maxima
from reduce.signal_shape import SignalShape, widths

FloatArray = NDArray[np.float64]

STARTS = 32  # of each: from the draws and from the prior
VALLEY = 1.0  # in ln: how far the posterior falls between two maxima that are not one
ALONG = 33  # points on the way from one to the other
FORGOTTEN = 12.0  # in ln below the highest
BEYOND = 0.1  # of the range of the prior's draws, on each side, where bounds are infinite


@dataclass(frozen=True, eq=False)
class Mode:
    """One maximum.

    Attributes
    ----------
    parameters : ndarray[parameter]
        Where it is.
    log_likelihood : float
        -|R s - z|^2 / 2 there.
    share : float
        Share of the posterior's draws that belong to it.
    laplace_share : float
        The same expected from height and curvature alone (Laplace's method, bounds ignored).
    """

    parameters: FloatArray
    log_likelihood: float
    share: float
    laplace_share: float


def posterior_modes(
    information: Information, shape: SignalShape, draws: FloatArray, rng: np.random.Generator
) -> tuple[Mode, ...]:
    """Find the maxima.

    Parameters
    ----------
    information : Information
    shape : SignalShape
        The climb is over the likelihood, so a prior that is not uniform only ranks and separates what is found.
    draws : ndarray[draw, parameter]
        From the posterior, of equal weight.
    rng : numpy.random.Generator

    Returns
    -------
    tuple of Mode
        Highest posterior density first; those more than `FORGOTTEN` below it in ln are left out.
    """
    from_prior = shape.draw_prior(rng, STARTS)
    starts = np.concatenate([draws[rng.choice(len(draws), STARTS)], from_prior])
    box = shape if np.isfinite(_bound_widths(shape)).all() else _boxed(shape, np.concatenate([draws, from_prior]))
    found = local_maxima(information, box, starts)
    height = shape.log_probability(found.parameters, information)
    order = [int(number) for number in np.argsort(-height) if height[number] > height.max() - FORGOTTEN]
    leader = _leaders(information, shape, found.parameters, height, order)
    nearest = _nearest(draws, found.parameters[order], found.covariance[order])
    volume = height[order] + 0.5 * np.linalg.slogdet(found.covariance[order])[1]
    expected = np.exp(volume - logsumexp(volume))
    modes = []
    for head in dict.fromkeys(leader):
        mine = np.array([one == head for one in leader])
        modes.append(
            Mode(
                found.parameters[head],
                float(found.log_likelihood[head]),
                float(mine[nearest].mean()),
                float(expected[mine].max() / sum(_largest(expected, leader))),
            )
        )
    return tuple(modes)


def _bound_widths(shape: SignalShape) -> FloatArray:
    """ndarray[parameter]; infinite where there are none."""
    return shape.upper - shape.lower


def _leaders(
    information: Information, shape: SignalShape, at: FloatArray, height: FloatArray, order: list[int]
) -> list[int]:
    """For each maximum, highest first, the highest one that it is not separated from by a valley."""
    leaders: list[int] = []
    share = np.linspace(0.0, 1.0, ALONG)[:, None]
    for number in order:
        for head in dict.fromkeys(leaders):
            between = shape.log_probability((1.0 - share) * at[head] + share * at[number], information)
            if between.min() > height[number] - VALLEY:
                leaders.append(head)
                break
        else:
            leaders.append(number)
    return leaders


def _largest(expected: FloatArray, leader: list[int]) -> list[float]:
    """For each mode, the largest of the shares of the maxima that were merged in it: they overlap, and do not add."""
    return [max(e for e, one in zip(expected, leader, strict=True) if one == head) for head in dict.fromkeys(leader)]


def _nearest(draws: FloatArray, at: FloatArray, covariance: FloatArray) -> NDArray[np.int64]:
    """Number of the maximum that each draw is nearest to, in its standard deviations."""
    distance = np.empty((len(draws), len(at)))
    for number, (centre, matrix) in enumerate(zip(at, covariance, strict=True)):
        white = np.linalg.solve(np.linalg.cholesky(matrix), (draws - centre).T)
        distance[:, number] = (white**2).sum(axis=0)
    return np.asarray(np.argmin(distance, axis=1))


@dataclass(frozen=True, eq=False)
class _Boxed:
    """A shape within finite bounds."""

    shape: SignalShape
    lower: FloatArray
    upper: FloatArray

    def signal_k(self, parameters: FloatArray) -> FloatArray:
        return self.shape.signal_k(parameters)

    def allowed(self, parameters: FloatArray) -> NDArray[np.bool_]:
        return self.shape.allowed(parameters)


def _boxed(shape: SignalShape, draws: FloatArray) -> _Boxed:
    low, high = draws.min(axis=0), draws.max(axis=0)
    pad = BEYOND * np.maximum(high - low, 1e-6 * widths(shape, draws))
    return _Boxed(shape, np.maximum(shape.lower, low - pad), np.minimum(shape.upper, high + pad))
