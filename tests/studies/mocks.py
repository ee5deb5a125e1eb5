"""Mocks that the statistics are tested on: other skies, antennas, receivers, troughs and noise every time.

Each mock is a whole campaign on a thinned set of samples: its truth is a draw of its own from
[knowledge], fields included, its trough a draw from the prior (or none), its noise that of
the full integration. It is then reduced as any campaign is, with the nominal response.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import xarray as xr

from reduce.binning import bin_of_each_sample, mean_by_bin
from reduce.fast_posterior import detection_statistic
from reduce.joint_fit import joint_fit
from reduce.knowledge_modes import knowledge_modes, thinned
from reduce.trough_model import TroughModel, trough_model
from sims.campaign import geometry_like, simulate, true_sky
from sims.config import Config
from sims.config_load import load_config
from sims.draws import draw
from sims.frequency import ChannelGrid, channel_grid
from sims.receiver import gain, noise_variance_k2, received_k
from sims.schema import SPECTRA, describe
from sims.sky import DiffuseSky, sky_from
from sims.streams import stream
from sims.vantage import survey_geometry

DEMO = Path(__file__).parents[2] / "configs" / "demo.toml"


@dataclass(frozen=True)
class Bench:
    """What all mocks share: the nominal campaign on thinned samples, and what its team believes."""

    config: Config
    sky: DiffuseSky
    grid: ChannelGrid
    geometry: xr.Dataset
    bin_seconds: np.ndarray
    response: np.ndarray
    mode_k: np.ndarray
    mode_w: np.ndarray
    model: TroughModel


@dataclass(frozen=True)
class Result:
    """One mock reduced."""

    rank: np.ndarray
    statistic: float
    chi_squared: float
    degrees_of_freedom: int
    mean: np.ndarray
    covariance: np.ndarray
    truth: np.ndarray


def quiet(done: int) -> None:
    """No bar."""


def make_bench(config: Config | None = None) -> Bench:
    """The demo's campaign, thinned."""
    config = load_config(DEMO) if config is None else config
    everything = survey_geometry(config.vantage, config.observation)
    grid = channel_grid(config.channels)
    label = bin_of_each_sample(everything, config.bins)
    on_antenna_s = everything["integration_s"].values * config.observation.duty_cycle
    geometry = thinned(everything, config)
    sky = sky_from(config.sky)
    nominal = simulate(config, sky, geometry, grid, quiet)
    modes = knowledge_modes(config, quiet)
    return Bench(
        config=config,
        sky=sky,
        grid=grid,
        geometry=geometry,
        bin_seconds=np.bincount(label, on_antenna_s, minlength=config.bins.count),
        response=mean_by_bin(nominal.signal_response, geometry, config.bins) * gain(grid.centre_mhz, config.receiver),
        mode_k=modes.temperature_k,
        mode_w=modes.response,
        model=trough_model(config.turning_points, grid.centre_mhz, grid.width_mhz),
    )


def mock_spectra(bench: Bench, index: int, *, signal: bool) -> tuple[xr.Dataset, np.ndarray]:
    """Spectra of mock number `index`, and its true turning points (NaN where there is no trough)."""
    config, grid = bench.config, bench.grid
    seed = config.run.seed
    truth = draw(config, "coverage", index)
    fields = config.model_copy(update={"run": config.run.model_copy(update={"seed": seed + 1 + index})})
    sky = true_sky(fields, truth, bench.sky)
    average = simulate(truth.config, sky, geometry_like(truth.config, bench.geometry, config), grid, quiet)
    foreground = mean_by_bin(average.antenna_temperature_k, bench.geometry, config.bins)
    response = mean_by_bin(average.signal_response, bench.geometry, config.bins)
    rng = stream(seed, "coverage/trough-and-noise", index)
    parameters = bench.model.draw_prior(rng, 1)[0]
    signal_k = bench.model.signal_k(parameters) if signal else np.zeros(grid.count)
    antenna = foreground + response * signal_k
    seconds = bench.bin_seconds[:, None]
    variance = noise_variance_k2(antenna, truth.config.receiver.temperature_k, grid.width_mhz, seconds)
    antenna = antenna + np.sqrt(variance) * rng.standard_normal(antenna.shape)
    measured = received_k(antenna, grid.centre_mhz, truth.config.receiver)
    spectra = xr.Dataset(
        {
            "frequency_mhz": ("channel", grid.centre_mhz),
            "width_mhz": ("channel", grid.width_mhz),
            "antenna_temperature_k": (("bin", "channel"), measured),
            "noise_variance": (
                ("bin", "channel"),
                noise_variance_k2(measured, config.receiver.temperature_k, grid.width_mhz, seconds),
            ),
            "signal_response": (("bin", "channel"), bench.response),
            "flag": (("bin", "channel"), np.broadcast_to(grid.masked.astype(np.uint8), measured.shape)),
            "systematic_modes": (("mode", "bin", "channel"), bench.mode_k),
            "response_modes": (("mode", "bin", "channel"), bench.mode_w),
        }
    )
    return describe(spectra, SPECTRA), parameters if signal else np.full(6, np.nan)


def reduce_mock(bench: Bench, index: int, *, signal: bool) -> Result:
    """Mock number `index`, made and reduced."""
    spectra, truth = mock_spectra(bench, index, signal=signal)
    rng = stream(bench.config.run.seed, "coverage/reduction", index)
    fit = joint_fit(spectra, bench.config.foreground, bench.model, rng)
    posterior = fit.posterior
    return Result(
        rank=posterior.rank(truth),
        statistic=detection_statistic(posterior.mean(), posterior.covariance()),
        chi_squared=fit.information.chi_squared_min,
        degrees_of_freedom=fit.information.degrees_of_freedom,
        mean=posterior.mean(),
        covariance=posterior.covariance(),
        truth=truth,
    )
