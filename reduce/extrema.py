"""Turning points of a curve of any shape: its deepest point, and the highest points on both sides of it."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

AT_ONCE = 2000


def curve_turning_points(frequency_mhz: FloatArray, curves_k: FloatArray) -> FloatArray:
    """B, C and D of curves on an even grid.

    Parameters
    ----------
    frequency_mhz : ndarray[point]
        Evenly spaced, rising, MHz; at least three.
    curves_k : ndarray[curve, point]
        Brightness, K, smooth on the scale of a step.

    Returns
    -------
    ndarray[curve, 3, 2]
        Frequency, MHz, and temperature, mK. C is the deepest point of the band, B the highest below it in frequency,
        D the highest above; each is refined by the parabola through it and its neighbours, unless it is the first or
        the last point of the band. All NaN where the deepest point is at an edge of the band, or not a number.
    """
    found = np.full((len(curves_k), 3, 2), np.nan)
    for start in range(0, len(curves_k), AT_ONCE):
        found[start : start + AT_ONCE] = _some(frequency_mhz, curves_k[start : start + AT_ONCE])
    return found


def at_edge(frequency_mhz: FloatArray, points: FloatArray) -> NDArray[np.bool_]:
    """Which of B, C and D ndarray[..., 3, 2] are the first or the last point of the band, not extrema: [..., 3]."""
    at_mhz = points[..., 0]
    return np.asarray((at_mhz == frequency_mhz[0]) | (at_mhz == frequency_mhz[-1]))


def _some(frequency_mhz: FloatArray, curves_k: FloatArray) -> FloatArray:
    rows, last = np.arange(len(curves_k)), curves_k.shape[1] - 1
    number = np.arange(curves_k.shape[1])
    lowest = np.argmin(curves_k, axis=1)
    below = np.argmax(np.where(number < lowest[:, None], curves_k, -np.inf), axis=1)
    above = np.argmax(np.where(number > lowest[:, None], curves_k, -np.inf), axis=1)
    step_mhz = frequency_mhz[1] - frequency_mhz[0]
    result = np.empty((len(curves_k), 3, 2))
    for point, at in enumerate((below, lowest, above)):
        before, here, after = (curves_k[rows, np.clip(at + shift, 0, last)] for shift in (-1, 0, 1))
        slope, bend = 0.5 * (after - before), after - 2.0 * here + before
        # A highest point beside C itself need not be an extremum, nor a plateau a parabola.
        turns = (at > 0) & (at < last) & (np.abs(slope) <= np.abs(bend)) & (bend != 0.0)
        shift = np.where(turns, -slope / np.where(turns, bend, 1.0), 0.0)
        result[:, point, 0] = frequency_mhz[at] + shift * step_mhz
        result[:, point, 1] = 1e3 * (here + 0.5 * slope * shift)
    result[(lowest == 0) | (lowest == last) | ~np.isfinite(curves_k).all(axis=1)] = np.nan
    return result
