"""Information form -> posterior of the turning points B, C and D, sampled for the record.

An ensemble sampler (emcee; Foreman-Mackey et al. 2013) runs two independent ensembles,
started from the annealed one of `fast_posterior`. Results follow ArviZ's conventions.
"""

from __future__ import annotations

import warnings
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import emcee
import numpy as np
import xarray as xr
from numpy.typing import NDArray
from scipy import stats

from reduce.combine import Information
from reduce.fast_posterior import WeightedPosterior, detection_statistic, fast_posterior, prior_bank
from reduce.trough_model import NAMES, POINTS, TroughModel
from sims.config import TurningPoints

with warnings.catch_warnings():
    warnings.simplefilter("ignore", FutureWarning)  # ArviZ announces its own refactoring at import
    import arviz

FloatArray = NDArray[np.float64]

ENSEMBLES = 2
BURN_IN_SHARE = 0.25
THINNING = 4
PROGRESS_STEPS = 100
R_HAT_LIMIT = 1.01
EFFECTIVE_SIZE_LIMIT = 400
UNCONSTRAINED = 0.9  # of the width of the prior
EDGE_MARGIN = 0.05
EDGE_MASS = 0.025
COLD_LIMIT = 0.01
MISFIT_PROBABILITY = 1e-3
INTERVALS = {"68": (0.16, 0.84), "95": (0.025, 0.975)}


@dataclass(frozen=True)
class Posterior:
    """Sampled posterior.

    Attributes
    ----------
    samples : xarray.Dataset
        Variables `trough_model.NAMES` over chain and draw, MHz and mK.
    fast : WeightedPosterior
        The annealed one it was started from.
    acceptance : float
        Share of proposals taken.
    """

    samples: xr.Dataset
    fast: WeightedPosterior
    acceptance: float

    def stacked(self) -> FloatArray:
        """All draws ndarray[draw, 6]."""
        return np.stack([self.samples[name].values.ravel() for name in NAMES], axis=1)


def sample_posterior(
    information: Information,
    model: TroughModel,
    settings: TurningPoints,
    rng: np.random.Generator,
    advance: Callable[[int], None],
) -> Posterior:
    """Sample the turning points.

    Parameters
    ----------
    information : Information
    model : TroughModel
    settings : TurningPoints
        Walkers in all and steps of each.
    rng : numpy.random.Generator
    advance : callable
        Told the number of steps done, over all ensembles.

    Returns
    -------
    Posterior
        The first quarter of the steps is left out, of the rest every fourth is kept; each
        walker is a chain.
    """
    fast = fast_posterior(information, model, prior_bank(model, rng), rng)
    walkers = settings.walkers // ENSEMBLES
    runs = [_run_ensemble(information, model, fast, walkers, settings.steps, rng, advance) for _ in range(ENSEMBLES)]
    draws = np.concatenate([draws for draws, _ in runs])
    samples = xr.Dataset(
        {name: (("chain", "draw"), draws[:, :, number]) for number, name in enumerate(NAMES)},
        coords={"chain": np.arange(len(draws)), "draw": np.arange(draws.shape[1])},
        attrs={"inference_library": "emcee", "sampler": "differential evolution and stretch moves"},
    )
    for name in NAMES:
        samples[name].attrs = {
            "units": "MHz" if name.endswith("mhz") else "mK",
            "long_name": f"{name.split('_')[0]} of turning point {name.split('_')[1].upper()}",
        }
    return Posterior(samples, fast, float(np.mean([acceptance for _, acceptance in runs])))


def _run_ensemble(
    information: Information,
    model: TroughModel,
    fast: WeightedPosterior,
    walkers: int,
    steps: int,
    rng: np.random.Generator,
    advance: Callable[[int], None],
) -> tuple[FloatArray, float]:
    start = np.unique(fast.resample(rng, 20 * walkers), axis=0)
    if len(start) < walkers:
        start = np.concatenate([start, model.draw_prior(rng, walkers - len(start))])
    start = rng.permutation(start)[:walkers]
    moves = [(emcee.moves.DEMove(), 0.7), (emcee.moves.DEMove(gamma0=1.0), 0.1), (emcee.moves.StretchMove(), 0.2)]
    sampler = emcee.EnsembleSampler(
        walkers, len(NAMES), lambda theta: model.log_probability(theta, information), vectorize=True, moves=moves
    )
    # emcee draws from the legacy generator; its state is set from the injected stream.
    seed = int(rng.integers(2**32))
    state = emcee.State(start, random_state=np.random.RandomState(seed).get_state())
    for step, _ in enumerate(sampler.sample(state, iterations=steps, store=True), start=1):
        if step % PROGRESS_STEPS == 0 or step == steps:
            advance(PROGRESS_STEPS if step % PROGRESS_STEPS == 0 else step % PROGRESS_STEPS)
    chain = sampler.get_chain(discard=int(BURN_IN_SHARE * steps), thin=THINNING)
    return np.swapaxes(chain, 0, 1), float(np.mean(sampler.acceptance_fraction))


def summarise(posterior: Posterior, model: TroughModel, information: Information) -> dict[str, Any]:
    """What is written to ``turning_points.json``.

    Parameters
    ----------
    posterior : Posterior
    model : TroughModel
    information : Information
        What was sampled.

    Returns
    -------
    dict
        For each of B, C, D: median and intervals of frequency and temperature, share of
        draws colder than gas can be. The 6x6 covariance, split R-hat (Vehtari et al.
        2021) and effective sizes, how well the best trough fits, flags in words, and the
        detection statistic.
    """
    draws = posterior.stacked()
    covariance = np.cov(draws.T)
    r_hat, effective = _convergence(posterior)
    fit = _best_fit(draws, model, information)
    cold = model.colder_than_gas(draws).mean(axis=0)
    points = {}
    for number, point in enumerate(POINTS):
        points[point] = {
            "frequency_mhz": _marginal(draws[:, number]),
            "temperature_mk": _marginal(draws[:, number + 3]),
            "share_colder_than_gas": float(cold[number]),
        }
    return {
        "points": points,
        "covariance": {"parameters": list(NAMES), "matrix": covariance.tolist()},
        "detection_statistic": detection_statistic(draws.mean(axis=0), covariance),
        "convergence": {
            "split_r_hat": dict(zip(NAMES, r_hat, strict=True)),
            "effective_size": dict(zip(NAMES, effective, strict=True)),
            "acceptance": posterior.acceptance,
            "converged": bool(max(r_hat) < R_HAT_LIMIT and min(effective) > EFFECTIVE_SIZE_LIMIT),
        },
        "best_trough": fit,
        "flags": _flags(draws, model, cold, r_hat, effective, fit),
        "prior": dict(zip(NAMES, np.stack([model.lower, model.upper], axis=1).tolist(), strict=True)),
    }  # fmt: skip


def _marginal(values: FloatArray) -> dict[str, Any]:
    return {
        "median": float(np.median(values)),
        "standard_deviation": float(np.std(values)),
        **{f"interval_{name}": [float(q) for q in np.quantile(values, levels)] for name, levels in INTERVALS.items()},
    }


def _convergence(posterior: Posterior) -> tuple[list[float], list[float]]:
    """Rank-normalised split R-hat and bulk effective size of each parameter (Vehtari et al. 2021).

    Walkers of one ensemble move together and are short, so R-hat compares whole ensembles;
    the effective size comes from the autocorrelation of each walker.
    """
    r_hat = []
    for name in NAMES:
        walkers = posterior.samples[name].values
        by_ensemble = walkers.reshape(ENSEMBLES, -1, walkers.shape[1])
        r_hat.append(float(arviz.rhat(np.swapaxes(by_ensemble, 1, 2).reshape(ENSEMBLES, -1))))
    effective = [float(arviz.ess(posterior.samples[name].values)) for name in NAMES]
    return r_hat, effective


def _best_fit(draws: FloatArray, model: TroughModel, information: Information) -> dict[str, float]:
    """Chi-squared of all bins under the best of the draws, and the chance of a larger one."""
    misfit = -2.0 * float(information.log_likelihood(model.signal_k(draws)).max())
    chi_squared = information.chi_squared_min + misfit
    freedom = information.degrees_of_freedom + len(information.z) - len(NAMES)
    return {
        "chi_squared": chi_squared,
        "degrees_of_freedom": freedom,
        "probability": float(stats.chi2.sf(chi_squared, freedom)),
    }


def _flags(
    draws: FloatArray,
    model: TroughModel,
    cold: FloatArray,
    r_hat: list[float],
    effective: list[float],
    fit: dict[str, float],
) -> list[str]:
    flags = []
    if fit["probability"] < MISFIT_PROBABILITY:
        flags.append(
            f"no trough of this shape fits: chi-squared {fit['chi_squared']:.1f} of {fit['degrees_of_freedom']:.0f} at "
            f"the best of them (chance {fit['probability']:.1g}); the stated errors are then too small"
        )
    if (
        fit["degrees_of_freedom"] > 0
        and stats.chi2.cdf(fit["chi_squared"], fit["degrees_of_freedom"]) < MISFIT_PROBABILITY
    ):
        flags.append(
            f"chi-squared {fit['chi_squared']:.1f} of {fit['degrees_of_freedom']:.0f} is too small to be chance: the "
            "stated noise is too large, or in another unit"
        )
    width = model.upper - model.lower
    for number, name in enumerate(NAMES):
        if np.std(draws[:, number]) > UNCONSTRAINED * width[number] / np.sqrt(12.0):
            flags.append(f"{name} is not constrained: its posterior is as wide as its prior")
            continue
        below = np.mean(draws[:, number] < model.lower[number] + EDGE_MARGIN * width[number])
        above = np.mean(draws[:, number] > model.upper[number] - EDGE_MARGIN * width[number])
        for side, mass in (("lower", below), ("upper", above)):
            if mass > EDGE_MASS:
                flags.append(
                    f"{name} runs into the {side} bound of its prior: {mass:.0%} of the posterior lies in the "
                    f"outermost {EDGE_MARGIN:.0%} of the range"
                )
    for point, share in zip(POINTS, cold, strict=True):
        if share > COLD_LIMIT:
            flags.append(
                f"{point} is colder than unheated gas can be in {share:.0%} of the posterior: the data may hold "
                "foreground that was not removed, or do not constrain it"
            )
    if max(r_hat) >= R_HAT_LIMIT or min(effective) <= EFFECTIVE_SIZE_LIMIT:
        flags.append(
            f"the sampler has not converged: split R-hat up to {max(r_hat):.3f} (allowed {R_HAT_LIMIT}), effective "
            f"size down to {min(effective):.0f} (needed {EFFECTIVE_SIZE_LIMIT}); raise turning_points.steps"
        )
    return flags
