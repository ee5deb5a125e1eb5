"""The 21-cm line: gas history, optical depth, brightness, and the coldest gas that standard cooling allows.

It stands at the root of the signal side: `sims.trough` and the limits of `reduce` ask it what the gas can do. The
history of the gas without sources is a table computed once (`sims/data/gas_history.csv`; its header says how).

Temperatures are thermodynamic, the cosmic microwave background's included: the line equation below is linear in them,
and turning every one into a Rayleigh-Jeans brightness would take the same h f / 2k off each.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from importlib import resources
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import CubicSpline

from sims.constants import (
    BOLTZMANN_J_PER_K,
    CMB_TEMPERATURE_K,
    EINSTEIN_A10_PER_S,
    LINE_21CM_MHZ,
    PLANCK_J_S,
    SPEED_OF_LIGHT_M_PER_S,
)
from sims.errors import InputError, raise_if_any

GRAVITATION_M3_PER_KG_S2 = 6.67430e-11  # CODATA 2018
MEGAPARSEC_M = 3.0856775814913673e22  # IAU 2015 Resolution B2 (parsec), with the au of IAU 2012
HYDROGEN_ATOM_KG = 1.00782503223 * 1.66053906660e-27  # NIST atomic weights (AME2016); CODATA 2018 unit
STEFAN_BOLTZMANN_W_PER_M2_K4 = 5.670374419e-8  # CODATA 2018 (exact)
ELECTRONVOLT_J = 1.602176634e-19  # SI Brochure, 9th edition (exact)


@dataclass(frozen=True)
class Cosmology:
    """A flat universe of baryons, cold dark matter, photons, three neutrinos and a cosmological constant.

    Parameters
    ----------
    hubble_km_s_mpc : float
        Hubble constant, km/s/Mpc.
    baryon_density : float
        Omega_b h^2.
    cold_dark_matter_density : float
        Omega_c h^2, without neutrinos.
    helium_mass_fraction : float
        Helium share of the baryon mass.
    cmb_temperature_k : float
        Temperature of the cosmic microwave background today, K.
    neutrino_number : float
        Effective number of neutrinos, in three equal species.
    neutrino_mass_ev : float
        Mass of one of the three, eV; the other two have none.
    """

    hubble_km_s_mpc: float
    baryon_density: float
    cold_dark_matter_density: float
    helium_mass_fraction: float
    cmb_temperature_k: float
    neutrino_number: float
    neutrino_mass_ev: float

    def photon_density(self) -> float:
        """Omega_gamma h^2, from the Stefan-Boltzmann law."""
        mass_kg_per_m3 = 4 * STEFAN_BOLTZMANN_W_PER_M2_K4 * self.cmb_temperature_k**4 / SPEED_OF_LIGHT_M_PER_S**3
        return mass_kg_per_m3 / _density_unit_kg_per_m3()

    def neutrino_density(self, redshift: ArrayLike) -> NDArray[np.float64]:
        """Omega_nu h^2 rho(z)/rho(0): the neutrinos at each redshift, in units of today's critical density over h^2.

        The massive species follows the fit of Komatsu et al. 2011, ApJS 192, 18, eq. 26; H(z) with it keeps to 2e-5
        of CAMB's exact integral.
        """
        stretch = 1.0 + np.asarray(redshift, dtype=float)
        share = self.neutrino_number / 3
        temperature_k = self.cmb_temperature_k * (4 / 11) ** (1 / 3) * share**0.25 * stretch
        mass_over_temperature = self.neutrino_mass_ev * ELECTRONVOLT_J / (BOLTZMANN_J_PER_K * temperature_k)
        massive = (1 + (0.3173 * mass_over_temperature) ** 1.83) ** (1 / 1.83)
        one_massless = 7 / 8 * (4 / 11) ** (4 / 3) * share * self.photon_density()
        return np.asarray(one_massless * (2 + massive) * stretch**4)

    def hubble_per_s(self, redshift: ArrayLike) -> NDArray[np.float64]:
        """Expansion rate, 1/s.

        Radiation is kept: photons and neutrinos left out make H(z) 0.6 % low at redshift 30 and 12 % low at 1000.
        """
        stretch = 1.0 + np.asarray(redshift, dtype=float)
        cold = self.baryon_density + self.cold_dark_matter_density
        photons = self.photon_density()
        total_today = (self.hubble_km_s_mpc / 100) ** 2
        vacuum = total_today - cold - photons - self.neutrino_density(0.0)
        density = cold * stretch**3 + photons * stretch**4 + self.neutrino_density(redshift) + vacuum
        return np.asarray(1e5 / MEGAPARSEC_M * np.sqrt(density))

    def hydrogen_per_m3(self, redshift: ArrayLike) -> NDArray[np.float64]:
        """Hydrogen nuclei in a cubic metre of proper volume."""
        hydrogen_kg_per_m3 = self.baryon_density * (1 - self.helium_mass_fraction) * _density_unit_kg_per_m3()
        return np.asarray(hydrogen_kg_per_m3 / HYDROGEN_ATOM_KG * (1.0 + np.asarray(redshift, dtype=float)) ** 3)


# Rounded from Planck Collaboration 2020, A&A 641, A6 (one neutrino of 0.06 eV, as in its baseline); cosmic microwave
# background from Fixsen 2009; neutrino number from Bennett et al. 2021, JCAP 04, 073. The table was made with these.
TABLE_COSMOLOGY = Cosmology(
    hubble_km_s_mpc=67.4,
    baryon_density=0.0224,
    cold_dark_matter_density=0.120,
    helium_mass_fraction=0.245,
    cmb_temperature_k=CMB_TEMPERATURE_K,
    neutrino_number=3.044,
    neutrino_mass_ev=0.06,
)


def _density_unit_kg_per_m3() -> float:
    """Critical density for a Hubble constant of 100 km/s/Mpc, kg/m^3."""
    return 3 * (1e5 / MEGAPARSEC_M) ** 2 / (8 * np.pi * GRAVITATION_M3_PER_KG_S2)


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


def coldest_brightness_k(frequency_mhz: ArrayLike) -> NDArray[np.float64]:
    """Deepest absorption that gas on standard cooling can show: the floor under every trough.

    The spin temperature is that of the unheated gas, the hydrogen is neutral but for the relic electrons, and the
    cosmic microwave background is the only radio background. The cosmology is `TABLE_COSMOLOGY`; its own error (1 %
    of the floor for 1 % of the baryon density) is not in the figure.

    Parameters
    ----------
    frequency_mhz : array_like[...]
        Frequency, MHz; 1.419 to 236.734.

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
    return brightness_k(
        z, gas_temperature_k(z), cmb_temperature_k(z, TABLE_COSMOLOGY), 1 - electron_fraction(z), TABLE_COSMOLOGY
    )
