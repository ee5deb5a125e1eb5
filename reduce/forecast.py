"""Errors forecast from the slope of the signal alone, for any shape: to stand beside each posterior.

The Fisher information J' R' R J of a Gaussian likelihood bounds the errors of unbiased estimates (Cramér and Rao).
It is taken by QR of R J, whose square root it is; a direction that the data do not see has an infinite bound.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from reduce.combine import Information
from reduce.signal_shape import SignalShape
from sims.errors import InputError

FloatArray = NDArray[np.float64]

FIRST_STEP = 0.02  # of a parameter's size
HALVINGS = 12
AGREED = 1e-5  # of the slope: two steps, extrapolated to zero, then err by far less
SEEN = 1e-9  # of the best seen direction, in units of the parameters' sizes
NULL = 1e-6  # part of a parameter along unseen directions above which it has no bound


@dataclass(frozen=True, eq=False)
class Forecast:
    """Covariances that a posterior can be held against.

    Attributes
    ----------
    cramer_rao : ndarray[parameter, parameter]
        (J' R' R J)^-1, in the units of the parameters; infinite on the diagonal where the data say nothing of a
        parameter once the others are free, NaN beside it.
    with_prior : ndarray[parameter, parameter]
        The same with the prior's own variance counted as data; always finite.
    slope_error : ndarray[parameter]
        How far the slope still moved from one step to half of it, as a part of itself.
    """

    cramer_rao: FloatArray
    with_prior: FloatArray
    slope_error: FloatArray

    @property
    def sd(self) -> FloatArray:
        """Cramér-Rao bound ndarray[parameter] of each standard deviation."""
        return np.sqrt(np.diag(self.cramer_rao))

    @property
    def sd_with_prior(self) -> FloatArray:
        """The same with the prior, ndarray[parameter]."""
        return np.sqrt(np.diag(self.with_prior))


def fisher_covariance(
    information: Information, shape: SignalShape, at: FloatArray, prior_sd: FloatArray | None = None
) -> Forecast:
    """Forecast the errors of a shape's parameters.

    Parameters
    ----------
    information : Information
    shape : SignalShape
    at : ndarray[parameter]
        Where the slope is taken.
    prior_sd : ndarray[parameter], optional
        Standard deviations of the prior; those of uniform ones within the bounds by default.

    Returns
    -------
    Forecast

    Raises
    ------
    InputError
        If the signal is not defined at `at`, or bounds are infinite and `prior_sd` is not given.
    """
    sd = (shape.upper - shape.lower) / np.sqrt(12.0) if prior_sd is None else np.asarray(prior_sd, float)
    if not (np.isfinite(sd) & (sd > 0.0)).all():
        raise InputError("forecast: bounds of the shape are infinite; give prior_sd, the prior's standard deviations")
    here_k = shape.signal_k(at)
    if not np.isfinite(here_k).all():
        raise InputError(f"forecast: no signal at {np.array2string(at, precision=4)}; it must be a set that is allowed")
    slopes = [_slope(information, shape, at, number, sd[number]) for number in range(len(at))]
    reaching = np.stack([slope for slope, _ in slopes], axis=1)
    whole = np.concatenate([reaching, np.eye(len(at))])
    root = np.linalg.inv(np.asarray(np.linalg.qr(whole, mode="r")))
    scale = np.outer(sd, sd)
    return Forecast(_bound(reaching) * scale, root @ root.T * scale, np.array([error for _, error in slopes]))


def _slope(
    information: Information, shape: SignalShape, at: FloatArray, number: int, size: float
) -> tuple[FloatArray, float]:
    """R J of one parameter ndarray[direction] for a change of one `size`, and how far it moved at the last halving."""
    best, least, before = np.zeros(len(information.z)), np.inf, None
    for halving in range(HALVINGS):
        step = FIRST_STEP * 0.5**halving
        slope = information.R @ _difference(shape, at, number, step * size) * size
        if before is not None:
            largest = max(float(np.linalg.norm(slope)), np.finfo(float).tiny)
            error = float(np.linalg.norm(slope - before)) / largest
            if error < least:
                best, least = (4.0 * slope - before) / 3.0, error
            if error < AGREED:
                break
        before = slope
    return best, least


def _difference(shape: SignalShape, at: FloatArray, number: int, step: float) -> FloatArray:
    """Slope ndarray[channel] to second order: central, or one-sided where the shape ends."""
    unit = np.zeros(len(at))
    unit[number] = step
    sides = shape.signal_k(at + np.array([-2.0, -1.0, 0.0, 1.0, 2.0])[:, None] * unit)
    two_below, below, here, above, two_above = sides
    if np.isfinite(below).all() and np.isfinite(above).all():
        return np.asarray((above - below) / (2.0 * step))
    if np.isfinite(above).all():
        return np.asarray((4.0 * above - 3.0 * here - two_above) / (2.0 * step))
    return np.asarray((3.0 * here - 4.0 * below + two_below) / (2.0 * step))


def _bound(reaching: FloatArray) -> FloatArray:
    """(A'A)^-1 ndarray[parameter, parameter] of A by the singular values of its triangle."""
    triangle = np.asarray(np.linalg.qr(reaching, mode="r"))
    _, singular, directions = np.linalg.svd(triangle, full_matrices=True)
    singular = np.concatenate([singular, np.zeros(len(directions) - len(singular))])
    seen = singular > SEEN * max(singular[0], np.finfo(float).tiny)
    weighed = directions[seen] / singular[seen, None]
    covariance = weighed.T @ weighed
    unseen = np.sqrt((directions[~seen] ** 2).sum(axis=0)) > NULL
    covariance[unseen, :] = np.nan
    covariance[:, unseen] = np.nan
    covariance[unseen, unseen] = np.inf
    return np.asarray(covariance)
