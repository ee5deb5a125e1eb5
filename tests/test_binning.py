"""Binning: weighted means in closed form, flags, empty bins, and the noise of a mean."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import xarray as xr
from scipy import stats

from reduce.binning import bin_of_each_sample, bin_recording, mean_by_bin, sum_by_bin
from sims.campaign import FLAG_EMPTY, FLAG_MASKED
from sims.config import Bins

RNG = np.random.default_rng(9)


def recording(samples: int, channels: int, **changed: Any) -> xr.Dataset:
    """A recording with the variables that binning reads."""
    shape, dims = (samples, channels), ("time", "channel")
    values: dict[str, Any] = {
        "antenna_temperature_k": (dims, RNG.uniform(500.0, 5000.0, shape)),
        "noise_variance_k2": (dims, RNG.uniform(0.1, 2.0, shape)),
        "signal_response": (dims, RNG.uniform(0.5, 0.8, shape)),
        "flag": (dims, np.zeros(shape, np.uint8)),
        "integration_s": ("time", RNG.uniform(50.0, 150.0, samples)),
        "pointing": ("time", RNG.integers(0, 3, samples)),
        "orbit_phase": ("time", RNG.uniform(0.0, 1.0, samples)),
        "sidereal_time_hours": ("time", RNG.uniform(0.0, 24.0, samples)),
        "frequency_mhz": ("channel", np.linspace(40.0, 120.0, channels)),
        "width_mhz": ("channel", np.full(channels, 1.0)),
    }
    return xr.Dataset({**values, **changed}, coords={"time": np.arange(samples)}, attrs={"sky": "invented"})


def bins(by: str, count: int) -> Bins:
    return Bins.model_validate({"by": by, "count": count})


# ---------------------------------------------------------------- which bin


def test_each_sample_goes_where_it_belongs() -> None:
    geometry = recording(
        4,
        1,
        orbit_phase=("time", [0.0, 0.2499, 0.25, 0.9999]),
        sidereal_time_hours=("time", [0.0, 5.99, 6.0, 23.999]),
        pointing=("time", [3, 0, 1, 2]),
    )
    assert bin_of_each_sample(geometry, bins("all", 1)).tolist() == [0, 0, 0, 0]
    assert bin_of_each_sample(geometry, bins("pointing", 4)).tolist() == [3, 0, 1, 2]
    assert bin_of_each_sample(geometry, bins("orbit-phase", 4)).tolist() == [0, 0, 1, 3]
    assert bin_of_each_sample(geometry, bins("sidereal-time", 4)).tolist() == [0, 0, 1, 3]


def test_rounding_at_the_end_of_the_circle_stays_within_the_bins() -> None:
    almost = np.array([1.0, np.nextafter(1.0, 0.0), -1e-20, np.nextafter(24.0, 0.0) / 24.0])
    geometry = recording(4, 1, orbit_phase=("time", almost), sidereal_time_hours=("time", 24.0 * almost))
    for by in ("orbit-phase", "sidereal-time"):
        label = bin_of_each_sample(geometry, bins(by, 7))
        assert label[0] == 0
        assert set(label.tolist()) <= {0, 6}


# ---------------------------------------------------------------- closed forms


def test_means_are_weighted_by_time() -> None:
    data = recording(
        3,
        1,
        antenna_temperature_k=(("time", "channel"), [[100.0], [200.0], [900.0]]),
        noise_variance_k2=(("time", "channel"), [[4.0], [2.0], [1.0]]),
        signal_response=(("time", "channel"), [[0.6], [0.9], [0.5]]),
        integration_s=("time", [1.0, 3.0, 5.0]),
        pointing=("time", [0, 0, 1]),
    )
    spectra = bin_recording(data, bins("pointing", 2))
    # By hand: (1 x 100 + 3 x 200)/4; (1 x 4 + 9 x 2)/16; (0.6 + 2.7)/4. One or two roundings.
    np.testing.assert_allclose(spectra["antenna_temperature_k"], [[175.0], [900.0]], rtol=1e-15)
    np.testing.assert_allclose(spectra["noise_variance"], [[22.0 / 16.0], [1.0]], rtol=1e-15)
    np.testing.assert_allclose(spectra["signal_response"], [[0.825], [0.5]], rtol=1e-15)
    np.testing.assert_array_equal(spectra["weight_s"], [4.0, 5.0])
    np.testing.assert_array_equal(spectra["flag"], 0)
    assert "time" not in spectra.variables
    assert spectra.attrs == {"sky": "invented"}


def test_equal_samples_average_to_themselves_with_less_noise() -> None:
    same = np.full((10, 4), 3000.0)
    data = recording(
        10,
        4,
        antenna_temperature_k=(("time", "channel"), same),
        noise_variance_k2=(("time", "channel"), np.full((10, 4), 2.5)),
        integration_s=("time", np.full(10, 120.0)),
    )
    spectra = bin_recording(data, bins("all", 1))
    np.testing.assert_allclose(spectra["antenna_temperature_k"], 3000.0, rtol=1e-14)  # ten roundings
    np.testing.assert_allclose(spectra["noise_variance"], 0.25, rtol=1e-14)


def test_bins_together_hold_all_that_the_recording_does() -> None:
    data = recording(200, 5)
    one, many = bin_recording(data, bins("all", 1)), bin_recording(data, bins("orbit-phase", 6))
    weight = many["weight_s"].values[:, None]
    again = (weight * many["antenna_temperature_k"].values).sum(axis=0) / weight.sum()
    np.testing.assert_allclose(again, one["antenna_temperature_k"].values[0], rtol=1e-13)  # two hundred roundings
    assert weight.sum() == pytest.approx(float(one["weight_s"][0]), rel=1e-13)


def test_means_agree_with_a_loop() -> None:
    data = recording(60, 3)
    label = data["pointing"].values
    seconds = data["integration_s"].values
    values = RNG.standard_normal((60, 3))
    loop = np.array([np.average(values[label == k], axis=0, weights=seconds[label == k]) for k in range(3)])
    np.testing.assert_allclose(mean_by_bin(values, data, bins("pointing", 3)), loop, rtol=1e-12)  # order of sums
    assert sum_by_bin(np.ones((60, 3)), label, 3)[:, 0].tolist() == np.bincount(label, minlength=3).tolist()


# ---------------------------------------------------------------- flags and empty bins


def test_flagged_samples_count_for_nothing_whatever_they_hold() -> None:
    clean = recording(40, 3)
    flag = np.zeros((40, 3), np.uint8)
    flag[::3, 1] = 4
    spoilt_k = clean["antenna_temperature_k"].values.copy()
    spoilt_k[::3, 1] = np.nan
    spoilt_k2 = clean["noise_variance_k2"].values.copy()
    spoilt_k2[::3, 1] = np.inf
    dims = ("time", "channel")
    spoilt = clean.assign(
        flag=(dims, flag), antenna_temperature_k=(dims, spoilt_k), noise_variance_k2=(dims, spoilt_k2)
    )
    spectra = bin_recording(spoilt, bins("all", 1))
    left = clean.isel(time=np.flatnonzero(flag[:, 1] == 0))
    without = bin_recording(left, bins("all", 1)).isel(channel=[1])
    for name in ("antenna_temperature_k", "noise_variance", "signal_response"):
        # Zeros in between do not change a sum; only its order may differ.
        np.testing.assert_allclose(spectra[name].values[:, [1]], without[name].values, rtol=1e-13)
    untouched = bin_recording(clean, bins("all", 1)).isel(channel=[0, 2])
    xr.testing.assert_equal(spectra.isel(channel=[0, 2]), untouched)
    np.testing.assert_array_equal(spectra["flag"], 0)


def test_a_masked_channel_is_flagged_in_every_bin_and_holds_no_number() -> None:
    flag = np.zeros((30, 4), np.uint8)
    flag[:, 2] = FLAG_MASKED
    spectra = bin_recording(recording(30, 4, flag=(("time", "channel"), flag)), bins("pointing", 3))
    assert np.all(spectra["flag"].values[:, 2] & FLAG_MASKED)
    assert np.all(spectra["flag"].values[:, [0, 1, 3]] == 0)
    assert np.isnan(spectra["antenna_temperature_k"].values[:, 2]).all()
    assert np.isnan(spectra["noise_variance"].values[:, 2]).all()
    assert np.isfinite(spectra["signal_response"]).all()


def test_an_empty_bin_is_flagged_and_weighs_nothing() -> None:
    spectra = bin_recording(recording(10, 2, pointing=("time", np.zeros(10, int))), bins("pointing", 3))
    np.testing.assert_array_equal(spectra["flag"].values, [[0, 0], [FLAG_EMPTY] * 2, [FLAG_EMPTY] * 2])
    assert np.isnan(spectra["antenna_temperature_k"].values[1:]).all()
    np.testing.assert_array_equal(spectra["weight_s"].values[1:], 0.0)
    np.testing.assert_array_equal(spectra["signal_response"].values[1:], 0.0)


# ---------------------------------------------------------------- noise


def test_noise_variance_of_a_mean_against_its_scatter() -> None:
    """Thousands of recordings of the same sky, samples of unequal time: the stated variance is the one seen."""
    samples, channels, trials = 24, 3, 3000
    seconds = RNG.uniform(20.0, 200.0, samples)
    variance = 50.0 / seconds[:, None] * np.array([1.0, 2.0, 4.0])
    pointing = np.arange(samples) % 2
    base = recording(
        samples,
        channels,
        antenna_temperature_k=(("time", "channel"), np.full((samples, channels), 1000.0)),
        noise_variance_k2=(("time", "channel"), variance),
        integration_s=("time", seconds),
        pointing=("time", pointing),
    )
    binned = np.empty((trials, 2, channels))
    for trial in range(trials):
        noise = RNG.standard_normal((samples, channels)) * np.sqrt(variance)
        binned[trial] = mean_by_bin(1000.0 + noise, base, bins("pointing", 2))
    stated = bin_recording(base, bins("pointing", 2))["noise_variance"].values
    squares = ((binned - 1000.0) ** 2).sum(axis=0) / stated
    # Chi-squared with `trials` degrees of freedom in each of six cells: beyond these bounds once in 1e6.
    low, high = stats.chi2(trials).ppf([1e-6 / 6, 1.0 - 1e-6 / 6])
    assert np.all((squares > low) & (squares < high))
    # Time weights are the best ones where variance goes as 1/time: no better mean exists (inverse-variance sum).
    best = np.array([1.0 / (1.0 / variance[pointing == k]).sum(axis=0) for k in range(2)])
    np.testing.assert_allclose(stated, best, rtol=1e-12)  # order of sums
