"""Whole mock campaigns of every kind of vantage, beam and surface: observed, binned and given their covariance."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr
from reader_cases import PHI_DEG, THETA_DEG, grid_directions
from small_campaign import CONFIGS, small_tree

from reduce.binning import bin_recording
from reduce.chromaticity import corrected
from reduce.knowledge_modes import knowledge_modes
from sims.beam import beam_from
from sims.campaign import observe
from sims.config_beam import Dipole
from sims.config_load import parse_config

BAND_MHZ = np.linspace(35.0, 125.0, 46)
UP = {"kind": "vertical"}
ONE_BIN = {"by": "all", "count": 1}
LOSSES = {"efficiency": 0.95, "structure_temperature_k": 270.0}


def quiet(samples: int) -> None:
    """No progress bar."""


def lander(folder: Path) -> dict[str, Any]:
    (folder / "ridge.csv").write_text("azimuth_deg,elevation_deg\n0,2\n90,11\n200,4\n")
    return {
        "vantage": {
            "kind": "lunar-surface", "latitude_deg": 20.0, "longitude_deg": 178.0, "height_m": 0.0,
            "horizon_file": str(folder / "ridge.csv"), "boresight": UP,
        },
        "beam": {"kind": "dipole", "length_m": 2.0, "height_m": 1.0, **LOSSES},
        "bins": ONE_BIN,
        "knowledge": {"surface.permittivity": {"distribution": "normal", "sd": 0.2}},
    }  # fmt: skip


def eccentric(folder: Path) -> dict[str, Any]:
    return {
        "vantage": {
            "kind": "lunar-orbit", "altitude_km": 900.0, "eccentricity": 0.25, "inclination_deg": 80.0,
            "node_deg": 20.0, "pericentre_deg": 60.0, "phase_deg": 0.0, "boresight": {"kind": "anti-sun"},
        },
        "surface": {
            "temperature_k": 230.0, "polar_temperature_k": 180.0, "permittivity": 2.7, "reflection": True,
            "layer": {"thickness_m": 2.0, "permittivity": 6.0, "loss_tangent": 0.01},
        },
        "bins": {"by": "orbit-phase", "count": 2},
        "observation": {"require": ["earth-hidden"]},
        "knowledge": {"surface.layer.thickness": {"distribution": "normal", "sd": "0.2 m"}},
    }  # fmt: skip


def from_file(folder: Path) -> dict[str, Any]:
    from_closed_form = {}
    for name, length_m in (("beam", 1.8), ("longer", 1.85)):
        beam = beam_from(Dipole(kind="dipole", length_m=length_m, efficiency=1.0, structure_temperature_k=270.0))
        power = beam.directivity(BAND_MHZ, grid_directions(THETA_DEG, PHI_DEG)).T
        from_closed_form[name] = netcdf(
            folder / f"{name}.nc", power.reshape(len(BAND_MHZ), len(THETA_DEG), len(PHI_DEG))
        )
    return {
        "beam": {
            "kind": "file", "source": from_closed_form["beam"], "quantity": "gain", "missing_power": "numerical",
            **LOSSES, "modes": [{"source": from_closed_form["longer"]}],
        },
        "correction": {"reference_mhz": 75.0},
        "knowledge": {
            "beam.modes.0.amplitude": {"distribution": "normal", "sd": 0.1},
            "beam.ripple_fraction": {"distribution": "normal", "sd": 1e-4},
            "beam.dimension_scale": {"distribution": "normal", "sd": 1e-3},
        },
    }  # fmt: skip


def netcdf(path: Path, power: np.ndarray) -> dict[str, Any]:
    axes = {"frequency": (BAND_MHZ, "MHz"), "theta": (THETA_DEG, "deg"), "phi": (PHI_DEG, "deg")}
    coords = {name: (name, values, {"units": unit}) for name, (values, unit) in axes.items()}
    xr.Dataset({"gain": (tuple(axes), power)}, coords=coords).to_netcdf(path, engine="h5netcdf")
    return {"format": "netcdf", "file": str(path), "variable": "gain"}


def scheduled(folder: Path) -> dict[str, Any]:
    return {
        "vantage": {
            "kind": "lunar-orbit", "altitude_km": 100.0, "inclination_deg": 88.0, "node_deg": 20.0, "phase_deg": 0.0,
            "boresight": {
                "kind": "schedule",
                "targets": [
                    {"start": "2027-05-01T00:00:00Z", "direction_deg": [70.0, -50.0]},
                    {"start": "2027-06-12T00:00:00Z", "direction_deg": [250.0, 20.0], "roll_deg": 45.0},
                ],
            },
        },
        "bins": {"by": "pointing", "count": 2},
        "knowledge": {"beam.tilt": {"distribution": "normal", "sd": "1 deg"}},
    }  # fmt: skip


@pytest.mark.parametrize("kind", [lander, eccentric, from_file, scheduled])
def test_campaign_from_orbit_to_covariance(kind: Any, tmp_path: Path) -> None:
    changes = kind(tmp_path)
    knowledge = changes.pop("knowledge")
    required = changes.pop("observation", {})
    tree = {**small_tree(), **changes, "knowledge": knowledge}
    tree["observation"].update(step="3600 s", count=700, **required)
    config = parse_config(tree, CONFIGS)
    observed = observe(config, quiet)
    assert observed.reached.error_k <= config.engine.tolerance_k
    spectra = bin_recording(observed.recording, config.bins)
    good = spectra["flag"].values == 0
    assert good.any(axis=1).all()
    # Every temperature lies between that of the coldest and the brightest sky; every response between 0 and 1.
    assert (spectra["antenna_temperature_k"].values[good] > 100.0).all()
    assert (spectra["antenna_temperature_k"].values[good] < 5e4).all()
    assert (spectra["signal_response"].values > 0.2).all()
    assert (spectra["signal_response"].values < 1.0).all()
    modes = knowledge_modes(config, quiet)
    assert modes.names == tuple(leaf.path for leaf in config.knowledge.leaves)
    assert np.isfinite(modes.temperature_k).all()
    assert (np.abs(modes.temperature_k).max(axis=(1, 2)) > 1e-4).all()
    if config.correction is not None:
        flat = corrected(spectra, config, quiet)
        assert (flat["chromaticity_error"].values > 0).any()
        assert np.isfinite(flat["antenna_temperature_k"].values[good]).all()
