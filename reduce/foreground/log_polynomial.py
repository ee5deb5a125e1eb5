"""Foreground family: ln T a polynomial in ln f, the power law with its curvature and what lies beyond.

ln T = sum_k a_k P_k(x), P_k Legendre polynomials and x = ln f scaled so that the band is -1 to 1. Any
polynomial of the same order in ln f has these coefficients; orthogonal ones keep order 9 and beyond
conditioned. One term is a constant, two a power law, three a power law with curvature.
The family is not linear. It is fitted to T, whose noise is Gaussian, not to ln T once: a fit of ln T
is wrong by about the square of the misfit over 2 T.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.polynomial import legendre
from numpy.typing import NDArray

from reduce.foreground.protocol import check_band, outside_band, weighted_least_squares


@dataclass(frozen=True)
class LogPolynomial:
    """ln T = sum_k a_k P_k(x), x the scaled ln f.

    Parameters
    ----------
    terms : int
        Number of coefficients, the order plus one.
    low_mhz, high_mhz : float
        Band that is scaled to -1 to 1, MHz.

    Raises
    ------
    InputError
        If there is no term or no band.
    """

    terms: int
    low_mhz: float
    high_mhz: float

    def __post_init__(self) -> None:
        check_band("log polynomial", self.terms, self.low_mhz, self.high_mhz)

    @property
    def linear(self) -> bool:
        """False: T is the exponential of what is linear."""
        return False

    def problems(self, frequency_mhz: NDArray[np.float64], temperature_k: NDArray[np.float64]) -> list[str]:
        """Lines for channels outside the band and for temperatures that have no logarithm."""
        found = outside_band(frequency_mhz, self.low_mhz, self.high_mhz)
        bad = ~(temperature_k > 0)
        if bad.any():
            found.append(
                f"{bad.sum()} temperatures not positive, first {temperature_k[bad][0]} K at "
                f"{frequency_mhz[bad][0]} MHz; a log polynomial allows only positive ones"
            )
        return found

    def _polynomials(self, frequency_mhz: NDArray[np.float64]) -> NDArray[np.float64]:
        low, high = np.log(self.low_mhz), np.log(self.high_mhz)
        x = (2.0 * np.log(np.asarray(frequency_mhz, float)) - low - high) / (high - low)
        return np.asarray(legendre.legvander(x, self.terms - 1))

    def start(
        self,
        frequency_mhz: NDArray[np.float64],
        temperature_k: NDArray[np.float64],
        noise_variance_k2: NDArray[np.float64],
    ) -> NDArray[np.float64]:
        """Weighted fit of ln T, where an error dT is dT/T.

        Parameters
        ----------
        frequency_mhz : ndarray[channel]
            Frequency, MHz.
        temperature_k : ndarray[channel]
            Antenna temperature, K; positive.
        noise_variance_k2 : ndarray[channel]
            Noise variance, K^2.

        Returns
        -------
        ndarray[term]
            Coefficients.
        """
        weight = temperature_k / np.sqrt(noise_variance_k2)
        return weighted_least_squares(self._polynomials(frequency_mhz), np.log(temperature_k), weight)

    def evaluate(self, frequency_mhz: NDArray[np.float64], coefficients: NDArray[np.float64]) -> NDArray[np.float64]:
        """Temperature, K: ndarray[channel], at coefficients ndarray[term]."""
        return np.asarray(np.exp(self._polynomials(frequency_mhz) @ coefficients))

    def basis(self, frequency_mhz: NDArray[np.float64], coefficients: NDArray[np.float64]) -> NDArray[np.float64]:
        """Tangent T P_k, K: ndarray[channel, term]."""
        polynomials = self._polynomials(frequency_mhz)
        return np.asarray(np.exp(polynomials @ coefficients)[:, None] * polynomials)

    def log_derivatives(self, coefficients: NDArray[np.float64], reference_mhz: float) -> NDArray[np.float64]:
        """The same polynomial in powers of ln(f/f0), for reading.

        Parameters
        ----------
        coefficients : ndarray[term]
            Coefficients of this family.
        reference_mhz : float
            Reference frequency f0, MHz.

        Returns
        -------
        ndarray[term]
            c of ln T = sum_k c_k ln(f/f0)^k: ln of the temperature in K at f0, minus the spectral
            index, minus the curvature, and so on.
        """
        domain = np.log(np.array([self.low_mhz, self.high_mhz]) / reference_mhz)
        powers = legendre.Legendre(coefficients, domain=domain).convert(kind=np.polynomial.Polynomial).coef
        return np.pad(powers, (0, self.terms - powers.size))
