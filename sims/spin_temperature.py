"""Brightness -> spin temperature, and spin temperature <-> coupling to the gas.

It inverts `sims.hydrogen`; the limits of `reduce` stand on it.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.optimize import elementwise

from sims.cosmology import Cosmology
from sims.errors import InputError
from sims.hydrogen import optical_depth

FloatArray = NDArray[np.float64]

# Nearer to either end of what a spin temperature can give than this, rounding leaves the answer no digits.
END_MARGIN = 1e-12


def spin_temperature_k(
    redshift: ArrayLike,
    brightness_k: ArrayLike,
    radio_temperature_k: ArrayLike,
    neutral_fraction: ArrayLike,
    cosmology: Cosmology,
) -> FloatArray:
    """Spin temperature that gives a brightness: the inverse of `sims.hydrogen.brightness_k`.

    With b = (1 + z) dT_b and t the optical depth times T_S, which does not depend on T_S, b = (T_S - T_R)
    (1 - exp(-t/T_S)) rises from -T_R for the coldest gas to t for the hottest. As x/(1 + x) <= 1 - exp(-x) <= 1, the
    root lies between T_R + b and t (T_R + b)/(t - b).

    Parameters
    ----------
    redshift : array_like[...]
        Redshift.
    brightness_k : array_like[...]
        Differential brightness as received, K; negative in absorption.
    radio_temperature_k : array_like[...]
        Radio background at that redshift, K; above 0.
    neutral_fraction : array_like[...]
        Neutral share of the hydrogen, above 0 to 1.
    cosmology : Cosmology

    Returns
    -------
    ndarray[...]
        Spin temperature, K; the inputs are broadcast. NaN where no spin temperature makes the gas so dark (at or below
        -T_R/(1 + z)); infinite at saturation and above, where hot gas of any temperature is too dim. Both ends are
        taken 1e-12 early.

    Raises
    ------
    InputError
        If a brightness is not finite, a background or a neutral fraction not above 0, or another input is refused by
        `optical_depth`.
    """
    brightness, radio, neutral = (
        np.asarray(a, dtype=float) for a in (brightness_k, radio_temperature_k, neutral_fraction)
    )
    problems = [
        f"{name}: {np.count_nonzero(~good)} of {good.size} values not allowed; each must be finite{allowed}"
        for name, good, allowed in (
            ("brightness, K", np.isfinite(brightness), ""),
            ("radio temperature, K", np.isfinite(radio) & (radio > 0), " and above 0"),
            ("neutral fraction", np.isfinite(neutral) & (neutral > 0), " and above 0"),
        )
        if not np.all(good)
    ]
    if problems:
        raise InputError(problems)
    strength_k = optical_depth(redshift, 1.0, neutral, cosmology)
    contrast_k = brightness * (1 + np.asarray(redshift, dtype=float))
    contrast_k, strength_k, radio = np.broadcast_arrays(contrast_k, strength_k, radio)
    spin_k = np.full(contrast_k.shape, np.nan)
    spin_k[contrast_k >= strength_k * (1 - END_MARGIN)] = np.inf
    inside = (contrast_k > -radio * (1 - END_MARGIN)) & (contrast_k < strength_k * (1 - END_MARGIN))
    if np.any(inside):
        spin_k[inside] = _root_k(contrast_k[inside], strength_k[inside], radio[inside])
    return spin_k


def _root_k(contrast_k: FloatArray, strength_k: FloatArray, radio_k: FloatArray) -> FloatArray:
    """Spin temperature of each brightness times (1 + z) that one exists for; by bracketing (Chandrupatla 1997)."""
    ends_k = np.stack([radio_k + contrast_k, strength_k * (radio_k + contrast_k) / (strength_k - contrast_k)])

    def miss(spin_k: FloatArray, contrast: FloatArray, strength: FloatArray, radio: FloatArray) -> FloatArray:
        return np.asarray(-(spin_k - radio) * np.expm1(-strength / spin_k) - contrast)

    # Twice as wide as proven: rounding may put the root on the wrong side of an end.
    bracket = (ends_k.min(axis=0) / 2, ends_k.max(axis=0) * 2)
    found = elementwise.find_root(miss, bracket, args=(contrast_k, strength_k, radio_k))
    if not np.all(found.success):
        raise RuntimeError(f"spin temperature: {np.count_nonzero(~found.success)} roots not found")
    return np.asarray(found.x)


def coupled_spin_temperature_k(
    radio_temperature_k: ArrayLike, gas_temperature_k: ArrayLike, coupling: ArrayLike
) -> FloatArray:
    """Spin temperature of gas coupled to its motion: 1/T_S = (1/T_R + x/T_K)/(1 + x), K.

    Field 1958, Proc. IRE 46, 240; x is the sum of the coupling by collisions and by Lyman-alpha, whose colour
    temperature is taken as that of the gas.
    """
    radio, gas, x = (np.asarray(a, dtype=float) for a in (radio_temperature_k, gas_temperature_k, coupling))
    return np.asarray((1 + x) / (1 / radio + x / gas))


def coupling_of_spin(
    radio_temperature_k: ArrayLike, gas_temperature_k: ArrayLike, spin_temperature_k: ArrayLike
) -> FloatArray:
    """Coupling x that holds the spins at a temperature: the inverse of `coupled_spin_temperature_k`.

    Parameters
    ----------
    radio_temperature_k, gas_temperature_k : array_like[...]
        Radio background and gas, K.
    spin_temperature_k : array_like[...]
        Spin temperature, K; may be infinite or NaN.

    Returns
    -------
    ndarray[...]
        x, from 0 (spins at the background) up. NaN where the spins lie outside the two temperatures, where no
        coupling puts them, and where they are at that of the gas.
    """
    radio, gas, spin = np.broadcast_arrays(
        *(np.asarray(a, dtype=float) for a in (radio_temperature_k, gas_temperature_k, spin_temperature_k))
    )
    between = ((gas < spin) & (spin <= radio)) | ((radio <= spin) & (spin < gas))
    x = np.full(spin.shape, np.nan)
    x[between] = (1 / spin[between] - 1 / radio[between]) / (1 / gas[between] - 1 / spin[between])
    return x
