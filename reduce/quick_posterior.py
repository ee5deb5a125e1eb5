"""The posterior of one mock in milliseconds: importance sampling from a bank of prior draws, refined where it is thin.

The bank is drawn once, its spectra are written in the few directions that troughs have, and each mock
costs one product of a matrix and a vector. Where too few draws carry the weight, proposals are drawn
around those that do (population Monte Carlo: Cappé et al. 2004, J. Comput. Graph. Stat. 13, 907), from the
whole mixture of a round and the prior together, so that the weights stay bounded (Owen and Zhou 2000,
J. Am. Stat. Assoc. 95, 135). `reduce.fast_posterior` moves draws instead; the two check each other.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln, logsumexp

from reduce.combine import Information
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
        parameters, log_weight = _refined(information, shape, bank.log_density, rounds[-1], rng)
        rounds.append(_Round(parameters, log_weight))
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
    return float(np.exp(2.0 * logsumexp(log_weight) - logsumexp(2.0 * log_weight)))


def _refined(
    information: Information,
    shape: TroughModel,
    log_prior: float,
    before: _Round,
    rng: np.random.Generator,
) -> tuple[FloatArray, FloatArray]:
    """A round of proposals around the draws that carry the weight.

    Weights are flattened first until a tenth as many draws as are wanted carry them, so that one
    lucky draw does not draw all proposals to itself.
    """
    parameters, log_weight = before.parameters, before.log_weight
    power = _flattening(log_weight)
    weight = np.exp(power * log_weight - logsumexp(power * log_weight))
    count, dimension = PROPOSALS, parameters.shape[1]
    centres = parameters[rng.choice(len(weight), CENTRES, p=weight)]
    mean = weight @ parameters
    off = parameters - mean
    # Silverman's width for so many centres, of the flattened cloud's covariance.
    width = (4.0 / (CENTRES * (dimension + 2.0))) ** (1.0 / (dimension + 4.0))
    spread = (off * weight[:, None]).T @ off
    floor = 1e-12 * np.diag(shape.upper - shape.lower) ** 2
    root = np.linalg.cholesky(width**2 * spread + floor)
    from_prior = shape.draw_prior(rng, int(PRIOR_SHARE * count))
    normal = rng.standard_normal((count - len(from_prior), dimension))
    scale = np.sqrt(FREEDOM / rng.chisquare(FREEDOM, len(normal)))[:, None]
    proposed = centres[rng.integers(CENTRES, size=len(normal))] + scale * normal @ root.T
    proposed = np.concatenate([proposed, from_prior])
    allowed = shape.allowed(proposed)
    proposed = proposed[allowed]
    log_mixture = _log_mixture(proposed, centres, root)
    share = np.log(PRIOR_SHARE), np.log1p(-PRIOR_SHARE)
    log_proposal = np.logaddexp(share[0] + log_prior, share[1] + log_mixture)
    value = information.log_likelihood(shape.signal_k(proposed))
    return proposed, value + log_prior - log_proposal - np.log(count)


def _flattening(log_weight: FloatArray) -> float:
    """Power of the weights at which a tenth of the draws wanted carry them."""
    low, high = 0.0, 1.0
    if _effective(log_weight) >= 0.1 * ENOUGH:
        return 1.0
    for _ in range(30):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if _effective(middle * log_weight) >= 0.1 * ENOUGH else (low, middle)
    return low


def _log_mixture(at: FloatArray, centres: FloatArray, root: FloatArray) -> FloatArray:
    """ln density ndarray[draw] of Student's t of one width about each centre, averaged."""
    dimension = at.shape[1]
    inverse = np.linalg.inv(root)
    white, whites = at @ inverse.T, centres @ inverse.T
    distance = (white**2).sum(axis=1)[:, None] + (whites**2).sum(axis=1) - 2.0 * white @ whites.T
    each = -0.5 * (FREEDOM + dimension) * np.log1p(np.maximum(distance, 0.0) / FREEDOM)
    constant = gammaln(0.5 * (FREEDOM + dimension)) - gammaln(0.5 * FREEDOM) - 0.5 * dimension * np.log(FREEDOM * np.pi)
    return np.asarray(logsumexp(each, axis=1) - np.log(len(centres)) + constant - np.log(np.abs(np.diag(root))).sum())
