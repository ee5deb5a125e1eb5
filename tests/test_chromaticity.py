"""Beam-chromaticity correction: exact where the spectral index is one, a fixed linear map of the data everywhere."""

from __future__ import annotations

from pathlib import Path

import healpy as hp
import numpy as np
import pytest
from small_campaign import CONFIGS, small_config, small_tree

from reduce.binning import bin_recording, mean_by_bin
from reduce.chromaticity import chromaticity, corrected
from sims.campaign import observe
from sims.config import Config
from sims.config_load import parse_config
from sims.errors import InputError

REFERENCE = {"correction": {"reference_mhz": 75.0}}


def quiet(samples: int) -> None:
    """No progress bar."""


def campaign(**leaves: object) -> Config:
    """A dipole over a plane; only these leaves are uncertain."""
    return parse_config({**tree_with(), "knowledge": leaves}, CONFIGS)


def tree_with(**changes: dict[str, object]) -> dict[str, object]:
    beam = {
        "kind": "dipole", "length_m": 2.0, "height_m": 1.0, "efficiency": 0.97, "structure_temperature_k": 270.0
    }  # fmt: skip
    tree = small_tree(run={"truth": "nominal"}, beam=beam, **REFERENCE, **changes)
    return {**tree, "knowledge": {}}


def test_one_index_all_over_the_sky_becomes_a_power_law(tmp_path: Path) -> None:
    map_k = 20.0 + 15.0 * np.random.default_rng(2).random(768)
    hp.write_map(tmp_path / "sky.fits", map_k, coord="C", dtype=np.float64)
    sky = {
        "kind": "healpix", "file": str(tmp_path / "sky.fits"), "frame": "icrs", "unit": "K", "nside": 8, "index": 2.52,
        "frequency_mhz": 408.0, "valid_from_mhz": 30.0, "valid_to_mhz": 500.0,
    }  # fmt: skip
    config = parse_config(tree_with(sky=sky), CONFIGS)
    observed = observe(config, quiet)
    truth = mean_by_bin(observed.truth["foreground_k"].values, observed.recording, config.bins)
    known = chromaticity(config, quiet)
    frequency = observed.truth["frequency_mhz"].values
    galaxy = (truth - known.apart_k) / known.factor
    slope = np.diff(np.log(galaxy), axis=1) / np.diff(np.log(frequency))
    # A channel is a mean over its width, of the product and of the factor: (width / f)^2 / 12 of the slopes of both.
    assert slope == pytest.approx(np.full(slope.shape, -2.52), abs=5e-3)
    uncorrected = np.diff(np.log(truth - known.apart_k), axis=1) / np.diff(np.log(frequency))
    assert np.abs(uncorrected + 2.52).max() > 0.05
    assert known.factor[:, np.argmin(np.abs(frequency - 75.0))] == pytest.approx(1.0, abs=5e-3)


def test_correction_is_a_linear_map_that_leaves_the_likelihood_alone() -> None:
    config = campaign()
    observed = observe(config, quiet)
    spectra = bin_recording(observed.recording, config.bins)
    after = corrected(spectra, config, quiet)
    known = chromaticity(config, quiet)
    signal = -0.1 * np.exp(-(((spectra["frequency_mhz"].values - 70.0) / 10.0) ** 2))

    def whitened(data: object) -> np.ndarray:
        rest = data["antenna_temperature_k"].values - known.apart_k - data["signal_response"].values * signal  # type: ignore[index]
        return np.asarray(rest / np.sqrt(data["noise_variance"].values))  # type: ignore[index]

    assert whitened(after) == pytest.approx(whitened(spectra), rel=1e-9, nan_ok=True)
    assert np.isfinite(whitened(after)).sum() > 400


def test_error_of_the_factor_comes_from_sky_and_beam() -> None:
    blind = chromaticity(campaign(), quiet)
    config = campaign(**{"beam.length": {"distribution": "normal", "sd": "2 cm"}})
    known = chromaticity(config, quiet)
    assert not blind.error.any()
    assert known.factor == pytest.approx(blind.factor, rel=1e-12)
    assert 1e-5 < known.error.max() < 0.05


def test_true_beam_only_for_a_drawn_truth_and_reference_within_the_band() -> None:
    with pytest.raises((InputError, ValueError), match=r"correction.beam"):
        small_config(run={"truth": "nominal"}, correction={"reference_mhz": 75.0, "beam": "true"})
    with pytest.raises((InputError, ValueError), match=r"correction.reference"):
        small_config(correction={"reference_mhz": 300.0})
