"""Foreground family: a power law times a polynomial in frequency, linear in its coefficients.

T = sum_k a_k (f/f0)^(-beta0 + k), k = 0 ... terms - 1. Inside, the same span is written
T = (f/f0)^-beta0 sum_k c_k P_k(x), P_k Legendre polynomials and x = f scaled so that the band is -1 to 1:
powers of f alone over one and a half octaves lose all digits of a double at some 15 terms, these do not. `powers`
turns the coefficients c into a.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.polynomial import legendre
from numpy.typing import NDArray

from reduce.foreground.protocol import check_band, outside_band, weighted_least_squares
from sims.errors import raise_if_any


@dataclass(frozen=True)
class PowerSeries:
    """T = (f/f0)^-beta0 sum_k c_k P_k(x), x the scaled f.

    Parameters
    ----------
    terms : int
        Number of coefficients.
    index : float
        beta0, the spectral index of the first term (T ~ f^-beta0); a pure number.
    reference_mhz : float
        Reference frequency f0, MHz.
    low_mhz, high_mhz : float
        Band that is scaled to -1 to 1, MHz.

    Raises
    ------
    InputError
        If there is no term, no band, or the index or reference makes no power law.
    """

    terms: int
    index: float
    reference_mhz: float
    low_mhz: float
    high_mhz: float

    def __post_init__(self) -> None:
        check_band("power series", self.terms, self.low_mhz, self.high_mhz)
        problems = []
        if not np.isfinite(self.index):
            problems.append(f"power series: got index = {self.index}; allowed is any finite number")
        if not 0 < self.reference_mhz < np.inf:
            problems.append(f"power series: got reference_mhz = {self.reference_mhz}; allowed is positive")
        raise_if_any(problems)

    @property
    def linear(self) -> bool:
        """True."""
        return True

    def problems(self, frequency_mhz: NDArray[np.float64], temperature_k: NDArray[np.float64]) -> list[str]:
        """Lines for channels outside the band."""
        return outside_band(frequency_mhz, self.low_mhz, self.high_mhz)

    def _columns(self, frequency_mhz: NDArray[np.float64]) -> NDArray[np.float64]:
        frequency = np.asarray(frequency_mhz, float)
        x = (2.0 * frequency - self.low_mhz - self.high_mhz) / (self.high_mhz - self.low_mhz)
        slope = (frequency / self.reference_mhz) ** -self.index
        return np.asarray(slope[:, None] * legendre.legvander(x, self.terms - 1))

    def start(
        self,
        frequency_mhz: NDArray[np.float64],
        temperature_k: NDArray[np.float64],
        noise_variance_k2: NDArray[np.float64],
    ) -> NDArray[np.float64]:
        """Weighted fit under the noise variance alone.

        Parameters
        ----------
        frequency_mhz : ndarray[channel]
            Frequency, MHz.
        temperature_k : ndarray[channel]
            Antenna temperature, K.
        noise_variance_k2 : ndarray[channel]
            Noise variance, K^2.

        Returns
        -------
        ndarray[term]
            Coefficients, K.
        """
        return weighted_least_squares(self._columns(frequency_mhz), temperature_k, 1.0 / np.sqrt(noise_variance_k2))

    def evaluate(self, frequency_mhz: NDArray[np.float64], coefficients: NDArray[np.float64]) -> NDArray[np.float64]:
        """Temperature, K: ndarray[channel], at coefficients ndarray[term] in K."""
        return np.asarray(self._columns(frequency_mhz) @ coefficients)

    def basis(self, frequency_mhz: NDArray[np.float64], coefficients: NDArray[np.float64]) -> NDArray[np.float64]:
        """Columns of the family, ndarray[channel, term]; the coefficients do not matter."""
        return self._columns(frequency_mhz)

    def powers(self, coefficients: NDArray[np.float64]) -> NDArray[np.float64]:
        """Coefficients a of T = sum_k a_k (f/f0)^(-beta0 + k), K: ndarray[term], from ndarray[term] of this family.

        For reading: with many terms they are large, of alternating sign, and lose digits.
        """
        domain = np.array([self.low_mhz, self.high_mhz]) / self.reference_mhz
        powers = legendre.Legendre(coefficients, domain=domain).convert(kind=np.polynomial.Polynomial).coef
        return np.pad(powers, (0, self.terms - powers.size))
