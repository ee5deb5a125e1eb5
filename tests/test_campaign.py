"""The mock campaign as a whole: what goes in comes out, and mock and truth stay apart."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from engine_cases import EvenSky, SmoothSky, moving_scene
from small_campaign import small_config

from reduce.binning import bin_recording, mean_by_bin
from reduce.combine import combine
from reduce.foreground.log_polynomial import LogPolynomial
from reduce.joint_fit import family_from
from reduce.subtract import subtract
from sims import config as settings
from sims.beam import beam_from
from sims.campaign import engine_passes, observe, signal_to_inject_k, true_draw
from sims.config import Config
from sims.frequency import channel_grid
from sims.receiver import gain
from sims.schema import RECORDING, check
from sims.sky_average import evaluate


def quiet(done: int) -> None:
    """No bar."""


def recovered_amplitude(config: Config, *, believe_all_sky: bool) -> tuple[float, float]:
    """Generalised least-squares amplitude of the injected trough, and its standard deviation."""
    observed = observe(config, quiet)
    spectra = bin_recording(observed.recording, config.bins)
    good = spectra["flag"].values == 0
    response = spectra["signal_response"].values
    fit = subtract(
        frequency_mhz=spectra["frequency_mhz"].values,
        temperature_k=spectra["antenna_temperature_k"].values,
        noise_variance_k2=spectra["noise_variance"].values,
        modes_k=np.zeros((*good.shape, 0)),
        good=good,
        family=family_from(config.foreground, spectra["frequency_mhz"].values),
    )
    information = combine(
        residual_k=fit.residual_k,
        covariance=fit.covariance,
        basis=fit.basis,
        signal_response=np.ones_like(response) if believe_all_sky else response,
        good=good,
        draws=None,
    )
    signal = observed.truth["signal_k"].values
    weight = float(signal @ information.K @ signal)
    return float(signal @ information.b) / weight, weight**-0.5


def test_a_trough_seen_by_a_half_hidden_beam_comes_back_at_full_depth() -> None:
    config = small_config(
        run={"truth": "nominal"},
        observation={"integration": "1e8 h"},
        channels={"count": 128},
        foreground={"terms": 9},
    )
    amplitude, sigma = recovered_amplitude(config, believe_all_sky=False)
    # Noise leaves 1 % here; what nine terms leave of a smooth antenna's foreground is less.
    assert sigma < 0.01
    assert amplitude == pytest.approx(1.0, abs=0.03)
    shallow, _ = recovered_amplitude(config, believe_all_sky=True)
    # From 100 km a dipole meets sky in some two thirds of its beam, reflection included; forgetting it costs a third.
    assert 0.6 < shallow < 0.75


def test_an_achromatic_beam_on_a_power_law_sky_is_removed_to_rounding() -> None:
    mount = {"efficiency": 1.0, "structure_temperature_k": 270.0}
    beam = beam_from(
        settings.GaussianBeam(kind="gaussian", width_deg=40.0, frequency_mhz=70.0, width_exponent=0.0, **mount)
    )
    scene = moving_scene(PatchySky(8), beam, 1, reflection=False)
    behind = -scene.pointing.axes[:, 0]
    alone = replace(scene, pointing=replace(scene.pointing, nadir=behind, limb_angle_rad=np.array([1e-3])))
    frequency = np.linspace(40.0, 120.0, 100)
    temperature, _ = evaluate(alone, frequency, quiet)
    good = np.ones((1, 100), dtype=bool)
    fit = subtract(
        frequency_mhz=frequency,
        temperature_k=temperature,
        noise_variance_k2=np.full((1, 100), 1e-6),
        modes_k=np.zeros((1, 100, 0)),
        good=good,
        family=LogPolynomial(2, 40.0, 120.0),
    )
    # 10^4 K to rounding: 1e-16 of it, times the pixels' sum and the table's 1e-12.
    assert np.abs(fit.residual_k).max() < 1e-7


class PatchySky:
    """A sky of one spectral index and uneven brightness."""

    def __init__(self, nside: int) -> None:
        self.nside = nside

    def brightness_k(self, frequency_mhz: np.ndarray) -> np.ndarray:
        base = SmoothSky(self.nside).brightness_k(np.array([70.0]))
        return base * (frequency_mhz / 70.0) ** -2.55


def test_noise_of_the_recording_is_what_it_says() -> None:
    config = small_config(run={"truth": "nominal"})
    observed = observe(config, quiet)
    clean = (
        observed.truth["foreground_k"].values
        + observed.truth["signal_response"].values * observed.truth["signal_k"].values
    )
    recording = observed.recording
    score = (recording["antenna_temperature_k"].values - clean) / np.sqrt(recording["noise_variance_k2"].values)
    # Mean square of N unit normals is 1 within 5 sqrt(2/N).
    assert np.mean(score**2) == pytest.approx(1.0, abs=5 * np.sqrt(2 / score.size))
    assert np.mean(score) == pytest.approx(0.0, abs=5 / np.sqrt(score.size))


def test_recording_holds_no_truth_and_the_nominal_response() -> None:
    config = small_config()
    observed = observe(config, quiet)
    check(observed.recording, RECORDING, "recording")
    assert not {"signal_k", "foreground_k"} & set(observed.recording.variables)
    assert "drawn_values" not in observed.recording.attrs
    assert engine_passes(config) == 2
    believed = mean_by_bin(observed.recording["signal_response"].values, observed.recording, config.bins)
    true = mean_by_bin(observed.truth["signal_response"].values, observed.recording, config.bins)
    # A tilt of a degree and a millimetre of length change the response, but by little.
    assert 0.0 < np.abs(believed - true).max() < 0.02
    # What is believed is the nominal response and gain to rounding, whatever is true.
    nominal = observe(config.model_copy(update={"run": config.run.model_copy(update={"truth": "nominal"})}), quiet)
    channels = (nominal.truth["frequency_mhz"].values, nominal.truth["width_mhz"].values)
    expected = nominal.truth["signal_response"].values * gain(*channels, config.receiver)
    assert observed.recording["signal_response"].values == pytest.approx(expected, abs=1e-8)


def test_stated_variance_is_the_radiometer_equation_with_the_duty_cycle() -> None:
    config = small_config()
    recording = observe(config, quiet).recording
    on_antenna_s = recording["integration_s"].values * config.observation.duty_cycle
    system_k = recording["antenna_temperature_k"].values + config.receiver.temperature_k
    expected = system_k**2 / (recording["width_mhz"].values * 1e6 * on_antenna_s[:, None])
    assert recording["noise_variance_k2"].values == pytest.approx(expected, rel=1e-12)
    assert float(recording["integration_s"].sum()) == pytest.approx(800 * 3600.0)


def test_same_seed_same_recording_other_seed_another() -> None:
    one, two = observe(small_config(), quiet), observe(small_config(), quiet)
    assert one.recording["antenna_temperature_k"].equals(two.recording["antenna_temperature_k"])
    other = observe(small_config(run={"seed": 5}), quiet)
    assert not one.recording["antenna_temperature_k"].equals(other.recording["antenna_temperature_k"])
    assert true_draw(small_config()).values != true_draw(small_config(run={"seed": 5})).values


@pytest.mark.parametrize(
    ("signal", "lowest_mk"),
    [
        ({"kind": "none"}, 0.0),
        (
            {"kind": "flattened-gaussian", "depth": "150 mK", "centre": "75 MHz", "width": "19 MHz", "flattening": 4.0},
            -150.0,
        ),
    ],
)
def test_other_signals_reach_the_truth(signal: dict[str, Any], lowest_mk: float) -> None:
    config = small_config(signal=signal)
    found = 1e3 * signal_to_inject_k(config.signal, channel_grid(config.channels))
    # The bottom of the trough is flat, so the mean over a channel of 1.25 MHz shows it within a tenth of a percent.
    assert found.min() == pytest.approx(lowest_mk, rel=1e-3)


def test_a_ground_site_sees_sky_above_and_soil_below() -> None:
    config = small_config(
        vantage={
            "kind": "ground", "latitude": "-26.7 deg", "longitude": "116.6 deg", "height": "380 m",
            "boresight": {"kind": "vertical"},
        },
        observation={"require": []},
        bins={"by": "sidereal-time", "count": 4},
        run={"truth": "nominal"},
    )  # fmt: skip
    recording = observe(config, quiet).recording
    w = recording["signal_response"].values / config.beam.efficiency
    reflected = w - 0.5
    # A horizontal dipole in free space meets sky in half its sphere, and a few percent more in the soil's mirror.
    assert np.all((reflected > 0.03) & (reflected < 0.12))
    # Flags 1 and 2 together: the masked channels, which no sample of a bin has.
    assert set(np.unique(bin_recording(recording, config.bins)["flag"])) == {0, 3}


def test_even_sky_seen_from_orbit_has_the_response_of_any_sky() -> None:
    """The response belongs to antenna and Moon; it is the same whatever the sky looks like."""
    beam = beam_from(settings.Dipole(kind="dipole", length_m=2.0, efficiency=0.9, structure_temperature_k=250.0))
    frequency = np.array([50.0, 90.0])
    one = evaluate(moving_scene(SmoothSky(8), beam, 3), frequency, quiet)[1]
    two = evaluate(moving_scene(EvenSky(8, 500.0, 2.5), beam, 3), frequency, quiet)[1]
    assert one == pytest.approx(two, abs=1e-15)
