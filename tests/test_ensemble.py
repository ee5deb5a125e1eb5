"""The ensemble's mean and modes: recovered from draws, honest for few of them, and the fit that uses them."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
import xarray as xr
from small_campaign import small_config

from reduce.covariance import DiagonalLowRank
from reduce.ensemble import DrawnSpectra, check_campaign, spread, without_drawn
from reduce.foreground.gaussian_process import process_modes
from reduce.foreground.known import KnownForeground, NoFamily, smooth_safety
from reduce.removed import without_known
from sims.errors import InputError
from sims.frequency import channel_grid

BINS, CHANNELS = 2, 60
SIZES = 10.0 ** np.linspace(4, -1, 12)  # of the noise


def linear_world(rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Modes ndarray[mode, bin, channel], K, and how the response goes with them."""
    shapes = np.linalg.qr(rng.standard_normal((BINS * CHANNELS, len(SIZES))))[0].T.reshape(-1, BINS, CHANNELS)
    return 0.01 * SIZES[:, None, None] * shapes, 1e-4 * rng.standard_normal(shapes.shape)


def drawn(modes_k: np.ndarray, response: np.ndarray, count: int, rng: np.random.Generator) -> DrawnSpectra:
    scores = rng.standard_normal((count, len(modes_k)))
    return DrawnSpectra(
        1000.0 + np.einsum("dm,mbc->dbc", scores, modes_k), 0.7 + np.einsum("dm,mbc->dbc", scores, response)
    )


def test_modes_of_many_draws_have_the_covariance_of_the_world_and_carry_the_response() -> None:
    rng = np.random.default_rng(1)
    modes_k, response = linear_world(rng)
    found = spread(drawn(modes_k, response, 20_000, rng), np.full((BINS, CHANNELS), 1e-4))
    assert len(found.size_of_noise) == len(SIZES)
    # A sample variance of 20,000 draws is good to 1 %; modes differ threefold, so axes mix little.
    assert found.size_of_noise == pytest.approx(SIZES, rel=0.04)
    flat, truth = found.known.modes_k.reshape(len(SIZES), -1), modes_k.reshape(len(SIZES), -1)
    assert flat.T @ flat == pytest.approx(truth.T @ truth, abs=0.03 * np.abs(truth.T @ truth).max())
    cross = np.einsum("mi,mj->ij", found.known.response.reshape(len(SIZES), -1), flat)
    expected = np.einsum("mi,mj->ij", response.reshape(len(SIZES), -1), truth)
    # Each of 12 scores is correlated with the largest mode's by chance, to 0.7 %: 2.5 % together, at most 4 times that.
    assert cross == pytest.approx(expected, abs=0.1 * np.abs(expected).max())


@pytest.mark.parametrize("count", [60, 200])
def test_few_draws_do_not_make_the_next_one_improbable(count: int) -> None:
    """Chi-squared of fresh draws and noise, averaged over ensembles, against the number of rows."""
    rng = np.random.default_rng(2)
    modes_k, response = linear_world(rng)
    variance = np.full((BINS, CHANNELS), 1e-4)
    good = np.ones((BINS, CHANNELS), dtype=bool)
    with_allowance, without = [], []
    for _ in range(150):
        found = spread(drawn(modes_k, response, count, rng), variance)
        fresh = drawn(modes_k, response, 4, rng).temperature_k + 0.01 * rng.standard_normal((4, BINS, CHANNELS))
        off = (fresh - found.known.mean_k).reshape(4, -1).T
        for size, into in ((1.0, with_allowance), (1.0 / np.sqrt(found.inflation), without)):
            modes = np.moveaxis(size * found.known.modes_k, 0, -1)
            white = DiagonalLowRank.from_bins(variance, modes, good).whiten(off)
            into.append((white**2).sum(axis=0).mean())
    rows = BINS * CHANNELS
    scatter = np.sqrt(2.0 * rows / 600)
    # Modes near the noise need less than the full allowance: the mean may fall short, by less than one row a mode.
    assert -len(SIZES) / 3 - 4 * scatter < np.mean(with_allowance) - rows < 4 * scatter
    assert np.mean(without) > np.mean(with_allowance)


def test_allowance_is_the_published_one_and_too_few_draws_are_refused() -> None:
    rng = np.random.default_rng(3)
    modes_k, response = linear_world(rng)
    found = spread(drawn(modes_k, response, 100, rng), np.full((BINS, CHANNELS), 1e-4))
    above = int((found.size_of_noise > 1.0).sum())
    assert found.inflation == pytest.approx((1 + 1 / 100) * 99 / (100 - above - 2))
    with pytest.raises(InputError, match=r"foreground\.draws: 20 draws for \d+ modes above the noise; allowed are"):
        spread(drawn(modes_k, response, 20, rng), np.full((BINS, CHANNELS), 1e-4))


def test_bins_and_channels_without_data_have_no_say_and_still_a_mean() -> None:
    rng = np.random.default_rng(4)
    modes_k, response = linear_world(rng)
    variance = np.full((BINS, CHANNELS), 1e-4)
    variance[1, 10:20] = np.nan
    spectra = drawn(modes_k, response, 500, rng)
    wild = spectra.temperature_k.copy()
    wild[:, 1, 10:20] += 1e3 * rng.standard_normal((500, 10))
    one, other = spread(spectra, variance), spread(DrawnSpectra(wild, spectra.response), variance)
    assert one.size_of_noise == pytest.approx(other.size_of_noise, rel=1e-9)
    assert np.isfinite(other.known.modes_k).all()


def test_numbers_drawn_for_the_ensemble_are_not_counted_again() -> None:
    config = small_config()
    paths = [leaf.path for leaf in config.knowledge.leaves]
    spectra = xr.Dataset(
        {
            "systematic_modes": (("mode", "bin", "channel"), np.arange(2.0 * 6).reshape(2, 2, 3)),
            "response_modes": (("mode", "bin", "channel"), np.zeros((2, 2, 3))),
        },
        attrs={"mode_names": [paths[0], "of my own"]},
    )
    left = without_drawn(spectra, config)
    assert left.attrs["mode_names"] == ["of my own"]
    assert np.array_equal(left["systematic_modes"], spectra["systematic_modes"][1:])
    none = without_drawn(spectra.isel(mode=[0]).assign_attrs(mode_names=[f"{paths[0]} (mixed)"]), config)
    assert "systematic_modes" not in none
    assert "mode_names" not in none.attrs
    unnamed = spectra.copy()
    unnamed.attrs = {}
    assert without_drawn(unnamed, config).identical(unnamed)


def test_spectra_of_another_campaign_are_refused() -> None:
    config = small_config()
    grid = channel_grid(config.channels)
    bins, channels = config.bins.count, grid.count

    def spectra(bins: int, frequency_mhz: np.ndarray) -> xr.Dataset:
        return xr.Dataset({"frequency_mhz": ("channel", frequency_mhz), "flag": (("bin", "channel"),
                          np.zeros((bins, len(frequency_mhz))))})  # fmt: skip

    check_campaign(spectra(bins, grid.centre_mhz), config)
    with pytest.raises(InputError, match="bins; allowed are the") as error:
        check_campaign(spectra(bins + 1, grid.centre_mhz[:-1]), config)
    assert f"{channels - 1} channels; allowed are the {channels}" in str(error.value)
    with pytest.raises(InputError, match=r"channels are up to 0\.1 MHz off"):
        check_campaign(spectra(bins, grid.centre_mhz + 0.1), config)


def test_safety_polynomial_is_independent_from_bin_to_bin_and_has_its_stated_size() -> None:
    frequency = np.linspace(40.0, 120.0, CHANNELS)
    level = np.array([3000.0, 1500.0])[:, None] * (frequency / 60.0) ** -2.5
    safety = smooth_safety(level, frequency, 3, 1e-4)
    covariance = np.einsum("mbc,mde->bcde", safety.modes_k, safety.modes_k)
    assert np.array_equal(covariance[0, :, 1], np.zeros((CHANNELS, CHANNELS)))
    # At the edge all Legendre polynomials are 1 or -1: the variance is that of three terms.
    assert np.sqrt(covariance[0, 0, 0, 0]) == pytest.approx(np.sqrt(3.0) * 1e-4 * level[0, 0], rel=1e-12)
    assert not safety.mean_k.any()
    both = safety.beside(KnownForeground(level, 0.1 * level[None], np.zeros((1, *level.shape)), 77))
    assert both.draws == 77
    assert np.array_equal(both.mean_k, level)
    assert len(both.modes_k) == len(safety.modes_k) + 1


def test_gaussian_process_modes_have_its_covariance() -> None:
    frequency = np.linspace(40.0, 120.0, CHANNELS)
    level = np.array([3000.0, 1500.0])[:, None] * (frequency / 60.0) ** -2.5
    variance = np.full((BINS, CHANNELS), 1e-4)
    found = process_modes(level, frequency, variance, amplitude=0.02, length=0.5)
    x = np.log(frequency)
    for number in range(BINS):
        kernel = (
            0.02**2 * np.exp(-((x[:, None] - x[None, :]) ** 2) / (2 * 0.5**2)) * np.outer(level[number], level[number])
        )
        flat = found.modes_k[:, number]
        # What is left out is below a hundredth of the noise, mode by mode.
        assert np.abs(flat.T @ flat - kernel).max() < 1e-4 * 1e-4 * CHANNELS
    assert not np.einsum("mc,mc->m", found.modes_k[:, 0], found.modes_k[:, 1]).any()


def test_no_family_takes_nothing() -> None:
    nothing, frequency = NoFamily(), np.linspace(40.0, 120.0, 5)
    assert nothing.evaluate(frequency, np.zeros(0)).tolist() == [0.0] * 5
    assert nothing.basis(frequency, np.zeros(0)).shape == (5, 0)


def test_known_foreground_refuses_what_does_not_fit_together() -> None:
    with pytest.raises(InputError) as error:
        KnownForeground(np.zeros((2, 3)), np.zeros((4, 2, 3)), np.full((5, 2, 3), np.nan))
    assert len(error.value.problems) == 2
    with pytest.raises(InputError, match="modes_k has shape"):
        KnownForeground(np.zeros((2, 3)), np.zeros((4, 3, 2)), np.zeros((4, 3, 2)))


def test_what_known_modes_leave_keeps_its_digits_beside_modes_a_million_times_the_noise() -> None:
    """Against the same algebra with 60 digits."""
    rng = np.random.default_rng(5)
    rows, sizes = 40, np.array([1e6, 3e4, 10.0, 0.5])
    shapes = np.linalg.qr(rng.standard_normal((rows, 4)))[0]
    variance = rng.uniform(0.5, 2.0, rows) * 1e-4
    modes = 0.01 * sizes * shapes
    covariance = DiagonalLowRank(variance, modes)
    residual = modes @ rng.standard_normal(4) + 0.01 * rng.standard_normal(rows)
    for known in (4, 3):  # with three, the first and largest is an error of its own and stays
        ours = without_known(covariance, known, residual)
        with mpmath.workdps(60):
            u, d = mpmath.matrix(modes.tolist()), mpmath.diag([mpmath.mpf(float(v)) for v in variance])
            solved = mpmath.lu_solve(d + u * u.T, mpmath.matrix(residual.tolist()))
            k = mpmath.matrix(modes[:, -known:].tolist())
            exact = mpmath.matrix(residual.tolist()) - k * (k.T * solved)
            reference = np.array([float(value) for value in exact])
        # A residual a million times the noise keeps ten digits of the noise: 1e6 * 1e-16, some sums of it.
        assert np.abs(ours - reference).max() < 1e-8 * 0.01
