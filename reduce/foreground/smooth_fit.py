"""Fit a maximally smooth foreground to all bins together, to certified optimality.

Each bin has its own member of the family; the systematic modes of the covariance couple the bins, so the fit is
joint: one convex problem in whitened columns (`reduce.foreground.convex`). What the fit may still do without letting
a held derivative go is its tangent, so that a signal can be fitted beside it to first order,
y - foreground = F d + W s + noise. That is the whole answer only while no constraint is let go or met on the way;
`SmoothDesign.profile_chi_squared` solves the problem anew for each signal and needs no such proviso.

Where the derivatives are those of ln T, T = L (1 + ln T - ln L) about a level L, to the square of their distance
over 2 T. The fit is iterated until L is the foreground itself, each step a convex problem; the certificate is
that of the last. A profile keeps one L for all signals: a hundred millikelvin on a thousand kelvin leave an
error of 5 uK.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from reduce.covariance import DiagonalLowRank
from reduce.foreground.convex import Certificate, CertificateError, ConeLeastSquares, ConeSolution
from reduce.foreground.maximally_smooth import FREE_TERMS, MaximallySmooth
from sims.errors import InputError, raise_if_any

FloatArray = NDArray[np.float64]

MOST_STEPS = 100
MOST_HALVINGS = 20
STEP_TOLERANCE = 1e-5  # in standard deviations of the data: what is left of chi-squared is about its square
ROUNDING = 64.0 * float(np.finfo(float).eps)  # part of the level by which it may change at rest


@dataclass(frozen=True, eq=False)
class SmoothFit:
    """A maximally smooth foreground at its optimum.

    Parameters
    ----------
    coefficients : ndarray[bin, term]
        Of the family, in K or of ln T.
    foreground_k : ndarray[bin, channel]
        Foreground, K, at every channel, flagged ones too.
    residual_k : ndarray[bin, channel]
        Data minus foreground, K; NaN where flagged.
    chi_squared : float
        Of the residual under the covariance.
    free : ndarray[bin, term]
        True where a coefficient is free to move; where not, its derivative is held at zero at an end of the band.
    multipliers : ndarray[bin, term]
        Cosine of the whitened residual with each held term: how firmly it is held. Zero for free ones.
    certificate : Certificate
        Conditions of Karush, Kuhn and Tucker and the gap to the optimum; within their tolerances.
    tangent : ndarray[row, direction]
        F, K: what the free terms can do; each of unit length and at right angles to the others once whitened.
    """

    coefficients: FloatArray
    foreground_k: FloatArray
    residual_k: FloatArray
    chi_squared: float
    free: NDArray[np.bool_]
    multipliers: FloatArray
    certificate: Certificate
    tangent: FloatArray


def _usable(level_k: FloatArray) -> bool:
    return bool((np.isfinite(level_k) & (level_k > 0)).all())


def _check(
    frequency_mhz: FloatArray,
    good: NDArray[np.bool_],
    rows: int,
    family: MaximallySmooth,
    level_k: FloatArray | None,
) -> None:
    if good.ndim != 2 or frequency_mhz.shape not in (good.shape, good.shape[1:]):
        raise InputError(
            f"smooth fit: got frequency_mhz of shape {frequency_mhz.shape} and good of {good.shape}; allowed is "
            f"[channel] or [bin, channel], and [bin, channel]"
        )
    problems = []
    if rows != good.sum():
        problems.append(f"smooth fit: covariance of {rows} rows for {good.sum()} good samples; allowed are as many")
    if level_k is not None and (family.linear or level_k.shape != good.shape or not _usable(level_k)):
        problems.append(
            f"level_k: got shape {level_k.shape}; allowed is positive and finite K of {good.shape}, with ln T only"
        )
    frequency = np.broadcast_to(frequency_mhz, good.shape)
    if not (np.isfinite(frequency) & (frequency > 0)).all():
        problems.append("frequency_mhz: not all finite and positive; allowed are MHz, for flagged channels too")
    else:
        for number, mask in enumerate(good):
            lines = family.problems(frequency[number], np.ones(mask.size))
            problems += [f"bin {number}: {line}" for line in lines]
            if mask.sum() < FREE_TERMS:
                problems.append(f"bin {number}: {mask.sum()} good channels; allowed are {FREE_TERMS} at least")
    raise_if_any(problems)


@dataclass(frozen=True, eq=False)
class SmoothDesign:
    """All but the data, factored once.

    Parameters
    ----------
    frequency_mhz : ndarray[channel] or ndarray[bin, channel]
        Frequency, MHz.
    good : ndarray[bin, channel]
        True where a sample is used.
    covariance : DiagonalLowRank
        Covariance of the rows, the good (bin, channel) pairs in C order.
    family : MaximallySmooth
        Family, with its signs.
    level_k : ndarray[bin, channel] or None
        L, K, for derivatives of ln T; None lets it be found from the data.

    Raises
    ------
    InputError
        If shapes disagree, a frequency is outside the band, or a bin has fewer than two good channels.
    """

    frequency_mhz: FloatArray
    good: NDArray[np.bool_]
    covariance: DiagonalLowRank
    family: MaximallySmooth
    level_k: FloatArray | None = None

    def __post_init__(self) -> None:
        frequency, good = np.asarray(self.frequency_mhz, float), np.asarray(self.good, bool)
        _check(frequency, good, self.covariance.rows, self.family, self.level_k)
        object.__setattr__(self, "frequency_mhz", np.broadcast_to(frequency, good.shape))
        object.__setattr__(self, "good", good)

    @cached_property
    def _blocks(self) -> FloatArray:
        """ndarray[bin, channel, term]: columns of the family."""
        return np.stack([self.family.columns(frequency) for frequency in self.frequency_mhz])

    @cached_property
    def columns_k(self) -> FloatArray:
        """ndarray[row, column]: tangent of all bins, (bin, term) pairs, K for each unit of a coefficient."""
        bins, channels = self.good.shape
        level_k = np.ones(self.good.shape) if self.level_k is None else self.level_k
        stacked = np.zeros((bins, channels, bins, self.family.terms))
        for number in range(bins):
            stacked[number, :, number] = level_k[number, :, None] * self._blocks[number]
        return stacked[self.good].reshape(self.covariance.rows, -1)

    @cached_property
    def _offset_k(self) -> FloatArray:
        """ndarray[row]: what the tangent has where all coefficients are zero, L (1 - ln L), K."""
        if self.level_k is None:
            return np.zeros(self.covariance.rows)
        level_k = self.level_k[self.good]
        return np.asarray(level_k * (1.0 - np.log(level_k)))

    @cached_property
    def _cone(self) -> ConeLeastSquares:
        always_free = np.tile(self.family.always_free, self.good.shape[0])
        return ConeLeastSquares(self.covariance.whiten(self.columns_k), always_free)

    def _rows(self, temperature_k: FloatArray) -> FloatArray:
        temperature = np.asarray(temperature_k, float)
        if temperature.shape != self.good.shape:
            raise InputError(f"temperature_k: got shape {temperature.shape}; allowed is {self.good.shape}")
        rows = temperature[self.good]
        if not np.isfinite(rows).all():
            raise InputError(
                f"temperature_k: {np.count_nonzero(~np.isfinite(rows))} values not finite on good channels; flag "
                f"them or give kelvin"
            )
        problems = []
        for number, mask in enumerate(self.good):
            lines = self.family.problems(self.frequency_mhz[number, mask], temperature[number, mask])
            problems += [f"bin {number}: {line}" for line in lines]
        raise_if_any(problems)
        return rows

    def at_level(self, temperature_k: FloatArray) -> SmoothDesign:
        """The same about the foreground of these data, ndarray[bin, channel]; itself if there is no level to find.

        Gauss-Newton steps, each a convex problem, halved until chi-squared falls: between members all are members.

        Raises
        ------
        InputError, CertificateError
            As `fit`.
        """
        if self.family.linear or self.level_k is not None:
            return self
        rows = self._rows(temperature_k)
        found, change = self._start(rows), np.inf
        level_k = self._values(found)
        floor = ROUNDING * float(np.linalg.norm(rows / self.covariance.sigma_k))
        for _ in range(MOST_STEPS):
            design = replace(self, level_k=level_k)
            solution = design._cone.solve(self.covariance.whiten(rows - design._offset_k))
            step = solution.coefficients.reshape(found.shape) - found
            # Under the whole covariance: what the modes leave unknown need not come to rest to the noise.
            change = self._size(design.columns_k @ step.ravel())
            if change <= STEP_TOLERANCE + floor:
                return design
            most = self._size(rows - level_k[self.good])
            for halving in range(MOST_HALVINGS):
                trial = found + 0.5**halving * step
                level_k = self._values(trial)
                if _usable(level_k) and self._size(rows - level_k[self.good]) < most:
                    break
            else:
                # The fall still promised, about the square of the step, is lost in the rounding of chi-squared.
                if change**2 <= 4.0 * floor * most:
                    return design
                break
            found = trial
        raise CertificateError(
            f"smooth fit: no maximally smooth foreground is near the data: ln T is not at rest, its last step "
            f"{change:.1e} standard deviations; allowed is {STEP_TOLERANCE:.0e}"
        )

    def _start(self, rows: FloatArray) -> FloatArray:
        """Members to begin with, each bin under its noise alone: ndarray[bin, term]."""
        temperature_k, variance_k2 = np.ones(self.good.shape), np.ones(self.good.shape)
        temperature_k[self.good], variance_k2[self.good] = rows, self.covariance.noise_variance_k2
        return np.array(
            [
                self.family.start(self.frequency_mhz[n, mask], temperature_k[n, mask], variance_k2[n, mask])
                for n, mask in enumerate(self.good)
            ]
        )

    def _size(self, values_k: FloatArray) -> float:
        return float(np.linalg.norm(self.covariance.whiten(values_k)))

    def _values(self, coefficients: FloatArray) -> FloatArray:
        """Foreground, K: ndarray[bin, channel], of ndarray[bin, term]."""
        values = np.einsum("bct,bt->bc", self._blocks, coefficients)
        with np.errstate(over="ignore"):  # an overlong step may overflow, and is halved
            return np.asarray(np.exp(values) if self.family.of_logarithm else values)

    def fit(self, temperature_k: FloatArray) -> SmoothFit:
        """Best members of the family for data, ndarray[bin, channel] in K, ignored where not good.

        Raises
        ------
        InputError
            If the shape is wrong or a good value is not finite, or has no logarithm where there must be one.
        CertificateError
            If the answer cannot be shown to be optimal, or an iterated one does not come to rest.
        """
        return self.at_level(temperature_k)._fit(self._rows(temperature_k))

    def _fit(self, rows: FloatArray) -> SmoothFit:
        solution = self._cone.solve(self.covariance.whiten(rows - self._offset_k))
        coefficients = solution.coefficients.reshape(-1, self.family.terms)
        foreground = self._values(coefficients)
        residual = np.full(self.good.shape, np.nan)
        residual[self.good] = rows - foreground[self.good]
        white = self.covariance.whiten(residual[self.good])
        return SmoothFit(
            coefficients=coefficients,
            foreground_k=foreground,
            residual_k=residual,
            chi_squared=float(white @ white),
            free=solution.free.reshape(coefficients.shape),
            multipliers=solution.multipliers.reshape(coefficients.shape),
            certificate=solution.certificate,
            tangent=self._tangent(solution),
        )

    def _tangent(self, solution: ConeSolution) -> FloatArray:
        """Free columns made orthonormal under the covariance; twice, because they are nearly dependent."""
        tangent = self.columns_k[:, solution.free]
        tangent = tangent / np.linalg.norm(tangent / self.covariance.sigma_k[:, None], axis=0)
        for _ in range(2):
            _, triangle = np.linalg.qr(self.covariance.whiten(tangent))
            tangent = np.linalg.solve(triangle.T, tangent.T).T
        return np.asarray(tangent)

    def profile_chi_squared(self, temperature_k: FloatArray, signals_k: FloatArray) -> FloatArray:
        """Chi-squared of the best foreground beside each of many signals: one convex problem for each.

        Exact for derivatives of T; for those of ln T about one level, that of the data without a signal.

        Parameters
        ----------
        temperature_k : ndarray[bin, channel]
            Data, K; ignored where not good.
        signals_k : ndarray[signal, bin, channel]
            Signals as the antenna has them (each through its response), K. Like ones beside each other are fastest.

        Returns
        -------
        ndarray[signal]
            Chi-squared.

        Raises
        ------
        InputError
            If a shape is wrong or a value not finite.
        CertificateError
            If an answer cannot be shown to be optimal.
        """
        signals = np.asarray(signals_k, float)
        if signals.ndim != 3 or signals.shape[1:] != self.good.shape:
            raise InputError(
                f"signals_k: got shape {signals.shape}; allowed is [signal, bin, channel], {self.good.shape}"
            )
        of_rows = signals[:, self.good]
        if not np.isfinite(of_rows).all():
            raise InputError(
                f"signals_k: {np.count_nonzero(~np.isfinite(of_rows))} values not finite; allowed are kelvin"
            )
        design = self.at_level(temperature_k)
        left = self.covariance.whiten((self._rows(temperature_k) - design._offset_k - of_rows).T)
        return np.array([solution.objective for solution in design._cone.solve_many(left)])


def smooth_fit(
    *,
    frequency_mhz: FloatArray,
    temperature_k: FloatArray,
    covariance: DiagonalLowRank,
    good: NDArray[np.bool_],
    family: MaximallySmooth,
) -> SmoothFit:
    """Fit once; parameters, returns and errors as `SmoothDesign` and its `fit`."""
    return SmoothDesign(frequency_mhz, good, covariance, family).fit(temperature_k)
