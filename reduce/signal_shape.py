"""What every shape of a signal must tell, so that posteriors know no shape by name; and what shapes share.

A shape has named parameters with a prior, a spectrum for each set of them, and turning points where it has any.
`reduce.trough_model` and `reduce.shapes` hold shapes; `fast_posterior`, `modes`, `forecast` and `turning_points`
take any of them.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from typing import ClassVar, Protocol

import numpy as np
from numpy.typing import NDArray

from reduce.combine import Information
from sims.errors import InputError

FloatArray = NDArray[np.float64]

PRIOR_TRIES = 1000
POINTS = ("B", "C", "D")


class SignalShape(Protocol):
    """A signal common to the sky, by its parameters.

    Attributes
    ----------
    names, units : tuple of str
        Of each parameter; a pure number has the unit "".
    lower, upper : ndarray[parameter]
        Bounds, in the units of the parameters. Infinite ones are allowed where `draw_prior` does not need them.
    """

    @property
    def names(self) -> tuple[str, ...]: ...

    @property
    def units(self) -> tuple[str, ...]: ...

    @property
    def lower(self) -> FloatArray: ...

    @property
    def upper(self) -> FloatArray: ...

    def signal_k(self, parameters: FloatArray) -> FloatArray:
        """Channel means ndarray[..., channel], K, of ndarray[..., parameter]; NaN where the shape is not defined."""

    def allowed(self, parameters: FloatArray) -> NDArray[np.bool_]:
        """Where the prior is not zero, ndarray[...]; the signal is finite there."""

    def draw_prior(self, rng: np.random.Generator, size: int) -> FloatArray:
        """Independent draws ndarray[size, parameter]."""

    def log_prior(self, parameters: FloatArray) -> FloatArray:
        """ln of the prior's density up to a constant, ndarray[...]; 0 where a uniform prior is not zero, else -inf."""

    def log_probability(self, parameters: FloatArray, information: Information) -> FloatArray:
        """`log_prior` plus ln L, ndarray[...]."""

    def turning_points(self, parameters: FloatArray) -> FloatArray:
        """Frequency, MHz, and temperature, mK, of B, C and D: ndarray[..., 3, 2]; NaN for what the shape has not."""


class UniformShape(ABC):
    """Base of shapes whose prior is uniform within bounds, where `allowed`."""

    title: ClassVar[str] = "signal"
    rule: ClassVar[str] = "are allowed"
    lower: FloatArray
    upper: FloatArray

    @abstractmethod
    def signal_k(self, parameters: FloatArray) -> FloatArray:
        """As `SignalShape`."""

    def allowed(self, parameters: FloatArray) -> NDArray[np.bool_]:
        """Where the prior is not zero: inside the bounds."""
        return np.asarray(np.all((parameters >= self.lower) & (parameters <= self.upper), axis=-1))

    def draw_prior(self, rng: np.random.Generator, size: int) -> FloatArray:
        """Independent draws ndarray[size, parameter] from the prior.

        Raises
        ------
        InputError
            If the bounds leave next to nothing that is allowed.
        """
        kept: list[FloatArray] = []
        found = 0
        for _ in range(PRIOR_TRIES):
            tries = rng.uniform(self.lower, self.upper, (size, len(self.lower)))
            kept.append(tries[self.allowed(tries)])
            found += len(kept[-1])
            if found >= size:
                return np.concatenate(kept)[:size]
        raise InputError(
            f"{self.title}: only {found} of {PRIOR_TRIES * size} draws within the bounds {self.rule}; widen the bounds"
        )

    def log_prior(self, parameters: FloatArray) -> FloatArray:
        """0 where allowed, else -inf: ndarray[...]."""
        return np.where(self.allowed(parameters), 0.0, -np.inf)

    def log_probability(self, parameters: FloatArray, information: Information) -> FloatArray:
        """Log posterior ndarray[...] up to a constant: the likelihood where the prior allows, else -inf."""
        return log_likelihood_where_allowed(self, parameters, information)


class Allowing(Protocol):
    """The part of a shape that a likelihood needs."""

    def signal_k(self, parameters: FloatArray) -> FloatArray: ...

    def allowed(self, parameters: FloatArray) -> NDArray[np.bool_]: ...


def log_likelihood_where_allowed(shape: Allowing, parameters: FloatArray, information: Information) -> FloatArray:
    """ln L ndarray[...] as `Information.log_likelihood`; -inf, and no spectrum made, where the prior is zero."""
    result = np.full(parameters.shape[:-1], -np.inf)
    allowed = shape.allowed(parameters)
    if allowed.any():
        result[allowed] = information.log_likelihood(shape.signal_k(parameters[allowed]))
    return result


def quadrature_mhz(frequency_mhz: FloatArray, width_mhz: FloatArray) -> FloatArray:
    """Two Gauss-Legendre points of each channel, ndarray[channel, 2], MHz, of equal weight; exact for cubics."""
    return np.asarray(frequency_mhz[:, None] + width_mhz[:, None] / np.sqrt(12.0) * np.array([-1.0, 1.0]))


def channel_means(at_points: FloatArray) -> FloatArray:
    """Means ndarray[..., channel] of values ndarray[..., 2 channel] at the points of `quadrature_mhz`, in C order."""
    pairs = at_points.reshape(*at_points.shape[:-1], -1, 2)
    return np.asarray(0.5 * (pairs[..., 0] + pairs[..., 1]))


def widths(shape: SignalShape, draws: FloatArray) -> FloatArray:
    """A size for each parameter, ndarray[parameter]: the width of its bounds, or the spread of `draws` without any."""
    width = shape.upper - shape.lower
    return np.where(np.isfinite(width), width, np.sqrt(12.0) * draws.std(axis=0))
