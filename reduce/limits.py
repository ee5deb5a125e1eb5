"""Turning points -> what they say of the gas without a model of its sources, for every draw of a posterior.

It follows `reduce.turning_points` and asks `sims` what the gas can do; `limits_text` puts it on a page. What a draw
does not determine is NaN, what it leaves without bound infinite; both are counted, and no draw is altered.
"""

from __future__ import annotations

from dataclasses import asdict
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from reduce.trough_model import POINTS
from sims.collisions import collisional_coupling
from sims.constants import BOLTZMANN_J_PER_K
from sims.cosmology import ELECTRONVOLT_J, TABLE_COSMOLOGY
from sims.errors import InputError
from sims.hydrogen import coldest_brightness_k, electron_fraction, gas_temperature_k, optical_depth, redshift
from sims.lyman_alpha import lyman_alpha_depth, lyman_alpha_intensity, scattering_correction
from sims.radio_background import CMB_ALONE, RadioBackground
from sims.spin_temperature import coupling_of_spin, spin_temperature_k

FloatArray = NDArray[np.float64]

INTERVALS = {"interval_68": (0.16, 0.84), "interval_95": (0.025, 0.975)}
ONE_SIDED = {"upper_95": 0.95, "lower_95": 0.05}
ADIABATIC_SLOPE = 2.0
NUCLEONS_IN_HELIUM = 4

ASSUMPTIONS = (
    "Standard cosmology (Planck 2018, rounded) and standard cooling, without their own errors; the gas is as dense as "
    "the mean of the universe and neutral but for the electrons left from recombination. Were some of it ionised, the "
    "same depth would need colder gas: limits from above hold.",
    "A turning point's brightness is that of the exact line, (T_S - T_R)/(1 + z) (1 - exp(-tau)).",
    "Upper limits on the gas, in absorption only: the spin temperature lies between those of the gas and of the "
    "background, so T_K <= T_S.",
    "Heat is thermal energy at the turning point above that of unheated gas, 3/2 k (T_K - T_unheated), of all "
    "particles, to a baryon. The limit bounds the heat still there. Heat given earlier, at 1 + z', has since cooled by "
    "((1 + z')/(1 + z))^2 or more, and as much more may have been given then; energy that ionised, excited or escaped "
    "is not counted.",
    "Heating at C takes the coupling as saturated (T_S = T_K): brightness at its lowest then says how fast the gas "
    "cools. Where it is not, the share of adiabatic cooling that heat cancels is larger for any coupling that grows "
    "faster than (1 + z)^(-1/2), as under light that is not fading (thin gas, cosmic microwave background alone): the "
    "share is a lower limit. The rates in K and eV hold for saturated coupling only. The heat includes what Compton "
    "scattering gives, 2 % of the adiabatic rate at redshift 17.",
    "Starlight at B takes the gas as unheated and what collisions leave of the coupling as Lyman-alpha. Warmer gas "
    "would need more light: both are lower limits. The colour of the light is taken as the temperature of the gas.",
    "One-sided limits hold in 95 % of the draws that gas on standard cooling can make; one that bounds nothing counts "
    "as above any limit from above and below any from below.",
)
ASSUMED_OF_EXCESS = "The excess radio background fills the sky evenly and does not heat the gas."


class Gas(NamedTuple):
    """Unheated gas and its background at each turning point."""

    redshift: FloatArray
    radio_k: FloatArray
    unheated_k: FloatArray
    electrons: FloatArray


class Heating(NamedTuple):
    """Heating at a minimum of brightness; arrays over draws.

    Attributes
    ----------
    slope : ndarray[...]
        dln T_K/dln(1 + z), exact in optical depth; 2 for adiabatic cooling.
    slope_thin : ndarray[...]
        The same in the thin limit.
    share : ndarray[...]
        Share of the adiabatic cooling that heat cancels.
    rate_k : ndarray[...]
        Heat as the warming it would be alone, K for each unit of ln(1 + z).
    rate_ev : ndarray[...]
        Heat, eV per baryon per Hubble time.
    """

    slope: FloatArray
    slope_thin: FloatArray
    share: FloatArray
    rate_k: FloatArray
    rate_ev: FloatArray


class Starlight(NamedTuple):
    """Coupling of unheated gas and the light that it takes; arrays over draws.

    Attributes
    ----------
    collisions : ndarray[...]
        Coupling by collisions, x_c.
    coupling : ndarray[...]
        What they leave to Lyman-alpha, x_alpha.
    effective_intensity, intensity : ndarray[...]
        S_alpha J and J, photons / (cm^2 s Hz sr).
    """

    collisions: FloatArray
    coupling: FloatArray
    effective_intensity: FloatArray
    intensity: FloatArray


def gas_at(frequency_mhz: ArrayLike, background: RadioBackground = CMB_ALONE) -> Gas:
    """Unheated gas that is received at each frequency, MHz; `InputError` outside the gas history."""
    z = redshift(frequency_mhz)
    return Gas(z, background.temperature_k(z), gas_temperature_k(z), electron_fraction(z))


def spin_at(gas: Gas, temperature_mk: ArrayLike) -> FloatArray:
    """Spin temperature, K, at each turning point of brightness `temperature_mk`, mK; NaN and inf as its source."""
    brightness_k = np.asarray(temperature_mk, dtype=float) / 1e3
    return spin_temperature_k(gas.redshift, brightness_k, gas.radio_k, 1 - gas.electrons, TABLE_COSMOLOGY)


def kinetic_temperature_max_k(gas: Gas, spin_k: FloatArray) -> FloatArray:
    """Upper limit on the gas temperature, K: the spin temperature in absorption; infinite in emission, NaN as it."""
    return np.where(spin_k >= gas.radio_k, np.inf, spin_k)


def heat_ev_per_baryon(temperature_k: ArrayLike, electrons: ArrayLike) -> FloatArray:
    """Thermal energy of the gas, 3/2 k T for each particle, eV per baryon.

    Parameters
    ----------
    temperature_k : array_like[...]
        Temperature, or a difference of two, K.
    electrons : array_like[...]
        Free electrons per hydrogen nucleus.

    Returns
    -------
    ndarray[...]
        Energy of hydrogen, helium and electrons over the number of nucleons, eV.
    """
    helium = TABLE_COSMOLOGY.helium_per_hydrogen()
    particles = (1 + helium + np.asarray(electrons, dtype=float)) / (1 + NUCLEONS_IN_HELIUM * helium)
    return np.asarray(1.5 * BOLTZMANN_J_PER_K / ELECTRONVOLT_J * np.asarray(temperature_k, dtype=float) * particles)


def heat_max_ev(gas: Gas, spin_k: FloatArray) -> FloatArray:
    """Upper limit on the heat in the gas above standard cooling, eV per baryon.

    Infinite in emission; NaN where the spins are colder than unheated gas, which standard cooling cannot make.
    """
    excess_k = kinetic_temperature_max_k(gas, spin_k) - gas.unheated_k
    return heat_ev_per_baryon(np.where(excess_k >= 0, excess_k, np.nan), gas.electrons)


def heating_at_minimum(gas: Gas, spin_k: FloatArray, background: RadioBackground = CMB_ALONE) -> Heating:
    """Heating that a minimum of brightness needs, with the spins at the temperature of the gas.

    With r = T_R/T_K, q = dln T_R/dln(1 + z), p = 2 - dln H/dln(1 + z), u the optical depth and e = u/(exp(u) - 1), the
    derivative of (T_K - T_R)/(1 + z) (1 - exp(-u)) vanishes for dln T_K/dln(1 + z) =
    [r q - (r - 1) + (r - 1)(p + 1) e]/[1 + (r - 1) e] (derived here). Thin gas has e = 1 and q + p (r - 1)/r; before a
    cosmic microwave background alone and with matter alone in H that is 1 + (r - 1)/(2 r).

    Parameters
    ----------
    gas : Gas
    spin_k : ndarray[...]
        Spin temperature at the minimum, K.
    background : RadioBackground
        That of `gas`.

    Returns
    -------
    Heating
        NaN where the minimum is not in absorption, or is colder than unheated gas.
    """
    usable = (spin_k >= gas.unheated_k) & (spin_k < gas.radio_k)
    kinetic_k = np.where(usable, spin_k, np.nan)
    contrast = gas.radio_k / kinetic_k
    growth = background.log_slope(gas.redshift)
    thinning = 2 - TABLE_COSMOLOGY.hubble_log_slope(gas.redshift)
    depth = optical_depth(gas.redshift, 1.0, 1 - gas.electrons, TABLE_COSMOLOGY) / kinetic_k
    lost = depth / np.expm1(depth)
    slope = contrast * growth - (contrast - 1) * (1 - (thinning + 1) * lost)
    slope /= 1 + (contrast - 1) * lost
    rate_k = (ADIABATIC_SLOPE - slope) * kinetic_k
    return Heating(
        slope,
        growth + thinning * (contrast - 1) / contrast,
        (ADIABATIC_SLOPE - slope) / ADIABATIC_SLOPE,
        rate_k,
        heat_ev_per_baryon(rate_k, gas.electrons),
    )


def starlight_at(gas: Gas, spin_k: FloatArray) -> Starlight:
    """Lyman-alpha coupling of unheated gas, and the intensity that it takes.

    1/T_S = (1/T_R + (x_c + x_alpha)/T_K)/(1 + x_c + x_alpha) with T_K that of unheated gas.

    Parameters
    ----------
    gas : Gas
    spin_k : ndarray[...]
        Spin temperature, K.

    Returns
    -------
    Starlight
        All but the collisions NaN where the spins are not above the temperature of the gas, not below the background,
        or nearer to it than collisions alone bring them.
    """
    collisions = collisional_coupling(gas.redshift, gas.unheated_k, gas.electrons, gas.radio_k, TABLE_COSMOLOGY)
    coupling = coupling_of_spin(gas.radio_k, gas.unheated_k, spin_k) - collisions
    coupling = np.where(coupling >= 0, coupling, np.nan)
    effective = lyman_alpha_intensity(coupling, gas.radio_k)
    depth = lyman_alpha_depth(gas.redshift, 1 - gas.electrons, TABLE_COSMOLOGY)
    return Starlight(collisions, coupling, effective, effective / scattering_correction(gas.unheated_k, depth))


def limits_of(
    frequency_mhz: ArrayLike, temperature_mk: ArrayLike, background: RadioBackground = CMB_ALONE
) -> dict[str, Any]:
    """What the draws of a posterior say of the gas.

    Parameters
    ----------
    frequency_mhz, temperature_mk : array_like[draw, 3]
        B, C and D of each draw, MHz and mK.
    background : RadioBackground
        The cosmic microwave background alone, unless another is asked for.

    Returns
    -------
    dict
        Ready for JSON: ``draws``, ``background`` and ``assumptions``, and ``points`` by letter. Each number there has
        the draws it is ``defined`` and ``undefined`` for, the defined without bound (``unbounded``), ``median``,
        ``interval_68``, ``interval_95`` and the one-sided limits that have a sense. None stands for no number: nothing
        defined, or a quantile without bound. ``counts`` says how many draws fall where a number ends.

    Raises
    ------
    InputError
        If the arrays are not two of one shape [draw, 3] of finite numbers, there is no draw, or a frequency lies
        outside the gas history.
    """
    frequency, temperature = (np.asarray(a, dtype=float) for a in (frequency_mhz, temperature_mk))
    problems = [
        f"{name}: shape {values.shape}, {np.count_nonzero(~np.isfinite(values))} of {values.size} values not finite; "
        f"[draw, {len(POINTS)}] of finite numbers is needed"
        for name, values in (("turning frequency, MHz", frequency), ("turning temperature, mK", temperature))
        if values.ndim != 2 or values.shape[-1] != len(POINTS) or not values.size or not np.all(np.isfinite(values))
    ]
    if not problems and frequency.shape != temperature.shape:
        problems.append(f"turning points: {len(frequency)} draws of frequency, {len(temperature)} of temperature")
    if problems:
        raise InputError(problems)
    return {
        "draws": len(frequency),
        "background": {**asdict(background), "text": background.describe()},
        "assumptions": [*ASSUMPTIONS, *([ASSUMED_OF_EXCESS] if background.excess_k > 0 else [])],
        "points": {
            point: _point(point, frequency[:, number], temperature[:, number], background)
            for number, point in enumerate(POINTS)
        },
    }


def _point(
    point: str, frequency_mhz: FloatArray, temperature_mk: FloatArray, background: RadioBackground
) -> dict[str, Any]:
    gas = gas_at(frequency_mhz, background)
    spin_k = spin_at(gas, temperature_mk)
    darker = np.isnan(spin_k)
    colder = darker | (spin_k < gas.unheated_k)
    found: dict[str, Any] = {
        "share_colder_than_gas": float(np.mean(temperature_mk / 1e3 < coldest_brightness_k(frequency_mhz))),
        "share_colder_than_gas_under_background": float(np.mean(colder)),
        "counts": {
            "darker_than_any_spin_temperature": int(np.count_nonzero(darker)),
            "colder_than_unheated_gas": int(np.count_nonzero(colder)),
            "in_emission": int(np.count_nonzero(spin_k >= gas.radio_k)),
            "saturated_emission": int(np.count_nonzero(np.isinf(spin_k))),
        },
        "redshift": spread(gas.redshift),
        "spin_temperature_k": spread(spin_k, "upper_95", "lower_95"),
        "kinetic_temperature_max_k": spread(kinetic_temperature_max_k(gas, spin_k), "upper_95"),
        "heat_max_ev_per_baryon": spread(heat_max_ev(gas, spin_k), "upper_95"),
    }
    if point == "C":
        heating = heating_at_minimum(gas, spin_k, background)
        found["cooling_slope"] = spread(heating.slope)
        found["cooling_slope_thin"] = spread(heating.slope_thin)
        for name, values in (
            ("heating_share_of_adiabatic", heating.share),
            ("heating_k_per_log_redshift", heating.rate_k),
            ("heating_ev_per_baryon_per_hubble_time", heating.rate_ev),
        ):
            found[name] = spread(values, "lower_95", unlimited=found["counts"]["in_emission"])
    if point == "B":
        light = starlight_at(gas, spin_k)
        weak = np.isnan(light.coupling) & (spin_k > gas.unheated_k) & (spin_k < gas.radio_k)
        found["counts"]["absorption_weaker_than_by_collisions"] = int(np.count_nonzero(weak))
        found["collisional_coupling"] = spread(light.collisions)
        dark = found["counts"]["absorption_weaker_than_by_collisions"] + found["counts"]["in_emission"]
        for name, values in (
            ("lyman_alpha_coupling", light.coupling),
            ("lyman_alpha_effective_intensity", light.effective_intensity),
            ("lyman_alpha_intensity", light.intensity),
        ):
            found[name] = spread(values, "lower_95", unlimited=dark)
    return found


def spread(values: FloatArray, *one_sided: str, unlimited: int = 0) -> dict[str, Any]:
    """Quantiles of the draws that a number is defined for.

    Parameters
    ----------
    values : ndarray[draw]
        NaN where undefined, infinite where without bound.
    *one_sided : {"upper_95", "lower_95"}
        Limits to add.
    unlimited : int
        Draws among the undefined that leave a positive number free to be as low as it likes: a limit from below
        holds in 95 % of these and the defined together.

    Returns
    -------
    dict
        As in `limits_of`. Quantiles are draws, never between two, so that an infinite one is seen as such.
    """
    defined = values[~np.isnan(values)]
    limited = {"upper_95": defined, "lower_95": np.concatenate([np.full(unlimited, -np.inf), defined])}
    return {
        "defined": int(defined.size),
        "undefined": int(values.size - defined.size),
        "unbounded": int(np.count_nonzero(np.isinf(defined))),
        "median": _quantile(defined, 0.5),
        **{name: [_quantile(defined, level) for level in levels] for name, levels in INTERVALS.items()},
        **{name: _quantile(limited[name], ONE_SIDED[name]) for name in one_sided},
    }


def _quantile(values: FloatArray, level: float) -> float | None:
    if not values.size:
        return None
    value = float(np.quantile(values, level, method="inverted_cdf"))
    return value if np.isfinite(value) else None
