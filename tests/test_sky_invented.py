"""Random fields and the invented sky: their statistics against theory, and one sky at every resolution."""

from __future__ import annotations

import healpy
import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import stats

from sims.errors import InputError
from sims.sky_invented import (
    gaussian_field,
    gaussian_field_spectrum,
    halo_k,
    invented_index_map,
    invented_sky_map,
    synthesised,
)


def test_short_correlation_has_the_flat_sky_spectrum() -> None:
    length = np.radians(2.0)
    spectrum = gaussian_field_spectrum(300, 2.0)
    multipole = np.arange(120)
    expected = 2.0 * np.pi * length**2 * np.exp(-0.5 * (multipole + 0.5) ** 2 * length**2)
    # A Gaussian's transform in the plane; the sphere's curvature enters at order L^2 (1.2e-3) per e-fold (up to 8.7).
    assert spectrum[:120] == pytest.approx(expected, rel=8.7 * length**2)


@pytest.mark.parametrize("length_deg", [2.0, 20.0, 60.0])
def test_spectrum_gives_back_the_correlation(length_deg: float) -> None:
    spectrum = gaussian_field_spectrum(500, length_deg)
    theta = np.radians(np.linspace(0.0, 180.0, 181))
    weights = (2 * np.arange(spectrum.size) + 1) * spectrum / (4.0 * np.pi)
    found = np.polynomial.legendre.legval(np.cos(theta), weights)
    expected = np.exp(-0.5 * (theta / np.radians(length_deg)) ** 2)
    # At 60 deg the correlation has a corner at the antipode, of height 0.01, which no finite spectrum carries.
    assert found == pytest.approx(expected, abs=1e-6 if length_deg < 30 else 6e-3)


@pytest.fixture(scope="module")
def fields() -> NDArray[np.float64]:
    """150 draws at nside 16, sd 0.05, L = 10 deg."""
    rng = np.random.default_rng(1)
    return np.array([gaussian_field(16, 0.05, 10.0, rng) for _ in range(150)])


# Six places 90 deg apart: at L = 10 deg their correlation is exp(-40), so that each counts as a draw of its own.
OCTAHEDRON = healpy.vec2pix(16, *np.vstack([np.eye(3), -np.eye(3)]).T)


def test_variance_over_an_ensemble_is_chi_squared(fields: NDArray[np.float64]) -> None:
    scores = fields[:, OCTAHEDRON].ravel() / 0.05
    # The sum of squares of independent normal scores is chi-squared; 1e-4 in either tail.
    low, high = stats.chi2.ppf([1e-4, 1 - 1e-4], scores.size)
    assert low < np.sum(scores**2) < high
    assert stats.kstest(scores, "norm").pvalue > 1e-4


@pytest.mark.parametrize("lengths", [0.5, 1.0, 2.0])
def test_correlation_is_the_stated_gaussian(fields: NDArray[np.float64], lengths: float) -> None:
    vectors = np.column_stack(healpy.pix2vec(16, np.arange(fields.shape[1])))
    pairs = []
    for first in OCTAHEDRON:
        separation_deg = np.degrees(np.arccos(np.clip(vectors @ vectors[first], -1.0, 1.0)))
        second = int(np.argmin(np.abs(separation_deg - 10.0 * lengths)))
        assert abs(separation_deg[second] - 10.0 * lengths) < 1.0
        expected = np.exp(-0.5 * (separation_deg[second] / 10.0) ** 2)
        found = np.corrcoef(fields[:, first], fields[:, second])[0, 1]
        pairs.append(np.arctanh(found) - np.arctanh(expected))
    # Fisher's transform of a correlation of n pairs is normal with variance 1/(n - 3); six of them, 4 sigma.
    assert abs(np.mean(pairs)) < 4.0 / np.sqrt(len(pairs) * (len(fields) - 3))


def test_variance_over_the_sphere_matches_its_own_spread(fields: NDArray[np.float64]) -> None:
    spectrum = gaussian_field_spectrum(47, 10.0)
    weights = 2 * np.arange(spectrum.size) + 1
    # Variance of the sphere's mean square of a Gaussian field: 2 sum (2l+1) C_l^2 / (4 pi)^2.
    spread = np.sqrt(2.0 * np.sum(weights * spectrum**2) / (4.0 * np.pi) ** 2 / len(fields))
    assert abs(np.mean(fields**2) / 0.05**2 - 1.0) < 4.0 * spread


def test_synthesis_has_the_spectrum_it_was_given() -> None:
    lmax, nside = 40, 64
    spectrum = np.asarray((np.arange(lmax + 1) + 2.0) ** -2.5, dtype=np.float64)
    found = np.zeros(lmax + 1)
    rng = np.random.default_rng(4)
    draws = 20
    for _ in range(draws):
        found += healpy.anafast(synthesised(spectrum, nside, rng), lmax=lmax, iter=3) / draws
    # The sum of (2l+1) draws squares per multipole is chi-squared, all multipoles together as well.
    freedom = draws * (2 * np.arange(lmax + 1) + 1)
    total = float(np.sum(freedom * found / spectrum))
    low, high = stats.chi2.ppf([1e-4, 1 - 1e-4], freedom.sum())
    assert low < total < high
    each = stats.chi2.cdf(freedom * found / spectrum, freedom)
    assert stats.kstest(each, "uniform").pvalue > 1e-4


def test_one_seed_is_one_field_at_every_resolution() -> None:
    coarse = gaussian_field(16, 1.0, 20.0, np.random.default_rng(5))
    fine = gaussian_field(64, 1.0, 20.0, np.random.default_rng(5))
    theta, phi = healpy.pix2ang(16, np.arange(coarse.size))
    # Both are values at points; bilinear interpolation on 0.92 deg pixels errs by (h/L)^2/8 of the sd, more at
    # the poles, where four pixels stand 90 deg apart in azimuth: (h/L)(1 - cos 45 deg).
    assert np.abs(healpy.get_interp_val(fine, theta, phi) - coarse).max() < 4.0 * (0.92 / 20.0) * 0.3


@pytest.mark.parametrize(("nside", "length_deg"), [(8, 1.0), (64, 0.3), (64, 90.0), (64, 180.0)])
def test_lengths_no_field_can_have_are_refused(nside: int, length_deg: float) -> None:
    with pytest.raises(InputError, match="correlation length"):
        gaussian_field(nside, 1.0, length_deg, np.random.default_rng(0))


@pytest.mark.parametrize("seed", range(20))
def test_invented_sky_is_of_the_real_size(seed: int) -> None:
    found = invented_sky_map(32, np.random.default_rng(seed))
    # The 408 MHz survey has a mean of 34.7 K, a minimum of 10.6 K and hundreds of kelvin at its peaks
    # (Haslam et al. 1982); an invention may stray by a third of that.
    assert 23.0 < found.temperature_k.mean() < 46.0
    assert 7.0 < found.temperature_k.min() < 14.0
    assert found.temperature_k.max() > 300.0
    assert (found.source, found.frame, found.filled_pixels) == ("invented", "galactic", 0)
    index = invented_index_map(32, np.random.default_rng(seed))
    assert 2.45 < index.mean() < 2.65
    assert index.min() > 2.2
    assert index.max() < 2.8


def test_invented_sky_is_one_sky_at_every_resolution() -> None:
    fine = invented_sky_map(128, np.random.default_rng(6))
    coarse = invented_sky_map(16, np.random.default_rng(6))
    assert coarse.temperature_k == pytest.approx(healpy.ud_grade(fine.temperature_k, 16), rel=1e-12)
    finer = invented_sky_map(256, np.random.default_rng(6))
    # Above nside 128 the same function is taken at more points; its mean moves by what a pixel cannot see of blobs.
    assert finer.temperature_k.mean() == pytest.approx(fine.temperature_k.mean(), rel=1e-3)
    assert coarse.sha256 != fine.sha256
    assert coarse.sha256 == invented_sky_map(16, np.random.default_rng(6)).sha256


def test_halo_has_the_published_angular_power_law() -> None:
    power = healpy.anafast(np.log(halo_k(64, np.random.default_rng(7))), lmax=100, iter=3)
    multipole = np.arange(20, 101)
    design = np.column_stack([np.ones(multipole.size), np.log(multipole + 2.0)])
    # ln of a chi-squared of 2l+1 terms has variance 2/(2l+1) to first order.
    weight = (2 * multipole + 1) / 2.0
    covariance = np.linalg.inv(design.T @ (weight[:, None] * design))
    slope = (covariance @ design.T @ (weight * np.log(power[multipole])))[1]
    assert abs(slope + 2.8) < 4.0 * np.sqrt(covariance[1, 1])
    # The published range at 408 MHz: La Porta, Burigana, Reich and Reich 2008, A&A 479, 641 (from memory).
    assert -3.0 < slope < -2.6


def test_no_part_of_the_invention_is_left_out() -> None:
    temperature_k = invented_sky_map(64, np.random.default_rng(8)).temperature_k
    latitude = np.abs(healpy.pix2ang(64, np.arange(temperature_k.size), lonlat=True)[1])
    plane, pole = temperature_k[latitude < 2.0], temperature_k[latitude > 60.0]
    assert np.median(plane) > 3.0 * np.median(pole)  # a disk, as in the survey, where the plane stands out by more
    # A blob about a degree wide is gone 5 deg away; the disk, which is longer than that, is not.
    peak = int(temperature_k.argmax())
    centre = np.array(healpy.pix2vec(64, peak))
    ring = np.setdiff1d(*(healpy.query_disc(64, centre, np.radians(radius)) for radius in (6.0, 5.0)))
    assert temperature_k[peak] > 2.0 * temperature_k[ring].max()
