"""The receiver: what calibration leaves wrong, and its noise.

A calibrated receiver still errs by a factor, a constant and the ripple of a cable, taken as channel
means like all else; its noise follows the radiometer equation.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from sims.config import Receiver

FloatArray = NDArray[np.float64]


def gain(frequency_mhz: FloatArray, width_mhz: FloatArray | float, settings: Receiver) -> FloatArray:
    """Factor on every temperature at the antenna, as its mean over each channel.

    Parameters
    ----------
    frequency_mhz : ndarray[channel]
        Channel centres, MHz.
    width_mhz : ndarray[channel] or float
        Channel widths, MHz; 0 for the factor at the centres.
    settings : Receiver

    Returns
    -------
    ndarray[channel]
        scale (1 + a sinc(width / period) cos(2 pi f / period + phase)), sinc(x) = sin(pi x) / (pi x).
    """
    turns = frequency_mhz / settings.ripple_period_mhz + settings.ripple_phase_deg / 360.0
    flattened = settings.ripple_fraction * np.sinc(width_mhz / settings.ripple_period_mhz)
    return np.asarray(settings.scale * (1.0 + flattened * np.cos(2.0 * np.pi * turns)))


def received_k(
    antenna_temperature_k: FloatArray, frequency_mhz: FloatArray, width_mhz: FloatArray | float, settings: Receiver
) -> FloatArray:
    """Temperature that the calibrated receiver reports, K: gain times the antenna's, plus the offset.

    A channel's mean of the product is taken as the product of the means. That leaves out g' T' width^2 / 12, with
    slopes per MHz: for channels of 0.3125 MHz, a ripple of 1e-3 and 35 MHz and a sky of index 2.5, up to 1.1 mK
    of 12,000 K at 40 MHz and 0.2 mK of 3,000 K at 70 MHz. It falls with the width squared, and mocks and the
    modes of ``[knowledge]`` leave out the same.
    """
    return np.asarray(gain(frequency_mhz, width_mhz, settings) * antenna_temperature_k + settings.offset_k)


def noise_variance_k2(
    antenna_temperature_k: FloatArray, receiver_temperature_k: float, width_mhz: FloatArray, integration_s: FloatArray
) -> FloatArray:
    """Variance of the radiometer noise (Dicke 1946), K^2.

    Parameters
    ----------
    antenna_temperature_k : ndarray[..., channel]
        Antenna temperature, K.
    receiver_temperature_k : float
        Noise temperature of the receiver, K.
    width_mhz : ndarray[channel]
        Channel width, MHz.
    integration_s : ndarray[..., 1]
        Time on the antenna, s.

    Returns
    -------
    ndarray[..., channel]
        T_sys^2 / (bandwidth time).
    """
    system_k = antenna_temperature_k + receiver_temperature_k
    return np.asarray(system_k**2 / (width_mhz * 1e6 * integration_s))
