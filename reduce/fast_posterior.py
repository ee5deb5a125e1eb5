"""The same posterior in a second, for hundreds of mocks and to start the sampler.

Annealed sequential Monte Carlo (Del Moral, Doucet and Jasra 2006, J. R. Stat. Soc. B 68,
411): draws from the prior are weighted by a growing power of the likelihood, resampled, and
moved by differential evolution (ter Braak 2006, Stat. Comput. 16, 239) until the power is 1.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.combine import Information
from reduce.trough_model import TroughModel

FloatArray = NDArray[np.float64]

KEPT_SHARE = 0.5  # of the effective draws, from one power of the likelihood to the next
BISECTIONS = 40
MOVES = 8
LAST_MOVES = 24
STRIDES = np.array([0.3, 0.69, 1.0])  # of a difference of two draws; 2.38/sqrt(2 d) is 0.69 in six dimensions
JITTER = 1e-6


@dataclass(frozen=True)
class WeightedPosterior:
    """Weighted draws from the posterior.

    Attributes
    ----------
    parameters : ndarray[draw, 6]
        As `trough_model.NAMES`, MHz and mK.
    weight : ndarray[draw]
        Sum to one.
    """

    parameters: FloatArray
    weight: FloatArray

    def mean(self) -> FloatArray:
        """Posterior means ndarray[6]."""
        return np.asarray(self.weight @ self.parameters)

    def covariance(self) -> FloatArray:
        """Posterior covariance ndarray[6, 6]."""
        off = self.parameters - self.mean()
        return np.asarray((off * self.weight[:, None]).T @ off)

    def quantiles(self, levels: FloatArray) -> FloatArray:
        """Quantiles ndarray[level, 6]."""
        columns = []
        for values in self.parameters.T:
            order = np.argsort(values)
            cumulative = np.cumsum(self.weight[order]) - 0.5 * self.weight[order]
            columns.append(np.interp(levels, cumulative, values[order]))
        return np.stack(columns, axis=1)

    def rank(self, truth: FloatArray) -> FloatArray:
        """Posterior probability ndarray[6] that lies below `truth`: uniform over mocks if all is well."""
        return np.asarray(self.weight @ (self.parameters < truth))

    def resample(self, rng: np.random.Generator, size: int) -> FloatArray:
        """Unweighted draws ndarray[size, 6], with replacement."""
        return self.parameters[rng.choice(len(self.weight), size, p=self.weight)]


@dataclass(frozen=True)
class PriorBank:
    """Draws from the prior with their spectra, made once and used for every mock.

    Attributes
    ----------
    parameters : ndarray[draw, 6]
    signal_k : ndarray[draw, channel]
    """

    parameters: FloatArray
    signal_k: FloatArray


def prior_bank(model: TroughModel, rng: np.random.Generator, size: int = 2000) -> PriorBank:
    """Draw a bank."""
    parameters = model.draw_prior(rng, size)
    return PriorBank(parameters, model.signal_k(parameters))


def fast_posterior(
    information: Information, model: TroughModel, bank: PriorBank, rng: np.random.Generator
) -> WeightedPosterior:
    """Posterior of the turning points by annealing the draws of a bank.

    Parameters
    ----------
    information : Information
        All bins together.
    model : TroughModel
    bank : PriorBank
        From `prior_bank` of the same model.
    rng : numpy.random.Generator

    Returns
    -------
    WeightedPosterior
        As many draws as the bank has, of equal weight.
    """
    draws, value = bank.parameters, information.log_likelihood(bank.signal_k)
    power = 0.0
    while power < 1.0:
        step = _next_step(value, 1.0 - power)
        if not step > 0.0:
            raise RuntimeError(
                "fast posterior: the likelihood is too steep over the prior, or not finite: the stated noise is too "
                f"small, or a signal is not finite (reached power {power:.3g} of 1)"
            )
        power = 1.0 if step == 1.0 - power else power + step
        chosen = _resampled(_normalised(step * value), rng)
        draws, value = draws[chosen], value[chosen]
        moves = MOVES if power < 1.0 else LAST_MOVES
        draws, value = _moved(draws, value, power, moves, information, model, rng)
    return WeightedPosterior(draws, np.full(len(draws), 1.0 / len(draws)))


def carried_over(
    posterior: WeightedPosterior, before: Information, after: Information, model: TroughModel, rng: np.random.Generator
) -> WeightedPosterior | None:
    """The posterior after the data's covariance changed a little, from that before.

    Parameters
    ----------
    posterior : WeightedPosterior
        Of `before`, equal weights.
    before, after : Information
    model : TroughModel
    rng : numpy.random.Generator

    Returns
    -------
    WeightedPosterior or None
        None where the change is too large: too few effective draws would be left.
    """
    signal_k = model.signal_k(posterior.parameters)
    value = after.log_likelihood(signal_k)
    weight = _normalised(value - before.log_likelihood(signal_k))
    if 1.0 / np.sum(weight**2) < KEPT_SHARE * len(weight):
        return None
    chosen = _resampled(weight, rng)
    draws, _ = _moved(posterior.parameters[chosen], value[chosen], 1.0, LAST_MOVES, after, model, rng)
    return WeightedPosterior(draws, posterior.weight)


def _next_step(value: FloatArray, room: float) -> float:
    """How far the power can grow before too few effective draws are left; all the room there is, if it can."""

    def kept(step: float) -> bool:
        return bool(1.0 / np.sum(_normalised(step * value) ** 2) >= KEPT_SHARE * len(value))

    if kept(room):
        return room
    low, high = 0.0, room
    for _ in range(BISECTIONS):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if kept(middle) else (low, middle)
    return low


def _resampled(weight: FloatArray, rng: np.random.Generator) -> NDArray[np.int64]:
    """Systematic resampling: numbers of the draws that go on."""
    places = (rng.random() + np.arange(len(weight))) / len(weight)
    return np.minimum(np.searchsorted(np.cumsum(weight), places), len(weight) - 1)


def _moved(
    draws: FloatArray,
    value: FloatArray,
    power: float,
    moves: int,
    information: Information,
    model: TroughModel,
    rng: np.random.Generator,
) -> tuple[FloatArray, FloatArray]:
    """Metropolis moves along differences of two draws of a frozen population, so each is its own reverse."""
    population, size = draws.copy(), len(draws)
    jitter = JITTER * (model.upper - model.lower)
    for _ in range(moves):
        one, other = rng.integers(size, size=(2, size))
        stride = rng.choice(STRIDES, size=size)[:, None]
        noise = jitter * rng.standard_normal(draws.shape)
        proposed = draws + stride * (population[one] - population[other]) + noise
        proposed_value = model.log_probability(proposed, information)
        taken = np.log(rng.random(size)) < power * (proposed_value - value)
        draws = np.where(taken[:, None], proposed, draws)
        value = np.where(taken, proposed_value, value)
    return draws, value


def _normalised(log_weight: FloatArray) -> FloatArray:
    weight = np.exp(log_weight - np.max(log_weight))
    return np.asarray(weight / weight.sum())


def detection_statistic(mean: FloatArray, covariance: FloatArray) -> float:
    """Depth of C below the mean of B and D, over its posterior standard deviation.

    Parameters
    ----------
    mean : ndarray[6]
        Posterior means, as `trough_model.NAMES`.
    covariance : ndarray[6, 6]
        Posterior covariance.

    Returns
    -------
    float
        What counts as a detection is set on mocks without a signal, not by a normal law.
    """
    contrast = np.array([0.0, 0.0, 0.0, 0.5, -1.0, 0.5])
    return float(contrast @ mean / np.sqrt(contrast @ covariance @ contrast))
