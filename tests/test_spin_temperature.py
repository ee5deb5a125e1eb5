"""Spin temperature from brightness, and from coupling: inverses, ends, and limits."""

from __future__ import annotations

import numpy as np
import pytest

from sims.cosmology import TABLE_COSMOLOGY
from sims.errors import InputError
from sims.hydrogen import brightness_k, cmb_temperature_k, optical_depth
from sims.spin_temperature import coupled_spin_temperature_k, coupling_of_spin, spin_temperature_k

REDSHIFT = np.array([6.0, 12.0, 17.0, 27.0, 80.0])[:, np.newaxis]


@pytest.mark.parametrize("neutral", [1.0, 0.3, 1e-3])
@pytest.mark.parametrize("excess", [1.0, 40.0])
def test_round_trip_from_spin_temperature(neutral: float, excess: float) -> None:
    spin_k = np.geomspace(0.5, 5e3, 300)
    radio_k = excess * cmb_temperature_k(REDSHIFT, TABLE_COSMOLOGY)
    shown_k = brightness_k(REDSHIFT, spin_k, radio_k, neutral, TABLE_COSMOLOGY)
    found_k = spin_temperature_k(REDSHIFT, shown_k, radio_k, neutral, TABLE_COSMOLOGY)
    # 1e-10: a rounding of 1e-16 in brightness is one of 1e-16 T_S/T_R near saturation, and of T_R/T_S near black:
    # 300 and 10^4 times as much here.
    np.testing.assert_allclose(found_k, np.broadcast_to(spin_k, found_k.shape), rtol=1e-10)


def test_round_trip_from_brightness() -> None:
    radio_k = cmb_temperature_k(REDSHIFT, TABLE_COSMOLOGY)
    share = np.linspace(0.001, 0.999, 200)
    darkest = -radio_k / (1 + REDSHIFT)
    hottest = optical_depth(REDSHIFT, 1.0, 1.0, TABLE_COSMOLOGY) / (1 + REDSHIFT)
    given_k = darkest + share * (hottest - darkest)
    spin_k = spin_temperature_k(REDSHIFT, given_k, radio_k, 1.0, TABLE_COSMOLOGY)
    # 1e-13 of the range of brightness: rounding.
    np.testing.assert_allclose(
        brightness_k(REDSHIFT, spin_k, radio_k, 1.0, TABLE_COSMOLOGY), given_k, rtol=1e-10, atol=3e-13
    )
    assert np.all(np.diff(spin_k, axis=-1) > 0)


def test_no_brightness_is_the_background_itself() -> None:
    np.testing.assert_allclose(spin_temperature_k(17.0, 0.0, 49.0, 1.0, TABLE_COSMOLOGY), 49.0, rtol=1e-14)  # rounding


def test_ends_of_what_a_spin_temperature_can_show() -> None:
    hottest_k = optical_depth(17.0, 1.0, 1.0, TABLE_COSMOLOGY) / 18
    darkest_k = -49.0 / 18
    given = np.array(
        [1.001 * darkest_k, darkest_k, 0.9997 * darkest_k, 0.999 * hottest_k, hottest_k, 1.001 * hottest_k]
    )
    found = spin_temperature_k(17.0, given, 49.0, 1.0, TABLE_COSMOLOGY)
    np.testing.assert_array_equal(np.isnan(found), [True, True, False, False, False, False])
    np.testing.assert_array_equal(np.isinf(found), [False, False, False, False, True, True])
    # Almost black gas is thick and shows its temperature, T_S = T_R + (1 + z) dT_b: the optical depth is above 40.
    np.testing.assert_allclose(found[2], 0.0003 * 49, rtol=1e-9)
    # Almost saturated gas is thin: 1 - dT_b/saturation = T_R/T_S, to the optical depth, 1.4e-5 of T_R/T_S here.
    np.testing.assert_allclose(found[3], 1000 * 49.0, rtol=0.02)


def test_thin_gas_follows_the_linear_relation() -> None:
    neutral = 1e-6
    strength_k = optical_depth(17.0, 1.0, neutral, TABLE_COSMOLOGY) / 18
    # In the thin limit dT_b = strength (1 - T_R/T_S).
    found = spin_temperature_k(17.0, strength_k * (1 - 49.0 / 7.0), 49.0, neutral, TABLE_COSMOLOGY)
    np.testing.assert_allclose(found, 7.0, rtol=1e-6)  # half the optical depth, 5e-8, times T_R/T_S at most


def test_bad_input_is_refused_and_named_at_once() -> None:
    with pytest.raises(InputError) as caught:
        spin_temperature_k(17.0, np.nan, 0.0, 0.0, TABLE_COSMOLOGY)
    assert len(caught.value.problems) == 3


def test_coupling_and_spin_temperature_are_inverse_and_have_their_limits() -> None:
    coupling = np.geomspace(1e-4, 1e4, 50)
    for gas_k in (7.0, 300.0):
        spin_k = coupled_spin_temperature_k(49.0, gas_k, coupling)
        # 1e-10: the spins come within 1e-4 of either end, which costs four digits of sixteen, twice.
        np.testing.assert_allclose(coupling_of_spin(49.0, gas_k, spin_k), coupling, rtol=1e-10)
    np.testing.assert_allclose(coupled_spin_temperature_k(49.0, 7.0, 1e12), 7.0, rtol=1e-11)
    assert coupled_spin_temperature_k(49.0, 7.0, 0.0) == pytest.approx(49.0, rel=1e-15)
    assert coupling_of_spin(49.0, 7.0, 49.0) == 0.0


def test_no_coupling_puts_the_spins_outside_the_two_temperatures() -> None:
    outside = [6.9, 7.0, 49.1, np.inf, np.nan]
    assert np.all(np.isnan(coupling_of_spin(49.0, 7.0, outside)))
