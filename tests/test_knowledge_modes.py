"""Modes of the covariance against derivatives worked out by hand, at a tiny campaign."""

from __future__ import annotations

from pathlib import Path

import healpy as hp
import numpy as np
import pytest
from config_cases import DEMO, load_text, small_with, substituted, with_knowledge
from numpy.typing import NDArray
from scipy import stats

from reduce.binning import bin_of_each_sample, mean_by_bin
from reduce.knowledge_modes import SAMPLES_PER_BIN, KnowledgeModes, engine_runs, knowledge_modes, smooth_ratio, thinned
from sims.campaign import simulate
from sims.config import Config
from sims.constants import CMB_TEMPERATURE_K, rayleigh_jeans_k
from sims.errors import InputError
from sims.frequency import channel_grid, mean_points
from sims.receiver import gain
from sims.sky import sky_from
from sims.vantage import survey_geometry

SPECTRUM_MHZ, INDEX, CURVATURE = 408.0, 2.52, 0.03
# The engine promises 1e-6 K between frequencies; a mode is a difference of two of its runs.
ENGINE_K = 2e-6
KNOWLEDGE = (
    "[knowledge]",
    'sky.zero_level = { distribution = "normal", sd = "100 mK" }',
    'sky.scale = { distribution = "normal", sd = 0.001 }',
    'beam.efficiency = { distribution = "normal", sd = 0.005 }',
    'beam.structure_temperature = { distribution = "normal", sd = "5 K" }',
    'surface.temperature = { distribution = "normal", sd = "10 K" }',
    'receiver.scale = { distribution = "normal", sd = 0.01 }',
    'receiver.offset = { distribution = "normal", sd = "2 K" }',
    'receiver.ripple_fraction = { distribution = "normal", sd = 2e-5 }',
    'receiver.temperature = { distribution = "normal", sd = "5 K" }',
)


def campaign(folder: Path, reflection: bool, *knowledge: str) -> Config:
    """A sky of one spectral index over the whole sphere, so that derivatives have closed forms."""
    pixels = hp.nside2npix(8)
    map_k = 20.0 + 10.0 * np.abs(np.cos(np.arange(pixels) / 50.0))
    hp.write_map(folder / "sky.fits", map_k, coord="G", column_units="K", overwrite=True, dtype=np.float64)
    text = with_knowledge(small_with(("reflection = true", f"reflection = {str(reflection).lower()}")), *knowledge)
    start, end = text.index("[sky]"), text.index("[beam]")
    sky = (
        '[sky]\nkind = "healpix"\nfile = "sky.fits"\nframe = "galactic"\nunit = "K"\nnside = 8\n'
        f'frequency = "{SPECTRUM_MHZ} MHz"\nindex = {INDEX}\ncurvature = {CURVATURE}\n'
        'valid_from = "30 MHz"\nvalid_to = "500 MHz"\n\n'
    )
    return load_text(text[:start] + sky + text[end:], folder)


class Case:
    """A campaign, its nominal binned spectra, and its modes by name."""

    def __init__(self, config: Config) -> None:
        self.config = config
        self.grid = channel_grid(config.channels)
        geometry = thinned(survey_geometry(config.vantage, config.observation), config)
        average = simulate(config, sky_from(config.sky), geometry, self.grid, lambda samples: None)
        self.temperature_k = mean_by_bin(average.antenna_temperature_k, geometry, config.bins)
        self.response = mean_by_bin(average.signal_response, geometry, config.bins)
        runs: list[int] = []
        self.modes: KnowledgeModes = knowledge_modes(config, runs.append)
        assert sum(runs) == engine_runs(config)

    def mode(self, path: str) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        number = self.modes.names.index(path)
        return self.modes.temperature_k[number], self.modes.response[number]

    def spectrum(self) -> NDArray[np.float64]:
        """Channel means of the sky's spectrum, 1 at 408 MHz."""
        frequency, weight = mean_points(self.grid.edges_mhz)
        x = np.log(frequency / SPECTRUM_MHZ)
        return np.asarray(np.exp(-INDEX * x - CURVATURE * x**2) @ weight)


@pytest.fixture(scope="module", params=[False, True], ids=["dark Moon", "mirror Moon"])
def case(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Case:
    return Case(campaign(tmp_path_factory.mktemp("modes"), request.param, *KNOWLEDGE))


def test_a_mode_for_every_leaf(case: Case) -> None:
    assert case.modes.names == tuple(leaf.path for leaf in case.config.knowledge.leaves)
    assert case.modes.temperature_k.shape == (9, 8, 16)
    assert case.modes.response.shape == (9, 8, 16)


def test_an_offset_is_the_same_everywhere(case: Case) -> None:
    temperature, response = case.mode("receiver.offset_k")
    # Rounding of 1e4 K, over the step.
    np.testing.assert_allclose(temperature, 2.0, atol=1e-11)
    np.testing.assert_array_equal(response, 0.0)


def test_a_scale_is_the_temperature_itself(case: Case) -> None:
    temperature, response = case.mode("receiver.scale")
    np.testing.assert_allclose(temperature, 0.01 * case.temperature_k, rtol=1e-12)  # rounding over a step of 1 %
    np.testing.assert_allclose(response, 0.01 * case.response, rtol=1e-12)


def test_a_ripple_is_the_temperature_times_its_cosine(case: Case) -> None:
    temperature, response = case.mode("receiver.ripple_fraction")
    cosine = np.cos(2 * np.pi * case.grid.centre_mhz / 35.0 + np.radians(40.0))
    cosine *= np.sinc(case.grid.width_mhz / 35.0)  # its mean over the channel
    # Rounding of 1e4 K, 1e-12 K, in modes of 0.1 K.
    np.testing.assert_allclose(temperature, 2e-5 * case.temperature_k * cosine, atol=1e-10)
    np.testing.assert_allclose(response, 2e-5 * case.response * cosine, atol=1e-14)


def test_receiver_noise_moves_no_mean(case: Case) -> None:
    temperature, response = case.mode("receiver.temperature_k")
    np.testing.assert_array_equal(temperature, 0.0)
    np.testing.assert_array_equal(response, 0.0)


def test_a_zero_level_fills_the_sky_like_a_signal(case: Case) -> None:
    """It is taken off the map everywhere, so it arrives as w(f) times the sky's spectrum."""
    temperature, response = case.mode("sky.zero_level_k")
    # The mean of a product over a channel is the product of means plus a twelfth of the product of their changes:
    # over 5 MHz w changes by up to 1.6e-3 and the spectrum by 0.3 of itself, 4e-5 in all.
    np.testing.assert_allclose(temperature, -0.1 * case.response * case.spectrum(), rtol=4e-5)
    np.testing.assert_array_equal(response, 0.0)


def test_a_sky_scale_is_the_sky_without_its_background(case: Case) -> None:
    """T = T_sky + (the rest), T_sky - w T_cmb = w(scale (map - zero) - T_cmb at 408 MHz): two modes make it up."""
    config = case.config
    scale, _ = case.mode("sky.scale")
    zero, _ = case.mode("sky.zero_level_k")
    background_k = rayleigh_jeans_k(CMB_TEMPERATURE_K, case.grid.centre_mhz)
    sky_k = scale / 0.001 + zero / 0.1 * rayleigh_jeans_k(CMB_TEMPERATURE_K, np.array([SPECTRUM_MHZ]))
    eta = config.beam.efficiency
    structure_k = (1 - eta) * rayleigh_jeans_k(config.beam.structure_temperature_k, case.grid.centre_mhz)
    moon_k = (eta - case.response) * rayleigh_jeans_k(config.surface.temperature_k, case.grid.centre_mhz)
    whole = sky_k + case.response * background_k + moon_k + structure_k
    # Steps of 0.001 and 0.1 K magnify the engine's error by 1000 and 10 x T_cmb.
    np.testing.assert_allclose(whole, case.temperature_k, atol=ENGINE_K * 1100)


def test_a_warmer_moon_fills_what_the_sky_does_not(case: Case) -> None:
    """What is not sky is Moon: a mirror returns what it does not emit (Kirchhoff)."""
    temperature, response = case.mode("surface.temperature_k")
    # Rayleigh-Jeans brightness is linear in T to (h f / k T)^2 / 12 = 4e-11 here.
    np.testing.assert_allclose(temperature, 10.0 * (case.config.beam.efficiency - case.response), atol=ENGINE_K)
    np.testing.assert_array_equal(response, 0.0)


def test_efficiency_trades_sky_for_structure(case: Case) -> None:
    temperature, response = case.mode("beam.efficiency")
    beam = case.config.beam
    structure_k = rayleigh_jeans_k(beam.structure_temperature_k, case.grid.centre_mhz)
    expected = 0.005 * (case.temperature_k - structure_k) / beam.efficiency
    np.testing.assert_allclose(temperature, expected, atol=ENGINE_K)
    np.testing.assert_allclose(response, 0.005 * case.response / beam.efficiency, rtol=1e-9)  # engine, of w
    warmer, _ = case.mode("beam.structure_temperature_k")
    np.testing.assert_allclose(warmer, 5.0 * (1 - beam.efficiency), atol=ENGINE_K)


# ---------------------------------------------------------------- steps


def test_a_step_that_is_not_allowed_is_taken_the_other_way(tmp_path: Path) -> None:
    """At an efficiency of 0.97 with sd 0.05 the way up ends at 1; the slope comes from below."""
    entry = 'beam.efficiency = { distribution = "normal", sd = 0.05 }'
    case = Case(campaign(tmp_path, False, "[knowledge]", entry))
    temperature, _ = case.mode("beam.efficiency")
    structure_k = rayleigh_jeans_k(case.config.beam.structure_temperature_k, case.grid.centre_mhz)
    # The temperature is linear in efficiency, so a one-sided slope is exact.
    np.testing.assert_allclose(temperature, 0.05 * (case.temperature_k - structure_k) / 0.97, atol=ENGINE_K * 2)


def test_a_leaf_known_so_badly_that_no_step_is_allowed_is_refused(tmp_path: Path) -> None:
    entry = 'beam.efficiency = { distribution = "normal", sd = 5.0 }'
    config = campaign(tmp_path, False, "[knowledge]", entry)
    with pytest.raises(InputError, match=r"knowledge.beam.efficiency: 0.97 can be moved by its error of 5 neither"):
        knowledge_modes(config, lambda runs: None)


@pytest.mark.parametrize(
    ("entry", "error"),
    [
        # Root mean square about the configured 1.0, in closed form.
        ('{ distribution = "lognormal", sd = 0.3 }', np.sqrt(np.exp(2 * 0.09) - 2 * np.exp(0.045) + 1)),
        ('{ distribution = "uniform", lower = 0.9, upper = 1.1 }', 0.1 / np.sqrt(3)),
        ('{ distribution = "normal", sd = 0.03, mean = 1.04 }', 0.05),
        ('{ distribution = "normal", sd = 0.1, upper = 1.0 }', 0.1),
    ],
)
def test_an_error_is_the_spread_about_the_configured_value(entry: str, error: float, tmp_path: Path) -> None:
    """A half-normal has the mean square of the normal; a mean elsewhere counts as error too."""
    case = Case(campaign(tmp_path, False, "[knowledge]", f"receiver.scale = {entry}"))
    temperature, _ = case.mode("receiver.scale")
    np.testing.assert_allclose(temperature, error * case.temperature_k, rtol=1e-8)  # moments by quadrature


def test_no_knowledge_no_modes(tmp_path: Path) -> None:
    modes = knowledge_modes(campaign(tmp_path, False), lambda runs: None)
    assert modes.names == ()
    assert modes.temperature_k.shape == (0, 8, 16)


def test_thinning_keeps_every_bin_and_few_of_each(tmp_path: Path) -> None:
    config = load_text(substituted(DEMO, [("count = 22300", "count = 9000")]), tmp_path)
    geometry = survey_geometry(config.vantage, config.observation)
    few = thinned(geometry, config)
    before = np.bincount(bin_of_each_sample(geometry, config.bins), minlength=8)
    after = np.bincount(bin_of_each_sample(few, config.bins), minlength=8)
    np.testing.assert_array_equal(after, np.minimum(before, SAMPLES_PER_BIN))
    assert np.isin(few["time"].values, geometry["time"].values).all()


def test_gain_is_part_of_the_response(tmp_path: Path) -> None:
    """What the receiver multiplies, it multiplies for a signal too."""
    text = 'receiver.scale = { distribution = "normal", sd = 0.01 }'
    config = campaign(tmp_path, False, "[knowledge]", text)
    config = config.model_copy(update={"receiver": config.receiver.model_copy(update={"ripple_fraction": 0.2})})
    case = Case(config)
    _, response = case.mode("receiver.scale")
    factor = gain(case.grid.centre_mhz, case.grid.width_mhz, config.receiver)
    np.testing.assert_allclose(response, 0.01 * case.response * factor, rtol=1e-12)


def test_receiver_errors_act_on_the_spectra_themselves_without_their_noise(tmp_path: Path) -> None:
    text = 'receiver.scale = { distribution = "normal", sd = 0.01 }'
    config = campaign(tmp_path, False, "[knowledge]", text)
    case = Case(config)
    level = np.exp(0.1 - 0.05 * np.log(case.grid.centre_mhz / 70.0))
    noisy = level * case.temperature_k * (1 + 1e-4 * np.random.default_rng(1).standard_normal(case.temperature_k.shape))
    noisy[:, 3] = np.nan
    modes = knowledge_modes(config, lambda runs: None, noisy)
    # Six terms of sixteen channels keep sqrt(6/16) of noise of 1e-4 as a smooth curve, which a foreground absorbs.
    np.testing.assert_allclose(modes.temperature_k[0], 0.01 * level * case.temperature_k, rtol=5e-4)


def test_smooth_ratio_keeps_noise_out() -> None:
    frequency = np.linspace(40.0, 120.0, 256)
    model = np.tile(1000.0 * (frequency / 70.0) ** -2.5, (3, 1))
    noise = 1e-5 * np.random.default_rng(3).standard_normal((3, 256))
    wanted = np.exp(0.02 * np.log(frequency / 70.0) ** 2)
    ratio = smooth_ratio(model * wanted * (1 + noise), model, frequency)
    left = ratio / wanted - 1
    # Six of 256 degrees of freedom pass: 0.15 of the noise, and none of it from channel to channel.
    assert np.std(left) < 0.3e-5
    assert np.abs(np.diff(left, axis=1)).max() < 1e-6


@pytest.mark.parametrize("rho", [0.9, -0.99])
def test_correlated_leaves_make_the_covariance_of_their_draws(tmp_path: Path, rho: float) -> None:
    text = (
        'beam.efficiency = { distribution = "normal", sd = 0.003 }\n'
        'receiver.scale = { distribution = "normal", sd = 0.01 }\n'
        '[[knowledge.correlated]]\npaths = ["beam.efficiency", "receiver.scale"]\n'
        f"correlation = [[1.0, {rho}], [{rho}, 1.0]]\n"
    )
    config = campaign(tmp_path, False, "[knowledge]", text)
    alone = campaign(tmp_path, False, "[knowledge]", text.split("[[")[0])
    one, two = knowledge_modes(alone, lambda runs: None).temperature_k
    mixed = knowledge_modes(config, lambda runs: None)
    variance = (mixed.temperature_k**2).sum(axis=0)
    # The variance of a sum of two correlated errors.
    np.testing.assert_allclose(variance, one**2 + two**2 + 2 * rho * one * two, rtol=1e-9)
    assert mixed.names == ("beam.efficiency (mixed)", "receiver.scale (mixed)")


def test_standard_deviation_of_a_truncated_normal_is_its_own() -> None:
    # Sanity of the closed form used above: E[(x - b)^2] of a half-normal is sd^2.
    half = stats.truncnorm(-np.inf, 0.0)
    assert np.hypot(half.std(), half.mean()) == pytest.approx(1.0, rel=1e-9)
