"""Starlight couples the spins to the gas: Lyman-alpha intensity <-> coupling x_alpha.

It follows `sims.collisions`; the limits of `reduce` turn what collisions leave into an intensity. Nothing is quoted
that follows from constants.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

from sims.collisions import LINE_TEMPERATURE_K
from sims.constants import BOLTZMANN_J_PER_K, EINSTEIN_A10_PER_S, PLANCK_J_S, SPEED_OF_LIGHT_M_PER_S
from sims.cosmology import HYDROGEN_ATOM_KG, Cosmology

FloatArray = NDArray[np.float64]

ELEMENTARY_CHARGE_C = 1.602176634e-19  # SI Brochure, 9th edition (exact)
ELECTRON_MASS_KG = 9.1093837139e-31  # CODATA 2022
VACUUM_PERMITTIVITY_F_PER_M = 8.8541878188e-12  # CODATA 2022
LYMAN_ALPHA_M = 1.215670e-7  # NIST Atomic Spectra Database, mean of the doublet, vacuum
LYMAN_ALPHA_A21_PER_S = 6.2649e8  # NIST Atomic Spectra Database
LYMAN_ALPHA_OSCILLATOR = 0.41641  # NIST Atomic Spectra Database

# Cross-section integrated over frequency, m^2 Hz: e^2 f/(4 eps_0 m_e c), the pi e^2 f/(m_e c) of Gaussian units.
INTEGRATED_M2_HZ = (
    ELEMENTARY_CHARGE_C**2
    * LYMAN_ALPHA_OSCILLATOR
    / (4 * VACUUM_PERMITTIVITY_F_PER_M * ELECTRON_MASS_KG * SPEED_OF_LIGHT_M_PER_S)
)
CM2_PER_M2 = 1e4


def lyman_alpha_coupling(intensity: ArrayLike, radio_temperature_k: ArrayLike) -> FloatArray:
    """Coupling of the spins by Lyman-alpha photons.

    x_alpha = 4 P T_*/(27 A_10 T_R), with P = 4 pi sigma S_alpha J the scatterings of an atom each second and T_* =
    h f_21/k (Furlanetto, Oh and Briggs 2006, Phys. Rep. 433): 1.78e11 S_alpha J/(1 + z) against the cosmic microwave
    background. They print 1.81e11, having A_10 1.2 % lower.

    Parameters
    ----------
    intensity : array_like[...]
        S_alpha J: photons / (cm^2 s Hz sr) beside the line, times the share of `scattering_correction`.
    radio_temperature_k : array_like[...]
        Radio background, K; above 0.

    Returns
    -------
    ndarray[...]
        x_alpha.
    """
    scatterings_per_s = 4 * np.pi * INTEGRATED_M2_HZ * CM2_PER_M2 * np.asarray(intensity, dtype=float)
    radio_k = np.asarray(radio_temperature_k, dtype=float)
    return np.asarray(4 * scatterings_per_s * LINE_TEMPERATURE_K / (27 * EINSTEIN_A10_PER_S * radio_k))


def lyman_alpha_intensity(coupling: ArrayLike, radio_temperature_k: ArrayLike) -> FloatArray:
    """S_alpha J, photons / (cm^2 s Hz sr), that gives a coupling: the inverse of `lyman_alpha_coupling`."""
    return np.asarray(np.asarray(coupling, dtype=float) / lyman_alpha_coupling(1.0, radio_temperature_k))


def lyman_alpha_depth(redshift: ArrayLike, neutral_fraction: ArrayLike, cosmology: Cosmology) -> FloatArray:
    """Optical depth of the mean gas in Lyman-alpha: sigma lambda n_HI/H(z) (Gunn and Peterson 1965, ApJ 142, 1633)."""
    neutral_per_m3 = np.asarray(neutral_fraction, dtype=float) * cosmology.hydrogen_per_m3(redshift)
    return np.asarray(INTEGRATED_M2_HZ * LYMAN_ALPHA_M * neutral_per_m3 / cosmology.hubble_per_s(redshift))


def scattering_correction(gas_temperature_k: ArrayLike, depth: ArrayLike) -> FloatArray:
    """S_alpha: how far recoil lowers the intensity at the centre of the line below that beside it.

    exp(-2 Gamma(4/3) alpha), alpha = eta (3 a depth/(2 pi))^(1/3), with eta the recoil and a the natural width in
    Doppler widths: the line seen as its wings alone (Chuzhoy and Shapiro 2006, ApJ 651, 1; Furlanetto and Pritchard
    2006, MNRAS 372, 1093). The exchange of spins in scattering is left out: it keeps the colour of the light above
    the temperature of the gas, by some per cent at a few kelvin.

    Parameters
    ----------
    gas_temperature_k : array_like[...]
        Gas temperature, K; above 0.
    depth : array_like[...]
        Optical depth in Lyman-alpha, of `lyman_alpha_depth`.

    Returns
    -------
    ndarray[...]
        Between 0 and 1.
    """
    return np.asarray(np.exp(-2 * math.gamma(4 / 3) * recoil_strength(gas_temperature_k, depth)))


def recoil_strength(gas_temperature_k: ArrayLike, depth: ArrayLike) -> FloatArray:
    """alpha of `scattering_correction`; parameters as there."""
    speed_m_per_s = np.sqrt(2 * BOLTZMANN_J_PER_K * np.asarray(gas_temperature_k, dtype=float) / HYDROGEN_ATOM_KG)
    doppler_hz = speed_m_per_s / LYMAN_ALPHA_M
    recoil = PLANCK_J_S / (LYMAN_ALPHA_M * HYDROGEN_ATOM_KG * speed_m_per_s)
    natural = LYMAN_ALPHA_A21_PER_S / (4 * np.pi * doppler_hz)
    return np.asarray(recoil * np.cbrt(3 * natural * np.asarray(depth, dtype=float) / (2 * np.pi)))
