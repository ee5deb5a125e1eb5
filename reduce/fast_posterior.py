"""The same posterior in a second, for hundreds of mocks and to start the sampler.

Annealed sequential Monte Carlo (Del Moral, Doucet and Jasra 2006, J. R. Stat. Soc. B 68,
411): draws from the prior are weighted by a growing power of the likelihood, resampled, and
moved by differential evolution (ter Braak 2006, Stat. Comput. 16, 239) until the power is 1.
The mean weights of all steps multiply to the evidence, whose error comes from how the draws
descend from those of the prior (Lee and Whiteley 2018, Biometrika 105, 609). Any shape of
`signal_shape` is taken.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import logsumexp

from reduce.combine import Information
from reduce.signal_shape import SignalShape, log_likelihood_where_allowed, widths

FloatArray = NDArray[np.float64]

KEPT_SHARE = 0.5  # of the effective draws, from one power of the likelihood to the next
BISECTIONS = 40
MOVES = 8
LAST_MOVES = 24
SHORT = 0.3  # strides as parts of a difference of two draws; 2.38/sqrt(2 d), the best of a normal law, and 1 beside it
JITTER = 1e-6


@dataclass(frozen=True)
class WeightedPosterior:
    """Weighted draws from the posterior.

    Attributes
    ----------
    parameters : ndarray[draw, parameter]
        As the shape's names and units.
    weight : ndarray[draw]
        Sum to one.
    log_evidence : float
        ln of the mean of exp(-|R s - z|^2 / 2) over the prior; NaN if it was not found.
    log_evidence_error : float
        Its standard error.
    """

    parameters: FloatArray
    weight: FloatArray
    log_evidence: float = np.nan
    log_evidence_error: float = np.nan

    def log_bayes_factor(self, information: Information) -> float:
        """ln of the evidence over that of no signal."""
        return self.log_evidence - float(information.log_likelihood(np.zeros(information.R.shape[1])))

    def mean(self) -> FloatArray:
        """Posterior means ndarray[parameter]."""
        return np.asarray(self.weight @ self.parameters)

    def covariance(self) -> FloatArray:
        """Posterior covariance ndarray[parameter, parameter]."""
        off = self.parameters - self.mean()
        return np.asarray((off * self.weight[:, None]).T @ off)

    def quantiles(self, levels: FloatArray) -> FloatArray:
        """Quantiles ndarray[level, parameter]."""
        columns = []
        for values in self.parameters.T:
            order = np.argsort(values)
            cumulative = np.cumsum(self.weight[order]) - 0.5 * self.weight[order]
            columns.append(np.interp(levels, cumulative, values[order]))
        return np.stack(columns, axis=1)

    def rank(self, truth: FloatArray) -> FloatArray:
        """Posterior probability ndarray[parameter] that lies below `truth`: uniform over mocks if all is well."""
        return np.asarray(self.weight @ (self.parameters < truth))

    def resample(self, rng: np.random.Generator, size: int) -> FloatArray:
        """Unweighted draws ndarray[size, parameter], with replacement."""
        return self.parameters[rng.choice(len(self.weight), size, p=self.weight)]


@dataclass(frozen=True)
class PriorBank:
    """Draws from the prior with their spectra, made once and used for every mock.

    Attributes
    ----------
    parameters : ndarray[draw, parameter]
    signal_k : ndarray[draw, channel]
    """

    parameters: FloatArray
    signal_k: FloatArray


def prior_bank(model: SignalShape, rng: np.random.Generator, size: int = 2000) -> PriorBank:
    """Draw a bank."""
    parameters = model.draw_prior(rng, size)
    return PriorBank(parameters, model.signal_k(parameters))


def fast_posterior(
    information: Information, model: SignalShape, bank: PriorBank, rng: np.random.Generator
) -> WeightedPosterior:
    """Posterior of a shape's parameters by annealing the draws of a bank.

    Parameters
    ----------
    information : Information
        All bins together.
    model : SignalShape
    bank : PriorBank
        From `prior_bank` of the same model.
    rng : numpy.random.Generator

    Returns
    -------
    WeightedPosterior
        As many draws as the bank has, of equal weight.

    Raises
    ------
    RuntimeError
        If the likelihood is too steep over the prior, or not finite.
    """
    draws, value = bank.parameters, information.log_likelihood(bank.signal_k)
    power, ascent = 0.0, _Ascent(len(draws))
    while power < 1.0:
        step = _next_step(value, 1.0 - power)
        if not step > 0.0:
            raise RuntimeError(
                "fast posterior: the likelihood is too steep over the prior, or not finite: the stated noise is too "
                f"small, or a signal is not finite (reached power {power:.3g} of 1)"
            )
        power = 1.0 if step == 1.0 - power else power + step
        weight = _normalised(step * value)
        chosen = _resampled(weight, rng)
        ascent.climbed(step * value, weight, chosen)
        draws, value = draws[chosen], value[chosen]
        moves = MOVES if power < 1.0 else LAST_MOVES
        draws, value = _moved(draws, value, power, moves, information, model, rng)
    return WeightedPosterior(draws, np.full(len(draws), 1.0 / len(draws)), ascent.log_evidence, ascent.error())


class _Ascent:
    """Evidence as the power grows, and which draw of the prior each draw descends from."""

    def __init__(self, size: int) -> None:
        self.ancestor = np.arange(size)
        self.steps = 0
        self.log_evidence = 0.0
        self.independent = 0.0

    def climbed(self, log_weight: FloatArray, weight: FloatArray, chosen: NDArray[np.int64]) -> None:
        """One step: its weights, ln and normalised, and the draws that went on."""
        self.log_evidence += _log_mean(log_weight)
        self.independent += float(np.sum(weight**2)) - 1.0 / len(weight)
        self.ancestor = self.ancestor[chosen]
        self.steps += 1

    def error(self) -> float:
        """Standard error of the evidence's ln: from descent, but not below that of draws independent at each step."""
        size = len(self.ancestor)
        shares = np.bincount(self.ancestor, minlength=size) / size
        descent = 1.0 - (size / (size - 1.0)) ** (self.steps + 1) * (1.0 - float(np.sum(shares**2)))
        return float(np.sqrt(max(descent, self.independent)))


def carried_over(
    posterior: WeightedPosterior, before: Information, after: Information, model: SignalShape, rng: np.random.Generator
) -> WeightedPosterior | None:
    """The posterior after the data's covariance changed a little, from that before.

    Parameters
    ----------
    posterior : WeightedPosterior
        Of `before`, equal weights.
    before, after : Information
    model : SignalShape
    rng : numpy.random.Generator

    Returns
    -------
    WeightedPosterior or None
        None where the change is too large: too few effective draws would be left.
    """
    signal_k = model.signal_k(posterior.parameters)
    value = after.log_likelihood(signal_k)
    log_weight = value - before.log_likelihood(signal_k)
    weight = _normalised(log_weight)
    if 1.0 / np.sum(weight**2) < KEPT_SHARE * len(weight):
        return None
    chosen = _resampled(weight, rng)
    draws, _ = _moved(posterior.parameters[chosen], value[chosen], 1.0, LAST_MOVES, after, model, rng)
    error = np.hypot(posterior.log_evidence_error, np.sqrt(np.sum(weight**2) - 1.0 / len(weight)))
    return WeightedPosterior(draws, posterior.weight, posterior.log_evidence + _log_mean(log_weight), float(error))


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
    model: SignalShape,
    rng: np.random.Generator,
) -> tuple[FloatArray, FloatArray]:
    """Metropolis moves along differences of two draws of a frozen population, so each is its own reverse."""
    population, (size, dimension) = draws.copy(), draws.shape
    strides = np.array([SHORT, 2.38 / np.sqrt(2.0 * dimension), 1.0])
    jitter = JITTER * widths(model, draws)
    prior = model.log_prior(draws)
    for _ in range(moves):
        one, other = rng.integers(size, size=(2, size))
        stride = rng.choice(strides, size=size)[:, None]
        noise = jitter * rng.standard_normal(draws.shape)
        proposed = draws + stride * (population[one] - population[other]) + noise
        proposed_value = log_likelihood_where_allowed(model, proposed, information)
        proposed_prior = model.log_prior(proposed)
        taken = np.log(rng.random(size)) < power * (proposed_value - value) + proposed_prior - prior
        draws = np.where(taken[:, None], proposed, draws)
        value, prior = np.where(taken, proposed_value, value), np.where(taken, proposed_prior, prior)
    return draws, value


def _normalised(log_weight: FloatArray) -> FloatArray:
    weight = np.exp(log_weight - np.max(log_weight))
    return np.asarray(weight / weight.sum())


def _log_mean(log_values: FloatArray) -> float:
    return float(logsumexp(log_values) - np.log(len(log_values)))


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


def depth_over_its_error(temperature_mk: FloatArray) -> float:
    """Depth of C below the mean of B and D, over its posterior standard deviation.

    Parameters
    ----------
    temperature_mk : ndarray[draw, 3]
        Of B, C and D, mK; a point that no draw has counts as the empty sky, 0 mK. Draws without C are left out.

    Returns
    -------
    float
        As `detection_statistic`, from draws; NaN where fewer than two draws have a C.
    """
    having = temperature_mk[np.isfinite(temperature_mk[:, 1])]
    if len(having) < 2:
        return float("nan")
    shoulders = np.where(np.isfinite(having[:, [0, 2]]), having[:, [0, 2]], 0.0)
    depth = 0.5 * shoulders.sum(axis=1) - having[:, 1]
    return float(depth.mean() / depth.std(ddof=1))
