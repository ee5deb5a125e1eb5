"""Collisions couple the spins to the gas: rates of de-excitation by atoms, electrons and protons, and x_c.

It follows `sims.hydrogen`; the limits of `reduce` take the coupling by starlight as what collisions leave. The rates
are a table (`sims/data/collision_rates.csv`; its header says whence).
"""

from __future__ import annotations

from functools import cache
from importlib import resources
from typing import Literal, get_args

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import PchipInterpolator

from sims.constants import BOLTZMANN_J_PER_K, EINSTEIN_A10_PER_S, LINE_21CM_MHZ, PLANCK_J_S
from sims.cosmology import Cosmology
from sims.errors import InputError

FloatArray = NDArray[np.float64]
Partner = Literal["hydrogen", "electron", "proton"]

PARTNERS: tuple[Partner, ...] = get_args(Partner)
LINE_TEMPERATURE_K = PLANCK_J_S * LINE_21CM_MHZ * 1e6 / BOLTZMANN_J_PER_K
CM3_PER_M3 = 1e6


@cache
def rate_table(partner: Partner) -> tuple[FloatArray, FloatArray]:
    """Rows of the table for one partner: gas temperature, K (rising), and rate, cm^3/s; read-only arrays."""
    text = resources.files("sims").joinpath("data", "collision_rates.csv").read_text(encoding="utf-8")
    rows = [line.split(",") for line in text.splitlines() if line.startswith(partner + ",")]
    temperature_k, rate = np.array([row[1:] for row in rows], dtype=float).T.copy()
    temperature_k.setflags(write=False)
    rate.setflags(write=False)
    return temperature_k, rate


@cache
def _log_curve(partner: Partner) -> PchipInterpolator:
    temperature_k, rate = rate_table(partner)
    return PchipInterpolator(np.log(temperature_k), np.log(rate))


def collision_rate_cm3_per_s(partner: Partner, gas_temperature_k: ArrayLike) -> FloatArray:
    """Rate at which collisions with one partner take a hydrogen atom from the upper to the lower hyperfine level.

    Parameters
    ----------
    partner : {"hydrogen", "electron", "proton"}
    gas_temperature_k : array_like[...]
        Gas temperature, K; 1 to 10 000.

    Returns
    -------
    ndarray[...]
        Rate coefficient kappa_10, cm^3/s; monotone cubics through the table in log-log.

    Raises
    ------
    InputError
        If the partner is another, or a temperature lies outside the table.
    """
    if partner not in PARTNERS:
        raise InputError(f"partner of collisions: {partner!r} not allowed; one of {', '.join(PARTNERS)}")
    temperature = np.asarray(gas_temperature_k, dtype=float)
    rows = rate_table(partner)[0]
    outside = ~((temperature >= rows[0]) & (temperature <= rows[-1]))
    if np.any(outside):
        raise InputError(
            f"gas temperature: {np.count_nonzero(outside)} of {temperature.size} values, the first "
            f"{temperature[outside].flat[0]:g} K, outside the collision rates, which run from {rows[0]:g} to "
            f"{rows[-1]:g} K"
        )
    return np.asarray(np.exp(_log_curve(partner)(np.log(temperature))))


def collisional_coupling(
    redshift: ArrayLike,
    gas_temperature_k: ArrayLike,
    electron_fraction: ArrayLike,
    radio_temperature_k: ArrayLike,
    cosmology: Cosmology,
) -> FloatArray:
    """Coupling of the spins by collisions in gas of mean density.

    x_c = T_*/(A_10 T_R) sum_i n_i kappa_i with T_* = h f_21/k (Furlanetto, Oh and Briggs 2006, Phys. Rep. 433). Every
    free electron has its proton: the helium is neutral.

    Parameters
    ----------
    redshift : array_like[...]
        Redshift.
    gas_temperature_k : array_like[...]
        Gas temperature, K; 1 to 10 000.
    electron_fraction : array_like[...]
        Free electrons per hydrogen nucleus, 0 to 1.
    radio_temperature_k : array_like[...]
        Radio background, K; above 0.
    cosmology : Cosmology
        Gives the density of hydrogen.

    Returns
    -------
    ndarray[...]
        x_c; the inputs are broadcast.

    Raises
    ------
    InputError
        If a temperature lies outside the table of rates.
    """
    ionised = np.asarray(electron_fraction, dtype=float)
    per_atom = collision_rate_cm3_per_s("hydrogen", gas_temperature_k)
    per_pair = collision_rate_cm3_per_s("electron", gas_temperature_k) + collision_rate_cm3_per_s(
        "proton", gas_temperature_k
    )
    hydrogen_per_cm3 = cosmology.hydrogen_per_m3(redshift) / CM3_PER_M3
    per_s = hydrogen_per_cm3 * ((1 - ionised) * per_atom + ionised * per_pair)
    return np.asarray(LINE_TEMPERATURE_K / (EINSTEIN_A10_PER_S * np.asarray(radio_temperature_k, dtype=float)) * per_s)
