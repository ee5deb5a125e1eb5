"""Foreground family: maximally smooth functions, no derivative of which changes sign, from the second up.

Sathyanarayana Rao et al. (2015, ApJ 810, 3; 2017, ApJ 840, 33) let polynomials of any order describe a foreground,
held to have no zero crossing in any derivative from the second up, over the band: a trough has them, a power law has
none. Derivatives are taken with ln f, of T or, as they do, of ln T (`of_logarithm`).

Of T: convex for each pattern of signs, and every sum of power laws of positive weight is a member, its signs
alternating, however many there are. Their series in ln f converge as those of an exponential do: 20 terms carry
(f/f0)^-2.5 over 1.6 octaves to 2e-11. The derivatives of such a sky are large, though, and a trough of a hundred
millikelvin bends them far before one changes sign. `logarithmic = False` takes derivatives with f itself, a wider
class still (it has every mixture of exponentials of f), that needs some 50 terms.

Of ln T: a power law lies on the edge of every constraint, and more of a trough is left. What is linear is ln T, so
each step of an iterated fit is convex. The derivative of order k is (-1)^k times the k-th cumulant of the index in
the mixture of power laws; its sign hangs on the mixture. A dominant one with a little of flatter ones has all
positive, which is the default; a sum of power laws need be no member of any pattern.

The constraints are exact, without a grid. The derivative of order n - 1 is a constant. Below it each derivative is
monotone, because the one above keeps its sign; so it keeps its own sign over the band if it has it at the end
where it is smallest. Functions with a derivative of order k of one sign and all others zero at those ends
(Abel-Goncarov polynomials) span all members with coefficients that are not negative. In the Bernstein basis
they come from sums of positive numbers alone, right to the last digits.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import lgamma

import numpy as np
from numpy.typing import NDArray
from scipy.special import comb

from reduce.foreground.convex import ConeLeastSquares
from reduce.foreground.protocol import check_band, outside_band
from sims.errors import raise_if_any

FloatArray = NDArray[np.float64]

FREE_TERMS = 2  # level and slope have no sign to keep
MOST_TERMS = 60  # binomials beyond it need more digits than a double has


def _bernstein(place: FloatArray, degree: int) -> FloatArray:
    """Bernstein polynomials of a degree at places 0 to 1: ndarray[place, degree + 1]."""
    order = np.arange(degree + 1)
    column = place[:, None]
    return np.asarray(comb(degree, order) * column**order * (1.0 - column) ** (degree - order))


def _integrated(coefficients: FloatArray, from_low: bool) -> FloatArray:
    """Bernstein coefficients of the integral from the low end up, or from a place up to the high end."""
    if from_low:
        return np.append(0.0, np.cumsum(coefficients))
    return np.append(np.cumsum(coefficients[::-1])[::-1], 0.0)


@dataclass(frozen=True)
class MaximallySmooth:
    """T or ln T = a_0 + a_1 x + sum_k a_k p_k(x), a_k >= 0 from k = 2, x the scaled ln f (or f), p_k at most 1 in size.

    Its coefficients are not free: `reduce.foreground.smooth_fit` fits it; `reduce.subtract` would leave its
    constraints out.

    Parameters
    ----------
    terms : int
        Number of coefficients, from 3 to 60.
    low_mhz, high_mhz : float
        Band over which no derivative changes sign, MHz; scaled to -1 to 1.
    signs : tuple of int or None
        Signs, +1 or -1, of the derivatives of order 2 to terms - 1. None is, of T, those of a falling power law, +1
        for even orders and -1 for odd; of ln T, +1 for all.
    logarithmic : bool
        True if derivatives are taken with ln f, False if with f.
    of_logarithm : bool
        True if they are those of ln T, False if of T.

    Raises
    ------
    InputError
        If the number of terms, the band or the signs are not allowed.
    """

    terms: int
    low_mhz: float
    high_mhz: float
    signs: tuple[int, ...] | None = None
    logarithmic: bool = True
    of_logarithm: bool = False

    def __post_init__(self) -> None:
        name = "maximally smooth"
        check_band(name, self.terms, self.low_mhz, self.high_mhz)
        problems = []
        if not FREE_TERMS < self.terms <= MOST_TERMS:
            problems.append(f"{name}: got terms = {self.terms}; allowed are {FREE_TERMS + 1} to {MOST_TERMS}")
        if self.signs is not None:
            if len(self.signs) != self.terms - FREE_TERMS:
                problems.append(
                    f"{name}: got {len(self.signs)} signs; allowed is one for each order from 2, "
                    f"{self.terms - FREE_TERMS} for {self.terms} terms"
                )
            if any(sign not in (-1, 1) for sign in self.signs):
                problems.append(f"{name}: got signs {self.signs}; allowed are 1 and -1")
        raise_if_any(problems)

    @property
    def linear(self) -> bool:
        """True if derivatives are those of T."""
        return not self.of_logarithm

    @property
    def pattern(self) -> tuple[int, ...]:
        """Signs of the derivatives of order 2 to terms - 1."""
        if self.signs is not None:
            return self.signs
        return tuple(1 if self.of_logarithm else (-1) ** order for order in range(FREE_TERMS, self.terms))

    @property
    def always_free(self) -> NDArray[np.bool_]:
        """ndarray[term]: True for level and slope."""
        return np.arange(self.terms) < FREE_TERMS

    def problems(self, frequency_mhz: FloatArray, temperature_k: FloatArray) -> list[str]:
        """Lines for channels outside the band and, of ln T, for temperatures that have no logarithm."""
        found = outside_band(frequency_mhz, self.low_mhz, self.high_mhz)
        bad = ~(temperature_k > 0)
        if self.of_logarithm and bad.any():
            found.append(
                f"{bad.sum()} temperatures not positive, first {temperature_k[bad][0]} K at "
                f"{frequency_mhz[bad][0]} MHz; derivatives of ln T allow only positive ones"
            )
        return found

    def _place(self, frequency_mhz: FloatArray) -> FloatArray:
        """From 0 at the low end of the band to 1 at its high end."""
        frequency = np.asarray(frequency_mhz, dtype=float)
        if self.logarithmic:
            place = np.log(frequency / self.low_mhz) / np.log(self.high_mhz / self.low_mhz)
        else:
            place = (frequency - self.low_mhz) / (self.high_mhz - self.low_mhz)
        return np.asarray(np.clip(place, 0.0, 1.0))

    def _member(self, order: int) -> FloatArray:
        """Bernstein coefficients of p_k: its derivative of order k is one sign, those below zero at their end."""
        pattern = (-self.pattern[0], *self.pattern)  # what the slope is taken to be matters to no member
        sizes = np.ones(1)
        for below in range(order - 1, -1, -1):
            # Of one sign with the derivative above, it grows with f and is smallest at the low end.
            grows = below >= 1 and pattern[below - 1] == pattern[below]
            sizes = _integrated(sizes, grows)
            sizes /= sizes.max()
        return sizes

    def columns(self, frequency_mhz: FloatArray) -> FloatArray:
        """1, x and p_k, which T or ln T is linear in: ndarray[channel, term]."""
        place = self._place(frequency_mhz)
        orders = range(FREE_TERMS, self.terms)
        members = [self.pattern[0] * (_bernstein(place, order) @ self._member(order)) for order in orders]
        return np.stack([np.ones(place.size), 2.0 * place - 1.0, *members], axis=1)

    def evaluate(self, frequency_mhz: FloatArray, coefficients: FloatArray) -> FloatArray:
        """Temperature, K: ndarray[channel], at coefficients ndarray[term], in K or of ln T."""
        values = self.columns(frequency_mhz) @ coefficients
        return np.asarray(np.exp(values) if self.of_logarithm else values)

    def basis(self, frequency_mhz: FloatArray, coefficients: FloatArray) -> FloatArray:
        """Tangent, ndarray[channel, term], K: the columns, of ln T each times T."""
        columns = self.columns(frequency_mhz)
        return np.asarray(np.exp(columns @ coefficients)[:, None] * columns) if self.of_logarithm else columns

    def start(self, frequency_mhz: FloatArray, temperature_k: FloatArray, noise_variance_k2: FloatArray) -> FloatArray:
        """The best member under the noise variance alone; of ln T, with an error dT taken as dT/T.

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
            Coefficients, in K or of ln T; not negative from the third on.

        Raises
        ------
        CertificateError
            If it cannot be shown to be the best.
        """
        weight, values = 1.0 / np.sqrt(noise_variance_k2), temperature_k
        if self.of_logarithm:
            weight, values = weight * temperature_k, np.log(temperature_k)
        columns = self.columns(frequency_mhz) * weight[:, None]
        return ConeLeastSquares(columns, self.always_free).solve(values * weight).coefficients

    def truncation(self, index: float) -> float:
        """Part of a power law f^-index, of its value at the low end, that its first terms leave out at the most.

        The remainder of the exponential series of (f / high)^-index in ln f: z^n / n! / (1 - z / (n + 1)) with
        z = index ln(high / low), over e^z. A bound on what a member can fail to describe, for index > 0.

        Raises
        ------
        InputError
            If derivatives are not those of T with ln f, the signs not those of a power law, or the series is too short.
        """
        exponent = index * float(np.log(self.high_mhz / self.low_mhz))
        problems = []
        if (
            self.of_logarithm
            or not self.logarithmic
            or self.pattern != MaximallySmooth(self.terms, self.low_mhz, self.high_mhz).pattern
        ):
            problems.append("truncation: known for derivatives of T with ln f of alternating signs only")
        if not 0.0 < exponent < self.terms + 1:
            problems.append(
                f"truncation: got index = {index}; allowed are 0 to {(self.terms + 1) / exponent * index:.3g} for "
                f"{self.terms} terms"
            )
        raise_if_any(problems)
        first = np.exp(self.terms * np.log(exponent) - lgamma(self.terms + 1) - exponent)
        return float(first / (1.0 - exponent / (self.terms + 1)))
