"""What the surface reflects and emits, against closed forms."""

from __future__ import annotations

import numpy as np
import pytest

from sims.config import Layer, Surface
from sims.constants import SPEED_OF_LIGHT_M_PER_S, rayleigh_jeans_k
from sims.moon import (
    fresnel_reflectivity,
    layered_reflectivity,
    lowest_cosine,
    reflectivity_table,
    surface_brightness_k,
)
from sims.profile import evaluate_table

COSINE = np.array([0.05, 0.3, 0.7, 1.0])


@pytest.mark.parametrize(("permittivity", "emissivity"), [(2.7, 0.940789), (3.0, 0.928203)])
def test_normal_emissivity(permittivity: float, emissivity: float) -> None:
    """Fresnel at normal incidence, ((n - 1)/(n + 1))^2; figures to six decimals."""
    assert 1.0 - fresnel_reflectivity(np.array(1.0), permittivity) == pytest.approx(emissivity, abs=5e-7)


def test_grazing_incidence_reflects_all_and_vacuum_nothing() -> None:
    assert fresnel_reflectivity(np.array(0.0), 2.7) == pytest.approx(1.0, abs=1e-15)
    assert fresnel_reflectivity(np.array([0.1, 1.0]), 1.0) == pytest.approx(0.0, abs=1e-30)


def test_brewster_angle_leaves_half_of_one_polarisation() -> None:
    """At tan i = n only the wave across the plane returns: (n^2 - 1)^2/(n^2 + 1)^2, half of it unpolarised."""
    n2 = 2.7
    cosine = 1.0 / np.sqrt(1.0 + n2)
    assert fresnel_reflectivity(np.array(cosine), n2) == pytest.approx(0.5 * ((n2 - 1) / (n2 + 1)) ** 2, rel=1e-12)


def test_layer_like_what_lies_under_it_is_no_layer() -> None:
    layer = Layer(thickness_m=3.0, permittivity=2.7)
    got = layered_reflectivity(COSINE, 2.7, layer, np.array([40.0, 90.0]))
    assert got == pytest.approx(np.repeat(fresnel_reflectivity(COSINE, 2.7)[:, None], 2, axis=1), rel=1e-12)


def test_quarter_wave_layer_of_the_mean_index_reflects_nothing() -> None:
    """The antireflection coating (Born and Wolf, section 1.6.4): n1^2 = n2, a quarter wave thick, head on."""
    frequency = np.array([60.0])
    quarter_m = SPEED_OF_LIGHT_M_PER_S / (4 * 60e6 * 1.5)
    layer = Layer(thickness_m=quarter_m, permittivity=1.5**4)
    assert layered_reflectivity(np.array([1.0]), 1.5**2, layer, frequency) == pytest.approx(0.0, abs=1e-25)


def test_half_wave_layer_is_not_seen() -> None:
    half_m = SPEED_OF_LIGHT_M_PER_S / (2 * 60e6 * 1.5)
    layer = Layer(thickness_m=half_m, permittivity=6.0)
    got = layered_reflectivity(np.array([1.0]), 1.5**2, layer, np.array([60.0]))
    assert got[0, 0] == pytest.approx(fresnel_reflectivity(np.array(1.0), 6.0), rel=1e-12)


def test_deep_lossy_layer_hides_what_lies_under_it() -> None:
    layer = Layer(thickness_m=500.0, permittivity=6.0, loss_tangent=0.05)
    got = layered_reflectivity(COSINE, 2.7, layer, np.array([80.0]))[:, 0]
    # exp(-2 k d tan / 2 sqrt(2.7)) ~ e^-69 is left of the wave; the loss itself changes the top face by tan^2.
    assert got == pytest.approx(fresnel_reflectivity(COSINE, 2.7), abs=1e-3)


@pytest.mark.parametrize("layer", [None, Layer(thickness_m=8.0, permittivity=7.0, loss_tangent=0.01)])
def test_table_is_the_function_a_little_beyond_grazing_too(layer: Layer | None) -> None:
    surface = Surface(temperature_k=230.0, permittivity=2.7, reflection=True, layer=layer)
    frequency = np.array([45.0, 110.0])
    table = reflectivity_table(surface, frequency)
    cosine = np.linspace(lowest_cosine(surface), 1.0, 200)
    if layer is None:
        expected = fresnel_reflectivity(cosine, 2.7)[:, None]
    else:
        expected = layered_reflectivity(cosine, 2.7, layer, frequency)
    assert evaluate_table(table, lowest_cosine(surface), 1.0, cosine) == pytest.approx(expected, abs=1e-7)


def test_surface_without_reflection_is_black() -> None:
    surface = Surface(temperature_k=230.0, permittivity=2.7, reflection=False)
    assert not reflectivity_table(surface, np.array([60.0])).any()


def test_temperature_by_latitude_and_frequency() -> None:
    surface = Surface(
        temperature_k=240.0, polar_temperature_k=140.0, temperature_exponent=0.05, temperature_frequency_mhz=100.0,
        permittivity=2.7, reflection=False,
    )  # fmt: skip
    frequency = np.array([50.0, 100.0])
    equator, change = surface_brightness_k(surface, frequency)
    ratio = np.array([0.5**0.05, 1.0])
    assert equator == pytest.approx(rayleigh_jeans_k(240.0 * ratio, frequency), rel=1e-14)
    assert equator + change == pytest.approx(rayleigh_jeans_k(140.0 * ratio, frequency), rel=1e-14)
