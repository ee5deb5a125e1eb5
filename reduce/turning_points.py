"""Information form -> posterior of the turning points B, C and D, sampled for the record.

An ensemble sampler (emcee; Foreman-Mackey et al. 2013) runs two independent ensembles,
started from the annealed one of `fast_posterior`, for any shape of `signal_shape`. Most of its
proposals come from a density fitted to the annealed draws (`mixture`), the others from
differences between walkers, so that it does not hang on the fit. Beside the
draws stand the maxima of the posterior (`modes`), the evidence, and the errors that the slope of
the signal alone forecasts (`forecast`). Results follow ArviZ's conventions (`posterior_file`).
"""

from __future__ import annotations

import warnings
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import emcee
import numpy as np
import xarray as xr
from numpy.typing import NDArray
from scipy import stats

from reduce.combine import Information
from reduce.fast_posterior import WeightedPosterior, depth_over_its_error, fast_posterior, prior_bank
from reduce.forecast import fisher_covariance
from reduce.mixture import Mixture, fitted_mixture
from reduce.modes import Mode, posterior_modes
from reduce.posterior_file import LOG_PROBABILITY, samples_dataset
from reduce.posterior_flags import converged, warnings_of
from reduce.signal_shape import POINTS, SignalShape, widths
from sims.config import TurningPoints
from sims.hydrogen import coldest_brightness_k

with warnings.catch_warnings():
    warnings.simplefilter("ignore", FutureWarning)  # ArviZ announces its own refactoring at import
    import arviz

FloatArray = NDArray[np.float64]

ENSEMBLES = 2
BURN_IN_SHARE = 0.25
THINNING = 4
ALONE = 0.9  # share of the draws above which a maximum is as good as the only one
PROGRESS_STEPS = 100
INTERVALS = {"68": (0.16, 0.84), "95": (0.025, 0.975)}


@dataclass(frozen=True)
class Posterior:
    """Sampled posterior.

    Attributes
    ----------
    samples : xarray.Dataset
        A variable for each of the shape's parameters, and `lp`, over chain and draw.
    fast : WeightedPosterior
        The annealed one it was started from.
    acceptance : float
        Share of proposals taken.
    modes : tuple of Mode
        Maxima of the posterior, highest first.
    """

    samples: xr.Dataset
    fast: WeightedPosterior
    acceptance: float
    modes: tuple[Mode, ...] = ()

    @property
    def names(self) -> tuple[str, ...]:
        """Of the parameters, in order."""
        return tuple(str(name) for name in self.samples.data_vars if name != LOG_PROBABILITY)

    def stacked(self) -> FloatArray:
        """All draws ndarray[draw, parameter]."""
        return np.stack([self.samples[name].values.ravel() for name in self.names], axis=1)


def sample_posterior(
    information: Information,
    model: SignalShape,
    settings: TurningPoints,
    rng: np.random.Generator,
    advance: Callable[[int], None],
) -> Posterior:
    """Sample the parameters of a shape.

    Parameters
    ----------
    information : Information
    model : SignalShape
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
    mixture = fitted_mixture(fast.parameters, model.lower, model.upper, rng)
    runs = [
        _run_ensemble(information, model, fast, mixture, walkers, settings.steps, rng, advance)
        for _ in range(ENSEMBLES)
    ]
    samples = samples_dataset(
        model, np.concatenate([run.draws for run in runs]), np.concatenate([run.log_probability for run in runs])
    ).assign_attrs(inference_library="emcee", sampler="independent proposals, differential evolution and stretch moves")
    posterior = Posterior(samples, fast, float(np.mean([run.acceptance for run in runs])))
    return replace(posterior, modes=posterior_modes(information, model, posterior.stacked(), rng))


@dataclass(frozen=True, eq=False)
class _Run:
    """One ensemble: draws ndarray[walker, draw, parameter], their ln probability, share of proposals taken."""

    draws: FloatArray
    log_probability: FloatArray
    acceptance: float


def _run_ensemble(
    information: Information,
    model: SignalShape,
    fast: WeightedPosterior,
    mixture: Mixture,
    walkers: int,
    steps: int,
    rng: np.random.Generator,
    advance: Callable[[int], None],
) -> _Run:
    start = np.unique(fast.resample(rng, 20 * walkers), axis=0)
    if len(start) < walkers:
        start = np.concatenate([start, model.draw_prior(rng, walkers - len(start))])
    start = rng.permutation(start)[:walkers]

    def independent(at: FloatArray, random: np.random.RandomState) -> tuple[FloatArray, FloatArray]:
        proposed = mixture.draw(random, len(at))
        return proposed, mixture.log_density(at) - mixture.log_density(proposed)

    moves = [
        (emcee.moves.MHMove(independent), 0.7),
        (emcee.moves.DEMove(), 0.2),
        (emcee.moves.DEMove(gamma0=1.0), 0.05),
        (emcee.moves.StretchMove(), 0.05),
    ]
    sampler = emcee.EnsembleSampler(
        walkers, len(model.names), lambda theta: model.log_probability(theta, information), vectorize=True, moves=moves
    )
    # emcee draws from the legacy generator; its state is set from the injected stream.
    seed = int(rng.integers(2**32))
    state = emcee.State(start, random_state=np.random.RandomState(seed).get_state())
    for step, _ in enumerate(sampler.sample(state, iterations=steps, store=True), start=1):
        if step % PROGRESS_STEPS == 0 or step == steps:
            advance(PROGRESS_STEPS if step % PROGRESS_STEPS == 0 else step % PROGRESS_STEPS)
    kept = {"discard": int(BURN_IN_SHARE * steps), "thin": THINNING}
    return _Run(
        np.swapaxes(sampler.get_chain(**kept), 0, 1),
        sampler.get_log_prob(**kept).T,
        float(np.mean(sampler.acceptance_fraction)),
    )


def summarise(posterior: Posterior, model: SignalShape, information: Information) -> dict[str, Any]:
    """What is written to ``turning_points.json``.

    Parameters
    ----------
    posterior : Posterior
    model : SignalShape
    information : Information
        What was sampled.

    Returns
    -------
    dict
        For each of B, C, D that the shape has: median and intervals over the draws that have
        it, their share, and the share of them colder than gas can be. Covariance of the
        parameters, split R-hat (Vehtari et al. 2021) and effective sizes, fit of the best
        signal, flags in words, detection statistic, ln of the Bayes factor against no signal,
        maxima of the posterior, and errors forecast from the slope at mean or leading maximum.
    """
    draws, names = posterior.stacked(), model.names
    covariance = np.cov(draws.T)
    r_hat, effective = _convergence(posterior)
    fit = _best_fit(draws, model, information)
    found = model.turning_points(draws)
    bounds = zip(model.lower, model.upper, strict=True)
    points = {point: _point(found[:, number]) for number, point in enumerate(POINTS)}
    return {
        "points": {point: said for point, said in points.items() if said is not None},
        "parameters": {name: _marginal(draws[:, number]) for number, name in enumerate(names)},
        "covariance": {"parameters": list(names), "matrix": covariance.tolist()},
        "detection_statistic": _finite(depth_over_its_error(found[:, :, 1])),
        "log_bayes_factor": {
            "value": posterior.fast.log_bayes_factor(information),
            "standard_error": posterior.fast.log_evidence_error,
        },
        "convergence": {
            "split_r_hat": dict(zip(names, r_hat, strict=True)),
            "effective_size": dict(zip(names, effective, strict=True)),
            "acceptance": posterior.acceptance,
            "converged": converged(r_hat, effective),
        },
        "best_trough": fit,
        "modes": [_mode(mode, names) for mode in posterior.modes],
        "forecast": _forecast(draws, posterior.modes, model, information),
        "flags": warnings_of(draws, model, points, posterior.modes, r_hat, effective, fit),
        "prior": {n: [_finite(low), _finite(high)] for n, (low, high) in zip(names, bounds, strict=True)},
    }  # fmt: skip


def _point(points: FloatArray) -> dict[str, Any] | None:
    """What the draws ndarray[draw, 2] say of one turning point; None if none of them has it."""
    having = points[np.isfinite(points).all(axis=1)]
    if not len(having):
        return None
    cold = having[:, 1] / 1e3 < coldest_brightness_k(having[:, 0])
    return {
        "frequency_mhz": _marginal(having[:, 0]),
        "temperature_mk": _marginal(having[:, 1]),
        "share_colder_than_gas": float(cold.mean()),
        "share_of_draws": len(having) / len(points),
    }


def _finite(value: float) -> float | None:
    """The number, or None, as JSON has neither infinities nor NaN."""
    return float(value) if np.isfinite(value) else None


def _mode(mode: Mode, names: tuple[str, ...]) -> dict[str, Any]:
    return {
        "parameters": dict(zip(names, mode.parameters.tolist(), strict=True)),
        "log_likelihood": mode.log_likelihood,
        "share_of_draws": mode.share,
        "share_by_laplace": mode.laplace_share,
    }


def _forecast(
    draws: FloatArray, modes: tuple[Mode, ...], model: SignalShape, information: Information
) -> dict[str, Any]:
    """Forecast standard deviations; None for no bound.

    At the mean, or at the maximum with most draws if it has not nearly all: the mean may then lie in a valley.
    """
    at = draws.mean(axis=0)
    leading = max(modes, key=lambda mode: mode.share, default=None)
    if leading is not None and leading.share < ALONE:
        at = leading.parameters
    if not model.allowed(at):
        at = draws[int(np.argmax(model.log_probability(draws, information)))]
    prior_sd = widths(model, draws) / np.sqrt(12.0)
    forecast = fisher_covariance(information, model, at, prior_sd)
    bound = [_finite(sd) for sd in forecast.sd]
    return {
        "at": dict(zip(model.names, at.tolist(), strict=True)),
        "cramer_rao_sd": dict(zip(model.names, bound, strict=True)),
        "with_prior_sd": dict(zip(model.names, forecast.sd_with_prior.tolist(), strict=True)),
    }


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
    for name in posterior.names:
        walkers = posterior.samples[name].values
        by_ensemble = walkers.reshape(ENSEMBLES, -1, walkers.shape[1])
        r_hat.append(float(arviz.rhat(np.swapaxes(by_ensemble, 1, 2).reshape(ENSEMBLES, -1))))
    effective = [float(arviz.ess(posterior.samples[name].values)) for name in posterior.names]
    return r_hat, effective


def _best_fit(draws: FloatArray, model: SignalShape, information: Information) -> dict[str, float]:
    """Chi-squared of all bins under the best of the draws, and the chance of a larger one."""
    misfit = -2.0 * float(information.log_likelihood(model.signal_k(draws)).max())
    chi_squared = information.chi_squared_min + misfit
    freedom = information.degrees_of_freedom + len(information.z) - len(model.names)
    return {
        "chi_squared": chi_squared,
        "degrees_of_freedom": freedom,
        "probability": float(stats.chi2.sf(chi_squared, freedom)),
    }
