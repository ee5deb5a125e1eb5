"""How long a large beam table takes to load and to be made ready for the engine, and in how much memory.

Run it as ``python tests/bench/beam_table.py``: 181 thetas, 360 phis and 200 frequencies in NetCDF,
against the time NumPy takes to read the same bytes.
"""

from __future__ import annotations

import resource
import tempfile
import time
from pathlib import Path

import numpy as np
import xarray as xr

from sims.beam_grid import grid_beam
from sims.beam_netcdf import read_netcdf_file
from sims.config_beam import NetcdfSource

SHAPE = (200, 181, 360)


def write(path: Path) -> None:
    """A smooth pattern, frequency by frequency."""
    axes = {
        "frequency": (np.linspace(40.0, 120.0, SHAPE[0]), "MHz"),
        "theta": (np.arange(181.0), "deg"),
        "phi": (np.arange(360.0), "deg"),
    }
    theta, phi = np.radians(axes["theta"][0])[:, None], np.radians(axes["phi"][0])
    wave = axes["frequency"][0][:, None, None] / 80.0
    power = 1.0 + 0.3 * np.sin(theta) ** 2 * np.cos(theta * wave) * np.cos(phi)
    coords = {name: (name, values, {"units": unit}) for name, (values, unit) in axes.items()}
    xr.Dataset({"gain": (tuple(axes), power)}, coords=coords).to_netcdf(path / "beam.nc", engine="h5netcdf")
    np.save(path / "beam.npy", power)


def peak_gb() -> float:
    """Largest memory of the process so far, GB."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6


def main() -> None:
    """Measure and print."""
    with tempfile.TemporaryDirectory() as folder:
        write(Path(folder))
        begun = time.perf_counter()
        plain = np.load(Path(folder) / "beam.npy")
        plain_s = time.perf_counter() - begun
        del plain
        begun = time.perf_counter()
        table = read_netcdf_file(NetcdfSource(format="netcdf", file=Path(folder) / "beam.nc", variable="gain"))
        load_s = time.perf_counter() - begun
        begun = time.perf_counter()
        beam = grid_beam(table, smoothing_mhz=None, mounting=np.eye(3), efficiency=1.0, structure_temperature_k=270.0)
        beam.node_table(np.linspace(41.0, 119.0, 20))
        ready_s = time.perf_counter() - begun
    print(f"{SHAPE[1]} x {SHAPE[2]} directions, {SHAPE[0]} frequencies")
    print(f"plain load  {plain_s:6.2f} s")
    print(f"read, judge {load_s:6.2f} s, ratio {load_s / plain_s:.1f}")
    print(f"20 nodes    {ready_s:6.2f} s")
    print(f"peak memory {peak_gb():6.2f} GB, with the writing of the file")


if __name__ == "__main__":
    main()
