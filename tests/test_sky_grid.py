"""Bringing maps together: frames, grids and resolutions."""

from __future__ import annotations

import healpy
import numpy as np
import pytest
from sky_cases import fwhm_deg, joined, survey, write_table

from sims.errors import InputError
from sims.sky import sky_from
from sims.sky_grid import frame_rotation, kernel_deg, regridded, smoothed, smoothing_nside
from sims.sky_images import SkyImage, average_onto_healpix
from sims.sky_map_checks import Frame
from sims.sky_maps import pixel_directions, turn_directions

PLACES = np.random.default_rng(1).normal(size=(500, 3))
PLACES /= np.linalg.norm(PLACES, axis=1, keepdims=True)


@pytest.mark.parametrize("frame", ["galactic", "icrs", "fk5", "fk4"])
@pytest.mark.parametrize("to_frame", ["galactic", "icrs", "fk5", "fk4"])
def test_rotation_is_that_of_astropy(frame: Frame, to_frame: Frame) -> None:
    rotation = frame_rotation(frame, to_frame)
    assert rotation @ rotation.T == pytest.approx(np.eye(3), abs=1e-14)
    apart = np.linalg.norm(PLACES @ rotation - turn_directions(PLACES, frame, to_frame), axis=1)
    # B1950 places hold the elliptic terms of aberration, up to 0.35 arcsec (Explanatory Supplement), which are no turn.
    assert np.degrees(apart.max()) * 3600.0 < (0.4 if "fk4" in (frame, to_frame) else 1e-6)


def smooth_k(directions: np.ndarray) -> np.ndarray:
    x, y, z = directions.T
    return 30.0 + 8.0 * x - 5.0 * y + 4.0 * z + 2.0 * x * y


@pytest.mark.parametrize(("own_nside", "nside"), [(64, 16), (16, 16), (128, 32)])
def test_a_turned_map_is_the_same_sky(own_nside: int, nside: int) -> None:
    ring = smooth_k(pixel_directions(own_nside, "galactic"))
    found = regridded(ring, frame_rotation("icrs", "galactic"), nside)
    expected = smooth_k(pixel_directions(nside, "icrs"))
    # The sky changes by up to 11 K a radian, and a child's value stands for a pixel of the file: half its diagonal
    # away at most, less by averaging over the children.
    reach = 11.0 * healpy.nside2resol(own_nside) * 0.7
    assert np.abs(found - expected).max() < reach
    assert found.mean() == pytest.approx(ring.mean(), abs=2e-3)
    assert ring.min() <= found.min()
    assert found.max() <= ring.max()


def test_an_image_is_averaged_onto_a_turned_grid() -> None:
    longitude, latitude = np.arange(-179.5, 180.0), np.arange(-89.5, 90.0)
    grid = np.meshgrid(longitude, latitude)
    vectors = healpy.ang2vec(grid[0].ravel(), grid[1].ravel(), lonlat=True)
    values = smooth_k(turn_directions(vectors, "fk4", "icrs")).reshape(grid[0].shape)
    image = SkyImage(values, longitude, latitude, 0)
    found = average_onto_healpix(image, 16, frame_rotation("galactic", "fk4"))
    # Cells of 1 deg, 11 K a radian: below 0.1 K, as half a cell's diagonal is 0.012 rad.
    assert found == pytest.approx(smooth_k(pixel_directions(16, "galactic")), abs=0.1)
    assert found.mean() == pytest.approx(30.0, abs=1e-3)


@pytest.mark.parametrize("width_deg", [4.0, 8.0, 15.0])
def test_a_point_source_becomes_a_gaussian_of_the_stated_width(width_deg: float) -> None:
    source = np.zeros(12 * 64**2)
    source[20_000] = 1e4
    found = smoothed(source, width_deg, 64)
    # The pixel's own spread, 0.29 of 0.92 deg each way, adds 0.63 deg of width in quadrature: 1.2 % at 4 deg.
    assert fwhm_deg(found, 20_000) == pytest.approx(width_deg, rel=0.02)
    # 3e-5 of the source is the stated cut of the harmonics.
    assert found.min() > -3e-5 * found.max()
    assert found.sum() == pytest.approx(1e4, rel=1e-12)


@pytest.mark.parametrize("width_deg", [1.0, 2.0, 4.0])
def test_narrow_gaussians_leave_no_rings(width_deg: float) -> None:
    source = np.full(12 * 16**2, 20.0)
    source[1500] = 4000.0
    found = smoothed(source, width_deg, 16)
    assert found.min() > 20.0 - 3e-5 * 4000.0
    assert found.mean() == pytest.approx(source.mean(), rel=1e-13)
    assert found[1500] < 4000.0


def test_what_cannot_be_seen_is_left_and_what_cannot_be_done_is_refused() -> None:
    assert smoothing_nside(0.0, 64) == 0
    assert smoothing_nside(0.2, 64) == 0
    assert smoothing_nside(10.0, 64) == 64
    assert smoothing_nside(2.0, 64) == 128
    with pytest.raises(InputError, match=r"too narrow .* allowed: 0\.2 deg"):
        smoothing_nside(0.1, 256)
    ring = np.random.default_rng(2).normal(size=12 * 16**2)
    assert np.array_equal(smoothed(ring, 0.0, 16), ring)


def test_widths_add_in_quadrature() -> None:
    assert kernel_deg(3.0, 5.0) == pytest.approx(4.0, rel=1e-15)
    assert kernel_deg(5.0, 5.0) == 0.0


def test_surveys_of_one_sky_agree_at_their_common_resolution(tmp_path) -> None:  # type: ignore[no-untyped-def]
    rng = np.random.default_rng(5)
    bright = np.full(12 * 128**2, 20.0)
    bright[rng.integers(0, bright.size, 40)] += rng.uniform(1e3, 1e4, 40)
    # Two beams look at the same sky, by healpy alone, at two frequencies at which it is the same.
    sharp, blunt = (healpy.smoothing(bright, fwhm=np.radians(width), iter=3) for width in (2.0, 6.0))
    files = [write_table(tmp_path / f"{n}.fits", [one]) for n, one in enumerate((sharp, blunt))]
    maps = [
        survey(files[0], 50.0, resolution_deg=2.0),
        survey(files[1], 100.0, resolution_deg=6.0),
    ]
    sky = sky_from(joined(maps, nside=32))
    first, second = sky.maps.temperature_k
    assert sky.maps.notes[0].kernel_deg == pytest.approx(np.sqrt(32.0))
    assert sky.maps.notes[1].kernel_deg == 0.0
    # What is left is the error of harmonics on HEALPix, 3e-5 of the peaks of some 60 K (computed).
    assert np.abs(first - second).max() < 1e-4 * second.max()
    unequal = sky_from(joined([survey(file, f) for file, f in zip(files, (50.0, 100.0), strict=True)], nside=32))
    assert np.ptp(unequal.maps.temperature_k[0] - unequal.maps.temperature_k[1]) > 10.0
