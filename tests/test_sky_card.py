"""The card of a sky: its numbers against closed forms, its page, its pictures, and the command."""

from __future__ import annotations

import io
from pathlib import Path
from typing import Any

import healpy
import numpy as np
import pytest
from config_cases import small_with
from matplotlib import image
from sky_cases import FREQUENCIES_MHZ, cmb_k, curved_sky_k, write_table
from small_campaign import small_tree
from typer.testing import CliRunner

from reduce.cli import EXIT_INPUT, app
from reduce.report.sky_page import report_sky, sky_page
from reduce.report.sky_plot import index_figure, maps_figure, mollweide, spectrum_figure
from reduce.report.style import look, png
from reduce.sky_card import (
    galactic_noise_k,
    local_index,
    log_polynomial_residual_mk,
    polar_brightness_k,
    sky_card,
)
from sims.config import Config
from sims.config_load import parse_config
from sims.errors import InputError
from sims.sky import sky_from
from sims.sky_map_checks import Frame
from sims.sky_maps import pixel_directions, turn_directions

FILES = ["sky.txt", "sky_index.png", "sky_maps.png", "sky_spectrum.png"]


def joined_config(folder: Path, **sky: Any) -> Config:
    """The small campaign under a curved sky of four maps at nside 8."""
    values = curved_sky_k(FREQUENCIES_MHZ, 8)
    values[3, 1] = np.nan
    tree = small_tree()
    tree["sky"] = {
        "kind": "joined", "nside": 8, "frame": "galactic", "join": "polynomial", "order": 2, "frequency": "100 MHz",
        "valid_from": "30 MHz", "valid_to": "500 MHz", "maps": [
            {
                "format": "healpix", "frame": "galactic", "unit": "K", "frequency": f"{f} MHz", "missing": "fill",
                "file": write_table(folder / f"map{n}.fits", [one]).name,
            }
            for n, (f, one) in enumerate(zip(FREQUENCIES_MHZ, values.T, strict=True))
        ], **sky,
    }  # fmt: skip
    tree["knowledge"] = {}
    return parse_config(tree, folder)


def test_index_and_curvature_are_those_laid_on_the_sky() -> None:
    number = np.arange(12 * 64)[:, np.newaxis] / (12 * 64)

    def brightness_k(f: Any) -> np.ndarray:
        return curved_sky_k(f, 8)

    at = 80.0
    index, curvature = local_index(brightness_k, at, 40.0, 120.0)
    x = np.log(at / 150.0)
    # A parabola in ln-ln has no error of differences; what is left is rounding of 10 over the step or its square.
    assert index == pytest.approx((2.4 + 0.2 * number + 2.0 * 0.1 * number * x)[:, 0], abs=1e-11)
    assert curvature == pytest.approx((0.1 * number)[:, 0], abs=1e-9)
    # A narrow band gets a narrower step and stays inside.
    narrow = local_index(brightness_k, at, 79.9, 120.0)
    assert narrow[0] == pytest.approx(index, abs=1e-9)


def test_log_polynomial_leaves_nothing_of_itself_and_all_of_a_ripple() -> None:
    f = np.geomspace(50.0, 150.0, 401)
    x = np.log(f / 80.0)
    smooth = np.exp(7.0 - 2.5 * x - 0.1 * x**2 + 0.02 * x**3)
    assert np.abs(log_polynomial_residual_mk(f, smooth, 4)).max() < 1e-6
    assert np.abs(log_polynomial_residual_mk(f, smooth, 3)).max() > 1e2
    # Thirty turns across the band are orthogonal to a smooth fit but for its ends.
    ripple = 0.1 * np.sin(2.0 * np.pi * 30.0 * (x - x[0]) / (x[-1] - x[0]))
    found = log_polynomial_residual_mk(f, smooth + ripple, 6)
    assert np.std(found) == pytest.approx(100.0 / np.sqrt(2.0), rel=0.03)


def test_published_spectra_are_as_published() -> None:
    # ITU-R P.372-16 eq. 13 at 100 MHz: 52 - 46 = 6 dB over 290 K.
    assert float(galactic_noise_k(np.array([100.0]))[0]) == pytest.approx(290.0 * 10.0**0.6, rel=1e-14)
    # The poles are fainter than the whole sky's mean by a quarter to a third, and steepen above 100 MHz.
    f = np.array([50.0, 100.0, 150.0])
    ratio = polar_brightness_k(f) / galactic_noise_k(f)
    assert np.all((ratio > 0.5) & (ratio < 0.95))
    slope = -np.diff(np.log(polar_brightness_k(f))) / np.diff(np.log(f))
    assert np.all((slope > 2.3) & (slope < 2.7))


def test_card_of_a_curved_sky(tmp_path: Path) -> None:
    config = joined_config(tmp_path)
    card = sky_card(config)
    sky = sky_from(config.sky)
    start, stop = config.channels.start_mhz, config.channels.stop_mhz
    assert card.shown_mhz == pytest.approx([start, np.sqrt(start * stop), stop])
    assert np.array_equal(card.shown_k, sky.brightness_k(card.shown_mhz).T)
    assert card.mean_k == pytest.approx(sky.mean_k(card.frequency_mhz), rel=1e-14)
    assert np.all(np.diff(card.quantile_k, axis=0) > 0.0)
    assert [row.note.filled for row in card.rows] == [0, 1, 0, 0]
    for number, row in enumerate(card.rows):
        assert row.mean_k == pytest.approx(sky.corrected_map_k(number).mean())  # type: ignore[union-attr, call-arg, arg-type]
        assert row.margin_k == pytest.approx(row.lowest_k - float(cmb_k(row.frequency_mhz)))
    # The mean of power laws bends upwards more than they do, and its index is the flux-weighted mean of theirs.
    foreground = card.shown_k[1] - cmb_k(card.middle_mhz)
    assert card.mean_index == pytest.approx(np.average(card.index, weights=foreground), abs=1e-4)
    assert card.mean_curvature < np.average(card.curvature, weights=foreground)


def test_page_says_what_was_read_and_done(tmp_path: Path) -> None:
    config = joined_config(tmp_path, background={
        "temperature": "1 K", "frequency": "310 MHz", "index": 2.6, "in_maps": True,
    }, free_free={
        "kind": "uniform", "electron_temperature": "7000 K", "emission_measure_pc_cm6": 2.0, "geometry": "mixed",
        "in_maps": False,
    })  # fmt: skip
    page = sky_page(sky_card(config), config)
    for words in (
        "4 maps from 45 to 408 MHz, joined by a polynomial of order 2",
        "reaches beyond the maps",
        "filled     1 values at 90 MHz",
        "background 1 K at 310 MHz, index 2.6, taken off the maps and put back",
        "gas        uniform, 7000 K, mixed with the emission, maps show the sky without it",
        "map3.fits (galactic, K, sha256",
        "galactic noise, median: ITU-R P.372-16",
        "6 terms leave",
    ):
        assert words in page, words
    assert max(len(line) for line in page.splitlines()) < 160


def test_a_kinked_sky_is_called_so(tmp_path: Path) -> None:
    # A wrong scale of one of many close maps makes a bump that no smooth foreground follows.
    frequency = np.geomspace(40.0, 125.0, 9)
    values = curved_sky_k(frequency, 8)
    values[:, 4] *= 1.001
    tree = small_tree()
    tree["knowledge"] = {}
    tree["sky"] = {
        "kind": "cube", "format": "fits", "nside": 8, "frame": "galactic", "unit": "K", "join": "spline",
        "frequencies": [f"{f:.12g} MHz" for f in frequency], "frequency": "80 MHz", "valid_from": "40 MHz",
        "valid_to": "120 MHz", "file": write_table(tmp_path / "cube.fits", list(values.T)).name,
    }  # fmt: skip
    config = parse_config(tree, tmp_path)
    assert "not smooth" in sky_page(sky_card(config), config)


@pytest.mark.parametrize("frame", ["galactic", "icrs", "fk4"])
def test_picture_puts_every_place_where_mollweide_does(frame: Frame) -> None:
    directions = turn_directions(pixel_directions(32, frame), "icrs", "galactic")
    for axis, row, column in ((0, 0.5, 0.5), (2, 1.0, 0.5)):
        picture = mollweide(directions[:, axis], frame, across=400)
        # Centre of the Galaxy in the middle, north pole on top (origin below).
        at = int(min(row * 200, 199)), int(column * 400)
        near = picture[at[0] - 4 : at[0] + 4, at[1] - 2 : at[1] + 2]
        assert np.nanmax(near) > 0.97
    left = mollweide(directions[:, 1], frame, across=400)[100]
    assert np.nanargmax(left) == pytest.approx(100, abs=4)  # l = 90 deg, half way out on the left
    assert np.nanargmin(left) == pytest.approx(300, abs=4)
    # An equal-area projection: the mean over the picture is that over the sphere.
    height = mollweide(directions[:, 2] ** 2, frame, across=400)
    assert np.nanmean(height) == pytest.approx(1.0 / 3.0, abs=2e-3)
    assert np.mean(np.isnan(height)) == pytest.approx(1.0 - np.pi / 4.0, abs=2e-3)


def test_pictures_are_drawn_the_same_each_time(tmp_path: Path) -> None:
    config = joined_config(tmp_path)
    card = sky_card(config)
    for figure in (maps_figure, index_figure, spectrum_figure):
        with look():
            first, again = png(figure(card, config)), png(figure(card, config))
        assert first == again
        pixels = image.imread(io.BytesIO(first))
        assert pixels.shape[1] > 1000
        assert np.std(pixels) > 0.05


def written(folder: Path) -> Path:
    path = folder / "campaign.toml"
    path.write_text(small_with(), encoding="utf-8")
    return path


def test_command_prints_alone_or_writes_beside(tmp_path: Path) -> None:
    config, out = written(tmp_path), tmp_path / "out"
    alone = CliRunner().invoke(app, ["sky", str(config)])
    assert alone.exit_code == 0
    assert "kind invented, nside 8 (768 pixels), pixels in galactic axes" in alone.stdout
    assert not out.exists()
    beside = CliRunner().invoke(app, ["sky", str(config), "--out", str(out)])
    assert beside.exit_code == 0
    assert sorted(path.name for path in out.iterdir()) == FILES
    assert beside.stdout.startswith(alone.stdout.rstrip())
    assert (out / "sky.txt").read_text(encoding="utf-8") == alone.stdout


def test_files_are_replaced_only_when_asked(tmp_path: Path) -> None:
    config, out = written(tmp_path), tmp_path / "out"
    out.mkdir()
    (out / "sky_maps.png").write_bytes(b"mine")
    (out / "other.txt").write_text("mine", encoding="utf-8")
    refused = CliRunner().invoke(app, ["sky", str(config), "--out", str(out)])
    assert refused.exit_code == EXIT_INPUT
    assert "already holds sky_maps.png" in refused.stderr
    assert (out / "sky_maps.png").read_bytes() == b"mine"
    done = CliRunner().invoke(app, ["sky", str(config), "--out", str(out), "--update"])
    assert done.exit_code == 0
    assert (out / "sky_maps.png").read_bytes()[:4] == b"\x89PNG"
    assert (out / "other.txt").read_text(encoding="utf-8") == "mine"


def test_a_file_in_place_of_the_folder_is_refused(tmp_path: Path) -> None:
    config = written(tmp_path)
    with pytest.raises(InputError, match="name a folder"):
        report_sky(config, config, update=True)


def test_a_sky_that_cannot_be_is_refused_with_every_problem(tmp_path: Path) -> None:
    config = joined_config(tmp_path)
    for name in ("map0.fits", "map2.fits"):
        (tmp_path / name).unlink()
    with pytest.raises(InputError) as caught:
        sky_card(config)
    assert [problem.split(":")[0] for problem in caught.value.problems] == ["sky.maps.0", "sky.maps.2"]


def test_resolution_of_the_picture_shows_each_pixel() -> None:
    values = np.zeros(12)
    values[healpy.ang2pix(1, 0.0, 0.0, lonlat=True)] = 1.0
    assert mollweide(values, "galactic", across=100)[25, 50] == 1.0
