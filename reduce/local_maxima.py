"""Every maximum of a trough's likelihood: climbed to from many starts at once, and merged where they meet.

A foreground leaves oscillating scraps of a trough, and a trough elsewhere can leave almost the same: the likelihood
has several maxima, some far narrower than the gaps between the draws of any bank. `reduce.quick_posterior` proposes
around each, and the page of a run names them.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from reduce.combine import Information

FloatArray = NDArray[np.float64]

ITERATIONS = 25
STEP = 1e-4  # of a parameter's range
FIRST_DAMPING, EASED, RAISED = 1e-2, 0.2, 8.0
SAME = 1.0  # standard deviations between maxima that are one
EDGE = 1e-6  # of a range: maxima outside the bounds end this far within


class Bounded(Protocol):
    """What is asked of a shape: finite bounds, spectra, and where its prior is not zero."""

    @property
    def lower(self) -> FloatArray:
        """Lower bounds ndarray[parameter]."""
        ...

    @property
    def upper(self) -> FloatArray:
        """Upper bounds ndarray[parameter]."""
        ...

    def signal_k(self, parameters: FloatArray) -> FloatArray:
        """Spectra ndarray[..., channel], K."""
        ...

    def allowed(self, parameters: FloatArray) -> NDArray[np.bool_]:
        """Where the prior is not zero: ndarray[...]."""
        ...


@dataclass(frozen=True, eq=False)
class Maxima:
    """Local maxima of a posterior, highest first.

    Attributes
    ----------
    parameters : ndarray[maximum, parameter]
    log_likelihood : ndarray[maximum]
        -|R s - z|^2 / 2.
    covariance : ndarray[maximum, parameter, parameter]
        Inverse of the curvature, the prior's own variance counted as data.
    """

    parameters: FloatArray
    log_likelihood: FloatArray
    covariance: FloatArray


def local_maxima(information: Information, shape: Bounded, starts: FloatArray) -> Maxima:
    """Climb from each start and merge what meets.

    Parameters
    ----------
    information : Information
    shape : Bounded
        With a prior that is uniform within bounds.
    starts : ndarray[start, parameter]
        Where the prior is not zero.

    Returns
    -------
    Maxima
        Levenberg's and Marquardt's damped least squares (Marquardt 1963, J. Soc. Indust. Appl. Math. 11, 431) on
        R s - z, all starts together; steps that leave the prior are shortened to its edge, or not taken.
    """
    width = shape.upper - shape.lower
    at = np.clip(starts, shape.lower + EDGE * width, shape.upper - EDGE * width)
    damping = np.full(len(at), FIRST_DAMPING)
    misfit, slope = _linearised(information, shape, at)
    for _ in range(ITERATIONS):
        curvature = np.einsum("kpr,kqr->kpq", slope, slope)
        diagonal = np.einsum("kpp->kp", curvature)
        damped = curvature + (damping[:, None] * (diagonal + 1.0))[:, :, None] * np.eye(len(width))
        step = -np.linalg.solve(damped, np.einsum("kpr,kr->kp", slope, misfit)[:, :, None])[:, :, 0]
        proposed = np.clip(at + step * width, shape.lower + EDGE * width, shape.upper - EDGE * width)
        better = shape.allowed(proposed)
        tried = _misfit(information, shape, np.where(better[:, None], proposed, at))
        better &= (tried**2).sum(axis=1) < (misfit**2).sum(axis=1)
        at = np.where(better[:, None], proposed, at)
        damping = np.where(better, EASED * damping, RAISED * damping)
        if not better.any() and damping.min() > 1e6:
            break
        misfit, slope = _linearised(information, shape, at)
    curvature = np.einsum("kpr,kqr->kpq", slope, slope) + 12.0 * np.eye(len(width))
    covariance = np.linalg.inv(curvature) * np.outer(width, width)
    return _distinct(at, -0.5 * (misfit**2).sum(axis=1), covariance)


def _misfit(information: Information, shape: Bounded, at: FloatArray) -> FloatArray:
    return np.asarray(shape.signal_k(at) @ information.R.T - information.z)


def _linearised(information: Information, shape: Bounded, at: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Misfit ndarray[start, direction] and its slope ndarray[start, parameter, direction], a range for a unit."""
    width = shape.upper - shape.lower
    inward = np.where(at > 0.5 * (shape.lower + shape.upper), -STEP, STEP)
    moved = at[:, None, :] + (inward * width)[:, :, None] * np.eye(len(width))
    whole = np.concatenate([at[:, None, :], moved], axis=1)
    values = _misfit(information, shape, whole)
    slope = (values[:, 1:] - values[:, :1]) / inward[:, :, None]
    # A step may break the order of the points where two of them touch: nothing is known of the slope there.
    return values[:, 0], np.where(np.isfinite(slope), slope, 0.0)


def _distinct(parameters: FloatArray, log_likelihood: FloatArray, covariance: FloatArray) -> Maxima:
    """Highest first; one that lies within `SAME` deviations of a higher one is that one."""
    kept: list[int] = []
    for number in np.argsort(-log_likelihood):
        near = False
        for other in kept:
            off = parameters[number] - parameters[other]
            near |= bool(off @ np.linalg.solve(covariance[other], off) < SAME**2 * len(off))
        if not near:
            kept.append(int(number))
    return Maxima(parameters[kept], log_likelihood[kept], covariance[kept])
