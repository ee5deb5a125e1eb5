"""Spectra -> foreground fit and information form, at a fiducial signal iterated to rest.

The uncertainty of the signal response costs more the larger the signal is, so it enters the
covariance at a fiducial signal: the posterior mean of the trough, found and put in again
until it stands still.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from reduce.combine import Information, combine, response_modes
from reduce.covariance import DiagonalLowRank, factor_basis
from reduce.fast_posterior import WeightedPosterior, carried_over, fast_posterior, prior_bank
from reduce.foreground.galaxy_ionosphere import GalaxyIonosphere
from reduce.foreground.log_polynomial import LogPolynomial
from reduce.foreground.power_series import PowerSeries
from reduce.foreground.protocol import Family
from reduce.subtract import RemovedSignal, Subtraction, removed_from_signal, subtract
from reduce.trough_model import TroughModel
from sims.config import Foreground
from sims.errors import InputError

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
    posterior : WeightedPosterior
        Of the turning points, annealed.
    fiducial_signal_k : ndarray[channel]
        Signal at which the response's uncertainty was taken, K.
    bins : ndarray[bin]
        Numbers of the bins that have data.
    rounds : int
        Times the fiducial signal was set.
    """

    subtraction: Subtraction
    information: Information
    removed: RemovedSignal
    posterior: WeightedPosterior
    fiducial_signal_k: FloatArray
    bins: NDArray[np.int64]
    rounds: int


def family_from(settings: Foreground, frequency_mhz: FloatArray) -> Family:
    """Foreground family as configured, scaled to the band of these channels."""
    low, high = float(frequency_mhz[0]), float(frequency_mhz[-1])
    if settings.family == "log-polynomial":
        return LogPolynomial(settings.terms, low, high)
    if settings.family == "galaxy-ionosphere":
        return GalaxyIonosphere(settings.terms, settings.index, low, high)
    return PowerSeries(settings.terms, settings.index, float(np.sqrt(low * high)), low, high)


def joint_fit(spectra: xr.Dataset, settings: Foreground, model: TroughModel, rng: np.random.Generator) -> JointFit:
    """Subtract the foreground from all bins and put what is left into the information form.

    Parameters
    ----------
    spectra : xarray.Dataset
        `sims.schema.SPECTRA`.
    settings : Foreground
    model : TroughModel
        Its posterior mean is the fiducial signal.
    rng : numpy.random.Generator

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
    bank = prior_bank(model, rng)
    fiducial_k = bank.signal_k.mean(axis=0)
    data = {
        "frequency_mhz": frequency,
        "temperature_k": chosen["antenna_temperature_k"].values,
        "noise_variance_k2": chosen["noise_variance"].values,
        "good": good[bins],
        "family": family,
    }
    first = subtract(**data, modes_k=np.zeros((*good[bins].shape, 0)))
    rounds = 0
    last: tuple[Information, WeightedPosterior] | None = None
    while True:
        rounds += 1
        subtraction = subtract(**data, modes_k=beyond_foreground_k(covariance_modes_k(chosen, fiducial_k), first))
        information = combine(
            residual_k=subtraction.residual_k,
            covariance=subtraction.covariance,
            basis=subtraction.basis,
            signal_response=chosen["signal_response"].values,
            good=good[bins],
            draws=None,
        )
        carried = None if last is None else carried_over(last[1], last[0], information, model, rng)
        posterior = carried or fast_posterior(information, model, bank, rng)
        last = (information, posterior)
        found_k = posterior.weight @ model.signal_k(posterior.parameters)
        at_rest = "response_modes" not in chosen or np.abs(found_k - fiducial_k).max() < AT_REST_K
        if at_rest or rounds == MOST_ROUNDS:
            break
        fiducial_k = found_k
    removed = removed_from_signal(
        subtraction,
        frequency_mhz=frequency,
        family=family,
        signal_response=chosen["signal_response"].values,
        signal_k=found_k,
    )
    return JointFit(subtraction, information, removed, posterior, fiducial_k, bins, rounds)


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
