"""The posterior of one mock in tenths of a second: importance sampling from a bank of prior draws, refined where thin.

The bank is drawn once, its spectra are written in the few directions that troughs have, and each mock
costs one product of a matrix and a vector. Where too few draws carry the weight, proposals are drawn first
around all local maxima (`reduce.local_maxima`; a bank alone misses a narrow one), then around the draws that
carry it (population Monte Carlo: Cappé et al. 2004, J. Comput. Graph. Stat. 13, 907), always from the
whole mixture of a round and the prior together, so that the weights stay bounded (Owen and Zhou 2000,
J. Am. Stat. Assoc. 95, 135). `reduce.fast_posterior` moves draws instead; the two check each other.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import logsumexp

from reduce.combine import Information
from reduce.local_maxima import Maxima, local_maxima
from reduce.mixture import Mixture, placed_mixture
from reduce.trough_model import TroughModel

FloatArray = NDArray[np.float64]

VOLUME_TRIES = 400_000  # the share of the bounds' volume that is allowed, to a few parts in a thousand
COMPRESSED_K = 2e-5  # rms, what the bank's spectra may lose in each direction left out; the bank alone is so written
ENOUGH = 400.0  # effective draws
ROUNDS = 12
CENTRES = 60
PROPOSALS = 3000
FREEDOM = 5.0  # of Student's t about each centre
PRIOR_SHARE = 0.1
FLATTENED = 100.0  # effective draws among which centres and starts are chosen
STARTS = 32
WIDENED = 1.2  # of a maximum's curvature, whose neighbourhood is not quite Gaussian
LEAST_SHARE = 0.05  # of the highest maximum's, for every other
FORGOTTEN = 15.0  # ln L below the highest maximum


@dataclass(frozen=True, eq=False)
class CompressedBank:
    """Draws from the prior, and their spectra in few directions.

    Attributes
    ----------
    parameters : ndarray[draw, parameter]
    coordinates : ndarray[draw, direction]
        Along `directions`, K.
    directions : ndarray[direction, channel]
        Orthonormal.
    log_density : float
        ln of the prior's density, where it is not zero; the prior is uniform.
    """

    parameters: FloatArray
    coordinates: FloatArray
    directions: FloatArray
    log_density: float


@dataclass(frozen=True, eq=False)
class QuickPosterior:
    """Weighted draws.

    Attributes
    ----------
    parameters : ndarray[draw, parameter]
    weight : ndarray[draw]
        Sum to one.
    log_evidence : float
        ln of the mean of exp(-|R s - z|^2 / 2) over the prior.
    effective : float
        Effective number of draws, 1 / sum of squared weights.
    rounds : int
        Refinements made.
    """

    parameters: FloatArray
    weight: FloatArray
    log_evidence: float
    effective: float
    rounds: int

    @property
    def enough(self) -> bool:
        """Whether enough draws carry the weight."""
        return self.effective >= ENOUGH

    def mean(self) -> FloatArray:
        """Posterior means ndarray[parameter]."""
        return np.asarray(self.weight @ self.parameters)

    def covariance(self) -> FloatArray:
        """Posterior covariance ndarray[parameter, parameter]."""
        off = self.parameters - self.mean()
        return np.asarray((off * self.weight[:, None]).T @ off)

    def rank(self, truth: FloatArray) -> FloatArray:
        """Posterior probability ndarray[parameter] below `truth`: uniform over mocks if all is well."""
        return np.asarray(self.weight @ (self.parameters < truth))


def compressed_bank(shape: TroughModel, rng: np.random.Generator, size: int = 20_000) -> CompressedBank:
    """Draw a bank from the prior of a shape."""
    parameters = shape.draw_prior(rng, size)
    signal_k = shape.signal_k(parameters)
    triangle = np.linalg.qr(signal_k, mode="r")
    _, singular, directions = np.linalg.svd(np.asarray(triangle), full_matrices=False)
    kept = singular > COMPRESSED_K * np.sqrt(size)
    tries = rng.uniform(shape.lower, shape.upper, (VOLUME_TRIES, len(shape.lower)))
    volume = float(np.prod(shape.upper - shape.lower) * shape.allowed(tries).mean())
    return CompressedBank(parameters, signal_k @ directions[kept].T, directions[kept], -np.log(volume))


def quick_posterior(
    information: Information, shape: TroughModel, bank: CompressedBank, rng: np.random.Generator
) -> QuickPosterior:
    """Posterior of a shape's parameters.

    Parameters
    ----------
    information : Information
    shape : TroughModel
    bank : CompressedBank
        From `compressed_bank` of the same shape.
    rng : numpy.random.Generator

    Returns
    -------
    QuickPosterior
        `enough` says whether to believe it.
    """
    value = _likelihood_of_bank(information, bank)
    rounds = [_Round(bank.parameters, value - np.log(len(value)))]
    while len(rounds) <= ROUNDS and sum(each.effective for each in rounds) < ENOUGH:
        flat = _flattened(rounds[-1].log_weight)
        if len(rounds) == 1:
            starts = bank.parameters[rng.choice(len(flat), STARTS, p=flat)]
            mixture = _around_maxima(local_maxima(information, shape, starts))
        else:
            mixture = _around_draws(rounds[-1].parameters, flat, shape, rng)
        rounds.append(_proposed(information, shape, bank.log_density, mixture, rng))
    # Each round is unbiased by itself; together they count by the draws that they are worth.
    worth = np.array([each.effective for each in rounds])
    log_weight = np.concatenate(
        [each.log_weight + np.log(share) for each, share in zip(rounds, worth / worth.sum(), strict=True)]
    )
    total = float(logsumexp(log_weight))
    return QuickPosterior(
        np.concatenate([each.parameters for each in rounds]),
        np.exp(log_weight - total),
        total,
        _effective(log_weight),
        len(rounds) - 1,
    )


@dataclass(frozen=True, eq=False)
class _Round:
    """Draws ndarray[draw, parameter] and their unnormalised weights: the sum of them estimates the evidence."""

    parameters: FloatArray
    log_weight: FloatArray

    @property
    def effective(self) -> float:
        return _effective(self.log_weight)


def _likelihood_of_bank(information: Information, bank: CompressedBank) -> FloatArray:
    """ln L of the bank's draws, to what was lost by compression."""
    axes, triangle = np.linalg.qr(information.R @ bank.directions.T)
    z = axes.T @ information.z
    beyond = float(information.z @ information.z - z @ z)
    misfit = bank.coordinates @ triangle.T - z
    return np.asarray(-0.5 * (np.einsum("dr,dr->d", misfit, misfit) + max(beyond, 0.0)))


def _effective(log_weight: FloatArray) -> float:
    weight = np.exp(log_weight - log_weight.max())
    return float(weight.sum() ** 2 / (weight @ weight))


def _around_maxima(maxima: Maxima) -> Mixture:
    """Shares by the height of the maxima, flattened, and some for each: the heights say little of the volumes."""
    height = np.exp(0.5 * (maxima.log_likelihood - maxima.log_likelihood[0]))
    near = maxima.log_likelihood > maxima.log_likelihood[0] - FORGOTTEN
    share = np.where(near, height + LEAST_SHARE, 0.0)
    roots = WIDENED * np.linalg.cholesky(maxima.covariance)
    return placed_mixture(maxima.parameters[near], roots[near], share[near] / share[near].sum(), FREEDOM)


def _around_draws(parameters: FloatArray, weight: FloatArray, shape: TroughModel, rng: np.random.Generator) -> Mixture:
    """Centres among the draws, of one width: Silverman's for so many, of the flattened cloud's covariance."""
    dimension = parameters.shape[1]
    centres = parameters[rng.choice(len(weight), CENTRES, p=weight)]
    off = parameters - weight @ parameters
    width = (4.0 / (CENTRES * (dimension + 2.0))) ** (1.0 / (dimension + 4.0))
    floor = 1e-12 * np.diag(shape.upper - shape.lower) ** 2
    root = np.linalg.cholesky(width**2 * (off * weight[:, None]).T @ off + floor)
    roots = np.broadcast_to(root, (CENTRES, *root.shape))
    return placed_mixture(centres, roots, np.full(CENTRES, 1.0 / CENTRES), FREEDOM)


def _proposed(
    information: Information, shape: TroughModel, log_prior: float, mixture: Mixture, rng: np.random.Generator
) -> _Round:
    """Draws from the mixture and the prior together, weighted."""
    from_prior = shape.draw_prior(rng, int(PRIOR_SHARE * PROPOSALS))
    proposed = np.concatenate([mixture.draw(rng, PROPOSALS - len(from_prior)), from_prior])
    proposed = proposed[shape.allowed(proposed)]
    log_proposal = np.logaddexp(np.log(PRIOR_SHARE) + log_prior, np.log1p(-PRIOR_SHARE) + mixture.log_density(proposed))
    value = information.log_likelihood(shape.signal_k(proposed))
    return _Round(proposed, value + log_prior - log_proposal - np.log(PROPOSALS))


def _flattened(log_weight: FloatArray) -> FloatArray:
    """Weights to a power at which some hundred draws carry them, so that one lucky draw does not draw all to itself."""
    low, high = 0.0, 1.0
    if _effective(log_weight) < FLATTENED:
        for _ in range(30):
            middle = 0.5 * (low + high)
            low, high = (middle, high) if _effective(middle * log_weight) >= FLATTENED else (low, middle)
    power = low if _effective(log_weight) < FLATTENED else 1.0
    return np.asarray(np.exp(power * log_weight - logsumexp(power * log_weight)))
