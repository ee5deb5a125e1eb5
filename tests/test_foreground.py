"""Foreground families: exact tangents, known members, published slopes, conditioning."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from reduce.foreground.galaxy_ionosphere import GalaxyIonosphere
from reduce.foreground.log_polynomial import LogPolynomial
from reduce.foreground.power_series import PowerSeries
from reduce.foreground.protocol import Family
from sims.errors import InputError

FREQUENCY_MHZ = np.linspace(40.0, 120.0, 161)
FAMILIES: list[tuple[Family, NDArray[np.float64]]] = [
    (LogPolynomial(5, 40.0, 120.0), np.array([7.5, -1.4, 0.02, 0.005, -0.001])),
    (PowerSeries(5, 2.5, 70.0, 40.0, 120.0), np.array([2000.0, 20.0, -5.0, 1.0, 0.3])),
    (GalaxyIonosphere(6, 2.55, 40.0, 120.0), np.array([-2000.0, 20.0, -5.0, 1.0, 0.3, 0.02])),
]


@pytest.mark.parametrize(("family", "coefficients"), FAMILIES)
def test_tangent_is_the_derivative(family: Family, coefficients: NDArray[np.float64]) -> None:
    tangent = family.basis(FREQUENCY_MHZ, coefficients)
    assert tangent.shape == (161, family.terms)
    # Central difference over h: its error is h^2/6 of the third derivative; here 1e-4 of each unit, so 2e-9 of T,
    # and rounding 1e-16 T/h is 1e-12 T.
    for term in range(family.terms):
        step = np.zeros(family.terms)
        step[term] = 1e-4
        up, down = (
            family.evaluate(FREQUENCY_MHZ, coefficients + step),
            family.evaluate(FREQUENCY_MHZ, coefficients - step),
        )
        scale = family.evaluate(FREQUENCY_MHZ, coefficients).max()
        np.testing.assert_allclose(tangent[:, term], (up - down) / 2e-4, atol=5e-9 * scale)


@pytest.mark.parametrize(("family", "coefficients"), FAMILIES)
def test_start_finds_a_member(family: Family, coefficients: NDArray[np.float64]) -> None:
    member = family.evaluate(FREQUENCY_MHZ, coefficients)
    found = family.start(FREQUENCY_MHZ, member, np.full(161, 1e-6))
    # Rounding of 1e4 K times a condition number of tens.
    np.testing.assert_allclose(family.evaluate(FREQUENCY_MHZ, found), member, rtol=1e-13)
    np.testing.assert_allclose(found, coefficients, rtol=1e-9, atol=1e-10)


@pytest.mark.parametrize(("family", "coefficients"), FAMILIES)
def test_linearity_is_as_declared(family: Family, coefficients: NDArray[np.float64]) -> None:
    doubled = family.evaluate(FREQUENCY_MHZ, 2 * coefficients)
    is_linear = bool(np.allclose(doubled, 2 * family.evaluate(FREQUENCY_MHZ, coefficients), rtol=1e-12))
    assert family.linear == is_linear


def test_galactic_noise_is_a_power_law() -> None:
    """F_am = 52 - 23 log10(f/MHz) dB over 290 K (ITU-R P.372-16 eq. 13): T ~ f^-2.3, two terms and no more."""
    temperature_k = 290.0 * 10 ** (5.2 - 2.3 * np.log10(FREQUENCY_MHZ))
    family = LogPolynomial(3, 40.0, 120.0)
    found = family.start(FREQUENCY_MHZ, temperature_k, np.ones(161))
    log_t, slope, curvature = family.log_derivatives(found, reference_mhz=100.0)
    # Rounding of logarithms of order 10 in fits of condition about 10.
    assert np.exp(log_t) == pytest.approx(290.0 * 10**0.6, rel=1e-12)
    assert slope == pytest.approx(-2.3, abs=1e-12)
    assert curvature == pytest.approx(0.0, abs=1e-11)


def test_power_series_is_its_formula() -> None:
    family = PowerSeries(4, 2.5, 70.0, 40.0, 120.0)
    wanted = np.array([3000.0, -200.0, 50.0, 7.0])
    ratio = FREQUENCY_MHZ / 70.0
    temperature_k = sum(a * ratio ** (-2.5 + k) for k, a in enumerate(wanted))
    found = family.start(FREQUENCY_MHZ, temperature_k, np.ones(161))
    np.testing.assert_allclose(family.evaluate(FREQUENCY_MHZ, found), temperature_k, rtol=1e-13)  # rounding
    np.testing.assert_allclose(family.powers(found), wanted, rtol=1e-9)  # rounding times the condition of the powers


def test_galaxy_and_ionosphere_is_its_formula() -> None:
    family = GalaxyIonosphere(5, 2.5, 40.0, 120.0)
    wanted = np.array([1800.0, -90.0, 12.0, -7.0, 4.0])
    ratio = FREQUENCY_MHZ / np.sqrt(40.0 * 120.0)
    galaxy = ratio**-2.5 * sum(b * np.log(ratio) ** k for k, b in enumerate(wanted[:3]))
    temperature_k = galaxy + wanted[3] * ratio**-4.5 + wanted[4] * ratio**-2
    found = family.start(FREQUENCY_MHZ, temperature_k, np.ones(161))
    np.testing.assert_allclose(family.evaluate(FREQUENCY_MHZ, found), temperature_k, rtol=1e-13)  # rounding
    np.testing.assert_allclose(family.expansion(found), wanted, rtol=1e-8)  # rounding times the condition of the terms


def test_galaxy_and_ionosphere_is_conditioned_and_needs_a_galaxy() -> None:
    family = GalaxyIonosphere(8, 2.5, 40.0, 120.0)
    columns = family.basis(FREQUENCY_MHZ, np.zeros(8)) / FREQUENCY_MHZ[:, None] ** -2.5
    assert scaled_condition(columns) < 20.0  # orthonormal evenly in ln f, here weighed evenly in f
    with pytest.raises(InputError, match="two belong to the ionosphere"):
        GalaxyIonosphere(2, 2.5, 40.0, 120.0)


def scaled_condition(columns: NDArray[np.float64]) -> float:
    return float(np.linalg.cond(columns / np.linalg.norm(columns, axis=0)))


def test_conditioning() -> None:
    """Order 9 and 15 terms stay conditioned; bare powers over the same band do not."""
    coefficients = np.zeros(10)
    coefficients[:2] = 7.5, -1.4
    log_family = LogPolynomial(10, 40.0, 120.0)
    tangent = log_family.basis(FREQUENCY_MHZ, coefficients)
    noise_k = log_family.evaluate(FREQUENCY_MHZ, coefficients) * 1e-5  # radiometer noise follows the sky
    assert scaled_condition(tangent / noise_k[:, None]) < 10.0  # Legendre columns, near orthogonal
    series = PowerSeries(15, 2.5, 70.0, 40.0, 120.0)
    bare = (FREQUENCY_MHZ / 70.0)[:, None] ** (-2.5 + np.arange(15))
    assert (
        scaled_condition(series.basis(FREQUENCY_MHZ, np.zeros(15))) < 100.0
    )  # the weight f^-2.5 costs some orthogonality
    assert scaled_condition(bare) > 1e12  # the reason for the polynomials: less than four digits left


def test_what_a_family_refuses() -> None:
    family = LogPolynomial(3, 40.0, 120.0)
    temperature_k = np.full(161, 100.0)
    temperature_k[[3, 7]] = 0.0, -5.0
    assert [line.split(",")[0] for line in family.problems(FREQUENCY_MHZ, temperature_k)] == [
        "2 temperatures not positive"
    ]
    wide_mhz = np.array([30.0, 50.0])
    for member in (family, PowerSeries(3, 2.5, 70.0, 40.0, 120.0)):
        assert "1 channels outside" in member.problems(wide_mhz, np.array([1.0, 1.0]))[0]
        assert member.problems(FREQUENCY_MHZ, np.full(161, 1.0)) == []


def test_what_is_no_family() -> None:
    with pytest.raises(InputError) as caught:
        LogPolynomial(0, 120.0, 40.0)
    assert len(caught.value.problems) == 2
    with pytest.raises(InputError) as caught:
        PowerSeries(2, float("nan"), 0.0, 40.0, 120.0)
    assert len(caught.value.problems) == 2
