"""Gas, background and CMB round a sky: limits of radiative transfer, and what a map is said to contain."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import healpy
import numpy as np
import pytest
from pydantic import TypeAdapter
from sky_cases import NSIDE, PIXELS, cmb_k, cube, curved_sky_k, joined_files, write_table

from sims.config_sky import Background, FreeFree, HealpixSky, InventedSky
from sims.constants import rayleigh_jeans_k
from sims.errors import InputError
from sims.sky import moved_sky, sky_from
from sims.sky_layers import Layers, free_free_opacity, gas_shape
from sims.sky_maps import pixel_directions, turn_directions

BAND_MHZ = np.array([40.0, 60.0, 100.0, 200.0])
BACKGROUND = {"temperature_k": 2.0, "frequency_mhz": 310.0, "index": 2.66, "in_maps": True}


def gas(**changes: Any) -> FreeFree:
    table = {
        "kind": "uniform", "electron_temperature_k": 8000.0, "emission_measure_pc_cm6": 5.0, "geometry": "in-front",
        "in_maps": True,
    }  # fmt: skip
    kept = {key: value for key, value in {**table, **changes}.items() if value is not None}
    return TypeAdapter(FreeFree).validate_python(kept)


def layers(**changes: Any) -> Layers:
    settings = gas(**changes)
    return Layers(settings, None, gas_shape(settings, NSIDE, "galactic"))


def test_opacity_is_the_published_law() -> None:
    # At 1 GHz, 1e4 K and 1 pc cm^-6 the coefficient itself: 3.28e-7 (Mezger and Henderson 1967).
    assert float(free_free_opacity(1000.0, 1e4, 1.0)) == pytest.approx(3.28e-7, rel=1e-15)
    assert float(free_free_opacity(500.0, 1e4, 1.0)) == pytest.approx(3.28e-7 * 2.0**2.1, rel=1e-12)
    assert float(free_free_opacity(1000.0, 5e3, 3.0)) == pytest.approx(3.0 * 3.28e-7 * 2.0**1.35, rel=1e-12)


@pytest.mark.parametrize("geometry", ["in-front", "mixed"])
def test_thick_gas_is_a_black_body(geometry: str) -> None:
    found = layers(emission_measure_pc_cm6=1e8, geometry=geometry).seen_k(np.full((1, 4), 3000.0), BAND_MHZ)
    # tau is above 900 in front; mixed gas shows the emission of its first optical depth, 1 / tau of it.
    left = 0.0 if geometry == "in-front" else 3000.0 / free_free_opacity(BAND_MHZ, 8000.0, 1e8)
    assert found[0] == pytest.approx(rayleigh_jeans_k(8000.0, BAND_MHZ) + left, rel=1e-12)


@pytest.mark.parametrize(("geometry", "share"), [("in-front", 1.0), ("mixed", 0.5)])
def test_thin_gas_adds_and_takes_to_first_order(geometry: str, share: float) -> None:
    sky_k = np.full((1, 4), 3000.0)
    found = layers(emission_measure_pc_cm6=1e-3, geometry=geometry).seen_k(sky_k.copy(), BAND_MHZ)[0]
    tau = free_free_opacity(BAND_MHZ, 8000.0, 1e-3)
    expected = 3000.0 * (1.0 - share * tau) + cmb_k(BAND_MHZ) * (1.0 - tau) + 8000.0 * tau
    # tau is below 4e-7: the second order is 1e-13 of 8000 K, h f / 2k of the 8000 K is 5 mK times tau.
    assert found == pytest.approx(expected, abs=1e-8)
    assert np.abs(found - 3000.0 - cmb_k(BAND_MHZ)).max() > 1e-4


def test_gas_as_warm_as_the_sky_changes_nothing() -> None:
    sky_k = np.atleast_2d(rayleigh_jeans_k(8000.0, BAND_MHZ) - cmb_k(BAND_MHZ))
    found = layers(emission_measure_pc_cm6=100.0).seen_k(sky_k.copy(), BAND_MHZ)
    assert found[0] == pytest.approx(rayleigh_jeans_k(8000.0, BAND_MHZ), rel=1e-13)


def test_no_gas_is_the_cmb_alone() -> None:
    sky_k = np.full((1, 4), 3000.0)
    for none in (Layers(), layers(emission_measure_pc_cm6=0.0), layers(emission_measure_pc_cm6=0.0, geometry="mixed")):
        assert none.seen_k(sky_k.copy(), BAND_MHZ) == pytest.approx(sky_k + cmb_k(BAND_MHZ), rel=1e-15)


def test_slab_follows_the_cosecant_of_latitude() -> None:
    thickness = layers(kind="slab", lowest_latitude_deg=10.0).emission_measure_pc_cm6()
    latitude = np.abs(healpy.pix2ang(NSIDE, np.arange(PIXELS), lonlat=True)[1])
    assert thickness == pytest.approx(5.0 / np.sin(np.radians(np.maximum(latitude, 10.0))), rel=1e-12)
    # In other axes the layer stays in the plane of the Galaxy.
    turned = gas_shape(gas(kind="slab", lowest_latitude_deg=10.0), NSIDE, "icrs")
    expected = np.abs(turn_directions(pixel_directions(NSIDE, "icrs"), "icrs", "galactic")[:, 2])
    assert turned == pytest.approx(expected, abs=1e-15)


def test_mapped_gas_is_its_map_times_scale(tmp_path: Path) -> None:
    values = np.linspace(0.0, 50.0, PIXELS)
    file = write_table(tmp_path / "gas.fits", [values], unit="pc cm-6")
    mapped = layers(kind="map", file=file, scale=1.2, emission_measure_pc_cm6=None)
    assert mapped.emission_measure_pc_cm6() == pytest.approx(1.2 * values, rel=1e-15)


@pytest.mark.parametrize(
    ("low", "unit", "word"), [(-1.0, "pc cm-6", "negative"), (0.0, "K", "TUNIT1"), (np.nan, "pc cm-6", "NaN")]
)
def test_bad_maps_of_gas_are_refused(tmp_path: Path, low: float, unit: str, word: str) -> None:
    file = write_table(tmp_path / "gas.fits", [np.r_[low, np.ones(PIXELS - 1)]], unit=unit)
    with pytest.raises(InputError, match=word):
        layers(kind="map", file=file, emission_measure_pc_cm6=None)


def all_kinds(folder: Path, **changes: Any) -> list[Any]:
    """One sky of each kind that takes a file, of the same nside, and the invented one."""
    values = curved_sky_k([50.0, 100.0, 200.0])
    one = write_table(folder / "one.fits", [values[:, 1]])
    several = write_table(folder / "several.fits", list(values.T))
    shared = {"nside": NSIDE, "index": 2.5, "valid_from_mhz": 30.0, "valid_to_mhz": 500.0, **changes}
    single = {"kind": "healpix", "file": one, "frame": "galactic", "unit": "K", "frequency_mhz": 100.0}
    invented = {"kind": "invented", "map_seed": 1, "frequency_mhz": 408.0}
    return [
        HealpixSky.model_validate({**single, **shared}),
        InventedSky.model_validate({**invented, **shared}),
        cube(several, [50.0, 100.0, 200.0], **changes),
        joined_files(folder, values, [50.0, 100.0, 200.0], **changes),
    ]


@pytest.mark.parametrize("geometry", ["in-front", "mixed"])
def test_a_map_comes_back_at_its_own_frequency_whatever_it_contains(tmp_path: Path, geometry: str) -> None:
    changes = {"background": Background(**BACKGROUND), "free_free": gas(geometry=geometry)}
    plain = all_kinds(tmp_path)
    for before, after in zip(plain, all_kinds(tmp_path, **changes), strict=True):
        at = 408.0 if before.kind == "invented" else 100.0
        assert sky_from(after).brightness_k([at]) == pytest.approx(sky_from(before).brightness_k([at]), rel=1e-12)
        off = sky_from(after).brightness_k([60.0]) / sky_from(before).brightness_k([60.0])
        # Its own spectrum and the gas are felt away from there, little where maps on both sides hold the spectrum.
        assert np.abs(off - 1.0).max() > 1e-6, before.kind


def test_a_background_of_the_same_law_can_be_split_off_and_changes_nothing(tmp_path: Path) -> None:
    same = Background(temperature_k=1.0, frequency_mhz=100.0, index=2.5, in_maps=True)
    plain, split = all_kinds(tmp_path)[0], all_kinds(tmp_path, background=same)[0]
    assert sky_from(split).brightness_k(BAND_MHZ) == pytest.approx(sky_from(plain).brightness_k(BAND_MHZ), rel=1e-13)


def test_a_background_not_in_the_maps_is_added(tmp_path: Path) -> None:
    added = Background(**{**BACKGROUND, "in_maps": False})
    expected = 2.0 * (BAND_MHZ / 310.0) ** -2.66
    for before, after in zip(all_kinds(tmp_path), all_kinds(tmp_path, background=added), strict=True):
        change = sky_from(after).brightness_k(BAND_MHZ) - sky_from(before).brightness_k(BAND_MHZ)
        # Rounding of brightness up to 1e6 K.
        assert change == pytest.approx(np.broadcast_to(expected, change.shape), abs=1e-8)


def test_gas_not_in_the_maps_is_laid_over_the_whole_sky(tmp_path: Path) -> None:
    over = gas(in_maps=False)
    tau = free_free_opacity(BAND_MHZ, 8000.0, 5.0)
    for before, after in zip(all_kinds(tmp_path), all_kinds(tmp_path, free_free=over), strict=True):
        plain = sky_from(before).brightness_k(BAND_MHZ)
        expected = plain * np.exp(-tau) + rayleigh_jeans_k(8000.0, BAND_MHZ) * -np.expm1(-tau)
        assert sky_from(after).brightness_k(BAND_MHZ) == pytest.approx(expected, rel=1e-12)


def test_numbers_of_gas_and_background_move_without_reading(tmp_path: Path) -> None:
    first = {"background": Background(**BACKGROUND), "free_free": gas(kind="slab", lowest_latitude_deg=10.0)}
    other = {
        "background": Background(**{**BACKGROUND, "index": 2.5}),
        "free_free": gas(kind="slab", lowest_latitude_deg=5.0, electron_temperature_k=6000.0),
    }
    pairs = list(zip(all_kinds(tmp_path, **first), all_kinds(tmp_path, **other), strict=True))
    skies = [(sky_from(before), sky_from(after)) for before, after in pairs]
    for file in tmp_path.iterdir():
        file.unlink()
    for (before, after), (sky, expected) in zip(pairs, skies, strict=True):
        assert np.array_equal(moved_sky(sky, before, after).brightness_k(BAND_MHZ), expected.brightness_k(BAND_MHZ))


def test_a_background_brighter_than_the_map_is_refused(tmp_path: Path) -> None:
    bright = Background(temperature_k=1000.0, frequency_mhz=100.0, index=2.5, in_maps=True)
    with pytest.raises(InputError, match=r"at or below the CMB with the background at 100 MHz .* allowed"):
        sky_from(all_kinds(tmp_path, background=bright)[0])


def test_gas_that_hides_what_the_map_should_show_is_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"free_free: at 100 MHz the gas lets through less than 5% .* allowed"):
        sky_from(all_kinds(tmp_path, free_free=gas(emission_measure_pc_cm6=1e5))[0])
