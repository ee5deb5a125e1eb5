"""The sky at any frequency: closed forms, limits, and bad input refused."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import healpy
import numpy as np
import pytest
from astropy.io import fits
from numpy.typing import NDArray

from sims.config import HealpixSky, InventedSky
from sims.constants import CMB_TEMPERATURE_K, rayleigh_jeans_k
from sims.errors import InputError
from sims.sky import DiffuseSky, sky_from
from sims.sky_maps import DiffuseMap

NSIDE = 4
PIXELS = 12 * NSIDE**2
F0_MHZ = 408.0
BAND_MHZ = np.array([40.0, 57.3, 80.0, 120.0, 408.0])


def a_map(temperature_k: NDArray[np.float64] | None = None) -> DiffuseMap:
    values = np.linspace(10.0, 500.0, PIXELS) if temperature_k is None else temperature_k
    return DiffuseMap(values, NSIDE, "galactic", 0, "made.fits", "0" * 64)


def a_sky(**changes: Any) -> DiffuseSky:
    settings: dict[str, Any] = {
        "diffuse_map": a_map(), "frequency_mhz": F0_MHZ, "index": 2.5, "curvature": 0.0, "zero_level_k": 0.0,
        "scale": 1.0, "valid_from_mhz": 20.0, "valid_to_mhz": 500.0,
    }  # fmt: skip
    return DiffuseSky(**{**settings, **changes})


def cmb_k(frequency_mhz: NDArray[np.float64] | float) -> NDArray[np.float64]:
    return rayleigh_jeans_k(CMB_TEMPERATURE_K, frequency_mhz)


def test_brightness_has_the_shape_and_layout_the_engine_wants() -> None:
    sky = a_sky()
    found = sky.brightness_k(BAND_MHZ)
    assert found.shape == (PIXELS, BAND_MHZ.size)
    assert found.flags.c_contiguous
    assert sky.directions.shape == (PIXELS, 3)
    assert sky.nside == NSIDE


def test_the_map_itself_comes_back_at_its_own_frequency() -> None:
    found = a_sky(curvature=0.1).brightness_k([F0_MHZ])[:, 0]
    assert found == pytest.approx(a_map().temperature_k, rel=1e-15, abs=1e-13)  # one subtraction and addition


def test_power_law_is_exact_above_the_cmb() -> None:
    foreground = a_sky().brightness_k(BAND_MHZ) - cmb_k(BAND_MHZ)
    slope = np.diff(np.log(foreground), axis=1) / np.diff(np.log(BAND_MHZ))
    assert slope == pytest.approx(-2.5, abs=1e-10)  # rounding of a few K below 1e5 K, over a step of 0.3 in ln f
    ratio = foreground[:, 0] / foreground[:, -1]
    assert ratio == pytest.approx((40.0 / 408.0) ** -2.5, rel=1e-12)


def test_index_of_each_pixel_is_its_own() -> None:
    index = np.linspace(2.3, 2.8, PIXELS)
    foreground = a_sky(index=index).brightness_k(BAND_MHZ) - cmb_k(BAND_MHZ)
    expected = (a_map().temperature_k - cmb_k(F0_MHZ))[:, None] * (BAND_MHZ / F0_MHZ) ** -index[:, None]
    assert foreground == pytest.approx(expected, rel=1e-12)


def test_curvature_closed_form() -> None:
    gamma = 0.08
    foreground = a_sky(curvature=gamma).brightness_k(BAND_MHZ) - cmb_k(BAND_MHZ)
    plain = a_sky().brightness_k(BAND_MHZ) - cmb_k(BAND_MHZ)
    x = np.log(BAND_MHZ / F0_MHZ)
    assert np.log(foreground / plain) == pytest.approx(np.tile(-gamma * x**2, (PIXELS, 1)), abs=1e-12)
    # The local slope is -(beta + 2 gamma x): a central difference of a parabola in ln-ln is exact.
    step = 1e-3
    pair = 80.0 * np.exp([-step, step])
    both = a_sky(curvature=gamma).brightness_k(pair) - cmb_k(pair)
    slope = np.diff(np.log(both), axis=1)[:, 0] / (2 * step)
    assert slope == pytest.approx(-(2.5 + 2 * gamma * np.log(80.0 / F0_MHZ)), abs=1e-9)  # rounding over the step


def test_cmb_alone_is_left_where_the_foreground_vanishes() -> None:
    faint = a_map(np.full(PIXELS, float(cmb_k(F0_MHZ)) + 1e-9))
    found = a_sky(diffuse_map=faint, valid_to_mhz=2000.0).brightness_k([100.0, 1000.0])
    # 1e-9 K at 408 MHz is 3e-8 K at 100 MHz.
    assert found == pytest.approx(np.tile(cmb_k(np.array([100.0, 1000.0])), (PIXELS, 1)), abs=1e-7)
    # Rayleigh-Jeans brightness lies h f / 2k = 2.40 mK below the temperature at 100 MHz (Planck's law).
    assert CMB_TEMPERATURE_K - found[0, 0] == pytest.approx(2.40e-3, abs=1e-5)


def test_zero_level_then_scale_then_noise() -> None:
    sky = a_sky(zero_level_k=2.0, scale=1.05).with_map_noise(np.full(PIXELS, 0.3)).with_map_noise(0.2)
    assert sky.corrected_map_k() == pytest.approx(1.05 * (a_map().temperature_k - 2.0) + 0.5, rel=1e-14)
    assert sky.brightness_k([F0_MHZ])[:, 0] == pytest.approx(sky.corrected_map_k(), rel=1e-14)


def test_changed_copies_leave_the_first_alone() -> None:
    sky = a_sky()
    before = sky.brightness_k(BAND_MHZ)
    change = np.linspace(-0.1, 0.1, PIXELS)
    moved = sky.with_index_field(change).with_index_field(0.01)
    assert moved.index == pytest.approx(2.51 + change, rel=1e-15)
    sky.with_map_noise(1.0)
    assert np.array_equal(sky.brightness_k(BAND_MHZ), before)


def test_mean_is_that_of_equal_areas() -> None:
    expected = a_sky().brightness_k(BAND_MHZ).mean(axis=0)
    assert np.array_equal(a_sky().mean_k(BAND_MHZ), expected)


@pytest.mark.parametrize(
    "frequencies", [[19.9], [500.1], [60.0, np.nan], [-60.0], [0.0], [60.0, np.inf], [[60.0, 70.0]]]
)
def test_frequencies_outside_the_range_are_refused(frequencies: list[Any]) -> None:
    with pytest.raises(InputError, match="allowed"):
        a_sky().brightness_k(frequencies)


@pytest.mark.parametrize(
    "changes",
    [
        {"zero_level_k": 9.0},
        {"scale": 0.2},
        {"noise_k": -8.0},
        {"diffuse_map": a_map(np.where(np.arange(PIXELS) == 5, -1.0, 30.0))},
        {"diffuse_map": a_map(np.where(np.arange(PIXELS) == 5, np.nan, 30.0))},
    ],
)
def test_pixels_below_the_cmb_are_refused_with_their_count(changes: dict[str, Any]) -> None:
    with pytest.raises(InputError, match=r"\d+ of 192 pixels .* first pixels .* allowed"):
        a_sky(**changes)


def test_noise_that_darkens_a_pixel_is_refused() -> None:
    noise = np.zeros(PIXELS)
    noise[[3, 17]] = -1000.0
    with pytest.raises(InputError, match=r"2 of 192 pixels .* first pixels 3, 17"):
        a_sky().with_map_noise(noise)


def test_wrong_shapes_and_ranges_are_all_said() -> None:
    with pytest.raises(InputError) as caught:
        a_sky(index=np.full(48, 2.5), noise_k=np.zeros(3), valid_from_mhz=100.0, valid_to_mhz=50.0, frequency_mhz=0.0)
    assert len(caught.value.problems) == 4


def healpix_file(path: Path, values: NDArray[np.float64], unit: str) -> Path:
    table = fits.BinTableHDU.from_columns([fits.Column(name="V", format="D", unit=unit, array=values)])
    table.header.update({"PIXTYPE": "HEALPIX", "ORDERING": "RING", "COORDSYS": "G"})
    fits.HDUList([fits.PrimaryHDU(), table]).writeto(path)
    return path


def healpix_settings(file: Path, **changes: Any) -> HealpixSky:
    settings: dict[str, Any] = {
        "kind": "healpix", "file": file, "frame": "galactic", "unit": "K", "nside": NSIDE, "frequency_mhz": F0_MHZ,
        "index": 2.5, "valid_from_mhz": 20.0, "valid_to_mhz": 500.0,
    }  # fmt: skip
    return HealpixSky.model_validate({**settings, **changes})


def test_sky_from_a_file_carries_every_setting(tmp_path: Path) -> None:
    file = healpix_file(tmp_path / "map.fits", a_map().temperature_k, "K")
    sky = sky_from(healpix_settings(file, zero_level_k=1.5, scale=1.02, curvature=0.05))
    expected = a_sky(zero_level_k=1.5, scale=1.02, curvature=0.05)
    assert np.array_equal(sky.brightness_k(BAND_MHZ), expected.brightness_k(BAND_MHZ))
    assert np.array_equal(sky.directions, expected.directions)


def test_index_map_gives_the_variation_and_index_its_mean(tmp_path: Path) -> None:
    file = healpix_file(tmp_path / "map.fits", a_map().temperature_k, "K")
    index = np.linspace(2.2, 2.9, PIXELS)
    index_file = healpix_file(tmp_path / "index.fits", index, "")
    sky = sky_from(healpix_settings(file, index_map=index_file, index=2.6))
    assert np.mean(sky.index) == pytest.approx(2.6, abs=1e-14)
    assert sky.index == pytest.approx(index - index.mean() + 2.6, abs=1e-14)


def test_map_and_index_map_are_refused_together(tmp_path: Path) -> None:
    settings = healpix_settings(tmp_path / "map.fits", index_map=tmp_path / "index.fits")
    with pytest.raises(InputError) as caught:
        sky_from(settings)
    assert [
        name for problem in caught.value.problems for name in ("map.fits", "index.fits") if f"/{name}" in problem
    ] == [
        "map.fits",
        "index.fits",
    ]


def invented(**changes: Any) -> InventedSky:
    settings: dict[str, Any] = {
        "kind": "invented", "map_seed": 1, "nside": 16, "frequency_mhz": 408.0, "index": 2.5, "valid_from_mhz": 30.0,
        "valid_to_mhz": 200.0,
    }  # fmt: skip
    return InventedSky.model_validate({**settings, **changes})


def test_invented_sky_follows_its_seed_and_mean_index() -> None:
    first, again, other = sky_from(invented()), sky_from(invented()), sky_from(invented(map_seed=2))
    assert np.array_equal(first.brightness_k([60.0]), again.brightness_k([60.0]))
    assert not np.array_equal(first.brightness_k([60.0]), other.brightness_k([60.0]))
    assert np.mean(first.index) == pytest.approx(2.5, abs=1e-14)
    assert np.std(first.index) > 0.01
    flatter = healpy.query_strip(16, np.radians(85.0), np.radians(95.0))
    assert np.mean(np.asarray(first.index)[flatter]) < 2.5


def test_invented_sky_stands_at_its_own_frequency() -> None:
    with pytest.raises(InputError, match="408 MHz"):
        sky_from(invented(frequency_mhz=150.0))
