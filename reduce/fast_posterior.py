"""The same posterior in a fraction of a second, for hundreds of mocks and to start the sampler.

Importance sampling in stages: draws from the prior first, then from a multivariate t fitted
to what they found; a likelihood too sharp for the draws so far is first tempered. All draws are weighted by the whole mixture they came from (the balance
heuristic; Veach and Guibas 1995; Cornuet et al. 2012, adaptive multiple importance sampling).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from reduce.combine import Information
from reduce.trough_model import NAMES, TroughModel

FloatArray = NDArray[np.float64]

TAIL_DEGREES = 5.0
WIDENING = 1.3
ENOUGH_DRAWS = 200.0
BISECTIONS = 40
MOST_STAGES = 15


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

    @property
    def effective_size(self) -> float:
        """Kish's effective number of draws."""
        return _effective_size(self.weight)

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
    log_density : float
        Log of the prior's density where it is not zero.
    """

    parameters: FloatArray
    signal_k: FloatArray
    log_density: float


def prior_bank(model: TroughModel, rng: np.random.Generator, size: int = 8000) -> PriorBank:
    """Draw a bank; the prior's density follows from the share of its box that is allowed."""
    tries = rng.uniform(model.lower, model.upper, (40 * size, len(NAMES)))
    share = float(np.mean(model.allowed(tries)))
    parameters = model.draw_prior(rng, size)
    log_density = -float(np.sum(np.log(model.upper - model.lower))) - np.log(share)
    return PriorBank(parameters, model.signal_k(parameters), log_density)


def fast_posterior(
    information: Information,
    model: TroughModel,
    bank: PriorBank,
    rng: np.random.Generator,
    *,
    enough: float = 1000.0,
    draws: int = 4000,
) -> WeightedPosterior:
    """Importance-weighted posterior of the turning points.

    Parameters
    ----------
    information : Information
        All bins together.
    model : TroughModel
    bank : PriorBank
        From `prior_bank` of the same model.
    rng : numpy.random.Generator
    enough : float
        Effective size at which to stop; after `MOST_STAGES` stages it stops all the same.
    draws : int
        Draws a stage.

    Returns
    -------
    WeightedPosterior
        Its `effective_size` says how far to trust it.
    """
    parameters = bank.parameters
    log_likelihood = information.log_likelihood(bank.signal_k)
    proposals: list[tuple[int, stats._multivariate.multivariate_t_frozen]] = []
    mixture = np.zeros(len(parameters))
    for _ in range(MOST_STAGES):
        posterior = WeightedPosterior(parameters, _tempered(log_likelihood, mixture))
        shape = WIDENING * posterior.covariance() + 1e-12 * np.diag((model.upper - model.lower) ** 2)
        proposal = stats.multivariate_t(posterior.mean(), shape, df=TAIL_DEGREES, seed=rng)
        proposals.append((draws, proposal))
        fresh = proposal.rvs(draws)
        value = model.log_probability(fresh, information)
        parameters = np.concatenate([parameters, fresh])
        log_likelihood = np.concatenate([log_likelihood, value])
        mixture = _log_mixture(parameters, model, bank, proposals)
        weight = _normalised(log_likelihood - mixture)
        if _effective_size(weight) >= enough:
            break
    return WeightedPosterior(parameters[weight > 0.0], weight[weight > 0.0])


def _tempered(log_likelihood: FloatArray, log_mixture: FloatArray) -> FloatArray:
    """Weights with the likelihood raised to the largest power up to 1 that leaves enough effective draws."""

    def weights(power: float) -> FloatArray:
        # Where the prior is zero the likelihood is -inf, and no power of it is anything else.
        return _normalised(np.where(np.isfinite(log_likelihood), power * log_likelihood - log_mixture, -np.inf))

    low, high = 0.0, 1.0
    if _effective_size(weights(1.0)) >= ENOUGH_DRAWS:
        return weights(1.0)
    for _ in range(BISECTIONS):
        middle = 0.5 * (low + high)
        if _effective_size(weights(middle)) >= ENOUGH_DRAWS:
            low = middle
        else:
            high = middle
    return weights(low)


def _log_mixture(
    parameters: FloatArray,
    model: TroughModel,
    bank: PriorBank,
    proposals: list[tuple[int, stats._multivariate.multivariate_t_frozen]],
) -> FloatArray:
    """Log density of the mixture that all draws so far came from."""
    total = len(bank.parameters) + sum(count for count, _ in proposals)
    prior = np.where(model.allowed(parameters), bank.log_density, -np.inf)
    parts = [prior + np.log(len(bank.parameters) / total)]
    parts += [np.atleast_1d(proposal.logpdf(parameters)) + np.log(count / total) for count, proposal in proposals]
    return np.asarray(np.logaddexp.reduce(parts, axis=0))


def _effective_size(weight: FloatArray) -> float:
    """Kish's effective number of draws of weights that sum to one."""
    return float(1.0 / np.sum(weight**2))


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
