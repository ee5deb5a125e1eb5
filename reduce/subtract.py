"""Subtract a smooth foreground from all bins together: generalised least squares, iterated to convergence.

Each bin has its own coefficients of one family, without priors; the systematic modes of the covariance
couple the bins, so the fit is joint. The rows of all good (bin, channel) pairs are whitened (which is
the augmented system of `reduce.covariance` with its modes eliminated) and solved by QR; normal equations
never appear. A family that is not linear is iterated by Gauss-Newton steps on the joint problem.

A smooth foreground also takes part of any signal; `reduce.removed` says how much.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.covariance import BasisFactor, DiagonalLowRank, factor_basis
from reduce.foreground.protocol import Family
from sims.errors import InputError, raise_if_any

STEP_TOLERANCE = 1e-8  # in standard deviations of the data: the error left in chi-squared is about its square
ROUNDING = 16.0 * float(np.finfo(float).eps)  # a step cannot be told from zero below this part of the whitened model


class ConvergenceError(RuntimeError):
    """An iterated foreground fit did not converge; the message says how far it came."""


@dataclass(frozen=True, eq=False)
class Subtraction:
    """A foreground fit at convergence.

    Parameters
    ----------
    foreground_k : ndarray[bin, channel]
        Fitted foreground, K, at every channel, flagged ones too.
    residual_k : ndarray[bin, channel]
        Data minus foreground, K; NaN where flagged.
    coefficients : ndarray[bin, term]
        Coefficients of the family.
    basis : ndarray[row, column]
        Tangent of the foreground at the fit, K for each unit of a coefficient; rows are the good
        (bin, channel) pairs in C order, columns (bin, term) pairs.
    good : ndarray[bin, channel]
        True where a sample was used.
    covariance : DiagonalLowRank
        Covariance of the rows.
    chi_squared : float
        Of the residual under the covariance.
    degrees_of_freedom : int
        Rows minus columns.
    iterations : int
        Steps taken, the last of which moved the fit by a rounding error.
    condition_number : float
        Of the whitened basis with its columns scaled to unit length.
    """

    foreground_k: NDArray[np.float64]
    residual_k: NDArray[np.float64]
    coefficients: NDArray[np.float64]
    basis: NDArray[np.float64]
    good: NDArray[np.bool_]
    covariance: DiagonalLowRank
    chi_squared: float
    degrees_of_freedom: int
    iterations: int
    condition_number: float


def _check(
    frequency_mhz: NDArray[np.float64],
    temperature_k: NDArray[np.float64],
    good: NDArray[np.bool_],
    family: Family,
) -> None:
    if good.ndim != 2 or temperature_k.shape != good.shape:
        raise InputError(
            f"temperature_k and good: got shapes {temperature_k.shape} and {good.shape}; allowed is [bin, channel] both"
        )
    if frequency_mhz.shape not in (good.shape, good.shape[1:]):
        raise InputError(
            f"frequency_mhz: got shape {frequency_mhz.shape}; allowed is [channel] or [bin, channel] of {good.shape}"
        )
    frequency = np.broadcast_to(frequency_mhz, good.shape)
    problems = []
    if not (np.isfinite(frequency_mhz) & (frequency_mhz > 0)).all():
        problems.append("frequency_mhz: not all finite and positive; allowed are MHz, for flagged channels too")
    for bin_number, mask in enumerate(good):
        count = int(mask.sum())
        values = temperature_k[bin_number, mask]
        if count == 0:
            problems.append(f"bin {bin_number}: no good channel; leave the bin out, or see what flagged all of it")
            continue
        if family.terms > count:
            problems.append(
                f"bin {bin_number}: {family.terms} foreground terms for {count} good channels; allowed are at most "
                f"as many terms as good channels"
            )
        if not np.isfinite(values).all():
            problems.append(
                f"bin {bin_number}: {np.count_nonzero(~np.isfinite(values))} temperatures not finite on good "
                f"channels; flag them or give kelvin"
            )
            continue
        problems += [f"bin {bin_number}: {line}" for line in family.problems(frequency[bin_number, mask], values)]
    raise_if_any(problems)


def _stacked_basis(
    family: Family,
    frequency_mhz: NDArray[np.float64],
    coefficients: NDArray[np.float64],
    good: NDArray[np.bool_],
) -> NDArray[np.float64]:
    bins, _ = good.shape
    block = np.zeros((*good.shape, bins, family.terms))
    for number in range(bins):
        mask = good[number]
        block[number, mask, number] = family.basis(frequency_mhz[number, mask], coefficients[number])
    return block[good].reshape(int(good.sum()), bins * family.terms)


def _stacked_value(
    family: Family,
    frequency_mhz: NDArray[np.float64],
    coefficients: NDArray[np.float64],
    good: NDArray[np.bool_],
) -> NDArray[np.float64]:
    parts = [family.evaluate(frequency_mhz[n, mask], coefficients[n]) for n, mask in enumerate(good)]
    return np.concatenate(parts)


def _descend(
    family: Family,
    frequency_mhz: NDArray[np.float64],
    good: NDArray[np.bool_],
    data_k: NDArray[np.float64],
    covariance: DiagonalLowRank,
    coefficients: NDArray[np.float64],
    step: NDArray[np.float64],
    step_length: float,
    objective: float,
    slack: float,
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], float] | None:
    """Take the step, halved until chi-squared falls as it should; None if no length of it serves.

    The full step may also leave chi-squared where it is, within rounding, as it does at the end. A
    shortened one must bring a ten-thousandth of the fall its tangent promises (Armijo 1966, Pacific
    J. Math. 16, 1), or steps of no length would pass as progress.
    """
    for halving in range(20):
        length = 0.5**halving
        trial = coefficients + step * length
        with np.errstate(over="ignore", invalid="ignore"):  # an overlong step may overflow; the check below shortens it
            model = _stacked_value(family, frequency_mhz, trial, good)
        if not np.isfinite(model).all():
            continue
        white = covariance.whiten(data_k - model)
        value = float(white @ white)
        if value <= objective - 2e-4 * length * step_length**2 + (slack if halving == 0 else 0.0):
            return trial, model, white, value
    return None


def subtract(
    *,
    frequency_mhz: NDArray[np.float64],
    temperature_k: NDArray[np.float64],
    noise_variance_k2: NDArray[np.float64],
    modes_k: NDArray[np.float64],
    good: NDArray[np.bool_],
    family: Family,
    most_iterations: int = 50,
) -> Subtraction:
    """Fit and subtract a foreground family from all bins together.

    Parameters
    ----------
    frequency_mhz : ndarray[channel] or ndarray[bin, channel]
        Frequency, MHz.
    temperature_k : ndarray[bin, channel]
        Calibrated antenna temperature, K; ignored where not `good`.
    noise_variance_k2 : ndarray[bin, channel]
        Noise variance, K^2; ignored where not `good`.
    modes_k : ndarray[bin, channel, mode]
        Systematic modes, K.
    good : ndarray[bin, channel]
        True where a sample is used.
    family : Family
        Foreground family, fitted to each bin without priors.
    most_iterations : int
        Steps after which the fit is given up.

    Returns
    -------
    Subtraction
        Foreground, residual, and all that is needed to project the foreground out.

    Raises
    ------
    InputError
        If shapes disagree, a bin has no good channel or fewer than terms, a good value is not
        finite, the family cannot accept it, or the basis is dependent.
    ConvergenceError
        If the fit does not converge.
    """
    frequency, temperature = np.asarray(frequency_mhz, float), np.asarray(temperature_k, float)
    mask = np.asarray(good, bool)
    _check(frequency, temperature, mask, family)
    frequency = np.broadcast_to(frequency, mask.shape)
    covariance = DiagonalLowRank.from_bins(noise_variance_k2, modes_k, mask)
    data = temperature[mask]
    coefficients = np.array(
        [
            family.start(frequency[n, use], temperature[n, use], np.asarray(noise_variance_k2, float)[n, use])
            for n, use in enumerate(mask)
        ]
    )
    model = _stacked_value(family, frequency, coefficients, mask)
    white = covariance.whiten(data - model)
    objective = float(white @ white)
    factor: BasisFactor | None = None
    for iteration in range(1, most_iterations + 1):
        if factor is None or not family.linear:
            basis = _stacked_basis(family, frequency, coefficients, mask)
            factor = factor_basis(covariance.whiten(basis), "foreground basis")
        projected = factor.orthonormal.T @ white
        step_length = float(np.linalg.norm(projected))
        floor = ROUNDING * float(np.linalg.norm(model / covariance.sigma_k))
        if step_length <= max(STEP_TOLERANCE, floor):
            break
        step = np.asarray(np.linalg.solve(factor.triangle, projected)).reshape(coefficients.shape)
        slack = 2.0 * floor * float(np.sqrt(objective)) + floor**2
        moved = _descend(family, frequency, mask, data, covariance, coefficients, step, step_length, objective, slack)
        if moved is None:
            raise ConvergenceError(
                f"foreground fit: iteration {iteration}: no length of the step lowers chi-squared {objective:.6g}; "
                f"the step is {step_length:.3g} standard deviations: the family is far from the data"
            )
        coefficients, model, white, objective = moved
    else:
        raise ConvergenceError(
            f"foreground fit: not converged in {most_iterations} iterations; last step {step_length:.3g} standard "
            f"deviations, chi-squared {objective:.6g}; allowed is a step below {max(STEP_TOLERANCE, floor):.1g}"
        )
    residual = np.full(mask.shape, np.nan)
    residual[mask] = data - model
    foreground = np.array([family.evaluate(frequency[n], coefficients[n]) for n in range(mask.shape[0])])
    return Subtraction(
        foreground_k=foreground,
        residual_k=residual,
        coefficients=coefficients,
        basis=basis,
        good=mask,
        covariance=covariance,
        chi_squared=objective,
        degrees_of_freedom=data.size - basis.shape[1],
        iterations=iteration,
        condition_number=factor.condition_number,
    )
