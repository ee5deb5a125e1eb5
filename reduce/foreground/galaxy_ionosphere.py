"""Foreground family: a Galaxy of curved spectrum behind an ionosphere that absorbs and emits, linear in its terms.

T = (f/f0)^-beta sum_k b_k ln^k(f/f0) + b_a (f/f0)^(-beta - 2) + b_e (f/f0)^-2: the expansion to first
order that Bowman et al. 2018 (Nature 555, 67) fit and Hills et al. 2018 (Nature 564, E32) discuss; both
point out that its coefficients, left free, need not be physical. Inside, the same span is
written in columns that are orthonormal over the band, each over (f/f0)^-beta, so that
nothing is lost to rounding; `expansion` turns their coefficients into the b.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.foreground.protocol import check_band, outside_band, weighted_least_squares
from sims.errors import raise_if_any

FloatArray = NDArray[np.float64]
IONOSPHERE_TERMS = 2
_GRID_POINTS = 128


@dataclass(frozen=True)
class GalaxyIonosphere:
    """The expansion, of a number of terms.

    Parameters
    ----------
    terms : int
        Number of coefficients, from 3: all but the last two belong to the Galaxy.
    index : float
        beta, the spectral index of the Galaxy (T ~ f^-beta).
    low_mhz, high_mhz : float
        Band over which the columns are orthonormal, MHz; f0 is its geometric middle.

    Raises
    ------
    InputError
        If there are too few terms, no band, or no index.
    """

    terms: int
    index: float
    low_mhz: float
    high_mhz: float

    def __post_init__(self) -> None:
        check_band("galaxy and ionosphere", self.terms, self.low_mhz, self.high_mhz)
        problems = []
        if self.terms <= IONOSPHERE_TERMS:
            problems.append(
                f"galaxy and ionosphere: got terms = {self.terms}; two belong to the ionosphere: 3 at least"
            )
        if not np.isfinite(self.index):
            problems.append(f"galaxy and ionosphere: got index = {self.index}; allowed is any finite number")
        raise_if_any(problems)

    @property
    def linear(self) -> bool:
        """True."""
        return True

    @property
    def reference_mhz(self) -> float:
        """f0, MHz."""
        return float(np.sqrt(self.low_mhz * self.high_mhz))

    def problems(self, frequency_mhz: FloatArray, temperature_k: FloatArray) -> list[str]:
        """Lines for channels outside the band."""
        return outside_band(frequency_mhz, self.low_mhz, self.high_mhz)

    def _over_galaxy(self, frequency_mhz: FloatArray) -> FloatArray:
        """Columns of the expansion over (f/f0)^-beta: ndarray[channel, term]."""
        log_ratio = np.log(np.asarray(frequency_mhz, dtype=float) / self.reference_mhz)
        galaxy = log_ratio[:, None] ** np.arange(self.terms - IONOSPHERE_TERMS)
        absorbed, emitted = np.exp(-2.0 * log_ratio), np.exp((self.index - 2.0) * log_ratio)
        return np.column_stack([galaxy, absorbed, emitted])

    def _triangle(self) -> FloatArray:
        """What makes the columns orthonormal over the band, evenly in ln f: ndarray[term, term]."""
        grid_mhz = np.exp(np.linspace(np.log(self.low_mhz), np.log(self.high_mhz), _GRID_POINTS))
        columns = self._over_galaxy(grid_mhz) / np.sqrt(_GRID_POINTS)
        return np.asarray(np.linalg.qr(columns, mode="r"))

    def basis(self, frequency_mhz: FloatArray, coefficients: FloatArray) -> FloatArray:
        """Columns of the family, ndarray[channel, term]; the coefficients do not matter."""
        slope = (np.asarray(frequency_mhz, dtype=float) / self.reference_mhz) ** -self.index
        columns = np.linalg.solve(self._triangle().T, self._over_galaxy(frequency_mhz).T).T
        return np.asarray(slope[:, None] * columns)

    def evaluate(self, frequency_mhz: FloatArray, coefficients: FloatArray) -> FloatArray:
        """Temperature, K: ndarray[channel], at coefficients ndarray[term] in K."""
        return np.asarray(self.basis(frequency_mhz, coefficients) @ coefficients)

    def start(self, frequency_mhz: FloatArray, temperature_k: FloatArray, noise_variance_k2: FloatArray) -> FloatArray:
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
        columns = self.basis(frequency_mhz, np.zeros(self.terms))
        return weighted_least_squares(columns, temperature_k, 1.0 / np.sqrt(noise_variance_k2))

    def expansion(self, coefficients: FloatArray) -> FloatArray:
        """Coefficients b of the expansion, K, from ndarray[term] of this family: those of the ionosphere last."""
        return np.asarray(np.linalg.solve(self._triangle(), coefficients))
