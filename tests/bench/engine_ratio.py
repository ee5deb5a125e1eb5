"""How much faster the engine is than a plain sum per channel, both measured in the same run.

Run it as ``python tests/bench/engine_ratio.py``. The plain side evaluates the closed-form beam
and the sky at every channel's centre with NumPy, one sample at a time, with the same limb and
mirror; the engine's side includes its self-check and the expansion to channel means.
"""

from __future__ import annotations

import argparse
import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from engine_cases import SmoothSky, moving_scene, plain_at

from sims import config
from sims.beam import beam_from
from sims.frequency import channel_grid
from sims.sky_average import sky_average


def main() -> None:
    """Measure and print the ratio."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--channels", type=int, default=1024)
    parser.add_argument("--nside", type=int, default=64)
    parser.add_argument("--samples", type=int, default=256)
    options = parser.parse_args()
    beam = beam_from(
        config.Dipole(kind="dipole", length_m=2.0, height_m=1.0, efficiency=0.95, structure_temperature_k=270.0)
    )
    grid = channel_grid(config.Channels(start_mhz=40.0, stop_mhz=120.0, count=options.channels))
    scene = moving_scene(SmoothSky(options.nside), beam, options.samples)
    engine = config.Engine()
    sky_average(scene.part(slice(0, 2)), grid, engine, np.random.default_rng(1), lambda done: None)
    begun = time.perf_counter()
    fast = sky_average(scene, grid, engine, np.random.default_rng(1), lambda done: None)
    engine_s = (time.perf_counter() - begun) / options.samples
    begun = time.perf_counter()
    plain = plain_at(scene.part(slice(0, 1)), grid.centre_mhz)
    plain_s = time.perf_counter() - begun
    apart_k = np.abs(fast.antenna_temperature_k[0] - plain[0][0]).max()
    print(f"nside {options.nside}, {options.channels} channels, dipole over a plane, moving Moon with its mirror image")
    print(f"plain sum  {plain_s:10.4f} s a sample")
    print(f"engine     {engine_s:10.6f} s a sample ({fast.reached.nodes} nodes, {options.samples} samples)")
    print(f"ratio      {plain_s / engine_s:10.0f}")
    print(f"largest difference {apart_k:.1e} K: the mean over a channel against the value at its centre")


if __name__ == "__main__":
    main()
