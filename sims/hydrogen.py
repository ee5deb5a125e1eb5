"""The 21-cm line: gas history, optical depth, brightness, and the coldest gas that standard cooling allows.

It follows `sims.cosmology` on the signal side: `sims.trough` and the limits of `reduce` ask it what the gas can do. The
history of the gas without sources is a table computed once (`sims/data/gas_history.csv`; its header says how).

Temperatures are thermodynamic, the cosmic microwave background's included: the line equation below is linear in them,
and turning every one into a Rayleigh-Jeans brightness would take the same h f / 2k off each.
"""

from __future__ import annotations

from functools import cache
from importlib import resources
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import CubicSpline

from sims.constants import (
    BOLTZMANN_J_PER_K,
    EINSTEIN_A10_PER_S,
    LINE_21CM_MHZ,
    PLANCK_J_S,
    SPEED_OF_LIGHT_M_PER_S,
)
from sims.cosmology import TABLE_COSMOLOGY, Cosmology
from sims.errors import InputError, raise_if_any
from sims.radio_background import CMB_ALONE, RadioBackground


class GasHistory(NamedTuple):
    """The table: the gas without sources, computed with CAMB."""

    redshift: NDArray[np.float64]
    gas_temperature_k: NDArray[np.float64]
    electron_fraction: NDArray[np.float64]


@cache
def gas_history() -> GasHistory:
    """Read the table of the gas without sources.

    Returns
    -------
    GasHistory
        Redshift (rising), gas temperature, K, and free electrons per hydrogen nucleus; read-only arrays.
    """
    text = resources.files("sims").joinpath("data", "gas_history.csv").read_text(encoding="utf-8")
    rows = [line for line in text.splitlines() if not line.startswith("#")]
    columns = np.array([row.split(",") for row in rows[1:]], dtype=float).T.copy()
    columns.setflags(write=False)
    return GasHistory(*columns)


@cache
def _log_splines() -> tuple[CubicSpline, CubicSpline]:
    table = gas_history()
    stretch_log = np.log1p(table.redshift)
    return (
        CubicSpline(stretch_log, np.log(table.gas_temperature_k)),
        CubicSpline(stretch_log, np.log(table.electron_fraction)),
    )


def _checked_redshift(redshift: ArrayLike) -> NDArray[np.float64]:
    z = np.asarray(redshift, dtype=float)
    table = gas_history().redshift
    outside = ~((z >= table[0]) & (z <= table[-1]))
    if np.any(outside):
        raise InputError(
            f"redshift: {_some(z[outside])} outside the gas history, which runs from {table[0]:g} to {table[-1]:g} "
            f"({frequency_mhz(table[-1]):.4f} to {frequency_mhz(table[0]):.4f} MHz)"
        )
    return z


def _some(values: NDArray[np.float64]) -> str:
    """First few of the offending values, and how many there are."""
    shown = ", ".join(f"{value:g}" for value in values.ravel()[:5])
    return shown if values.size <= 5 else f"{shown}, ... ({values.size} values)"


def gas_temperature_k(redshift: ArrayLike) -> NDArray[np.float64]:
    """Kinetic temperature of the gas without sources.

    Parameters
    ----------
    redshift : array_like[...]
        Redshift, 5 to 1000.

    Returns
    -------
    ndarray[...]
        Gas temperature, K; a cubic spline in log-log, good to 1e-5 of the table's code.

    Raises
    ------
    InputError
        If a redshift lies outside the table.
    """
    z = _checked_redshift(redshift)
    return np.asarray(np.exp(_log_splines()[0](np.log1p(z))))


def electron_fraction(redshift: ArrayLike) -> NDArray[np.float64]:
    """Free electrons per hydrogen nucleus in the gas without sources; input, accuracy and errors as above."""
    z = _checked_redshift(redshift)
    return np.asarray(np.exp(_log_splines()[1](np.log1p(z))))


def frequency_mhz(redshift: ArrayLike) -> NDArray[np.float64]:
    """Frequency, MHz, at which the 21-cm line of each redshift is received.

    Raises
    ------
    InputError
        If a redshift is negative or not finite.
    """
    z = np.asarray(redshift, dtype=float)
    bad = ~(np.isfinite(z) & (z >= 0))
    if np.any(bad):
        raise InputError(f"redshift: {_some(z[bad])} not allowed; it must be finite and not negative")
    return np.asarray(LINE_21CM_MHZ / (1 + z))


def redshift(frequency_mhz: ArrayLike) -> NDArray[np.float64]:
    """Redshift from which the 21-cm line is received at each frequency, MHz.

    Raises
    ------
    InputError
        If a frequency is not above 0 or lies above that of the line at rest.
    """
    frequency = np.asarray(frequency_mhz, dtype=float)
    bad = ~((frequency > 0) & (frequency <= LINE_21CM_MHZ))
    if np.any(bad):
        raise InputError(
            f"frequency: {_some(frequency[bad])} MHz not allowed; the line is received above 0 and up to "
            f"{LINE_21CM_MHZ:.4f} MHz"
        )
    return np.asarray(LINE_21CM_MHZ / frequency - 1)


def _check_gas(redshift: ArrayLike, spin_temperature_k: ArrayLike, neutral_fraction: ArrayLike) -> None:
    z, spin, neutral = (np.asarray(a, dtype=float) for a in (redshift, spin_temperature_k, neutral_fraction))
    problems = []
    for name, values, good, allowed in (
        ("redshift", z, np.isfinite(z) & (z >= 0), "finite and not negative"),
        ("spin temperature, K", spin, np.isfinite(spin) & (spin > 0), "finite and above 0"),
        ("neutral fraction", neutral, (neutral >= 0) & (neutral <= 1), "between 0 and 1"),
    ):
        if not np.all(good):
            problems.append(f"{name}: {_some(values[~good])} not allowed; it must be {allowed}")
    raise_if_any(problems)


def optical_depth(
    redshift: ArrayLike, spin_temperature_k: ArrayLike, neutral_fraction: ArrayLike, cosmology: Cosmology
) -> NDArray[np.float64]:
    """Optical depth of the mean gas in the 21-cm line.

    tau = 3 h c^3 A_10 x_HI n_H / (32 pi k f_21^2 T_S H(z)) (Furlanetto, Oh and Briggs 2006, Phys. Rep. 433), the
    leading order in h f/(k T_S): the next adds 0.017 K/T_S of it, 0.24 % at 7 K.

    Parameters
    ----------
    redshift : array_like[...]
        Redshift.
    spin_temperature_k : array_like[...]
        Spin temperature, K; positive.
    neutral_fraction : array_like[...]
        Neutral share of the hydrogen, 0 to 1.
    cosmology : Cosmology
        Gives the density of hydrogen and the expansion rate.

    Returns
    -------
    ndarray[...]
        Optical depth; the inputs are broadcast.

    Raises
    ------
    InputError
        If a value is outside its range; lists each variable at fault.
    """
    _check_gas(redshift, spin_temperature_k, neutral_fraction)
    neutral_per_m3 = np.asarray(neutral_fraction, dtype=float) * cosmology.hydrogen_per_m3(redshift)
    line_hz = LINE_21CM_MHZ * 1e6
    strength = 3 * PLANCK_J_S * SPEED_OF_LIGHT_M_PER_S**3 * EINSTEIN_A10_PER_S
    spread = 32 * np.pi * BOLTZMANN_J_PER_K * line_hz**2 * np.asarray(spin_temperature_k, dtype=float)
    return np.asarray(strength * neutral_per_m3 / (spread * cosmology.hubble_per_s(redshift)))


def brightness_k(
    redshift: ArrayLike,
    spin_temperature_k: ArrayLike,
    radio_temperature_k: ArrayLike,
    neutral_fraction: ArrayLike,
    cosmology: Cosmology,
) -> NDArray[np.float64]:
    """Brightness of the line against the radio background, as received today.

    dT_b = (T_S - T_R)/(1 + z) (1 - exp(-tau)) (Furlanetto, Oh and Briggs 2006).

    Parameters
    ----------
    redshift, spin_temperature_k, neutral_fraction, cosmology
        As in `optical_depth`.
    radio_temperature_k : array_like[...]
        Radio background at that redshift, K; `cmb_temperature_k` where there is no other.

    Returns
    -------
    ndarray[...]
        Differential brightness temperature, K; negative in absorption.

    Raises
    ------
    InputError
        If a value is outside its range; lists each variable at fault.
    """
    depth = optical_depth(redshift, spin_temperature_k, neutral_fraction, cosmology)
    contrast_k = np.asarray(spin_temperature_k, dtype=float) - _checked_radio_k(radio_temperature_k)
    return np.asarray(-contrast_k / (1 + np.asarray(redshift, dtype=float)) * np.expm1(-depth))


def linear_brightness_k(
    redshift: ArrayLike,
    spin_temperature_k: ArrayLike,
    radio_temperature_k: ArrayLike,
    neutral_fraction: ArrayLike,
    cosmology: Cosmology,
) -> NDArray[np.float64]:
    """Thin-gas form of `brightness_k` in round numbers, for comparison: 4 to 6 % too deep for the coldest gas.

    27 mK x_HI (Omega_b h^2/0.023) sqrt(0.15/(Omega_m h^2) (1 + z)/10) (1 - T_R/T_S) (Furlanetto, Oh and Briggs 2006).
    Parameters, returned array and errors as in `brightness_k`; Omega_m is that of baryons and cold dark matter.
    """
    _check_gas(redshift, spin_temperature_k, neutral_fraction)
    stretch = 1 + np.asarray(redshift, dtype=float)
    matter = cosmology.baryon_density + cosmology.cold_dark_matter_density
    scale_k = 0.027 * cosmology.baryon_density / 0.023 * np.sqrt(0.15 / matter * stretch / 10)
    contrast = 1 - _checked_radio_k(radio_temperature_k) / np.asarray(spin_temperature_k, dtype=float)
    return np.asarray(scale_k * np.asarray(neutral_fraction, dtype=float) * contrast)


def _checked_radio_k(radio_temperature_k: ArrayLike) -> NDArray[np.float64]:
    radio = np.asarray(radio_temperature_k, dtype=float)
    bad = ~(np.isfinite(radio) & (radio >= 0))
    if np.any(bad):
        raise InputError(f"radio temperature, K: {_some(radio[bad])} not allowed; it must be finite and not negative")
    return radio


def cmb_temperature_k(redshift: ArrayLike, cosmology: Cosmology) -> NDArray[np.float64]:
    """Temperature of the cosmic microwave background at each redshift, K: T_0 (1 + z)."""
    return np.asarray(cosmology.cmb_temperature_k * (1 + np.asarray(redshift, dtype=float)))


def coldest_brightness_k(frequency_mhz: ArrayLike, background: RadioBackground = CMB_ALONE) -> NDArray[np.float64]:
    """Deepest absorption that gas on standard cooling can show: the floor under every trough.

    The spin temperature is that of the unheated gas and the hydrogen is neutral but for the relic electrons. The
    cosmology is `TABLE_COSMOLOGY`; its own error (1 % of the floor for 1 % of the baryon density) is not in the figure.

    Parameters
    ----------
    frequency_mhz : array_like[...]
        Frequency, MHz; 1.419 to 236.734.
    background : RadioBackground
        The cosmic microwave background alone, unless another is given; it is not taken to heat the gas.

    Returns
    -------
    ndarray[...]
        Brightness, K; negative.

    Raises
    ------
    InputError
        If a frequency corresponds to no redshift of the gas history.
    """
    z = _checked_redshift(redshift(frequency_mhz))
    return brightness_k(z, gas_temperature_k(z), background.temperature_k(z), 1 - electron_fraction(z), TABLE_COSMOLOGY)
