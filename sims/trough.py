"""The cosmic signal to inject: a trough through turning points, or a flattened Gaussian.

It follows `sims.hydrogen` and feeds `sims.campaign`; the likelihoods of `reduce` call the same shapes for whole batches
of parameter sets. Every shape is the brightness of the sky itself, in K, negative in absorption; what of it reaches an
antenna is for others to say. `channel_mean_k` turns any of them from values at points into means over channels.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numba import njit
from numpy.typing import ArrayLike, NDArray

from sims.errors import InputError, raise_if_any

# Gauss-Legendre points to a channel: exact for polynomials up to degree 9, so for any cubic piece.
CHANNEL_POINTS = 5


@njit(cache=True, nogil=True)
def _turning_point_rows(
    frequency_mhz: NDArray[np.float64],
    turning_frequency_mhz: NDArray[np.float64],
    turning_temperature_k: NDArray[np.float64],
    trough_k: NDArray[np.float64],
) -> None:
    sets, points = turning_frequency_mhz.shape
    for row in range(sets):
        usable = True
        for i in range(points):
            usable = usable and math.isfinite(turning_frequency_mhz[row, i])
            usable = usable and math.isfinite(turning_temperature_k[row, i])
        for i in range(points - 1):
            usable = usable and turning_frequency_mhz[row, i + 1] > turning_frequency_mhz[row, i]
        piece = 0
        for channel in range(frequency_mhz.size):
            f = frequency_mhz[channel]
            if not (usable and turning_frequency_mhz[row, 0] <= f <= turning_frequency_mhz[row, points - 1]):
                usable = False
                break
            while piece < points - 2 and f > turning_frequency_mhz[row, piece + 1]:
                piece += 1
            while f < turning_frequency_mhz[row, piece]:
                piece -= 1
            low_mhz = turning_frequency_mhz[row, piece]
            s = (f - low_mhz) / (turning_frequency_mhz[row, piece + 1] - low_mhz)
            low_k = turning_temperature_k[row, piece]
            trough_k[row, channel] = low_k + (turning_temperature_k[row, piece + 1] - low_k) * s * s * (3.0 - 2.0 * s)
        if not usable:
            trough_k[row, :] = np.nan


def turning_point_batch_k(
    frequency_mhz: ArrayLike, turning_frequency_mhz: ArrayLike, turning_temperature_k: ArrayLike
) -> NDArray[np.float64]:
    """Troughs of many parameter sets, for samplers: as `turning_point_trough_k`, but a bad set is NaN, not an error.

    Parameters
    ----------
    frequency_mhz : array_like[channel]
        Frequency, MHz.
    turning_frequency_mhz : array_like[..., point]
        Frequency of each turning point, MHz.
    turning_temperature_k : array_like[..., point]
        Brightness at each turning point, K; leading axes are broadcast against those above.

    Returns
    -------
    ndarray[..., channel]
        Brightness, K. A row is NaN throughout where its turning frequencies do not rise strictly, where a parameter
        is not finite, or where any channel lies outside its first and last turning point.

    Raises
    ------
    InputError
        If the arrays have shapes that do not fit.
    """
    channels = np.ascontiguousarray(frequency_mhz, dtype=float)
    turning_mhz = np.asarray(turning_frequency_mhz, dtype=float)
    turning_k = np.asarray(turning_temperature_k, dtype=float)
    problems = []
    if channels.ndim != 1:
        problems.append(f"frequency: got {channels.ndim} axes; one axis (channel) is allowed")
    if turning_mhz.ndim == 0 or turning_k.ndim == 0 or turning_mhz.shape[-1:] != turning_k.shape[-1:]:
        problems.append(
            f"turning points: frequencies of shape {turning_mhz.shape} and temperatures of shape {turning_k.shape}; "
            "their last axes must have the same length"
        )
    elif turning_mhz.shape[-1] < 2:
        problems.append(f"turning points: got {turning_mhz.shape[-1]}; at least 2 are needed")
    raise_if_any(problems)
    try:
        shape = np.broadcast_shapes(turning_mhz.shape, turning_k.shape)
    except ValueError:
        raise InputError(
            f"turning points: leading axes of shapes {turning_mhz.shape} and {turning_k.shape} do not broadcast"
        ) from None
    rows_mhz, rows_k = (
        np.ascontiguousarray(np.broadcast_to(a, shape)).reshape(-1, shape[-1]) for a in (turning_mhz, turning_k)
    )
    trough_k = np.empty((rows_mhz.shape[0], channels.size))
    _turning_point_rows(channels, rows_mhz, rows_k, trough_k)
    return trough_k.reshape(*shape[:-1], channels.size)


def turning_point_trough_k(
    frequency_mhz: ArrayLike, turning_frequency_mhz: ArrayLike, turning_temperature_k: ArrayLike
) -> NDArray[np.float64]:
    """Trough through turning points: a cubic between neighbours, with zero slope at each.

    Pritchard and Loeb 2012, Rep. Prog. Phys. 75, 086901. Nothing is invented outside the first and the last point:
    give anchors that enclose the band.

    Parameters
    ----------
    frequency_mhz : array_like[channel]
        Frequency, MHz; within the turning points of every set.
    turning_frequency_mhz : array_like[..., point]
        Frequency of each turning point, MHz, strictly rising.
    turning_temperature_k : array_like[..., point]
        Brightness at each turning point, K; leading axes are broadcast against those above.

    Returns
    -------
    ndarray[..., channel]
        Brightness, K; continuous with its first derivative, and nowhere beyond its turning points.

    Raises
    ------
    InputError
        If shapes do not fit, a value is not finite, turning frequencies do not rise, or a channel lies outside them.
    """
    channels = np.asarray(frequency_mhz, dtype=float)
    turning_mhz = np.asarray(turning_frequency_mhz, dtype=float)
    turning_k = np.asarray(turning_temperature_k, dtype=float)
    problems = [
        f"{name}: {np.count_nonzero(~np.isfinite(values))} of {values.size} values are not finite"
        for name, values in (
            ("frequency", channels),
            ("turning frequency", turning_mhz),
            ("turning temperature", turning_k),
        )
        if not np.all(np.isfinite(values))
    ]
    if turning_mhz.ndim > 0 and turning_mhz.shape[-1] >= 2:
        falling = ~np.all(np.diff(turning_mhz, axis=-1) > 0, axis=-1)
        if np.any(falling):
            first = turning_mhz[falling][0]
            problems.append(f"turning frequency: {_listed(first)} MHz; they must rise strictly along the last axis")
        elif channels.size:
            low_mhz, high_mhz = np.max(turning_mhz[..., 0]), np.min(turning_mhz[..., -1])
            outside = channels[(channels < low_mhz) | (channels > high_mhz)]
            if outside.size:
                problems.append(
                    f"frequency: {outside.size} channels from {outside.min():g} to {outside.max():g} MHz lie outside "
                    f"the turning points, which enclose {low_mhz:g} to {high_mhz:g} MHz; move the outer ones"
                )
    raise_if_any(problems)
    return turning_point_batch_k(channels, turning_mhz, turning_k)


def _listed(values: NDArray[np.float64]) -> str:
    return ", ".join(f"{value:g}" for value in np.ravel(values))


def flattened_gaussian_k(
    frequency_mhz: ArrayLike, depth_k: ArrayLike, centre_mhz: ArrayLike, width_mhz: ArrayLike, flattening: ArrayLike
) -> NDArray[np.float64]:
    """Absorption trough with a flattened bottom.

    -A (1 - exp(-tau e^B)) / (1 - exp(-tau)), B = 4 (f - f_0)^2/w^2 ln[-ln((1 + e^-tau)/2)/tau] (Bowman et al. 2018,
    Nature 555, 67).

    Parameters
    ----------
    frequency_mhz : array_like[channel]
        Frequency, MHz.
    depth_k : array_like[...]
        Depth A, K: positive for absorption, the returned brightness being negative.
    centre_mhz : array_like[...]
        Frequency of the bottom, MHz.
    width_mhz : array_like[...]
        Full width at half depth, MHz, whatever the flattening.
    flattening : array_like[...]
        tau: 0 for a Gaussian, the larger the flatter.

    Returns
    -------
    ndarray[..., channel]
        Brightness, K; the parameters are broadcast.

    Raises
    ------
    InputError
        If a value is not finite, a depth or flattening is negative, or a width is not above 0; lists each.
    """
    channels = np.asarray(frequency_mhz, dtype=float)
    depth, centre, width, tau = (np.asarray(a, dtype=float) for a in (depth_k, centre_mhz, width_mhz, flattening))
    checks = (
        ("frequency, MHz", channels, np.isfinite(channels), "finite"),
        ("depth, K", depth, np.isfinite(depth) & (depth >= 0), "finite and not negative (absorption is positive)"),
        ("centre, MHz", centre, np.isfinite(centre), "finite"),
        ("width, MHz", width, np.isfinite(width) & (width > 0), "finite and above 0"),
        ("flattening", tau, np.isfinite(tau) & (tau >= 0), "finite and not negative"),
    )
    problems = [
        f"{name}: {np.count_nonzero(~good)} of {values.size} values not allowed, the first {values[~good].flat[0]:g}; "
        f"each must be {allowed}"
        for name, values, good, allowed in checks
        if not np.all(good)
    ]
    if channels.ndim != 1:
        problems.append(f"frequency: got {channels.ndim} axes; one axis (channel) is allowed")
    raise_if_any(problems)

    # The limit at 0, a Gaussian, is 0/0 here; a flattening of 1e-12 is within 1e-12 of it and computed without loss.
    tau = np.maximum(tau, 1e-12)
    steepness = np.log(-np.log1p(np.expm1(-tau) / 2) / tau) * 4 / width**2
    offset = channels - centre[..., np.newaxis]
    rise = np.exp(steepness[..., np.newaxis] * offset**2)
    scale = depth / np.expm1(-tau)
    return np.asarray(-scale[..., np.newaxis] * np.expm1(-tau[..., np.newaxis] * rise))


def channel_mean_k(
    trough: Callable[[NDArray[np.float64]], NDArray[np.float64]], centre_mhz: ArrayLike, width_mhz: ArrayLike
) -> NDArray[np.float64]:
    """Mean of a trough over the width of each channel, by Gauss-Legendre quadrature with 5 points.

    Exact where the trough is a polynomial up to degree 9 across the channel. A turning point inside one leaves up to
    1.2e-4 of the jump of the second derivative times the width squared: 0.1 microkelvin for a trough of 0.2 K that
    falls over 10 MHz, in channels of 0.2 MHz.

    Parameters
    ----------
    trough : callable
        Maps frequencies, MHz, ndarray[frequency], to brightness, K, ndarray[..., frequency].
    centre_mhz : array_like[channel]
        Centre of each channel, MHz. The trough must be defined to the edges of the channels.
    width_mhz : array_like[channel] or float
        Width of each channel, MHz; above 0.

    Returns
    -------
    ndarray[..., channel]
        Mean brightness of each channel, K.

    Raises
    ------
    InputError
        If centres are not a list of finite numbers, or a width is not finite and above 0.
    """
    centre = np.asarray(centre_mhz, dtype=float)
    width = np.asarray(width_mhz, dtype=float)
    problems = []
    if centre.ndim != 1 or not np.all(np.isfinite(centre)):
        problems.append("channel centre, MHz: one axis of finite numbers is needed")
    if not np.all(np.isfinite(width) & (width > 0)):
        problems.append("channel width, MHz: every width must be finite and above 0")
    if width.ndim > 0 and width.shape != centre.shape:
        problems.append(f"channel width, MHz: shape {width.shape}; it must be one number or {centre.shape}")
    raise_if_any(problems)
    points, weights = np.polynomial.legendre.leggauss(CHANNEL_POINTS)
    frequency_mhz = centre[:, np.newaxis] + np.broadcast_to(width, centre.shape)[:, np.newaxis] / 2 * points
    brightness_k = trough(frequency_mhz.ravel())
    by_channel = brightness_k.reshape(*brightness_k.shape[:-1], centre.size, CHANNEL_POINTS)
    return np.asarray(by_channel @ (weights / 2))
