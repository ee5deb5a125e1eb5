"""What is wrong with a posterior, in words: misfit, bounds of the prior, cold gas, lost maxima, a sampler not done."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from reduce.modes import Mode
from reduce.signal_shape import SignalShape, widths

FloatArray = NDArray[np.float64]

UNCONSTRAINED = 0.9  # of the width of the prior
EDGE_MARGIN = 0.05
EDGE_MASS = 0.025
COLD_LIMIT = 0.01
MISFIT_PROBABILITY = 1e-3
MISSED = 0.05  # share of the posterior expected at a maximum that holds no draw
R_HAT_LIMIT = 1.01
EFFECTIVE_SIZE_LIMIT = 400


def converged(r_hat: list[float], effective: list[float]) -> bool:
    """Whether split R-hat and effective size of every parameter are within their limits."""
    return bool(max(r_hat) < R_HAT_LIMIT and min(effective) > EFFECTIVE_SIZE_LIMIT)


def warnings_of(
    draws: FloatArray,
    model: SignalShape,
    points: dict[str, dict[str, Any] | None],
    modes: tuple[Mode, ...],
    r_hat: list[float],
    effective: list[float],
    fit: dict[str, float],
) -> list[str]:
    """Every flag, in words.

    Parameters
    ----------
    draws : ndarray[draw, parameter]
        From the posterior.
    model : SignalShape
    points : dict
        What the draws say of B, C and D; None for a point that none has.
    modes : tuple of Mode
    r_hat, effective : list of float
        Split R-hat and effective size of each parameter.
    fit : dict
        Chi-squared of the best signal, its degrees of freedom, and the chance of a larger one.

    Returns
    -------
    list of str
    """
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
    width = widths(model, draws)
    for number, name in enumerate(model.names):
        if not (np.isfinite(model.lower[number]) and np.isfinite(model.upper[number])):
            continue
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
    for point, said in points.items():
        if said is not None and (share := said["share_colder_than_gas"]) > COLD_LIMIT:
            flags.append(
                f"{point} is colder than unheated gas can be in {share:.0%} of the posterior: the data may hold "
                "foreground that was not removed, or do not constrain it"
            )
    for mode in modes:
        if mode.share == 0.0 and mode.laplace_share > MISSED:
            at = ", ".join(f"{name} {value:.4g}" for name, value in zip(model.names, mode.parameters, strict=True))
            flags.append(
                f"a maximum of the likelihood holds no draw, though its height and curvature are worth "
                f"{mode.laplace_share:.0%} of the posterior: {at}"
            )
    if not converged(r_hat, effective):
        flags.append(
            f"the sampler has not converged: split R-hat up to {max(r_hat):.3f} (allowed {R_HAT_LIMIT}), effective "
            f"size down to {min(effective):.0f} (needed {EFFECTIVE_SIZE_LIMIT}); raise turning_points.steps"
        )
    return flags
