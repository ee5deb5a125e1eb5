"""Many bins to the information form of a common signal, without loss; what turning points and fitters start from.

The model of the stacked good rows is y - mu = F d + W s + e, e ~ N(0, C): mu the foreground fitted by
`reduce.subtract`, F its tangent there, d its free shift without prior, W the signal responses (row
(bin, channel) holds w in its channel's column), s the signal in kelvin. d is projected out exactly, by
QR of the whitened F; no large variance stands in for it. What is left of whitened W is then factored, so

    ln L(s), maximised over d = -|R s - z|^2 / 2 + log_constant      for any s.

For a foreground that is not linear this is to first order in d; mu absorbs at most the signal's own size
delta, so the error is of order delta^2 / 2T, some microkelvin (`reduce.removed.removed_from_signal`
computes it).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.covariance import DiagonalLowRank, factor_basis
from sims.errors import InputError, raise_if_any

LARGEST_RESPONSE = 1.5  # a share of the sky, at most 1, times a gain near 1


@dataclass(frozen=True, eq=False)
class Information:
    """All that the data say of a signal common to the bins.

    Parameters
    ----------
    K : ndarray[channel, channel]
        W^T C^-1 W with the foreground projected out, 1/K^2.
    b : ndarray[channel]
        W^T C^-1 (y - mu) with the foreground projected out, 1/K.
    R : ndarray[direction, channel]
        Square root, R^T R = K, 1/K; one row for each direction that carries information.
    z : ndarray[direction]
        R^T z = b; pure numbers of unit variance.
    chi_squared_min : float
        Chi-squared minimised over all signals and foregrounds.
    degrees_of_freedom : int
        Rows minus foreground terms minus directions.
    rows, nuisance_terms : int
        Number of good samples; number of foreground terms projected out.
    log_det_covariance : float
        ln det C, C in K^2.
    log_det_nuisance : float
        ln det F^T C^-1 F, in the inverse square units of the coefficients of F.
    draws : int or None
        Number of draws that C was estimated from; None if it was not.
    """

    K: NDArray[np.float64]
    b: NDArray[np.float64]
    R: NDArray[np.float64]
    z: NDArray[np.float64]
    chi_squared_min: float
    degrees_of_freedom: int
    rows: int
    nuisance_terms: int
    log_det_covariance: float
    log_det_nuisance: float
    draws: int | None

    @property
    def log_constant(self) -> float:
        """ln L of the best signal and foreground: add it to `log_likelihood` for the absolute, profiled ln L."""
        return float(-0.5 * (self.chi_squared_min + self.log_det_covariance + self.rows * np.log(2.0 * np.pi)))

    @property
    def log_constant_marginal(self) -> float:
        """The same with the foreground shifts integrated over a flat density of one in their coefficients."""
        return float(self.log_constant + 0.5 * (self.nuisance_terms * np.log(2.0 * np.pi) - self.log_det_nuisance))

    def log_likelihood(self, signal_k: NDArray[np.float64]) -> NDArray[np.float64]:
        """-|R s - z|^2 / 2.

        Parameters
        ----------
        signal_k : ndarray[..., channel]
            Signals, K.

        Returns
        -------
        ndarray[...]
            ln L relative to the best signal; zero there.
        """
        signal = np.asarray(signal_k, float)
        if signal.shape[-1:] != self.R.shape[1:]:
            raise InputError(
                f"signal_k: got shape {signal.shape}; allowed is [..., channel], {self.R.shape[1]} channels"
            )
        misfit = signal @ self.R.T - self.z
        return np.asarray(-0.5 * (misfit**2).sum(axis=-1))


@dataclass(frozen=True, eq=False)
class SignalDesign:
    """The part of the information form that does not depend on the data; made once, used for all mocks.

    Parameters
    ----------
    covariance : DiagonalLowRank
        C of the rows.
    nuisance_axes : ndarray[row, column]
        Orthonormal axes of the whitened foreground.
    signal_axes : ndarray[row, direction]
        Orthonormal axes of what of the whitened signal responses no foreground imitates.
    R : ndarray[direction, channel]
        As in `Information`.
    log_det_nuisance : float
        As in `Information`.
    good : ndarray[bin, channel]
        True where a sample is used.
    """

    covariance: DiagonalLowRank
    nuisance_axes: NDArray[np.float64]
    signal_axes: NDArray[np.float64]
    R: NDArray[np.float64]
    log_det_nuisance: float
    good: NDArray[np.bool_]

    def project(self, data_k: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """The data side of the information form, for one or many data vectors.

        Parameters
        ----------
        data_k : ndarray[..., row]
            y - mu on the good rows, K. For a foreground that is not linear, mu must lie within the
            reach of its tangent: a mock of the same sky, minus the same mu.

        Returns
        -------
        z : ndarray[..., direction]
            As in `Information`.
        chi_squared_min : ndarray[...]
            As in `Information`.
        """
        data = np.asarray(data_k, float)
        if data.shape[-1:] != (self.covariance.rows,) or not np.isfinite(data).all():
            raise InputError(
                f"data_k: got shape {data.shape}, {np.count_nonzero(~np.isfinite(data))} values not finite; allowed "
                f"is [..., row] of {self.covariance.rows} good rows, all finite"
            )
        left = self.covariance.whiten(data.reshape(-1, data.shape[-1]).T)
        for _ in range(2):  # the second pass clears what rounding of a large foreground leaves
            left = left - self.nuisance_axes @ (self.nuisance_axes.T @ left)
        z = self.signal_axes.T @ left
        left = left - self.signal_axes @ z
        chi_squared = (left**2).sum(axis=0)
        return z.T.reshape(*data.shape[:-1], z.shape[0]), np.asarray(chi_squared.reshape(data.shape[:-1]))

    def information(self, residual_k: NDArray[np.float64], draws: int | None) -> Information:
        """Information form of ndarray[bin, channel] residuals y - mu in K (ignored where flagged)."""
        residual = np.asarray(residual_k, float)
        if residual.shape != self.good.shape:
            raise InputError(f"residual_k: got shape {residual.shape}; allowed is [bin, channel], {self.good.shape}")
        z, chi_squared = self.project(residual[self.good])
        rows, terms = self.nuisance_axes.shape
        return Information(
            K=self.R.T @ self.R,
            b=self.R.T @ z,
            R=self.R,
            z=z,
            chi_squared_min=float(chi_squared),
            degrees_of_freedom=rows - terms - z.size,
            rows=rows,
            nuisance_terms=terms,
            log_det_covariance=self.covariance.log_det,
            log_det_nuisance=self.log_det_nuisance,
            draws=draws,
        )


def signal_design(
    *,
    covariance: DiagonalLowRank,
    basis: NDArray[np.float64],
    signal_response: NDArray[np.float64],
    good: NDArray[np.bool_],
) -> SignalDesign:
    """Factor covariance, foreground and signal responses.

    Parameters
    ----------
    covariance : DiagonalLowRank
        C of the good rows, K^2.
    basis : ndarray[row, column]
        F, the foreground without prior on the good rows, K for each unit of a coefficient; no
        column at all is allowed.
    signal_response : ndarray[bin, channel]
        w, a pure number from 0 to 1; ignored where not `good`.
    good : ndarray[bin, channel]
        True where a sample is used; good pairs in C order are the rows.

    Raises
    ------
    InputError
        If shapes disagree, a response is not from 0 to 1, or the basis is dependent.
    """
    mask, response, nuisance = np.asarray(good, bool), np.asarray(signal_response, float), np.asarray(basis, float)
    if mask.ndim != 2 or response.shape != mask.shape:
        raise InputError(
            f"signal_response and good: got shapes {response.shape} and {mask.shape}; allowed is [bin, channel] both"
        )
    problems = []
    if int(mask.sum()) != covariance.rows:
        problems.append(f"good: {int(mask.sum())} good samples; allowed are the {covariance.rows} of the covariance")
    if nuisance.ndim != 2 or nuisance.shape[0] != covariance.rows:
        problems.append(f"basis: got shape {nuisance.shape}; allowed is [row, column] with {covariance.rows} rows")
    elif not np.isfinite(nuisance).all():
        problems.append("basis: not all values finite; allowed are kelvin for each unit of a coefficient")
    outside = mask & ~((response >= 0) & (response <= LARGEST_RESPONSE))
    if outside.any():
        numbers = np.flatnonzero(outside.any(axis=1)).tolist()
        problems.append(
            f"signal_response: {outside.sum()} values outside 0 to {LARGEST_RESPONSE:g} in bins {numbers}, first "
            f"{response[outside][0]}; allowed is the share of a signal filling the sky, times the receiver's gain"
        )
    raise_if_any(problems)

    factor = factor_basis(covariance.whiten(nuisance), "basis")
    stacked = np.zeros((*mask.shape, mask.shape[1]))
    channels = np.arange(mask.shape[1])
    stacked[:, channels, channels] = response
    left = covariance.whiten(stacked[mask])
    whole = float(np.linalg.norm(left, axis=0).max(initial=0.0))
    for _ in range(2):  # once leaves rounding of the size of the foreground's share; twice is enough
        left = left - factor.orthonormal @ (factor.orthonormal.T @ left)
    axes, triangle = np.linalg.qr(left)
    rotation, singular, directions = np.linalg.svd(triangle)
    # Directions that a foreground imitates wholly come out at rounding level: they are no information. The
    # scale is that of the responses before projection, so that a foreground that takes all leaves nothing.
    kept = singular > max(left.shape) * np.finfo(float).eps * whole
    return SignalDesign(
        covariance=covariance,
        nuisance_axes=factor.orthonormal,
        signal_axes=axes @ rotation[:, : singular.size][:, kept],
        R=singular[kept, None] * directions[: singular.size][kept],
        log_det_nuisance=factor.log_det,
        good=mask,
    )


def combine(
    *,
    residual_k: NDArray[np.float64],
    covariance: DiagonalLowRank,
    basis: NDArray[np.float64],
    signal_response: NDArray[np.float64],
    good: NDArray[np.bool_],
    draws: int | None,
) -> Information:
    """Information form of all bins together.

    Parameters
    ----------
    residual_k : ndarray[bin, channel]
        y - mu, K: data minus fitted foreground; ignored where not `good`.
    covariance, basis, signal_response, good
        As in `signal_design`.
    draws : int or None
        Number of draws that C was estimated from; None if it was not. Carried, not used.

    Raises
    ------
    InputError
        As `signal_design`, or if a good residual is not finite.
    """
    design = signal_design(covariance=covariance, basis=basis, signal_response=signal_response, good=good)
    return design.information(residual_k, draws)


def response_modes(
    response_modes_per_sigma: NDArray[np.float64], fiducial_signal_k: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Systematic modes that an uncertain signal response adds, at a fiducial signal.

    An error dW of the response changes the data by dW s. It is treated as an error of the data at
    the fiducial s; whoever fits s repeats with what was found until it stands still.

    Parameters
    ----------
    response_modes_per_sigma : ndarray[bin, channel, mode]
        Change of w at one standard deviation of each error of the response, pure numbers.
    fiducial_signal_k : ndarray[channel]
        Fiducial signal, K.

    Returns
    -------
    ndarray[bin, channel, mode]
        Columns for U, K.

    Raises
    ------
    InputError
        If shapes disagree or a value is not finite.
    """
    modes, signal = np.asarray(response_modes_per_sigma, float), np.asarray(fiducial_signal_k, float)
    if modes.ndim != 3 or signal.shape != modes.shape[1:2]:
        raise InputError(
            f"response modes: got shapes {modes.shape} and {signal.shape}; allowed are [bin, channel, mode], [channel]"
        )
    if not (np.isfinite(modes).all() and np.isfinite(signal).all()):
        raise InputError("response modes: values not finite; allowed are pure numbers and kelvin")
    return np.asarray(modes * signal[None, :, None])


@dataclass(frozen=True, eq=False)
class ProjectedSpectrum:
    """Pseudo-inverse spectrum, to look at and not to be fitted: the directions it leaves out are set to zero.

    Parameters
    ----------
    spectrum_k : ndarray[channel]
        K; the signal seen through the kept directions.
    covariance_k2 : ndarray[channel, channel]
        Covariance, K^2; singular.
    kept, directions : int
        Directions kept, of those that carry any information.
    label : str
        "projected".
    """

    spectrum_k: NDArray[np.float64]
    covariance_k2: NDArray[np.float64]
    kept: int
    directions: int
    label: str = "projected"


def projected_spectrum(information: Information, worst_error_k: float) -> ProjectedSpectrum:
    """Pseudo-inverse of the information form, over the directions known well enough to be drawn.

    Parameters
    ----------
    information : Information
        Information form.
    worst_error_k : float
        A direction, a unit vector over the channels, is drawn if its standard deviation is no
        larger than this, K; infinity draws all that carry any information.

    Raises
    ------
    InputError
        If `worst_error_k` is not positive.
    """
    if not worst_error_k > 0:
        raise InputError(f"worst_error_k: got {worst_error_k}; allowed is any positive number of kelvin, or infinity")
    rotation, singular, directions = np.linalg.svd(information.R, full_matrices=False)
    kept = singular * worst_error_k >= 1.0
    inverse = directions[kept].T / singular[kept]
    return ProjectedSpectrum(
        spectrum_k=inverse @ (rotation[:, kept].T @ information.z),
        covariance_k2=inverse @ inverse.T,
        kept=int(kept.sum()),
        directions=int(singular.size),
    )
