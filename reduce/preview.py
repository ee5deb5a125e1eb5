"""What ``quietlimb check`` prints: the configuration as resolved, and what a run of it would be like.

Geometry and expected noise come from the real stages on a few samples; the time comes from
timing those, so it is this machine's.
"""

from __future__ import annotations

import json
import time
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from reduce.binning import bin_of_each_sample, mean_by_bin
from reduce.knowledge_modes import MOVED_SAMPLES_PER_BIN, SAMPLES_PER_BIN, engine_runs, moving_leaves
from reduce.redraw import SCORES
from sims.campaign import engine_passes, scene_of
from sims.config import ORBIT_KINDS, Config
from sims.config_load import load_config
from sims.frequency import channel_grid, chebyshev_nodes_mhz
from sims.receiver import noise_variance_k2
from sims.sky import sky_from
from sims.sky_average import evaluate
from sims.vantage import full_geometry, survey_geometry

TIMED_SAMPLES = 16
PASSES_A_MEAN_BEAM = 2.0  # of the engine, in time
SECONDS_A_SKY_NUMBER = 6e-8  # of a redraw, a pixel and node
BYTES_PER_NUMBER = 8
ARRAYS_PER_SAMPLE = 8


def preview(config_path: Path) -> str:
    """Check a configuration and say what a run of it would be like.

    Parameters
    ----------
    config_path : Path
        TOML configuration.

    Returns
    -------
    str
        The resolved configuration, geometry, expected noise, time and memory.

    Raises
    ------
    InputError
        With every problem of the configuration.
    """
    config = load_config(config_path)
    geometry = survey_geometry(config.vantage, config.observation)
    parts = [_resolved(config), _geometry(config, geometry), _noise_and_cost(config, geometry)]
    return "\n\n".join(parts)


def _resolved(config: Config) -> str:
    lines = ["Resolved configuration"]
    for name, section in config.model_dump(mode="json").items():
        lines.append(f"[{name}]")
        if section is None:
            lines.append("  not used")
            continue
        lines += [f"  {key} = {json.dumps(value)}" for key, value in _leaves(section)]
    return "\n".join(lines)


def _leaves(table: dict[str, Any], before: str = "") -> list[tuple[str, Any]]:
    found: list[tuple[str, Any]] = []
    for key, value in table.items():
        if key == "leaves":
            found += [
                (leaf["path"], {k: v for k, v in leaf.items() if k != "path" and v is not None}) for leaf in value
            ]
        elif isinstance(value, dict):
            found += _leaves(value, f"{before}{key}.")
        else:
            found.append((f"{before}{key}", value))
    return found


def _geometry(config: Config, geometry: xr.Dataset) -> str:
    everything = full_geometry(config.vantage, config.observation)
    kept, total = geometry.sizes["time"], everything.sizes["time"]
    first, last = (str(geometry["time"].values[at])[:19] for at in (0, -1))
    label = bin_of_each_sample(geometry, config.bins)
    counts = np.bincount(label, minlength=config.bins.count)
    lines = ["Geometry", f"  samples kept          {kept} of {total}, {first} to {last} UTC"]
    span_hours = kept * config.observation.step_s / 3600.0
    asked_hours = config.observation.integration_hours
    lines.append(
        f"  time in them          {span_hours:.1f} h; {asked_hours:g} h of integration are spread over them, as if "
        f"{asked_hours / span_hours:.1f} such spans were observed"
    )
    if config.vantage.kind != "ground":
        lines.append(f"  Earth hidden          {float(everything['earth_hidden'].mean()):.1%} of all samples")
    lines.append(f"  Sun hidden            {float(everything['sun_hidden'].mean()):.1%} of all samples")
    if config.vantage.kind in ORBIT_KINDS:
        limb = np.degrees(geometry["limb_angle_rad"].values)
        shares = (1 - np.cos(np.radians(limb))) / 2
        lines.append(f"  Moon's angular radius {_range(limb, '.3f')} deg, {_range(shares, '.1%')} of the sphere")
    lines.append(f"  samples in each bin   {counts.tolist()}")
    return "\n".join(lines)


def _range(values: NDArray[np.float64], form: str) -> str:
    """One number where both ends print the same, else the two."""
    lowest, highest = format(values.min(), form), format(values.max(), form)
    return lowest if lowest == highest else f"{lowest} to {highest}"


def _noise_and_cost(config: Config, geometry: xr.Dataset) -> str:
    grid = channel_grid(config.channels)
    rows = np.unique(np.linspace(0, geometry.sizes["time"] - 1, TIMED_SAMPLES).astype(int))
    some = geometry.isel(time=rows)
    scene = scene_of(config, sky_from(config.sky), some)
    nodes_mhz = chebyshev_nodes_mhz(config.channels.start_mhz, config.channels.stop_mhz, config.engine.nodes)
    evaluate(scene, nodes_mhz, lambda samples: None)
    begun = time.perf_counter()
    evaluate(scene, nodes_mhz, lambda samples: None)
    per_sample_s = (time.perf_counter() - begun) / len(rows)
    probes = np.linspace(0, grid.count - 1, 3).astype(int)
    temperature, response = evaluate(scene, grid.centre_mhz[probes], lambda samples: None)
    on_antenna_s = config.observation.integration_hours * 3600.0 * config.observation.duty_cycle / config.bins.count
    mean_k = mean_by_bin(temperature, some, config.bins.model_copy(update={"by": "all", "count": 1}))[0]
    sigma_mk = 1e3 * np.sqrt(
        noise_variance_k2(mean_k, config.receiver.temperature_k, grid.width_mhz[probes], np.array([on_antenna_s]))
    )
    mean_response = response.mean(axis=0)
    samples = geometry.sizes["time"]
    moved = 2 * len(moving_leaves(config))
    thin = min(SAMPLES_PER_BIN * config.bins.count, samples) * (engine_runs(config) - moved)
    thin += min(MOVED_SAMPLES_PER_BIN * config.bins.count, samples) * moved
    seconds = per_sample_s * (samples * engine_passes(config) + thin)
    memory = samples * grid.count * BYTES_PER_NUMBER * ARRAYS_PER_SAMPLE
    memory += 12 * config.sky.nside**2 * config.engine.nodes * BYTES_PER_NUMBER * 3
    lines = [
        "Expected, from a few samples",
        "  at               " + "".join(f"{f:10.2f} MHz" for f in grid.centre_mhz[probes]),
    ]
    lines += [
        "  antenna          " + "".join(f"{value:10.1f} K  " for value in mean_k),
        "  signal response  " + "".join(f"{value:10.4f}    " for value in mean_response),
        "  noise, a bin     " + "".join(f"{value:10.1f} mK " for value in sigma_mk) + " a channel",
        "",
        f"  engine time      about {np.ceil(seconds):.0f} s ({per_sample_s * 1e3:.1f} ms a sample)",
        f"  memory           about {np.ceil(memory / 1e6):.0f} MB beside the libraries",
    ]
    if config.foreground.draws is not None:
        lines.append(_ensemble_cost(config, config.foreground.draws, per_sample_s * samples))
    return "\n".join(lines)


def _ensemble_cost(config: Config, draws: int, engine_pass_s: float) -> str:
    """Time and memory of the ensemble: mean beams first, as many as the leaves that move the beam ask for."""
    leaves = len(moving_leaves(config))
    fewest = 1 + len(SCORES) * leaves
    most = fewest + 4 * leaves * (leaves - 1) // 2
    pixels = 12 * config.sky.nside**2 * config.engine.nodes
    beam_s, draw_s = PASSES_A_MEAN_BEAM * engine_pass_s, SECONDS_A_SKY_NUMBER * pixels
    table = pixels * config.bins.count * BYTES_PER_NUMBER
    span = f"{fewest}" if most == fewest else f"{fewest} to {most}"
    return (
        f"  ensemble         {span} mean beams of about {np.ceil(beam_s):.0f} s and {table / 1e6:.0f} MB each, then "
        f"{draws} draws of about {draw_s * 1e3:.0f} ms"
    )
