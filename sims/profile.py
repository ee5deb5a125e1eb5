"""Piecewise-cubic tables of smooth functions: the compact form that kernels read.

Beams and the Moon's mirror are smooth functions of one cosine. Tabulated here once, to a
stated accuracy, they cost four multiplications a value in the engine instead of a
transcendental function.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from sims.errors import InputError

_THIRDS = np.array([0.0, 1.0 / 3.0, 2.0 / 3.0, 1.0])
_TO_COEFFICIENTS = np.linalg.inv(np.vander(_THIRDS, increasing=True))
_BETWEEN = np.array([1.0 / 6.0, 0.5, 5.0 / 6.0])


def cubic_table(
    function: Callable[[NDArray[np.float64]], NDArray[np.float64]],
    lower: float,
    upper: float,
    *,
    tolerance: float = 1e-13,
    intervals: int = 256,
    cap: int = 8192,
) -> NDArray[np.float64]:
    """Tabulate a smooth function as cubics on equal intervals.

    Parameters
    ----------
    function : callable
        Takes ndarray[point], returns ndarray[point, column]. It may break where two
        intervals meet, so a break must lie at a dyadic fraction of the range.
    lower, upper : float
        Range of the argument.
    tolerance : float
        Largest error between the points of the table, over the largest value of its column.
    intervals, cap : int
        Starting and largest number of intervals; doubled in between.

    Returns
    -------
    ndarray[interval, 4, column]
        Coefficients of 1, t, t^2, t^3 with t running from 0 to 1 across each interval.

    Raises
    ------
    InputError
        If `cap` intervals do not reach `tolerance`.
    """
    while True:
        table, error = _table_and_error(function, lower, upper, intervals)
        if error <= tolerance:
            return table
        if intervals >= cap:
            raise InputError(
                f"a profile cannot be tabulated: error {error:.1e} of its largest value with {intervals} intervals, "
                f"allowed is {tolerance:.1e}; it varies too fast with angle"
            )
        intervals *= 2


def evaluate_table(
    table: NDArray[np.float64], lower: float, upper: float, argument: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Values of a table in plain NumPy, as the kernels compute them.

    Parameters
    ----------
    table : ndarray[interval, 4, column]
        From `cubic_table`.
    lower, upper : float
        Its range.
    argument : ndarray[point]
        Where to evaluate; within the range.

    Returns
    -------
    ndarray[point, column]
    """
    scaled = (argument - lower) * (table.shape[0] / (upper - lower))
    interval = np.clip(scaled.astype(np.int64), 0, table.shape[0] - 1)
    t = (scaled - interval)[:, None]
    c0, c1, c2, c3 = (table[interval, power] for power in range(4))
    return np.asarray(((c3 * t + c2) * t + c1) * t + c0)


def _table_and_error(
    function: Callable[[NDArray[np.float64]], NDArray[np.float64]], lower: float, upper: float, intervals: int
) -> tuple[NDArray[np.float64], float]:
    step = (upper - lower) / intervals
    starts = lower + step * np.arange(intervals)
    inward = np.array([1e-12, 0.0, 0.0, -1e-12])
    points = starts[:, None] + step * (_THIRDS + inward)
    values = function(points.ravel()).reshape(intervals, 4, -1)
    table = np.einsum("kp,ipc->ikc", _TO_COEFFICIENTS, values)
    between = (starts[:, None] + step * _BETWEEN).ravel()
    error = np.abs(evaluate_table(table, lower, upper, between) - function(between)).max(axis=0)
    largest = np.abs(values).max(axis=(0, 1))
    return table, float(np.max(error / np.where(largest > 0.0, largest, 1.0)))
