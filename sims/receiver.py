"""The receiver: what calibration leaves wrong, and its noise.

A calibrated receiver still errs by a factor, a constant and the ripple of a cable; its
noise follows the radiometer equation.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from sims.config import Receiver

FloatArray = NDArray[np.float64]


def gain(frequency_mhz: FloatArray, settings: Receiver) -> FloatArray:
    """Factor on every temperature at the antenna.

    Parameters
    ----------
    frequency_mhz : ndarray[channel]
        Frequency, MHz.
    settings : Receiver

    Returns
    -------
    ndarray[channel]
        scale (1 + a cos(2 pi f / period + phase)).
    """
    turns = frequency_mhz / settings.ripple_period_mhz + settings.ripple_phase_deg / 360.0
    return np.asarray(settings.scale * (1.0 + settings.ripple_fraction * np.cos(2.0 * np.pi * turns)))


def received_k(antenna_temperature_k: FloatArray, frequency_mhz: FloatArray, settings: Receiver) -> FloatArray:
    """Temperature that the calibrated receiver reports, K: gain times the antenna's, plus the offset."""
    return np.asarray(gain(frequency_mhz, settings) * antenna_temperature_k + settings.offset_k)


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
