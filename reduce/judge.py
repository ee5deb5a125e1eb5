"""One fit of a foreground judged: how well it fits, what it predicts, what it leaves, and the turning points it gives.

`reduce.compare` asks for it, fit by fit. The evidence and the predictions come from `reduce.evidence`, the whiteness of
the residuals from `reduce.whiteness`; here they stand beside chi-squared and the information criteria.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import least_squares
from scipy.stats import chi2

from reduce.combine import Information
from reduce.covariance import factor_basis
from reduce.evidence import coefficient_prior, cross_validated, evidence, linear_model
from reduce.joint_fit import JointFit, family_from
from reduce.quick_posterior import CompressedBank, QuickPosterior
from reduce.trough_model import NAMES, TroughModel
from reduce.whiteness import Whiteness, whiteness
from sims.config import Foreground

FloatArray = NDArray[np.float64]

BLOCKS = 8  # of contiguous channels, each left out in turn
STARTS = 1000
MOST_STEPS = 40
STEP = 1e-4  # of the prior's width, for the tangent of a trough


@dataclass(frozen=True, eq=False)
class Judged:
    """One foreground, judged.

    Attributes
    ----------
    settings : Foreground
        Family and options.
    problem : str
        Why it could not be fitted; empty if it was.
    chi_squared_any, chi_squared_trough, chi_squared_none : float
        With any signal, with the best trough of the prior, and without a signal.
    freedom_any, freedom_trough, freedom_none : int
        Their degrees of freedom.
    aic, bic : float
        Akaike's and Schwarz's criterion of the best trough; what has a prior is integrated out, not counted.
    log_evidence, log_evidence_none : float
        With a trough over its prior, and without a signal.
    predicted_channels, predicted_bins : float
        ln density of blocks of channels, and of bins, given all else: sums over all of them.
    white : Whiteness or None
        None where it could not be fitted.
    mean, sd : ndarray[6]
        Posterior mean and standard deviation of the turning points, as `trough_model.NAMES`.
    surviving : float
        Share of the trough's signal-to-noise ratio that is left.
    effective : float
        Effective draws of the posterior.
    condition_number : float
        Of the scaled, whitened free terms.
    dynamic_range : float
        Largest foreground over its noise.
    """

    settings: Foreground
    problem: str = ""
    chi_squared_any: float = np.nan
    chi_squared_trough: float = np.nan
    chi_squared_none: float = np.nan
    freedom_any: int = 0
    freedom_trough: int = 0
    freedom_none: int = 0
    aic: float = np.nan
    bic: float = np.nan
    log_evidence: float = np.nan
    log_evidence_none: float = np.nan
    predicted_channels: float = np.nan
    predicted_bins: float = np.nan
    white: Whiteness | None = None
    mean: FloatArray = field(default_factory=lambda: np.full(len(NAMES), np.nan))
    sd: FloatArray = field(default_factory=lambda: np.full(len(NAMES), np.nan))
    surviving: float = np.nan
    effective: float = np.nan
    condition_number: float = np.nan
    dynamic_range: float = np.nan

    @property
    def family(self) -> str:
        """Name of the family."""
        return self.settings.family

    @property
    def terms(self) -> int:
        """Free terms a bin."""
        return self.settings.free_terms

    @property
    def fitted(self) -> bool:
        """Whether the fit came to an end."""
        return not self.problem

    @property
    def chance(self) -> float:
        """Probability of a larger chi-squared with the best trough."""
        return probability(self.chi_squared_trough, self.freedom_trough)


def probability(chi_squared: float, freedom: int) -> float:
    """Chance of a larger chi-squared; NaN without degrees of freedom."""
    return float(chi2.sf(chi_squared, freedom)) if freedom > 0 else float("nan")


def judged(
    fit: JointFit, settings: Foreground, model: TroughModel, bank: CompressedBank, rng: np.random.Generator
) -> Judged:
    """Judge one fit.

    Parameters
    ----------
    fit : JointFit
    settings : Foreground
        What was fitted.
    model, bank
        Troughs of the prior.
    rng : numpy.random.Generator

    Returns
    -------
    Judged
    """
    done, information, posterior = fit.subtraction, fit.information, fit.posterior
    good = done.good
    trough, beside_trough = best_trough(information, model, posterior)
    chi_squared_trough = information.chi_squared_min + beside_trough
    rows, parameters = information.rows, information.nuisance_terms + len(NAMES)
    deviance = chi_squared_trough + information.log_det_covariance + rows * np.log(2.0 * np.pi)
    family = family_from(settings, fit.spectra["frequency_mhz"].values)
    prior = coefficient_prior(
        family,
        fit.spectra["frequency_mhz"].values,
        fit.spectra["antenna_temperature_k"].values,
        good,
        settings.galaxy_index,
    )
    linear = linear_model(fit, prior, bank.directions)
    whole = evidence(linear.information(), model, bank, rng)
    by_channel, by_bin = channel_blocks(good), np.nonzero(good)[0]
    covariance = posterior.covariance()
    return Judged(
        settings=settings,
        chi_squared_any=information.chi_squared_min,
        chi_squared_trough=chi_squared_trough,
        chi_squared_none=information.chi_squared_min + float(information.z @ information.z),
        freedom_any=information.degrees_of_freedom,
        freedom_trough=rows - parameters,
        freedom_none=rows - information.nuisance_terms,
        aic=deviance + 2.0 * parameters,
        bic=deviance + np.log(rows) * parameters,
        log_evidence=whole.trough,
        log_evidence_none=whole.no_signal,
        predicted_channels=float(cross_validated(linear, by_channel, model, bank, rng, whole).sum()),
        predicted_bins=float(cross_validated(linear, by_bin, model, bank, rng, whole).sum()),
        white=_whiteness(fit, model, trough, rng),
        mean=posterior.mean(),
        sd=np.sqrt(np.diag(covariance)),
        surviving=fit.removed.surviving_fraction,
        effective=posterior.effective,
        condition_number=done.condition_number,
        dynamic_range=float((np.abs(done.foreground_k[good]) / done.covariance.sigma_k).max()),
    )


def best_trough(information: Information, model: TroughModel, posterior: QuickPosterior) -> tuple[FloatArray, float]:
    """The trough of the prior that fits best, from the best draw downhill.

    Returns
    -------
    parameters : ndarray[6]
        As `trough_model.NAMES`.
    value : float
        |R s - z|^2 there.
    """
    heaviest = posterior.parameters[np.argsort(posterior.weight)[-STARTS:]]
    from_draws = information.log_likelihood(model.signal_k(heaviest))
    start, value = heaviest[int(np.argmax(from_draws))], -2.0 * float(from_draws.max())
    width = model.upper - model.lower

    def misfit(scaled: FloatArray) -> FloatArray:
        off = information.R @ model.signal_k(model.lower + scaled * width) - information.z
        return np.where(np.isfinite(off), off, 1e6)  # where the frequencies do not rise there is no trough

    scaled = np.clip((start - model.lower) / width, 1e-9, 1.0 - 1e-9)
    found = least_squares(misfit, scaled, bounds=(0.0, 1.0), max_nfev=MOST_STEPS)
    parameters = model.lower + found.x * width
    if model.allowed(parameters) and 2.0 * found.cost < value:
        return parameters, float(2.0 * found.cost)
    return start, value


def channel_blocks(good: NDArray[np.bool_]) -> NDArray[np.int64]:
    """Number of the block of contiguous channels, all bins together, of each row: ndarray[row].

    Blocks hold as many channels in use each, to one.
    """
    used = good.any(axis=0)
    order = np.cumsum(used) - 1
    count = min(BLOCKS, int(used.sum()))
    block = np.asarray(order * count // max(int(used.sum()), 1), dtype=np.int64)
    return np.broadcast_to(block, good.shape)[good]


def _whiteness(fit: JointFit, model: TroughModel, trough: FloatArray, rng: np.random.Generator) -> Whiteness:
    done = fit.subtraction
    good, covariance = done.good, done.covariance
    response = fit.spectra["signal_response"].values
    foreground = factor_basis(covariance.whiten(done.basis), "foreground basis").orthonormal
    reaching = (response * model.signal_k(trough))[good]
    tangent = np.stack([(response * each)[good] for each in _tangent(model, trough)], axis=-1)
    white = covariance.whiten(np.column_stack([done.residual_k[good] - reaching, tangent]))
    for _ in range(2):  # the second pass clears the rounding of the first
        white = white - foreground @ (foreground.T @ white)
    length = np.linalg.norm(white[:, 1:], axis=0)
    axes, singular, _ = np.linalg.svd(white[:, 1:] / np.where(length > 0.0, length, 1.0), full_matrices=False)
    fitted = np.column_stack([foreground, axes[:, singular > 1e-6]])
    ends = np.concatenate([[0], np.cumsum(good.sum(axis=1))])
    pieces = tuple(slice(int(a), int(b)) for a, b in pairwise(ends))
    return whiteness(white[:, 0], fitted, pieces, rng)


def _tangent(model: TroughModel, trough: FloatArray) -> list[FloatArray]:
    """Change of the trough along each parameter that is not held by a bound of its prior."""
    step = STEP * (model.upper - model.lower)
    moved = []
    for number in range(len(trough)):
        by = np.where(np.arange(len(trough)) == number, step, 0.0)
        if model.allowed(trough - by) and model.allowed(trough + by):
            moved.append((model.signal_k(trough + by) - model.signal_k(trough - by)) / (2.0 * step[number]))
    return moved or [np.zeros(model.points_mhz.shape[0])]
