"""What draws of the turning points say of the gas: closed forms, brute force on the line itself, and honest counts."""

from __future__ import annotations

import json

import numpy as np
import pytest
from numpy.typing import NDArray

from reduce import limits
from reduce.limits_text import COLUMNS, limits_text
from sims.collisions import collisional_coupling
from sims.constants import CMB_TEMPERATURE_K
from sims.cosmology import TABLE_COSMOLOGY
from sims.errors import InputError
from sims.hydrogen import brightness_k, coldest_brightness_k, electron_fraction, frequency_mhz, gas_temperature_k
from sims.radio_background import CMB_ALONE, RadioBackground
from sims.spin_temperature import coupled_spin_temperature_k

FloatArray = NDArray[np.float64]
EXCESS = RadioBackground(excess_k=2.0, index=-2.6)


def _points(redshift: list[float], temperature_mk: list[float], draws: int = 1) -> tuple[FloatArray, FloatArray]:
    return np.tile(frequency_mhz(redshift), (draws, 1)), np.tile(temperature_mk, (draws, 1)).astype(float)


def _shown_mk(gas: limits.Gas, spin_k: FloatArray) -> FloatArray:
    return 1e3 * brightness_k(gas.redshift, spin_k, gas.radio_k, 1 - gas.electrons, TABLE_COSMOLOGY)


@pytest.mark.parametrize("background", [CMB_ALONE, EXCESS])
def test_spin_temperature_round_trip(background: RadioBackground) -> None:
    gas = limits.gas_at(frequency_mhz([28.0, 20.0, 12.0]), background)
    spin_k = np.array([60.0, 12.0, 300.0])
    np.testing.assert_allclose(limits.spin_at(gas, _shown_mk(gas, spin_k)), spin_k, rtol=1e-10)  # rounding


def test_heat_of_a_baryon() -> None:
    # k is 8.617333e-5 eV/K (CODATA 2018). With 0.245 of the mass in helium there are 0.0817 helium nuclei to each of
    # hydrogen, so 1.0817 particles to 1 + 4 x 0.0817 nucleons.
    expected = 1.5 * 8.617333e-5 * 10 * (1 + 0.08171 + 2e-4) / (1 + 4 * 0.08171)
    np.testing.assert_allclose(limits.heat_ev_per_baryon(10.0, 2e-4), expected, rtol=1e-4)  # rounding of 0.08171


def test_a_common_trough_bounds_the_gas_from_above() -> None:
    # Common practice: a trough near -100 mK between redshift 20 and 25.
    for z in (20.0, 22.0, 25.0):
        found = limits.limits_of(*_points([30.0, z, 12.0], [-8.0, -100.0, 15.0], 5))["points"]["C"]
        hottest_k = found["kinetic_temperature_max_k"]["upper_95"]
        # Between unheated gas and the background: this is what seeing it in absorption says.
        assert gas_temperature_k(z) < hottest_k < 0.5 * CMB_TEMPERATURE_K * (1 + z)
        assert 0 < found["heat_max_ev_per_baryon"]["upper_95"] < 1.5e-3
        assert found["share_colder_than_gas"] == 0.0


def test_minus_250_mk_at_redshift_15_is_flagged_as_colder_than_standard_gas() -> None:
    found = limits.limits_of(*_points([30.0, 15.0, 10.0], [-8.0, -250.0, 15.0], 5))
    point = found["points"]["C"]
    assert point["share_colder_than_gas"] == 1.0
    assert point["counts"]["colder_than_unheated_gas"] == 5
    assert point["heat_max_ev_per_baryon"]["upper_95"] is None
    assert point["heating_share_of_adiabatic"]["undefined"] == 5
    assert "! C is colder than standard gas" in limits_text(found)
    # An excess of the background is one way out, and has to be asked for.
    under = limits.limits_of(*_points([30.0, 15.0, 10.0], [-8.0, -250.0, 15.0], 5), background=EXCESS)
    assert under["points"]["C"]["share_colder_than_gas"] == 1.0
    assert under["points"]["C"]["share_colder_than_gas_under_background"] == 0.0
    assert "EXCESS of 2 K today at 78 MHz" in " ".join(limits_text(under).split())
    assert len(under["assumptions"]) == len(found["assumptions"]) + 1


def test_colder_than_gas_is_below_the_floor() -> None:
    rng = np.random.default_rng(5)
    frequency = np.tile(frequency_mhz([28.0, 18.0, 11.0]), (2000, 1))
    temperature_mk = 1e3 * coldest_brightness_k(frequency) * rng.uniform(0.9, 1.1, frequency.shape)
    found = limits.limits_of(frequency, temperature_mk)["points"]
    for number, point in enumerate("BCD"):
        below = np.mean(temperature_mk[:, number] / 1e3 < coldest_brightness_k(frequency[:, number]))
        # By brightness and by spin temperature the same draws: the floor is where T_S = T_K.
        assert found[point]["share_colder_than_gas"] == below
        assert found[point]["counts"]["colder_than_unheated_gas"] == round(2000 * below)


def _slope_at_minimum(kinetic_k: float, redshift: float, background: RadioBackground, neutral: float) -> float:
    """Slope dln T_K/dln(1 + z) for which finite differences of the brightness vanish, by bisection."""
    step = 1e-4

    def rise(slope: float) -> float:
        stretch = np.exp(np.array([step, -step]))
        z = (1 + redshift) * stretch - 1
        shown = brightness_k(z, kinetic_k * stretch**slope, background.temperature_k(z), neutral, TABLE_COSMOLOGY)
        return float(shown[0] - shown[1])

    low, high = -5.0, 10.0
    assert rise(low) * rise(high) < 0
    for _ in range(60):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if rise(low) * rise(middle) > 0 else (low, middle)
    return 0.5 * (low + high)


@pytest.mark.parametrize("background", [CMB_ALONE, EXCESS])
@pytest.mark.parametrize(("redshift", "kinetic_k"), [(15.0, 8.0), (20.0, 12.0), (25.0, 30.0)])
def test_slope_at_a_minimum_is_where_brightness_stands_still(
    redshift: float, kinetic_k: float, background: RadioBackground
) -> None:
    gas = limits.gas_at(frequency_mhz(redshift), background)
    found = limits.heating_at_minimum(gas, np.asarray(kinetic_k), background)
    neutral = float(1 - gas.electrons)
    # 1e-6: the fourth-order terms of brightness in ln(1 + z), about step^2 times a hundred.
    assert found.slope == pytest.approx(_slope_at_minimum(kinetic_k, redshift, background, neutral), abs=1e-6)
    # A millionth of the hydrogen is thin gas: optical depth 1e-7.
    assert found.slope_thin == pytest.approx(_slope_at_minimum(kinetic_k, redshift, background, 1e-6), abs=1e-6)


def test_thin_slope_against_matter_and_the_cosmic_microwave_background_alone() -> None:
    contrast = np.array([2.0, 4.0, 7.0])
    gas = limits.gas_at(frequency_mhz(17.0))
    found = limits.heating_at_minimum(gas, gas.radio_k / contrast)
    # 1 + (r - 1)/(2 r). 0.003: radiation in H(z), half a per cent of it here, takes that much from p.
    np.testing.assert_allclose(found.slope_thin, 1 + (contrast - 1) / (2 * contrast), atol=3e-3)
    # [1 - (r - 1)/(2 r)]/2: 0.375 at r = 2, 0.2857 at r = 7; finite depth adds up to 0.005 (measured here).
    np.testing.assert_allclose(found.share, (1 - (contrast - 1) / (2 * contrast)) / 2, atol=6e-3)
    assert np.all(found.slope < found.slope_thin)


def test_heating_is_what_slows_the_cooling() -> None:
    gas = limits.gas_at(frequency_mhz(20.0))
    found = limits.heating_at_minimum(gas, np.asarray(12.0))
    # Without heat the gas would lose 2 T_K to a unit of ln(1 + z); it loses slope T_K. A Hubble time is that unit.
    assert found.rate_k == pytest.approx((2 - found.slope) * 12.0, rel=1e-14)
    assert found.share * 2 * 12.0 == pytest.approx(found.rate_k, rel=1e-14)
    assert found.rate_ev == pytest.approx(limits.heat_ev_per_baryon(found.rate_k, gas.electrons), rel=1e-14)


@pytest.mark.parametrize("coupling", [0.2, 1.0, 5.0, 50.0])
@pytest.mark.parametrize("growth", [0.0, 0.5, 1.0, 3.0, 10.0])
def test_share_of_heat_is_a_lower_limit_for_coupling_that_grows_and_not_for_one_that_does_not(
    coupling: float, growth: float
) -> None:
    # Thin gas, x = coupling (1 + z)^-growth about redshift 18: the minimum, by bisection on the heating of the gas.
    redshift, kinetic_k, step, neutral = 18.0, 9.0, 1e-4, 1e-6
    radio_k = CMB_TEMPERATURE_K * (1 + redshift)

    def rise(slope: float) -> float:
        stretch = np.exp(np.array([step, -step]))
        radio = radio_k * stretch
        spin = coupled_spin_temperature_k(radio, kinetic_k * stretch**slope, coupling * stretch**-growth)
        shown = brightness_k((1 + redshift) * stretch - 1, spin, radio, neutral, TABLE_COSMOLOGY)
        return float(shown[0] - shown[1])

    low, high = -60.0, 10.0
    assert rise(low) * rise(high) < 0
    for _ in range(60):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if rise(low) * rise(middle) > 0 else (low, middle)
    true_share = (2 - low) / 2
    gas = limits.gas_at(frequency_mhz(redshift))
    spin_k = coupled_spin_temperature_k(radio_k, kinetic_k, coupling)
    stated = 1 - float(limits.heating_at_minimum(gas, np.asarray(spin_k)).slope_thin) / 2
    # 1e-6: finite differences.
    assert (true_share > stated - 1e-6) == (growth >= 0.5)


def test_starlight_gives_back_what_coupled_the_gas() -> None:
    for background in (CMB_ALONE, EXCESS):
        gas = limits.gas_at(frequency_mhz([22.0, 26.0, 30.0]), background)
        x_c = collisional_coupling(gas.redshift, gas.unheated_k, gas.electrons, gas.radio_k, TABLE_COSMOLOGY)
        x_alpha = np.array([0.5, 0.1, 0.02])
        spin_k = coupled_spin_temperature_k(gas.radio_k, gas.unheated_k, x_c + x_alpha)
        found = limits.starlight_at(gas, limits.spin_at(gas, _shown_mk(gas, spin_k)))
        # 1e-9: x = 0.02 is a difference of 1/T_S and 1/T_R that are alike to two digits; rounding through the inverse.
        np.testing.assert_allclose(found.coupling, x_alpha, rtol=1e-9)
        # x_alpha = 1.78e11 S J/(1 + z) against the cosmic microwave background (Furlanetto, Oh and Briggs 2006 with
        # A_10 of 2.8843e-15 /s); any other background takes more light in proportion.
        expected = x_alpha * gas.radio_k / CMB_TEMPERATURE_K / 1.785e11
        np.testing.assert_allclose(found.effective_intensity, expected, rtol=5e-3)  # rounding of 1.81
        assert np.all((found.intensity > found.effective_intensity) & (found.intensity < 2 * found.effective_intensity))


def test_starlight_is_undefined_where_no_light_does_it_and_those_draws_are_counted() -> None:
    z = 28.0
    gas = limits.gas_at(frequency_mhz(z))
    x_c = collisional_coupling(z, gas_temperature_k(z), electron_fraction(z), gas.radio_k, TABLE_COSMOLOGY)
    by_collisions_mk = float(_shown_mk(gas, coupled_spin_temperature_k(gas.radio_k, gas.unheated_k, x_c)))
    floor_mk = 1e3 * float(coldest_brightness_k(frequency_mhz(z)))
    given = [1.05 * floor_mk, 0.9 * floor_mk, 1.1 * by_collisions_mk, 0.9 * by_collisions_mk, 5.0, 200.0, -3000.0]
    frequency = np.tile(frequency_mhz([z, 18.0, 12.0]), (len(given), 1))
    temperature = np.stack([given, np.full(len(given), -90.0), np.full(len(given), 10.0)], axis=1)
    found = limits.limits_of(frequency, temperature)["points"]["B"]
    assert found["counts"] == {
        "darker_than_any_spin_temperature": 1,
        "colder_than_unheated_gas": 2,
        "in_emission": 2,
        "saturated_emission": 1,
        "absorption_weaker_than_by_collisions": 1,
    }
    assert found["spin_temperature_k"]["undefined"] == 1
    assert found["spin_temperature_k"]["unbounded"] == 1
    assert found["kinetic_temperature_max_k"]["unbounded"] == 2
    assert found["lyman_alpha_coupling"]["defined"] == 2
    # Three draws need no light at all, so none is needed in 95 % of them.
    assert found["lyman_alpha_coupling"]["lower_95"] is None


def test_one_sided_limits_count_the_draws_that_bound_nothing() -> None:
    draws = np.concatenate([np.arange(1.0, 91.0), np.full(10, np.inf)])
    found = limits.spread(draws, "upper_95", "lower_95")
    assert (found["defined"], found["undefined"], found["unbounded"]) == (100, 0, 10)
    assert found["upper_95"] is None
    assert found["lower_95"] == 5.0
    assert found["interval_68"] == [16.0, 84.0]
    assert found["interval_95"] == [3.0, None]
    few = limits.spread(np.where(np.isinf(draws), np.nan, draws), "upper_95", "lower_95", unlimited=10)
    assert (few["defined"], few["undefined"]) == (90, 10)
    assert few["upper_95"] == 86.0
    assert few["lower_95"] is None
    nothing = limits.spread(np.full(3, np.nan), "upper_95")
    assert nothing["median"] is None
    assert nothing["upper_95"] is None


def test_a_posterior_goes_into_strict_json_and_onto_a_page() -> None:
    rng = np.random.default_rng(11)
    frequency = np.array([46.0, 64.0, 98.0]) + rng.normal(size=(3000, 3))
    temperature = np.array([-6.0, -105.0, 10.0]) + rng.normal(size=(3000, 3)) * [2.0, 15.0, 15.0]
    found = limits.limits_of(frequency, temperature)
    assert json.loads(json.dumps(found, allow_nan=False)) == found
    page = limits_text(found)
    assert max(len(line) for line in page.splitlines()) <= COLUMNS
    assert page.endswith("\n")
    for words in ("B, redshift", "gas no hotter than", "coupling by Lyman-alpha", "no limit from above", "saturated"):
        assert words in page
    low, high = found["points"]["C"]["spin_temperature_k"]["interval_68"]
    assert low < found["points"]["C"]["spin_temperature_k"]["median"] < high
    # A spread of 15 mK about -105 mK: the interval is that of the exact inverse at -105 -+ 15 mK, to the scatter of the
    # frequencies (1 MHz changes T_R by 1.6 %) and of 3000 draws.
    gas = limits.gas_at(64.0)
    np.testing.assert_allclose([low, high], limits.spin_at(gas, np.array([-120.0, -90.0])), rtol=0.05)


def test_wrong_arrays_are_refused() -> None:
    good_mhz, good_mk = _points([28.0, 18.0, 11.0], [-8.0, -90.0, 10.0], 4)
    with pytest.raises(InputError) as caught:
        limits.limits_of(good_mhz[:, :2], good_mk * np.nan)
    assert len(caught.value.problems) == 2
    with pytest.raises(InputError, match="4 draws of frequency, 3 of temperature"):
        limits.limits_of(good_mhz, good_mk[:3])
    with pytest.raises(InputError, match=r"0 of 0 values not finite"):
        limits.limits_of(good_mhz[:0], good_mk[:0])
    with pytest.raises(InputError, match="outside the gas history"):
        limits.limits_of(good_mhz * 5, good_mk)
