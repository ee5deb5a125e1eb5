"""Forecast of errors from curvature alone: the Cramér-Rao bound of a trough's parameters."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from reduce.combine import Information
from reduce.trough_model import TroughModel

FloatArray = NDArray[np.float64]
STEP = 1e-4  # of the prior's range: central differences err by its square


def cramer_rao_sd(information: Information, model: TroughModel, at: FloatArray) -> FloatArray:
    """Smallest standard deviations that an unbiased estimate can have, the prior's own variance counted as data.

    Parameters
    ----------
    information : Information
    model : TroughModel
    at : ndarray[parameter]
        Where the likelihood's curvature is taken.

    Returns
    -------
    ndarray[parameter]
        Of (J' R' R J + P^-1)^-1, J the slope of the signal and P the variance of each parameter's range; in the
        units of the parameters.
    """
    width = model.upper - model.lower
    steps = np.diag(STEP * width)
    slope = (model.signal_k(at + steps) - model.signal_k(at - steps)) / (2.0 * STEP * width)[:, None]
    rows = np.concatenate([information.R @ slope.T, np.diag(np.sqrt(12.0) / width)])
    triangle = np.linalg.qr(rows, mode="r")
    inverse = np.linalg.solve(np.asarray(triangle), np.eye(len(at)))
    return np.asarray(np.sqrt((inverse**2).sum(axis=1)))
