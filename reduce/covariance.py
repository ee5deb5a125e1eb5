"""Diagonal + low-rank covariances: build, carry, whiten; the root of every fit in the reduction.

C = D + U U^T over the rows of a data vector, D the noise variance of each row and each column
of U one systematic mode in kelvin, at one standard deviation. Rows are the good (bin, channel)
pairs in C order; flagged ones are dropped before they come here. Nothing of size row x row is formed.

With V = D^-1/2 U = A S B^T (thin singular value decomposition) the symmetric square root is
D^-1/2 then C^-1/2 = 1 - A [1 - (1 + S^2)^-1/2] A^T. The factor S is taken from V itself, never
from V^T V, so modes far above or far below the noise, and repeated modes, keep their digits. It
solves the augmented least-squares system [D^-1/2 F, D^-1/2 U; 0, 1] with the U part eliminated
by an orthogonal transformation: ordinary least squares on whitened rows is the generalised one.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from sims.errors import InputError, raise_if_any

LARGEST_CONDITION = 1e12  # beyond it a double keeps fewer than four digits of the weakest direction of a basis


@dataclass(frozen=True, eq=False)
class DiagonalLowRank:
    """Covariance C = D + U U^T of the rows of one data vector.

    Parameters
    ----------
    noise_variance_k2 : ndarray[row]
        Diagonal D, K^2; finite and positive.
    modes_k : ndarray[row, mode]
        Columns of U, K: the response to one standard deviation of each systematic error. No
        column at all is allowed.

    Raises
    ------
    InputError
        If shapes disagree or a value is not finite or not positive; all problems together.
    """

    noise_variance_k2: NDArray[np.float64]
    modes_k: NDArray[np.float64]

    def __post_init__(self) -> None:
        variance, modes = np.asarray(self.noise_variance_k2, float), np.asarray(self.modes_k, float)
        problems = []
        if variance.ndim != 1 or variance.size == 0:
            problems.append(f"noise_variance_k2: got shape {variance.shape}; allowed is [row] with at least one row")
        if modes.ndim != 2 or modes.shape[:1] != variance.shape[:1]:
            problems.append(f"modes_k: got shape {modes.shape}; allowed is [row, mode] with {variance.shape[:1]} rows")
        bad = ~(np.isfinite(variance) & (variance > 0))
        if bad.any():
            problems.append(
                f"noise_variance_k2: {bad.sum()} values not finite and positive, first {variance[bad][0]} at row "
                f"{int(np.flatnonzero(bad)[0])}; drop flagged rows, every other needs a variance in K^2"
            )
        if not np.isfinite(modes).all():
            problems.append(f"modes_k: {np.count_nonzero(~np.isfinite(modes))} values not finite; allowed are kelvin")
        raise_if_any(problems)
        object.__setattr__(self, "noise_variance_k2", variance)
        object.__setattr__(self, "modes_k", modes)

    @classmethod
    def from_bins(
        cls,
        noise_variance_k2: NDArray[np.float64],
        modes_k: NDArray[np.float64],
        good: NDArray[np.bool_],
    ) -> DiagonalLowRank:
        """Stack the good rows of binned arrays.

        Parameters
        ----------
        noise_variance_k2 : ndarray[bin, channel]
            Noise variance, K^2; values where not `good` are ignored.
        modes_k : ndarray[bin, channel, mode]
            Systematic modes, K, each coupling all bins and channels.
        good : ndarray[bin, channel]
            True where a sample is used.

        Raises
        ------
        InputError
            As the class, or if the shapes disagree.
        """
        variance, modes, mask = np.asarray(noise_variance_k2, float), np.asarray(modes_k, float), np.asarray(good, bool)
        problems = []
        if mask.ndim != 2:
            problems.append(f"good: got shape {mask.shape}; allowed is [bin, channel]")
        if variance.shape != mask.shape:
            problems.append(f"noise_variance_k2: got shape {variance.shape}; allowed is that of good, {mask.shape}")
        if modes.ndim != 3 or modes.shape[:2] != mask.shape:
            problems.append(f"modes_k: got shape {modes.shape}; allowed is [bin, channel, mode] with {mask.shape}")
        raise_if_any(problems)
        return cls(variance[mask], modes[mask])

    @property
    def rows(self) -> int:
        """Number of rows."""
        return int(self.noise_variance_k2.size)

    @cached_property
    def sigma_k(self) -> NDArray[np.float64]:
        """ndarray[row]: noise standard deviation, K."""
        return np.asarray(np.sqrt(self.noise_variance_k2))

    @cached_property
    def _axes(self) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        left, singular, right = np.linalg.svd(self.modes_k / self.sigma_k[:, None], full_matrices=False)
        return left, singular, right

    @property
    def _directions(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        return self._axes[:2]

    def _filter(self, scaled: NDArray[np.float64], removed: NDArray[np.float64]) -> NDArray[np.float64]:
        left, _ = self._directions
        flat = scaled.reshape(self.rows, -1)
        return np.asarray((flat - left @ (removed[:, None] * (left.T @ flat))).reshape(scaled.shape))

    def _scaled(self, values_k: NDArray[np.float64]) -> NDArray[np.float64]:
        values = np.asarray(values_k, float)
        if values.shape[:1] != (self.rows,):
            raise InputError(f"covariance: got values of shape {values.shape}; allowed is [row, ...], {self.rows} rows")
        return values / self.sigma_k.reshape((-1,) + (1,) * (values.ndim - 1))

    def whiten(self, values_k: NDArray[np.float64]) -> NDArray[np.float64]:
        """Symmetric whitening: a linear map L with L^T L = C^-1.

        Parameters
        ----------
        values_k : ndarray[row, ...]
            Vectors in kelvin along the first axis.

        Returns
        -------
        ndarray[row, ...]
            Pure numbers, of unit covariance where `values_k` has covariance C.
        """
        _, singular = self._directions
        return self._filter(self._scaled(values_k), 1.0 - 1.0 / np.sqrt(1.0 + singular**2))

    def solve(self, values_k: NDArray[np.float64]) -> NDArray[np.float64]:
        """C^-1 times vectors (Woodbury's identity in the singular basis).

        Parameters
        ----------
        values_k : ndarray[row, ...]
            Vectors in kelvin along the first axis.

        Returns
        -------
        ndarray[row, ...]
            Solutions, 1/K.
        """
        _, singular = self._directions
        scaled = self._filter(self._scaled(values_k), singular**2 / (1.0 + singular**2))
        return self._scaled(scaled)

    def scores(self, values_k: NDArray[np.float64]) -> NDArray[np.float64]:
        """Mean of each mode's amplitude given the data, U^T C^-1 times vectors.

        Parameters
        ----------
        values_k : ndarray[row, ...]
            Vectors in kelvin along the first axis.

        Returns
        -------
        ndarray[mode, ...]
            In standard deviations, B S (1 + S^2)^-1 A^T D^-1/2 r: without the cancellation of `solve` beside
            modes far above the noise.
        """
        left, singular, right = self._axes
        flat = self._scaled(values_k).reshape(self.rows, -1)
        found = right.T @ ((singular / (1.0 + singular**2))[:, None] * (left.T @ flat))
        return np.asarray(found.reshape(found.shape[0], *np.shape(values_k)[1:]))

    @cached_property
    def log_det(self) -> float:
        """ln det C (C in K^2), by the matrix determinant lemma: sum ln D + sum ln(1 + S^2)."""
        _, singular = self._directions
        return float(np.log(self.noise_variance_k2).sum() + np.log1p(singular**2).sum())

    def draw(self, rng: np.random.Generator, size: int) -> NDArray[np.float64]:
        """Independent Gaussian vectors of mean zero and covariance C.

        Returns
        -------
        ndarray[draw, row]
            Errors, K.
        """
        white = rng.standard_normal((size, self.rows)) * self.sigma_k
        return white + rng.standard_normal((size, self.modes_k.shape[1])) @ self.modes_k.T

    def with_modes(self, more_modes_k: NDArray[np.float64]) -> DiagonalLowRank:
        """The same covariance with further modes, ndarray[row, mode] in K, beside its own."""
        more = np.asarray(more_modes_k, float)
        if more.ndim != 2 or more.shape[0] != self.rows:
            raise InputError(f"more_modes_k: got shape {more.shape}; allowed is [row, mode] with {self.rows} rows")
        return DiagonalLowRank(self.noise_variance_k2, np.concatenate([self.modes_k, more], axis=1))

    def dense(self) -> NDArray[np.float64]:
        """ndarray[row, row]: C written out, K^2. For small sizes and for checks only."""
        return np.asarray(np.diag(self.noise_variance_k2) + self.modes_k @ self.modes_k.T)


@dataclass(frozen=True, eq=False)
class BasisFactor:
    """Orthogonal factorisation of a whitened basis.

    Parameters
    ----------
    orthonormal : ndarray[row, column]
        Q: orthonormal columns spanning the basis.
    triangle : ndarray[column, column]
        Upper triangular R of basis = Q R.
    condition_number : float
        Of the basis with its columns scaled to unit length; 1 for a basis of no column.
    """

    orthonormal: NDArray[np.float64]
    triangle: NDArray[np.float64]
    condition_number: float

    @property
    def log_det(self) -> float:
        """ln det of basis^T basis, in the inverse square units of the coefficients."""
        return float(2.0 * np.log(np.abs(np.diag(self.triangle))).sum())


def factor_basis(whitened: NDArray[np.float64], where: str) -> BasisFactor:
    """Factor a whitened basis by QR with columns scaled to unit length.

    Parameters
    ----------
    whitened : ndarray[row, column]
        Whitened basis, pure numbers for each unit of its coefficients.
    where : str
        What the basis is, for the error.

    Raises
    ------
    InputError
        If it has more columns than rows, a column of zeros, or columns that are dependent to
        the digits of a double.
    """
    rows, columns = whitened.shape
    if columns > rows:
        raise InputError(f"{where}: got {columns} terms for {rows} good samples; allowed are at most as many terms")
    if columns == 0:
        return BasisFactor(np.empty((rows, 0)), np.empty((0, 0)), 1.0)
    length = np.sqrt((whitened**2).sum(axis=0))
    if not (np.isfinite(length) & (length > 0)).all():
        bad = np.flatnonzero(~(np.isfinite(length) & (length > 0))).tolist()
        raise InputError(f"{where}: columns {bad} are zero or not finite on the good samples; each must act on some")
    orthonormal, triangle = np.linalg.qr(whitened / length)
    condition = float(np.linalg.cond(triangle))
    if not condition < LARGEST_CONDITION:
        raise InputError(
            f"{where}: condition number {condition:.2e} of the {columns} scaled columns; allowed is below "
            f"{LARGEST_CONDITION:.0e}: use fewer terms or do not repeat a mode"
        )
    return BasisFactor(orthonormal, triangle * length, condition)
