"""Collision rates held to what was published apart from their tables, and the coupling that they give."""

from __future__ import annotations

from importlib import resources

import numpy as np
import pytest

from sims.collisions import (
    LINE_TEMPERATURE_K,
    PARTNERS,
    Partner,
    collision_rate_cm3_per_s,
    collisional_coupling,
    rate_table,
)
from sims.constants import BOLTZMANN_J_PER_K, CMB_TEMPERATURE_K, PLANCK_J_S
from sims.cosmology import HYDROGEN_ATOM_KG, TABLE_COSMOLOGY
from sims.errors import InputError
from sims.hydrogen import electron_fraction, gas_temperature_k

BOHR_M = 5.29177210544e-11  # CODATA 2022
ELECTRON_KG = 9.1093837139e-31  # CODATA 2022


# From memory: Zygelman 2005, ApJ 622, 1356, table 2; Furlanetto and Furlanetto 2007, MNRAS 374, 547, table 1, and
# MNRAS 379, 130, table 1. Temperature, K, and rate, cm^3/s.
PUBLISHED: dict[Partner, list[tuple[float, float]]] = {
    "hydrogen": [(1, 1.38e-13), (10, 2.88e-12), (30, 3.67e-11), (100, 1.19e-10), (300, 2.09e-10), (1000, 3.31e-10)],
    "electron": [(1, 2.39e-10), (10, 7.46e-10), (100, 2.26e-9), (1000, 5.92e-9), (10000, 8.37e-9)],
    "proton": [(1, 4.028e-10), (10, 3.699e-10), (100, 3.379e-10), (1000, 7.051e-10), (10000, 1.695e-9)],
}


@pytest.mark.parametrize("partner", PARTNERS)
def test_rates_are_those_of_the_tables(partner: Partner) -> None:
    temperature_k, rate = np.array(PUBLISHED[partner]).T
    # 1e-12: the curve passes through its rows; rounding of log and exp.
    np.testing.assert_allclose(collision_rate_cm3_per_s(partner, temperature_k), rate, rtol=1e-12)


def test_the_file_says_that_its_values_are_from_memory() -> None:
    text = resources.files("sims").joinpath("data", "collision_rates.csv").read_text(encoding="utf-8")
    assert "FROM MEMORY" in text.partition("partner,")[0]


def test_hydrogen_rate_follows_a_published_fit() -> None:
    temperature_k = np.geomspace(10, 300, 40)
    # Kuhlen, Madau and Montgomery 2006, ApJ 637, L1: 3.1e-11 T^0.357 exp(-32 K/T) cm^3/s above 10 K (from memory).
    fit = 3.1e-11 * temperature_k**0.357 * np.exp(-32 / temperature_k)
    # 7 %: the fit is one of two parameters over a factor of 70; it is worst at 15 K.
    np.testing.assert_allclose(collision_rate_cm3_per_s("hydrogen", temperature_k), fit, rtol=0.07)


def test_electron_rate_follows_a_published_fit_to_older_cross_sections() -> None:
    temperature_k = np.geomspace(1, 1e4, 60)
    # Liszt 2001, A&A 371, 698, to the rates of Smith 1966 (from memory); Furlanetto and Furlanetto 2007 find theirs
    # within some per cent of them.
    decade = np.log10(temperature_k)
    fit = 10 ** (-9.607 + 0.5 * decade * np.exp(-(decade**4.5) / 1800))
    np.testing.assert_allclose(collision_rate_cm3_per_s("electron", temperature_k), fit, rtol=0.07)


def test_slow_electrons_scatter_as_the_scattering_lengths_say() -> None:
    # s waves alone: cross-section pi (a_t - a_s)^2/4 and the mean speed (8 k T/(pi m))^(1/2). Scattering lengths of
    # electrons on hydrogen: 5.965 and 1.769 Bohr radii (Schwartz 1961, Phys. Rev. 124, 1468).
    cross_section_m2 = np.pi / 4 * ((5.965 - 1.769) * BOHR_M) ** 2
    speed_m_per_s = np.sqrt(8 * BOLTZMANN_J_PER_K * 1.0 / (np.pi * ELECTRON_KG))
    # 2 %: the next order is k a_0 times the polarisability over the length, some per cent of k a_0 (k a_0 = 0.003).
    np.testing.assert_allclose(
        collision_rate_cm3_per_s("electron", 1.0), 1e6 * cross_section_m2 * speed_m_per_s, rtol=0.02
    )


def test_slow_protons_are_captured_as_ions_are() -> None:
    # Langevin 1905: an ion is captured at the rate 2 pi (alpha e^2/(4 pi eps_0)/mu)^(1/2), the polarisability alpha
    # being 4.5 cubic Bohr radii. The electron leaves with either proton equally often, and with the new one has F = 0
    # one time in four.
    hartree_m3_kg_per_s2 = PLANCK_J_S**2 / (4 * np.pi**2 * ELECTRON_KG * BOHR_M)
    capture_m3_per_s = 2 * np.pi * np.sqrt(4.5 * BOHR_M**3 * hartree_m3_kg_per_s2 / (HYDROGEN_ATOM_KG / 2))
    # The classical rate is the limit of many partial waves at low energy. The quantum one swings about it where they
    # are few (35 % below 10 K), is near it from 10 to 100 K (15 %), and rises where impact parameters outgrow capture.
    for low_k, high_k, within in ((1, 10, 0.35), (10, 100, 0.15), (100, 200, 0.25)):
        rate = collision_rate_cm3_per_s("proton", np.geomspace(low_k, high_k, 20))
        np.testing.assert_allclose(rate, 1e6 * capture_m3_per_s / 8, rtol=within)


@pytest.mark.parametrize("partner", PARTNERS)
def test_rates_are_smooth_between_rows(partner: Partner) -> None:
    temperature_k, rate = rate_table(partner)
    kept = np.ones(len(rate), dtype=bool)
    kept[1:-1:2] = False
    skipped = np.exp(np.interp(np.log(temperature_k), np.log(temperature_k[kept]), np.log(rate[kept])))
    # 25 %: straight lines over twice the spacing. A slip in a digit of any one row would show as more.
    warm = temperature_k >= (10 if partner == "hydrogen" else 1)
    np.testing.assert_allclose(rate[warm], skipped[warm], rtol=0.25)


def test_coupling_is_the_ratio_of_collisions_to_radiation() -> None:
    redshift, gas_k, radio_k, density_per_cm3 = 50.0, 50.0, 139.0, TABLE_COSMOLOGY.hydrogen_per_m3(50.0) / 1e6
    # Detailed balance by hand: de-excitation by collision over A_10 k T_R/(h f), the rate stimulated by the background.
    expected = density_per_cm3 * 6.86e-11 / (2.8843e-15 * radio_k / LINE_TEMPERATURE_K)
    # 1e-10: rounding; no electrons here.
    np.testing.assert_allclose(
        collisional_coupling(redshift, gas_k, 0.0, radio_k, TABLE_COSMOLOGY), expected, rtol=1e-10
    )
    np.testing.assert_allclose(LINE_TEMPERATURE_K, 0.068, rtol=5e-3)  # 0.068 K: Furlanetto, Oh and Briggs 2006


def test_collisions_let_go_of_the_gas_between_redshift_60_and_80() -> None:
    redshift = np.array([30.0, 60.0, 80.0, 150.0])
    radio_k = CMB_TEMPERATURE_K * (1 + redshift)
    x_c = collisional_coupling(
        redshift, gas_temperature_k(redshift), electron_fraction(redshift), radio_k, TABLE_COSMOLOGY
    )
    # Furlanetto, Oh and Briggs 2006: in gas of mean density x_c falls through 1 near redshift 70.
    assert np.all(np.diff(x_c) > 0)
    assert x_c[1] < 1 < x_c[2]
    assert x_c[0] < 0.1


def test_what_lies_outside_the_tables_is_refused() -> None:
    for bad in (0.99, 10001.0, np.nan):
        with pytest.raises(InputError, match="outside the collision rates"):
            collision_rate_cm3_per_s("proton", [10.0, bad])
    with pytest.raises(InputError, match="muon"):
        collision_rate_cm3_per_s("muon", 10.0)  # type: ignore[arg-type]
