"""Spectra -> foreground fit and information form, at a fiducial signal iterated to rest.

A foreground has a free half, projected out, and a known one, in the mean and the covariance; here they
come together. The uncertainty of the signal response costs more the larger the signal is, so it enters
the covariance at a fiducial signal: the posterior mean of the trough, found and put in again until it
stands still.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from reduce.combine import Information, combine, response_modes
from reduce.covariance import DiagonalLowRank, factor_basis
from reduce.foreground.galaxy_ionosphere import GalaxyIonosphere
from reduce.foreground.gaussian_process import process_modes
from reduce.foreground.known import KnownForeground, NoFamily, smooth_safety
from reduce.foreground.log_polynomial import LogPolynomial
from reduce.foreground.power_series import PowerSeries
from reduce.foreground.protocol import Family
from reduce.quick_posterior import CompressedBank, QuickPosterior, compressed_bank, quick_posterior
from reduce.removed import RemovedSignal, removed_from_signal
from reduce.subtract import Subtraction, subtract
from reduce.trough_model import TroughModel
from sims.config import Foreground
from sims.errors import InputError
from sims.schema import SPECTRA, describe

FloatArray = NDArray[np.float64]

MOST_ROUNDS = 5
AT_REST_K = 5e-3  # a response known to a percent then shifts the data by 50 microkelvin


@dataclass(frozen=True)
class JointFit:
    """All bins fitted together.

    Attributes
    ----------
    subtraction : Subtraction
        Of the bins that have data.
    information : Information
    removed : RemovedSignal
        What the foreground fit leaves of the fiducial signal.
    posterior : QuickPosterior
        Of the turning points.
    fiducial_signal_k : ndarray[channel]
        Signal at which the response's uncertainty was taken, K.
    bins : ndarray[bin]
        Numbers of the bins that have data.
    rounds : int
        Times the fiducial signal was set.
    at_rest : bool
        Whether it stood still at the end.
    known : KnownForeground or None
        The half of the foreground that has a prior.
    spectra : xarray.Dataset
        What was fitted: the bins that have data, the known foreground's modes last among theirs.
    """

    subtraction: Subtraction
    information: Information
    removed: RemovedSignal
    posterior: QuickPosterior
    fiducial_signal_k: FloatArray
    bins: NDArray[np.int64]
    rounds: int
    at_rest: bool
    known: KnownForeground | None
    spectra: xr.Dataset

    @property
    def known_modes(self) -> int:
        """How many of the modes, the last ones, are the foreground's."""
        return 0 if self.known is None else len(self.known.modes_k)


def family_from(settings: Foreground, frequency_mhz: FloatArray) -> Family:
    """The free half of the foreground as configured, scaled to the band of these channels."""
    low, high = float(frequency_mhz[0]), float(frequency_mhz[-1])
    if settings.family == "ensemble":
        return NoFamily()
    if settings.family in ("log-polynomial", "gaussian-process"):
        return LogPolynomial(settings.free_terms, low, high)
    if settings.family == "galaxy-ionosphere":
        return GalaxyIonosphere(settings.free_terms, settings.galaxy_index, low, high)
    return PowerSeries(settings.free_terms, settings.galaxy_index, float(np.sqrt(low * high)), low, high)


def joint_fit(
    spectra: xr.Dataset,
    settings: Foreground,
    model: TroughModel,
    rng: np.random.Generator,
    ensemble: KnownForeground | None = None,
    bank: CompressedBank | None = None,
) -> JointFit:
    """Subtract the foreground from all bins and put what is left into the information form.

    Parameters
    ----------
    spectra : xarray.Dataset
        `sims.schema.SPECTRA`.
    settings : Foreground
    model : TroughModel
        Its posterior mean is the fiducial signal.
    rng : numpy.random.Generator
    ensemble : KnownForeground, optional
        Of all bins of `spectra`; needed where `settings` asks for one. What the spectra's own modes
        say of the numbers that were drawn for it must not be among them still.
    bank : CompressedBank, optional
        Draws from the prior of `model`, to be made once for many fits.

    Returns
    -------
    JointFit

    Raises
    ------
    InputError
        If no bin has data, or the family cannot be fitted to one that has.
    """
    good = spectra["flag"].values == 0
    bins = np.flatnonzero(good.any(axis=1))
    if not len(bins):
        raise InputError("spectra: every channel of every bin is flagged; nothing is left to fit")
    chosen = spectra.isel(bin=bins)
    frequency = chosen["frequency_mhz"].values
    family = family_from(settings, frequency)
    bank = compressed_bank(model, rng) if bank is None else bank
    fiducial_k = bank.coordinates.mean(axis=0) @ bank.directions
    data = {
        "frequency_mhz": frequency,
        "noise_variance_k2": chosen["noise_variance"].values,
        "good": good[bins],
        "family": family,
    }
    measured_k = chosen["antenna_temperature_k"].values
    known = known_foreground(chosen, settings, ensemble, bins)
    mean_k = np.zeros_like(measured_k) if known is None else known.mean_k
    first = subtract(**data, temperature_k=measured_k - mean_k, modes_k=np.zeros((*good[bins].shape, 0)))
    if settings.family == "gaussian-process":
        assert settings.amplitude is not None
        assert settings.length is not None
        known = process_modes(
            first.foreground_k, frequency, chosen["noise_variance"].values, settings.amplitude, settings.length
        )
    chosen = chosen if known is None else with_known_modes(chosen, known)
    rounds = 0
    while True:
        rounds += 1
        modes_k = beyond_foreground_k(covariance_modes_k(chosen, fiducial_k), first)
        subtraction = subtract(**data, temperature_k=measured_k - mean_k, modes_k=modes_k)
        information = combine(
            residual_k=subtraction.residual_k,
            covariance=subtraction.covariance,
            basis=subtraction.basis,
            signal_response=chosen["signal_response"].values,
            good=good[bins],
            draws=None if known is None else known.draws,
        )
        posterior = quick_posterior(information, model, bank, rng)
        found_k = posterior.weight @ model.signal_k(posterior.parameters)
        at_rest = "response_modes" not in chosen or bool(np.abs(found_k - fiducial_k).max() < AT_REST_K)
        if at_rest or rounds == MOST_ROUNDS:
            break
        fiducial_k = found_k
    information = with_whole_determinants(information, subtraction, covariance_modes_k(chosen, fiducial_k))
    removed = removed_from_signal(
        subtraction,
        frequency_mhz=frequency,
        family=family,
        signal_response=chosen["signal_response"].values,
        signal_k=found_k,
        known_modes=0 if known is None else len(known.modes_k),
    )
    whole = replace(subtraction, foreground_k=subtraction.foreground_k + mean_k)
    return JointFit(whole, information, removed, posterior, fiducial_k, bins, rounds, at_rest, known, chosen)


def known_foreground(
    spectra: xr.Dataset, settings: Foreground, ensemble: KnownForeground | None, bins: NDArray[np.int64]
) -> KnownForeground | None:
    """The ensemble for these bins, with the small polynomial that stands beside it; None without one."""
    if settings.family != "ensemble":
        return None
    if ensemble is None:
        raise InputError('foreground.family = "ensemble": no ensemble was given')
    own = KnownForeground(ensemble.mean_k[bins], ensemble.modes_k[:, bins], ensemble.response[:, bins], ensemble.draws)
    if settings.safety_terms is None:
        return own
    assert settings.safety_sd is not None
    frequency = spectra["frequency_mhz"].values
    return own.beside(smooth_safety(own.mean_k, frequency, settings.safety_terms, settings.safety_sd))


def with_known_modes(spectra: xr.Dataset, known: KnownForeground) -> xr.Dataset:
    """Spectra whose modes are their own and then those of the known foreground."""
    modes_k, response = known.modes_k, known.response
    if "systematic_modes" in spectra:
        before = spectra["systematic_modes"].values
        beside = spectra["response_modes"].values if "response_modes" in spectra else np.zeros_like(before)
        modes_k, response = np.concatenate([before, modes_k]), np.concatenate([beside, response])
    found = spectra.drop_vars(["systematic_modes", "response_modes"], errors="ignore").assign(
        systematic_modes=(("mode", "bin", "channel"), modes_k), response_modes=(("mode", "bin", "channel"), response)
    )
    return describe(found, SPECTRA)


def with_whole_determinants(information: Information, fit: Subtraction, modes_k: FloatArray) -> Information:
    """The same information with the determinants of the whole covariance.

    The fit knows the modes only beyond the free foreground (`beyond_foreground_k`): chi-squared is the
    same, but an absolute likelihood wants the volume that they have along it too.
    """
    if not fit.basis.shape[1]:  # beyond no free term the modes are whole
        return information
    whole = DiagonalLowRank(fit.covariance.noise_variance_k2, modes_k[fit.good])
    nuisance = factor_basis(whole.whiten(fit.basis), "foreground basis").log_det
    return replace(information, log_det_covariance=whole.log_det, log_det_nuisance=nuisance)


def beyond_foreground_k(modes_k: FloatArray, fit: Subtraction) -> FloatArray:
    """The part of each mode that no foreground of the family imitates.

    A foreground without a prior absorbs the rest whatever its size, so the likelihood is the
    same; but a mode of hundreds of kelvin along the foreground would let the fit of a family
    that is not linear wander a long way for nothing.

    Parameters
    ----------
    modes_k : ndarray[bin, channel, mode]
        Modes, K.
    fit : Subtraction
        Fit at whose tangent the foreground is taken.

    Returns
    -------
    ndarray[bin, channel, mode]
        Zero where flagged.
    """
    left = np.zeros_like(modes_k)
    if modes_k.shape[-1]:
        weighted = DiagonalLowRank(fit.covariance.noise_variance_k2, np.zeros((fit.covariance.rows, 0)))
        factor = factor_basis(weighted.whiten(fit.basis), "foreground basis")
        white = weighted.whiten(modes_k[fit.good])
        for _ in range(2):  # the second pass clears what rounding of a large mode leaves
            white = white - factor.orthonormal @ (factor.orthonormal.T @ white)
        left[fit.good] = white * weighted.sigma_k[:, None]
    return left


def covariance_modes_k(spectra: xr.Dataset, fiducial_signal_k: FloatArray) -> FloatArray:
    """Modes ndarray[bin, channel, mode] of the covariance, K: each error of the data with its error of the response."""
    if "systematic_modes" not in spectra:
        return np.zeros((*spectra["flag"].shape, 0))
    modes = np.moveaxis(spectra["systematic_modes"].values, 0, -1)
    if "response_modes" in spectra:
        modes = modes + response_modes(np.moveaxis(spectra["response_modes"].values, 0, -1), fiducial_signal_k)
    return np.asarray(modes)
