"""Skies from several maps: settings to brightness, leaves that move without reading, errors all at once."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from pydantic import ValidationError
from sky_cases import (
    FREQUENCIES_MHZ,
    NSIDE,
    PIXELS,
    cmb_k,
    cube,
    curved_sky_k,
    joined,
    joined_files,
    survey,
    write_netcdf,
    write_table,
)
from small_campaign import CONFIGS, small_tree

from sims.config import Config
from sims.config_load import parse_config
from sims.draws import leaf_value, with_leaves
from sims.errors import InputError
from sims.knowledge import IndexField
from sims.sky import JoinedSky, index_error, moved_sky, sky_from
from sims.sky_map_checks import Frame
from sims.sky_maps import turn_directions

BAND_MHZ = np.array([35.0, 45.0, 70.0, 120.0, 408.0, 480.0])
RULES: list[dict[str, Any]] = [
    {"join": "spline"},
    {"join": "polynomial", "order": 2},
    {"join": "polynomial", "order": 3},
]


@pytest.mark.parametrize("rule", RULES, ids=["spline", "order 2", "order 3"])
def test_a_curved_sky_comes_back_exactly(tmp_path: Path, rule: dict[str, Any]) -> None:
    sky = sky_from(joined_files(tmp_path, curved_sky_k(FREQUENCIES_MHZ), FREQUENCIES_MHZ, **rule))
    assert isinstance(sky, JoinedSky)
    # Rounding of logarithms of 1e4, times weights of a few tens at the ends.
    assert sky.brightness_k(BAND_MHZ) == pytest.approx(curved_sky_k(BAND_MHZ), rel=1e-12)
    assert sky.misfit().max() < 1e-12
    assert sky.brightness_k(BAND_MHZ).flags.c_contiguous


def test_a_power_law_comes_back_from_two_maps(tmp_path: Path) -> None:
    index = np.linspace(2.3, 2.7, PIXELS)[:, np.newaxis]

    def power_law_k(frequency_mhz: Any) -> np.ndarray:
        return 300.0 * (np.asarray(frequency_mhz) / 150.0) ** -index + cmb_k(frequency_mhz)

    for rule in ({"join": "spline"}, {"join": "polynomial", "order": 1}):
        sky = sky_from(joined_files(tmp_path, power_law_k([45.0, 408.0]), [45.0, 408.0], **rule))
        assert sky.brightness_k(BAND_MHZ) == pytest.approx(power_law_k(BAND_MHZ), rel=1e-12)


def test_a_line_through_more_maps_is_their_least_squares(tmp_path: Path) -> None:
    values = curved_sky_k(FREQUENCIES_MHZ)
    sky = sky_from(joined_files(tmp_path, values, FREQUENCIES_MHZ, join="polynomial", order=1))
    logarithm = np.log(values - cmb_k(FREQUENCIES_MHZ))
    expected = np.array([np.polyval(np.polyfit(np.log(FREQUENCIES_MHZ), one, 1), np.log(70.0)) for one in logarithm])
    assert sky.brightness_k([70.0])[:, 0] == pytest.approx(np.exp(expected) + cmb_k(70.0), rel=1e-12)
    assert sky.misfit().max() > 0.01


def test_the_engine_sees_the_frame_it_is_in(tmp_path: Path) -> None:
    frames: tuple[Frame, ...] = ("galactic", "icrs")
    file = write_table(tmp_path / "a.fits", [curved_sky_k([100.0], 16)[:, 0]])
    maps = [survey(file, 50.0), survey(file, 100.0, scale=0.2)]
    first, second = (sky_from(joined(maps, nside=16, frame=frame)) for frame in frames)
    # The brightest place, in ICRS, is the same: pixels are 3.7 deg wide.
    at = [sky.directions[int(sky.brightness_k([50.0])[:, 0].argmax())] for sky in (first, second)]
    assert np.degrees(np.arccos(at[0] @ at[1])) < 5.3
    turned = turn_directions(first.directions, "icrs", "galactic")
    assert np.argmax(turned[:, 2]) in range(4)


def leaves_of(count: int, number: int, sky: str) -> dict[str, str]:
    return {"zero": f"sky.maps.{number}.zero_level_k", "scale": f"sky.maps.{number}.scale"} if sky == "joined" else {
        "zero": f"sky.zero_levels_k.{number}", "scale": f"sky.scales.{number}",
    }  # fmt: skip


def campaign(folder: Path, kind: str, knowledge: dict[str, Any] | None = None) -> Config:
    """The small campaign under a joined sky or a cube, from tables as a file has them."""
    values = curved_sky_k(FREQUENCIES_MHZ)
    shared: dict[str, Any] = {
        "kind": kind, "nside": NSIDE, "frame": "galactic", "join": "polynomial", "order": 3, "frequency": "100 MHz",
        "valid_from": "30 MHz", "valid_to": "500 MHz",
    }  # fmt: skip
    if kind == "joined":
        names = [write_table(folder / f"map{n}.fits", [one]).name for n, one in enumerate(values.T)]
        shared["maps"] = [
            {"format": "healpix", "file": name, "frame": "galactic", "unit": "K", "frequency": f"{f} MHz"}
            for name, f in zip(names, FREQUENCIES_MHZ, strict=True)
        ]
    else:
        shared |= {"format": "fits", "unit": "K", "frequencies": [f"{f} MHz" for f in FREQUENCIES_MHZ]}
        shared |= {"zero_levels": ["0 K"] * 4, "scales": [1.0] * 4}
        shared["file"] = write_table(folder / "cube.fits", list(values.T)).name
    tree = small_tree()
    tree["sky"] = shared
    tree["knowledge"] = knowledge or {}
    return parse_config(tree, folder)


@pytest.mark.parametrize("kind", ["joined", "cube"])
def test_zero_levels_and_scales_are_leaves(tmp_path: Path, kind: str) -> None:
    names = leaves_of(4, 2, kind)
    entries: dict[str, Any] = {"distribution": "normal", "sd": "3 K"}
    plain = names["zero"].replace("_k", "")
    config = campaign(tmp_path, kind, {
        plain: entries, names["scale"]: {"distribution": "normal", "sd": 0.05},
        "sky.index_change": {"distribution": "normal", "sd": 0.02},
    })  # fmt: skip
    assert [leaf.path for leaf in config.knowledge.leaves] == [names["zero"], names["scale"], "sky.index_change"]
    assert leaf_value(config, names["zero"]) == 0.0
    sky = sky_from(config.sky)
    for file in tmp_path.glob("*.fits"):
        file.unlink()
    moved = with_leaves(config, {names["zero"]: 4.0, names["scale"]: 1.1})
    found = moved_sky(sky, config.sky, moved.sky)
    values = curved_sky_k(FREQUENCIES_MHZ)
    values[:, 2] = 1.1 * (values[:, 2] - 4.0)
    # A polynomial through all four maps: each comes back as corrected.
    assert found.brightness_k(FREQUENCIES_MHZ) == pytest.approx(values, rel=1e-12)
    assert np.array_equal(sky.brightness_k(BAND_MHZ), sky_like(sky, config).brightness_k(BAND_MHZ))


def sky_like(sky: Any, config: Config) -> Any:
    return moved_sky(sky, config.sky, config.sky)


def test_a_scale_common_to_a_cube_moves_every_map(tmp_path: Path) -> None:
    file = write_table(tmp_path / "cube.fits", list(curved_sky_k(FREQUENCIES_MHZ).T))
    sky = sky_from(cube(file, FREQUENCIES_MHZ, scale=1.2))
    assert sky.brightness_k(FREQUENCIES_MHZ) == pytest.approx(1.2 * curved_sky_k(FREQUENCIES_MHZ), rel=1e-12)


def test_a_change_of_files_is_read(tmp_path: Path) -> None:
    before = joined_files(tmp_path, curved_sky_k(FREQUENCIES_MHZ), FREQUENCIES_MHZ)
    sky = sky_from(before)
    other = write_table(tmp_path / "other.fits", [curved_sky_k([408.0])[:, 0] * 1.5])
    maps = (*before.maps[:3], before.maps[3].model_copy(update={"file": other}))
    found = moved_sky(sky, before, before.model_copy(update={"maps": maps}))
    assert found.brightness_k([408.0]) == pytest.approx(1.5 * curved_sky_k([408.0]), rel=1e-12)


def test_index_changes_about_the_stated_frequency(tmp_path: Path) -> None:
    sky = sky_from(joined_files(tmp_path, curved_sky_k(FREQUENCIES_MHZ), FREQUENCIES_MHZ))
    change = np.linspace(-0.1, 0.1, PIXELS)
    moved = sky.with_index_field(change).with_index_field(0.01)
    ratio = (moved.brightness_k(BAND_MHZ) - cmb_k(BAND_MHZ)) / (sky.brightness_k(BAND_MHZ) - cmb_k(BAND_MHZ))
    assert ratio == pytest.approx((BAND_MHZ / 100.0) ** -(change[:, np.newaxis] + 0.01), rel=1e-12)
    assert moved.brightness_k([100.0]) == pytest.approx(sky.brightness_k([100.0]), rel=1e-14)


def test_map_noise_is_kelvin_at_the_stated_frequency(tmp_path: Path) -> None:
    sky = sky_from(joined_files(tmp_path, curved_sky_k(FREQUENCIES_MHZ), FREQUENCIES_MHZ))
    noise = np.random.default_rng(1).normal(size=PIXELS)
    found = sky.with_map_noise(noise)
    assert found.brightness_k([100.0])[:, 0] - sky.brightness_k([100.0])[:, 0] == pytest.approx(noise, abs=1e-10)
    ratio = (found.brightness_k(BAND_MHZ) - cmb_k(BAND_MHZ)) / (sky.brightness_k(BAND_MHZ) - cmb_k(BAND_MHZ))
    assert np.ptp(ratio, axis=1) == pytest.approx(0.0, abs=1e-12)
    with pytest.raises(InputError, match="1 of 192 pixels are at or below the CMB at 100 MHz with the noise"):
        sky.with_map_noise(np.where(np.arange(PIXELS) == 7, -1e5, 0.0))


def test_frequencies_outside_the_range_are_refused(tmp_path: Path) -> None:
    sky = sky_from(joined_files(tmp_path, curved_sky_k(FREQUENCIES_MHZ), FREQUENCIES_MHZ))
    for frequency in (29.9, 500.1, np.nan):
        with pytest.raises(InputError, match="valid_from"):
            sky.brightness_k([60.0, frequency])


def test_dark_pixels_of_every_map_are_said_at_once(tmp_path: Path) -> None:
    values = curved_sky_k(FREQUENCIES_MHZ)
    settings = joined_files(tmp_path, values, FREQUENCIES_MHZ)
    low = [one.model_copy(update={"zero_level_k": 250.0}) for one in settings.maps]
    with pytest.raises(InputError) as caught:
        sky_from(settings.model_copy(update={"maps": tuple(low)}))
    dark = [n for n in range(4) if np.any(values[:, n] - 250.0 <= cmb_k(FREQUENCIES_MHZ[n]))]
    assert [problem.split(",")[0] for problem in caught.value.problems] == [f"sky: map {n}" for n in dark]
    assert all("zero level (250 K)" in problem and "allowed" in problem for problem in caught.value.problems)


BAD_TABLES: dict[str, tuple[dict[str, Any], str]] = {
    "one map": ({"maps": 1}, "two or more"),
    "a frequency twice": ({"repeat": True}, "90 MHz stands more than once"),
    "no order": ({"join": "polynomial"}, "order: missing"),
    "order too high": ({"join": "polynomial", "order": 4}, "1 to 3"),
    "order of a spline": ({"order": 2}, "'polynomial' only"),
    "broken line": ({"join": "linear"}, "polynomial"),
    "resolution of one": ({"resolution": True}, "maps.0, maps.2, maps.3: no resolution"),
    "column of an image": ({"image": True}, "healpix"),
}


@pytest.mark.parametrize("name", BAD_TABLES)
def test_bad_tables_are_refused(tmp_path: Path, name: str) -> None:
    changes, word = BAD_TABLES[name]
    changes = dict(changes)
    maps = [survey(tmp_path / f"{f}.fits", f) for f in FREQUENCIES_MHZ[: changes.pop("maps", 4)]]
    if changes.pop("repeat", False):
        maps[3]["frequency_mhz"] = 90.0
    if changes.pop("resolution", False):
        maps[1]["resolution_deg"] = 3.0
    if changes.pop("image", False):
        maps[0] |= {"format": "image", "field": 1}
    with pytest.raises(ValidationError, match=word):
        joined(maps, **changes)


def test_every_bad_file_is_said_with_its_place(tmp_path: Path) -> None:
    values = curved_sky_k(FREQUENCIES_MHZ)
    hole = values[:, 1].copy()
    hole[5] = np.nan
    files = [
        tmp_path / "absent.fits",
        write_table(tmp_path / "hole.fits", [hole]),
        write_table(tmp_path / "frame.fits", [values[:, 2]], COORDSYS="C"),
        write_table(tmp_path / "good.fits", [values[:, 3]]),
    ]
    maps = [survey(file, f) for file, f in zip(files, FREQUENCIES_MHZ, strict=True)]
    maps[3] |= {"unit": "mK", "field": 0}
    with pytest.raises(InputError) as caught:
        sky_from(joined(maps, nside=8))
    found = caught.value.problems
    for start, word in (
        ("sky.maps.0", "no such file"),
        ("sky.maps.1", "NaN"),
        ("sky.maps.1", "nside 8"),
        ("sky.maps.2", "COORDSYS"),
        ("sky.maps.3", "TUNIT1"),
    ):
        assert any(problem.startswith(start) and word in problem for problem in found), (start, word, found)


def test_files_that_a_campaign_names_are_said_with_their_place(tmp_path: Path) -> None:
    campaign(tmp_path, "joined")
    (tmp_path / "map1.fits").unlink()
    tree = small_tree()
    tree["sky"] = {
        "kind": "joined", "nside": NSIDE, "frame": "galactic", "join": "spline", "frequency": "100 MHz",
        "valid_from": "30 MHz", "valid_to": "500 MHz", "maps": [
            {"format": "healpix", "file": f"map{n}.fits", "frame": "galactic", "frequency": f"{f} MHz"}
            for n, f in enumerate((45.0, 90.0))
        ],
    }  # fmt: skip
    with pytest.raises(InputError) as caught:
        parse_config(tree, CONFIGS)
    assert any("sky.maps.0.unit: missing" in problem for problem in caught.value.problems)
    assert any("sky.maps.1.unit: missing" in problem for problem in caught.value.problems)
    for one in tree["sky"]["maps"]:
        one["unit"] = "K"
    with pytest.raises(InputError, match=r"sky\.maps\.1\.file: no such file"):
        parse_config(tree, tmp_path)


def test_netcdf_and_fits_hold_the_same_sky(tmp_path: Path) -> None:
    values = curved_sky_k(FREQUENCIES_MHZ).T
    fits_file = write_table(tmp_path / "cube.fits", list(values))
    netcdf_file = write_netcdf(tmp_path / "cube.nc", values, FREQUENCIES_MHZ)
    expected = sky_from(cube(fits_file, FREQUENCIES_MHZ)).brightness_k(BAND_MHZ)
    found = sky_from(cube(netcdf_file, FREQUENCIES_MHZ, format="netcdf", variable="sky")).brightness_k(BAND_MHZ)
    assert np.array_equal(found, expected)
    assert found == pytest.approx(curved_sky_k(BAND_MHZ), rel=1e-12)


def test_a_field_of_the_index_has_its_stated_spread_at_any_resolution() -> None:
    known = IndexField(sd=0.05, angular_index=2.4, angular_offset=3.0, mean_sd=0.0)
    for nside in (8, 32):
        drawn = np.array([index_error(known, nside, np.random.default_rng(seed)) for seed in range(40)])
        # Sum over l of (2l+1) C_l^2: the mean square of a sphere scatters by some 15 %, of forty by 2.4 %; 4 sigma.
        assert np.mean(drawn**2) == pytest.approx(0.05**2, rel=0.10)
        assert np.abs(drawn.mean(axis=1)).max() < 1e-4
    shifted = IndexField(sd=0.0, angular_index=2.4, angular_offset=3.0, mean_sd=0.2)
    means = [float(index_error(shifted, 4, np.random.default_rng(seed))[0]) for seed in range(200)]
    assert np.std(means) == pytest.approx(0.2, rel=0.2)  # four times 1/sqrt(400)


@pytest.mark.parametrize(
    ("entries", "word"),
    [
        ({}, "one of"),
        ({"angular_index": 2.0}, "go together"),
        ({"correlation_length_deg": 20.0, "angular_index": 2.0, "angular_offset": 1.0}, "one of"),
        ({"correlation_length_deg": 20.0, "angular_offset": 1.0}, "go together"),
    ],
)
def test_a_field_has_one_spectrum(entries: dict[str, float], word: str) -> None:
    with pytest.raises(ValidationError, match=word):
        IndexField(sd=0.05, **entries)
