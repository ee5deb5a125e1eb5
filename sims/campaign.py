"""A mock campaign: sky, beam, vantage, trough and receiver chained into a recording and its truth.

The last file of the forward side. The recording holds what an experiment would have: noisy
calibrated spectra, and the signal response that its team believes in (the nominal one).
The truth goes into a Dataset of its own, which no stage of the reduction is given.
"""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from sims import config as settings
from sims.beam_files import antenna_from
from sims.draws import Draw, draw
from sims.frequency import ChannelGrid, channel_grid
from sims.horizon import read_horizon
from sims.pixel_sum import Pointing
from sims.receiver import gain, noise_variance_k2, received_k
from sims.schema import RECORDING, describe
from sims.sky import AnySky, index_error, moved_sky, sky_from
from sims.sky_average import Reached, Scene, Sky, SkyAverage, scene_axes, sky_average
from sims.streams import stream
from sims.trough import channel_mean_k, flattened_gaussian_k, turning_point_trough_k
from sims.trough_table import read_trough_table, tabulated_trough_k
from sims.vantage import survey_geometry

FloatArray = NDArray[np.float64]
FLAG_MASKED = 1
FLAG_EMPTY = 2
RESPONSE_NODES = 8

Advance = Callable[[int], None]
RESPONSE_SECTIONS = ("beam", "vantage", "surface", "observation", "channels")


@dataclass(frozen=True)
class Observed:
    """A mock campaign.

    Attributes
    ----------
    recording : xarray.Dataset
        What the experiment has (`sims.schema.RECORDING`).
    truth : xarray.Dataset
        What only a mock knows, still one row a sample: foreground, response, signal.
    reached : Reached
        What the engine reached for the foreground.
    """

    recording: xr.Dataset
    truth: xr.Dataset
    reached: Reached


@dataclass(frozen=True)
class BlankSky:
    """A sky without brightness, for when only the response to a signal is wanted."""

    nside: int

    def brightness_k(self, frequency_mhz: FloatArray) -> FloatArray:
        """Zero K everywhere."""
        return np.zeros((12 * self.nside**2, len(frequency_mhz)))


def observe(config: settings.Config, advance: Advance) -> Observed:
    """Run the mock campaign.

    Parameters
    ----------
    config : Config
        With ``run.truth = "drawn"`` the truth is one draw from ``[knowledge]``, fields
        included; the recording still carries the nominal response.
    advance : callable
        Told the number of samples done; `engine_passes` says how often each is counted.

    Returns
    -------
    Observed

    Raises
    ------
    InputError
        If the sky cannot be read, no sample is left, or a draw is not allowed.
    """
    truth = true_draw(config)
    grid = channel_grid(config.channels)
    geometry = survey_geometry(config.vantage, config.observation)
    sky = true_sky(config, truth, sky_from(config.sky))
    average = simulate(truth.config, sky, geometry_like(truth.config, geometry, config), grid, advance)
    believed = average.signal_response
    if engine_passes(config) > 1:
        believed = simulate(_for_response(config), _blank(sky), geometry, grid, advance).signal_response
    signal_k = signal_to_inject_k(config.signal, grid)
    recording = _recording(config, truth.config, geometry, grid, average, believed, signal_k)
    return Observed(recording, _truth(truth, grid, average, signal_k), average.reached)


def true_draw(config: settings.Config) -> Draw:
    """The mock's true configuration: one draw from ``[knowledge]``, or the configuration itself."""
    return draw(config, "truth") if config.run.truth == "drawn" else Draw(config, {}, 0)


def engine_passes(config: settings.Config) -> int:
    """How many times the engine goes through all samples: twice where truth and belief differ in response."""
    truth = true_draw(config).config
    same = all(getattr(truth, name) == getattr(config, name) for name in RESPONSE_SECTIONS)
    return 1 if same else 2


def true_sky(config: settings.Config, truth: Draw, nominal: AnySky) -> AnySky:
    """The mock's true sky: drawn scalars, and drawn fields where ``[knowledge]`` has them."""
    if config.run.truth != "drawn":
        return moved_sky(nominal, config.sky, truth.config.sky)
    return drawn_sky(config, truth, nominal, "truth")


def drawn_sky(config: settings.Config, drawn: Draw, nominal: AnySky, name: str) -> AnySky:
    """The sky of one draw, its fields drawn too.

    Parameters
    ----------
    config : Config
        Nominal configuration, for its seed and ``[knowledge]``.
    drawn : Draw
        Its scalars, and the number of the draw.
    nominal : AnySky
        The configured sky.
    name : str
        Name of the stream that `drawn` came from.

    Returns
    -------
    AnySky
    """
    sky = moved_sky(nominal, config.sky, drawn.config.sky)
    seed, known = config.run.seed, config.knowledge
    if known.index_field is not None:
        rng = stream(seed, f"{name}/index-field", drawn.index)
        sky = sky.with_index_field(index_error(known.index_field, sky.nside, rng))
    if known.map_noise is not None:
        rng = stream(seed, f"{name}/map-noise", drawn.index)
        sky = sky.with_map_noise(known.map_noise.sd_k * rng.standard_normal(len(sky.directions)))
    return sky


def simulate(
    config: settings.Config, sky: Sky, geometry: xr.Dataset, grid: ChannelGrid, advance: Advance
) -> SkyAverage:
    """Engine run for a configuration, sky and geometry."""
    scene = scene_of(config, sky, geometry)
    return sky_average(scene, grid, config.engine, stream(config.run.seed, "engine-check"), advance)


def geometry_like(config: settings.Config, geometry: xr.Dataset, nominal: settings.Config) -> xr.Dataset:
    """Geometry of a changed configuration at the times that the nominal one chose."""
    if config.vantage == nominal.vantage:
        return geometry
    everything = config.observation.model_copy(update={"require": ()})
    return survey_geometry(config.vantage, everything).sel(time=geometry["time"])


def scene_of(config: settings.Config, sky: Sky, geometry: xr.Dataset) -> Scene:
    """The engine's scene for a configuration, sky and geometry."""
    beam = antenna_from(config.beam)
    attitude = Rotation.from_quat(geometry["attitude"].values).as_matrix()
    pointing = Pointing(
        axes=scene_axes(beam, attitude),
        nadir=np.ascontiguousarray(geometry["nadir"].values),
        limb_angle_rad=geometry["limb_angle_rad"].values,
        north=np.ascontiguousarray(geometry["forward"].values),
        pole=np.ascontiguousarray(geometry["pole"].values),
    )
    vantage = config.vantage
    horizon_file = vantage.horizon_file if isinstance(vantage, settings.LunarSurface | settings.GroundSite) else None
    horizon = None if horizon_file is None else read_horizon(horizon_file)
    orbiting = isinstance(vantage, settings.LunarOrbit | settings.LunarOrbitFile)
    return Scene(sky, beam, pointing, config.surface, sphere=orbiting, horizon=horizon)


def signal_to_inject_k(signal: settings.Signal, grid: ChannelGrid) -> FloatArray:
    """Channel means of the configured trough, K."""
    if isinstance(signal, settings.NoSignal):
        return np.zeros(grid.count)
    return channel_mean_k(_trough(signal), grid.centre_mhz, grid.width_mhz)


def _trough(signal: settings.Signal) -> Callable[[FloatArray], FloatArray]:
    if isinstance(signal, settings.TurningPointSignal):
        points = (signal.a, signal.b, signal.c, signal.d, signal.e)
        turning_mhz = np.array([point.frequency_mhz for point in points])
        turning_k = np.array([point.temperature_mk for point in points]) / 1e3
        return lambda f: turning_point_trough_k(f, turning_mhz, turning_k)
    if isinstance(signal, settings.FlattenedGaussianSignal):
        shape = signal
        return lambda f: flattened_gaussian_k(
            f, shape.depth_mk / 1e3, shape.centre_mhz, shape.width_mhz, shape.flattening
        )
    assert isinstance(signal, settings.TableSignal)
    table = read_trough_table(signal.file)
    return lambda f: tabulated_trough_k(f, table.frequency_mhz, table.temperature_k)


def _for_response(config: settings.Config) -> settings.Config:
    """The response alone is smoother than the sky: begin with fewer nodes, checked all the same."""
    fewer = min(RESPONSE_NODES, config.engine.nodes)
    return config.model_copy(update={"engine": config.engine.model_copy(update={"nodes": fewer})})


def _blank(sky: AnySky) -> BlankSky:
    return BlankSky(sky.nside)


def _recording(
    config: settings.Config,
    true: settings.Config,
    geometry: xr.Dataset,
    grid: ChannelGrid,
    average: SkyAverage,
    believed: FloatArray,
    signal_k: FloatArray,
) -> xr.Dataset:
    centre, width = grid.centre_mhz, grid.width_mhz
    on_antenna_s = geometry["integration_s"].values[:, None] * config.observation.duty_cycle
    antenna_k = average.antenna_temperature_k + average.signal_response * signal_k
    true_variance = noise_variance_k2(antenna_k, true.receiver.temperature_k, width, on_antenna_s)
    noise = np.sqrt(true_variance) * stream(config.run.seed, "radiometer-noise").standard_normal(antenna_k.shape)
    measured_k = received_k(antenna_k + noise, centre, width, true.receiver)
    kept = [name for name in RECORDING if name in geometry]
    recording = geometry[kept].assign(
        frequency_mhz=("channel", centre),
        width_mhz=("channel", width),
        antenna_temperature_k=(("time", "channel"), measured_k),
        noise_variance_k2=(
            ("time", "channel"),
            noise_variance_k2(measured_k, config.receiver.temperature_k, width, on_antenna_s),
        ),
        signal_response=(("time", "channel"), believed * gain(centre, width, config.receiver)),
        flag=(("time", "channel"), np.broadcast_to(grid.masked * np.uint8(FLAG_MASKED), antenna_k.shape)),
    )
    recording.attrs = {**geometry.attrs, "sky": config.sky.kind, "engine": json.dumps(vars(average.reached))}
    return describe(recording, RECORDING)


def _truth(truth: Draw, grid: ChannelGrid, average: SkyAverage, signal_k: FloatArray) -> xr.Dataset:
    return xr.Dataset(
        {
            "frequency_mhz": ("channel", grid.centre_mhz),
            "width_mhz": ("channel", grid.width_mhz),
            "signal_k": ("channel", signal_k),
            "foreground_k": (("time", "channel"), average.antenna_temperature_k),
            "signal_response": (("time", "channel"), average.signal_response),
        },
        attrs={"drawn_values": json.dumps(truth.values), "true_configuration": truth.config.model_dump_json()},
    )
