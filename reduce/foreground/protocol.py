"""What a smooth foreground family must offer to be subtracted, projected out and handed on.

To add a family, write one file here with a frozen dataclass that has the members of `Family`: its
number of terms, whether it is linear in its coefficients, what it cannot accept, a start, its value
and its tangent. It needs to inherit nothing. `reduce.subtract` does all fitting: it calls `start` for
each bin, then iterates with `evaluate` and `basis` on all bins together under the full covariance. A
family is unconstrained: what has a prior belongs among the systematic modes of the covariance.
The scaling of its coordinates is fixed when the family is made (a band in MHz), not by the data, so
that coefficients of different bins and mocks mean the same. `basis` must be the exact derivative of
`evaluate`, and should be well conditioned (orthogonal polynomials): both are tested for every family.
"""

from __future__ import annotations

from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from sims.errors import raise_if_any


class Family(Protocol):
    """A foreground family T(f; a) with unconstrained coefficients a."""

    @property
    def terms(self) -> int:
        """Number of coefficients for each bin."""
        ...

    @property
    def linear(self) -> bool:
        """True if T is linear in its coefficients, so that `basis` does not depend on them."""
        ...

    def problems(self, frequency_mhz: NDArray[np.float64], temperature_k: NDArray[np.float64]) -> list[str]:
        """What of the data, ndarray[channel] each, this family cannot accept; one line each, empty if nothing."""
        ...

    def start(
        self,
        frequency_mhz: NDArray[np.float64],
        temperature_k: NDArray[np.float64],
        noise_variance_k2: NDArray[np.float64],
    ) -> NDArray[np.float64]:
        """Coefficients, ndarray[term], near the best fit to ndarray[channel] data; the place to iterate from."""
        ...

    def evaluate(self, frequency_mhz: NDArray[np.float64], coefficients: NDArray[np.float64]) -> NDArray[np.float64]:
        """Temperature, K: ndarray[channel], at coefficients ndarray[term]."""
        ...

    def basis(self, frequency_mhz: NDArray[np.float64], coefficients: NDArray[np.float64]) -> NDArray[np.float64]:
        """Tangent dT/da at the coefficients: ndarray[channel, term], K for each unit of a coefficient."""
        ...


def check_band(name: str, terms: int, low_mhz: float, high_mhz: float) -> None:
    """Raise `InputError` unless a family has at least one term and a band 0 < low < high in MHz."""
    problems = []
    if isinstance(terms, bool) or not isinstance(terms, int) or terms < 1:
        problems.append(f"{name}: got terms = {terms!r}; allowed is a whole number from 1")
    if not (0 < low_mhz < high_mhz < np.inf):
        problems.append(f"{name}: got a band {low_mhz} to {high_mhz} MHz; allowed is 0 < low < high")
    raise_if_any(problems)


def outside_band(frequency_mhz: NDArray[np.float64], low_mhz: float, high_mhz: float) -> list[str]:
    """Lines for channels outside the band a family is scaled to, where its polynomials grow without bound."""
    slack_mhz = 1e-9 * high_mhz  # band edges computed in two ways differ by rounding
    outside = ~((frequency_mhz >= low_mhz - slack_mhz) & (frequency_mhz <= high_mhz + slack_mhz))
    if not outside.any():
        return []
    first_mhz = frequency_mhz[outside][0]
    return [f"{outside.sum()} channels outside {low_mhz} to {high_mhz} MHz, the band allowed, first {first_mhz} MHz"]


def weighted_least_squares(
    basis: NDArray[np.float64], values: NDArray[np.float64], weight: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Coefficients that minimise the sum of (weight (values - basis a))^2, by singular values.

    Parameters
    ----------
    basis : ndarray[channel, term]
        Columns of the model.
    values : ndarray[channel]
        Data, in the units of the model.
    weight : ndarray[channel]
        Inverse standard deviations, in the inverse of those units.

    Returns
    -------
    ndarray[term]
        Coefficients.
    """
    weighted = basis * weight[:, None]
    length = np.sqrt((weighted**2).sum(axis=0))
    length = np.where(length > 0, length, 1.0)  # a term that acts on no channel keeps coefficient zero
    scaled, *_ = np.linalg.lstsq(weighted / length, values * weight, rcond=None)
    return np.asarray(scaled / length)
