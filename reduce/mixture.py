"""A density that follows a cloud of draws: Student's t in a few places, fitted by expectation and maximisation.

Made from the annealed draws of `fast_posterior`, it proposes for the sampler of `turning_points`: independent of where
a walker stands, so also from one maximum of a posterior to another. A sampler corrects for what it misses, so it need
not be exact; its tails are heavy so that no place is proposed far too seldom. `quick_posterior` places the centres
itself, without bounds.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln

FloatArray = NDArray[np.float64]

COMPONENTS = 8
ITERATIONS = 30
FREEDOM = 8.0  # of Student's t
LEAST = 1e-6  # of the cloud's variance: no component is thinner
EDGE = 1e-9  # of a range: nearer to a bound than that is that near


@dataclass(frozen=True, eq=False)
class Mixture:
    """Student's t about centres, in numbers stretched so that bounds lie at infinity.

    Attributes
    ----------
    lower, upper : ndarray[parameter]
        Bounds; infinite where there are none.
    centres : ndarray[component, parameter]
    roots : ndarray[component, parameter, parameter]
        Cholesky factors of the scale matrices.
    inverses : ndarray[component, parameter, parameter]
        Their inverses.
    share : ndarray[component]
        Sum to one.
    freedom : float
        Of Student's t.
    """

    lower: FloatArray
    upper: FloatArray
    centres: FloatArray
    roots: FloatArray
    inverses: FloatArray
    share: FloatArray
    freedom: float = FREEDOM

    def draw(self, rng: np.random.Generator | np.random.RandomState, size: int) -> FloatArray:
        """Independent draws ndarray[size, parameter], within the bounds."""
        which = rng.choice(len(self.share), size=size, p=self.share)
        normal = rng.standard_normal((size, self.centres.shape[1]))
        scale = np.sqrt(self.freedom / rng.chisquare(self.freedom, size=size))[:, None]
        offset = np.einsum("dij,dj->di", self.roots[which], normal)
        return _squeezed(self.centres[which] + scale * offset, self.lower, self.upper)

    def log_density(self, at: FloatArray) -> FloatArray:
        """ln density ndarray[draw] at ndarray[draw, parameter] within the bounds, per unit of the parameters."""
        stretched, log_slope = _stretched(at, self.lower, self.upper)
        return _log_sum(self._each(stretched) + np.log(self.share)) + log_slope

    def _each(self, stretched: FloatArray) -> FloatArray:
        """ln density ndarray[draw, component] of each component."""
        dimension = stretched.shape[1]
        distance = self._distance(stretched)
        constant = gammaln(0.5 * (self.freedom + dimension)) - gammaln(0.5 * self.freedom)
        constant -= 0.5 * dimension * np.log(self.freedom * np.pi)
        volume = np.log(np.diagonal(self.roots, axis1=1, axis2=2)).sum(axis=1)
        return np.asarray(constant - volume - 0.5 * (self.freedom + dimension) * np.log1p(distance / self.freedom))

    def _distance(self, stretched: FloatArray) -> FloatArray:
        """Squared distance ndarray[draw, component] from each centre, in its deviations."""
        white = (stretched[None] - self.centres[:, None]) @ np.swapaxes(self.inverses, 1, 2)
        return np.asarray(np.einsum("kdi,kdi->dk", white, white))


def placed_mixture(centres: FloatArray, roots: FloatArray, share: FloatArray, freedom: float) -> Mixture:
    """Student's t of given places, Cholesky factors, shares and freedom, without bounds."""
    endless = np.full(centres.shape[1], np.inf)
    return Mixture(-endless, endless, centres, roots, _inverse(roots), share, freedom)


def fitted_mixture(draws: FloatArray, lower: FloatArray, upper: FloatArray, rng: np.random.Generator) -> Mixture:
    """Fit to a cloud.

    Parameters
    ----------
    draws : ndarray[draw, parameter]
        Within the bounds, of equal weight; many times as many as a component has numbers.
    lower, upper : ndarray[parameter]
        Bounds; infinite where there are none.
    rng : numpy.random.Generator
        Chooses where components begin.

    Returns
    -------
    Mixture
        Expectation and maximisation for Student's t of fixed freedom (Peel and McLachlan 2000, Stat. Comput. 10,
        339), after `ITERATIONS` rounds.
    """
    cloud, _ = _stretched(draws, lower, upper)
    size, dimension = cloud.shape
    count = max(1, min(COMPONENTS, size // (20 * dimension)))
    spread = np.atleast_2d(np.cov(cloud.T)) + LEAST * np.eye(dimension)
    floor = LEAST * np.diag(np.diag(spread))
    root = _cholesky(np.broadcast_to(spread, (count, dimension, dimension)))
    start = cloud[rng.choice(size, count, replace=False)]
    found = Mixture(lower, upper, start, root, _inverse(root), np.full(count, 1.0 / count))
    for _ in range(ITERATIONS):
        log_each = found._each(cloud) + np.log(found.share)
        belonging = np.exp(log_each - _log_sum(log_each)[:, None])
        pull = belonging * (FREEDOM + dimension) / (FREEDOM + found._distance(cloud))
        total = belonging.sum(axis=0) + 1e-9
        centres = (pull / (pull.sum(axis=0) + 1e-9)).T @ cloud
        off = cloud[None] - centres[:, None]
        scatter = np.swapaxes(off * pull.T[:, :, None], 1, 2) @ off / total[:, None, None] + floor
        root = _cholesky(scatter)
        found = Mixture(lower, upper, centres, root, _inverse(root), total / total.sum())
    return found


def _cholesky(matrices: FloatArray) -> FloatArray:
    """Lower triangular roots of stacked matrices."""
    return np.asarray(np.linalg.cholesky(matrices), float)


def _inverse(matrices: FloatArray) -> FloatArray:
    return np.asarray(np.linalg.inv(matrices), float)


def _log_sum(log_values: FloatArray) -> FloatArray:
    """ln of the sum over the last axis of ndarray[draw, component]; scipy's costs more than all the rest here."""
    largest = log_values.max(axis=1)
    return np.asarray(largest + np.log(np.exp(log_values - largest[:, None]).sum(axis=1)))


def _stretched(at: FloatArray, lower: FloatArray, upper: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Logit of each bounded number, others as they are; and ln of the product of slopes, ndarray[draw]."""
    bounded = np.isfinite(lower) & np.isfinite(upper)
    result, log_slope = at.copy(), np.zeros(len(at))
    width = (upper - lower)[bounded]
    part = np.clip((at[:, bounded] - lower[bounded]) / width, EDGE, 1.0 - EDGE)
    result[:, bounded] = np.log(part) - np.log1p(-part)
    log_slope -= (np.log(part) + np.log1p(-part) + np.log(width)).sum(axis=1)
    return result, log_slope


def _squeezed(stretched: FloatArray, lower: FloatArray, upper: FloatArray) -> FloatArray:
    bounded = np.isfinite(lower) & np.isfinite(upper)
    result = stretched.copy()
    part = 1.0 / (1.0 + np.exp(-np.clip(stretched[:, bounded], -40.0, 40.0)))
    result[:, bounded] = lower[bounded] + (upper - lower)[bounded] * part
    return result
