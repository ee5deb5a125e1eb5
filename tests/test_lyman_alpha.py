"""Lyman-alpha coupling from constants, against published coefficients and the transfer equation itself."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad

from sims import lyman_alpha
from sims.constants import CMB_TEMPERATURE_K, SPEED_OF_LIGHT_M_PER_S
from sims.cosmology import TABLE_COSMOLOGY


def test_coefficient_of_the_coupling() -> None:
    # x_alpha = 1.81e11 S J/(1 + z), Furlanetto, Oh and Briggs 2006, with A_10 = 2.85e-15 /s; ours is 2.8843e-15.
    published = 1.81e11 * 2.85e-15 / 2.8843e-15
    # 0.5 %: rounding of the published figure to three digits.
    np.testing.assert_allclose(lyman_alpha.lyman_alpha_coupling(1.0, CMB_TEMPERATURE_K), published, rtol=5e-3)


def test_oscillator_strength_and_rate_are_of_one_line() -> None:
    # A_21 = 8 pi^2 e^2 f g_1/(4 pi eps_0 m_e c lambda^2 g_2) = 8 pi sigma/lambda^2 (g_1/g_2 = 1/3).
    rate = 8 * np.pi * lyman_alpha.INTEGRATED_M2_HZ / lyman_alpha.LYMAN_ALPHA_M**2 / 3
    np.testing.assert_allclose(rate, lyman_alpha.LYMAN_ALPHA_A21_PER_S, rtol=2e-4)  # rounding of the two in the tables
    np.testing.assert_allclose(SPEED_OF_LIGHT_M_PER_S / lyman_alpha.LYMAN_ALPHA_M, 2.466e15, rtol=1e-4)


def test_intensity_and_coupling_are_inverse() -> None:
    coupling = np.geomspace(1e-4, 1e3, 20)
    intensity = lyman_alpha.lyman_alpha_intensity(coupling, 49.0)
    np.testing.assert_allclose(lyman_alpha.lyman_alpha_coupling(intensity, 49.0), coupling, rtol=1e-14)  # rounding


@pytest.mark.parametrize("gas_k", [5.0, 10.0, 20.0, 100.0])
def test_correction_solves_the_transfer_of_light_in_the_wings(gas_k: float) -> None:
    depth = float(lyman_alpha.lyman_alpha_depth(20.0, 1.0, TABLE_COSMOLOGY))
    alpha = float(lyman_alpha.recoil_strength(gas_k, depth))
    # d(J)/dx by diffusion, recoil and expansion (Rybicki 2006, ApJ 647, 709) leaves 1 - S = 2 alpha int exp(-2 alpha s
    # - s^3) ds at the centre of a line with wings a/(pi x^2) (integrated by hand).
    gap = 2 * alpha * quad(lambda s: np.exp(-2 * alpha * s - s**3), 0, np.inf)[0]
    # The exponential is right to first order in alpha; its second-order term is off by 0.21 alpha^2.
    assert abs(lyman_alpha.scattering_correction(gas_k, depth) - (1 - gap)) < 0.25 * alpha**2


@pytest.mark.parametrize("gas_k", [10.0, 30.0, 100.0])
def test_correction_agrees_with_a_published_numerical_solution(gas_k: float) -> None:
    depth = lyman_alpha.lyman_alpha_depth(20.0, 1.0, TABLE_COSMOLOGY)
    # Hirata 2006, MNRAS 367, 259, the part of his fit that does not depend on spin exchange (from memory).
    xi = np.cbrt(1e-7 * depth) * gas_k ** (-2 / 3)
    fit = 1 / (1 + 2.98394 * xi + 1.53583 * xi**2 + 3.85289 * xi**3)
    # 2 %: the wings stand for the whole line here.
    np.testing.assert_allclose(lyman_alpha.scattering_correction(gas_k, depth), fit, rtol=0.02)


def test_hot_or_thin_gas_does_not_dim_the_line() -> None:
    assert lyman_alpha.scattering_correction(1e6, 1e6) > 0.999
    assert lyman_alpha.scattering_correction(10.0, 0.0) == 1.0
