"""Readers of sky maps: what is written comes back, and bad files never give a plausible map."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import healpy
import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from astropy.io import fits
from numpy.typing import NDArray

from sims.errors import InputError
from sims.sky_images import read_image
from sims.sky_map_checks import Frame
from sims.sky_maps import (
    pixel_directions,
    read_healpix_map,
    read_image_map,
    read_index_map,
    turn_directions,
)

Values = NDArray[np.float64]
NSIDE = 16
HEALPIX: dict[str, Any] = {
    "field": 0,
    "ordering": "header",
    "frame": "galactic",
    "unit": "K",
    "missing": "refuse",
    "nside": NSIDE,
}
IMAGE: dict[str, Any] = {"frame": "galactic", "unit": "K", "missing": "refuse", "nside": 16}


def smooth_sky(vectors: Values) -> Values:
    """A smooth positive pattern without symmetry; its mean over the sphere is 30 + 3/3 K exactly."""
    x, y, z = vectors.T
    return np.asarray(30.0 + 8.0 * x - 5.0 * y + 4.0 * z + 2.0 * x * y + 3.0 * z**2)


def write_healpix(path: Path, values: Values, drop: tuple[str, ...] = (), **keys: Any) -> Path:
    """Write one column, by astropy alone, so that the reader is not tested with its own library."""
    table = fits.BinTableHDU.from_columns([fits.Column(name="T", format="D", array=values)])
    header: dict[str, Any] = {
        "PIXTYPE": "HEALPIX",
        "ORDERING": "RING",
        "COORDSYS": "G",
        "TUNIT1": "K",
        "INDXSCHM": "IMPLICIT",
    }
    for key, value in {**header, **keys}.items():
        if key not in drop:
            table.header[key] = value
    fits.HDUList([fits.PrimaryHDU(), table]).writeto(path, overwrite=True)
    return path


def write_image(path: Path, values: Values, drop: tuple[str, ...] = (), **keys: Any) -> Path:
    hdu = fits.PrimaryHDU(values)
    rows, columns = values.shape[-2:]
    step = 180.0 / (rows - 1)
    header: dict[str, Any] = {
        "CTYPE1": "GLON-CAR", "CRVAL1": 0.0, "CRPIX1": (columns + 1) / 2, "CDELT1": -step,
        "CTYPE2": "GLAT-CAR", "CRVAL2": 0.0, "CRPIX2": (rows + 1) / 2, "CDELT2": step, "BUNIT": "K",
    }  # fmt: skip
    for key, value in {**header, **keys}.items():
        if key not in drop:
            hdu.header[key] = value
    hdu.writeto(path, overwrite=True)
    return path


def image_values(rows: int = 91) -> Values:
    """`smooth_sky` on rows from pole to pole, columns from +180 to -180 deg, the last repeating the first."""
    columns = 2 * (rows - 1) + 1
    longitude, latitude = np.meshgrid(np.linspace(180.0, -180.0, columns), np.linspace(-90.0, 90.0, rows))
    vectors = healpy.ang2vec(longitude.ravel(), latitude.ravel(), lonlat=True)
    return smooth_sky(vectors).reshape(rows, columns)


def ring_values(nside: int = NSIDE) -> Values:
    return smooth_sky(pixel_directions(nside, "icrs"))


def problems_of(call: Callable[..., object], *args: Any, **kwargs: Any) -> tuple[str, ...]:
    with pytest.raises(InputError) as caught:
        call(*args, **kwargs)
    return caught.value.problems


def test_ring_map_comes_back_bit_for_bit(tmp_path: Path) -> None:
    found = read_healpix_map(write_healpix(tmp_path / "a.fits", ring_values()), **HEALPIX)
    assert np.array_equal(found.temperature_k, ring_values())
    assert (found.nside, found.frame, found.filled_pixels, found.source) == (NSIDE, "galactic", 0, "a.fits")
    assert len(found.sha256) == 64


@pytest.mark.parametrize("declared", ["header", "nested"])
def test_nested_map_is_the_same_sky(tmp_path: Path, declared: str) -> None:
    nested = healpy.reorder(ring_values(), r2n=True)
    path = write_healpix(tmp_path / "a.fits", nested, ORDERING="NESTED")
    assert np.array_equal(read_healpix_map(path, **{**HEALPIX, "ordering": declared}).temperature_k, ring_values())


def test_declared_ordering_serves_where_the_header_is_silent(tmp_path: Path) -> None:
    nested = healpy.reorder(ring_values(), r2n=True)
    path = write_healpix(tmp_path / "a.fits", nested, drop=("ORDERING",))
    assert np.array_equal(read_healpix_map(path, **{**HEALPIX, "ordering": "nested"}).temperature_k, ring_values())


def test_unit_is_applied(tmp_path: Path) -> None:
    path = write_healpix(tmp_path / "a.fits", ring_values() * 10.0, drop=("TUNIT1",))
    found = read_healpix_map(path, **{**HEALPIX, "unit": "0.1 K"}).temperature_k
    assert found == pytest.approx(ring_values(), rel=1e-14)  # one multiplication
    path = write_healpix(tmp_path / "b.fits", ring_values() * 1e3, TUNIT1="mK,thermodynamic")
    assert read_healpix_map(path, **{**HEALPIX, "unit": "mK"}).temperature_k == pytest.approx(ring_values(), rel=1e-14)


def test_second_column_and_wide_rows(tmp_path: Path) -> None:
    rows = ring_values().reshape(-1, 1024)
    columns = [fits.Column("A", "1024D", array=rows * 0.0 + 1.0), fits.Column("B", "1024D", unit="K", array=rows)]
    table = fits.BinTableHDU.from_columns(columns)
    table.header.update({"PIXTYPE": "HEALPIX", "ORDERING": "RING", "COORDSYS": "G", "NSIDE": NSIDE})
    fits.HDUList([fits.PrimaryHDU(), table]).writeto(tmp_path / "a.fits")
    found = read_healpix_map(tmp_path / "a.fits", **{**HEALPIX, "field": 1}).temperature_k
    assert np.array_equal(found, ring_values())


def test_averaging_down_keeps_the_mean(tmp_path: Path) -> None:
    path = write_healpix(tmp_path / "a.fits", ring_values())
    coarse = read_healpix_map(path, **{**HEALPIX, "nside": 4}).temperature_k
    assert coarse.size == healpy.nside2npix(4)
    assert coarse.mean() == pytest.approx(ring_values().mean(), rel=1e-14)  # equal areas: rounding alone


def test_fill_of_a_linear_sky_is_near_the_truth_and_counted(tmp_path: Path) -> None:
    values = ring_values()
    hole = healpy.query_disc(NSIDE, healpy.ang2vec(40.0, 20.0, lonlat=True), np.radians(12.0))
    values[hole[0]], values[hole[1:]] = np.nan, healpy.UNSEEN
    found = read_healpix_map(write_healpix(tmp_path / "a.fits", values), **{**HEALPIX, "missing": "fill"})
    assert found.filled_pixels == hole.size
    # Filling from the border has no slope: at most gradient (about 11 K/rad) times the hole's radius.
    assert np.abs(found.temperature_k - ring_values()).max() < 11.0 * np.radians(14.0)
    untouched = np.setdiff1d(np.arange(values.size), hole)
    assert np.array_equal(found.temperature_k[untouched], ring_values()[untouched])


def test_image_keeps_mean_range_and_pattern(tmp_path: Path) -> None:
    path = write_image(tmp_path / "a.fits", image_values()[np.newaxis])
    image = read_image(path, **{key: value for key, value in IMAGE.items() if key != "nside"})
    assert image.temperature_k.shape == (91, 180)
    # Midpoint rule in latitude, cells of 2 deg: (2 deg)^2 / 24 times the bending along a meridian once averaged
    # round each row, at most 4 + 6 K/rad^2, is 5.1e-4 K; round a row the rule is exact.
    assert image.mean_k() == pytest.approx(31.0, abs=6e-4)
    found = read_image_map(path, **IMAGE).temperature_k
    assert found.mean() == pytest.approx(31.0, abs=1e-3)
    assert found.min() >= image.temperature_k.min()
    assert found.max() <= image.temperature_k.max()
    # A pixel is a mean over 3.7 deg of a pattern bent by at most 20 K/rad^2 (3e-3 K); its edge is known to
    # half a cell (1 deg), where the slope of at most 15 K/rad makes 0.26 K, over less than a third of its area.
    assert np.abs(found - ring_values(16)).max() < 0.1


def test_image_without_seam_column_and_from_either_side(tmp_path: Path) -> None:
    left = write_image(tmp_path / "a.fits", image_values())
    expected = read_image_map(left, **IMAGE).temperature_k
    open_end = write_image(tmp_path / "b.fits", image_values()[:, :-1], CRPIX1=91.0)
    assert read_image_map(open_end, **IMAGE).temperature_k == pytest.approx(expected, abs=1e-12)
    flipped = write_image(tmp_path / "c.fits", image_values()[::-1, ::-1], CDELT1=2.0, CDELT2=-2.0)
    # Points on a cell's border may fall to its other side when the axis is turned round.
    assert read_image_map(flipped, **IMAGE).temperature_k == pytest.approx(expected, abs=0.02)


def test_image_hole_is_filled_and_counted(tmp_path: Path) -> None:
    values = image_values()
    values[40:43, 50:55] = np.nan
    found = read_image_map(write_image(tmp_path / "a.fits", values), **{**IMAGE, "missing": "fill"})
    assert found.filled_pixels == 15
    assert np.abs(found.temperature_k - ring_values(16)).max() < 11.0 * np.radians(4.0)  # gradient times half the hole


@pytest.mark.parametrize("frame", ["galactic", "fk5", "fk4", "icrs"])
def test_directions_agree_with_astropy(frame: Frame) -> None:
    longitude, latitude = healpy.pix2ang(8, np.arange(768), lonlat=True)
    expected = SkyCoord(longitude, latitude, unit="deg", frame=frame).icrs.cartesian.xyz.value.T
    found = pixel_directions(8, frame)
    assert found.flags.c_contiguous
    assert np.abs(found - expected).max() < 1e-9  # both double precision; FK4 iterates its aberration to that
    assert np.abs(np.linalg.norm(found, axis=1) - 1.0).max() < 1e-14


def test_galactic_pole_stands_where_the_iau_put_it() -> None:
    pole = turn_directions(np.array([[0.0, 0.0, 1.0]]), "galactic", "icrs")
    # IAU 1958, carried to J2000: 192.85948, +27.12825 deg (Hipparcos, ESA SP-1200 vol. 1).
    expected = healpy.ang2vec(192.85948, 27.12825, lonlat=True)
    assert (
        np.degrees(np.arccos(min(1.0, float(pole[0] @ expected)))) < 1e-4
    )  # figures of the source, ICRS against J2000


def test_index_map_same_grid_other_frame_and_finer(tmp_path: Path) -> None:
    index = 2.5 + 0.01 * (ring_values() - 31.0)
    path = write_healpix(tmp_path / "a.fits", index, TUNIT1="")
    assert np.array_equal(read_index_map(path, nside=NSIDE, frame="galactic"), index)
    assert read_index_map(path, nside=4, frame="galactic").mean() == pytest.approx(index.mean(), rel=1e-14)
    turned = read_index_map(path, nside=32, frame="icrs")
    vectors = turn_directions(pixel_directions(32, "icrs"), "icrs", "galactic")
    expected = 2.5 + 0.01 * (smooth_sky(vectors) - 31.0)
    error, equatorial = np.abs(turned - expected), np.abs(vectors[:, 2]) < 0.6
    # Between rings 2/(3 nside) apart and pixels pi/(2 nside) apart, a line misses a curve bent by at most 0.2 per rad^2
    # by an eighth of the squared spacings; on the ring of four pixels round a pole, where azimuths are 90 deg apart,
    # it misses a slope of at most 0.15 per rad by 1 - cos 45 deg of the ring's radius.
    assert error[equatorial].max() < 0.2 / 8 * ((2 / (3 * NSIDE)) ** 2 + (np.pi / (2 * NSIDE)) ** 2)
    assert error.max() < 0.15 * np.sqrt(2 / 3) / NSIDE * (1 - np.sqrt(0.5))


BAD_HEALPIX: dict[str, tuple[dict[str, Any], dict[str, Any], str]] = {
    "contradicted ordering": ({}, {"ordering": "nested"}, "ORDERING"),
    "no ordering": ({"drop": ("ORDERING",)}, {}, "ORDERING"),
    "unknown ordering": ({"ORDERING": "SPIRAL"}, {}, "ORDERING"),
    "wrong frame": ({}, {"frame": "icrs"}, "COORDSYS"),
    "ecliptic frame": ({"COORDSYS": "E"}, {}, "COORDSYS"),
    "contradicted unit": ({"TUNIT1": "mK"}, {}, "TUNIT1"),
    "flux unit in the header": ({"TUNIT1": "MJy/sr"}, {}, "TUNIT1"),
    "declared unit no temperature": ({}, {"unit": "Jy"}, "temperature"),
    "declared unit no unit": ({}, {"unit": "warm"}, "temperature"),
    "finer than the file": ({}, {"nside": 32}, "nside 32"),
    "nside no power of two": ({}, {"nside": 12}, "power of two"),
    "no such column": ({}, {"field": 1}, "column 1"),
    "partial map": ({"INDXSCHM": "EXPLICIT"}, {}, "INDXSCHM"),
    "NSIDE of another map": ({"NSIDE": 32}, {}, "NSIDE"),
    "no HEALPix table": ({"drop": ("PIXTYPE",)}, {}, "PIXTYPE"),
}


@pytest.mark.parametrize("name", BAD_HEALPIX)
def test_bad_healpix_files_are_refused(tmp_path: Path, name: str) -> None:
    keys, declared, word = BAD_HEALPIX[name]
    path = write_healpix(tmp_path / "a.fits", ring_values(), **keys)
    (problem,) = problems_of(read_healpix_map, path, **{**HEALPIX, **declared})
    assert "a.fits" in problem
    assert word in problem
    assert "allowed" in problem or "declare" in problem or "make nside" in problem


@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf, healpy.UNSEEN, -32768.0])
def test_missing_pixels_are_refused_with_count_and_place(tmp_path: Path, value: float) -> None:
    values = ring_values()
    values[[7, 99, 1234]] = value
    path = write_healpix(tmp_path / "a.fits", values, BAD_DATA=-32768.0)
    (problem,) = problems_of(read_healpix_map, path, **HEALPIX)
    assert "3 of 3072" in problem
    assert "7, 99, 1234" in problem


def test_too_much_to_fill_is_refused(tmp_path: Path) -> None:
    values = ring_values()
    values[: values.size // 5] = np.nan
    path = write_healpix(tmp_path / "a.fits", values)
    (problem,) = problems_of(read_healpix_map, path, **{**HEALPIX, "missing": "fill"})
    assert "10%" in problem


def test_everything_wrong_is_said_at_once(tmp_path: Path) -> None:
    values = ring_values()
    values[5] = np.nan
    path = write_healpix(tmp_path / "a.fits", values, TUNIT1="mK", COORDSYS="C", ORDERING="NESTED")
    found = problems_of(read_healpix_map, path, **{**HEALPIX, "ordering": "ring", "nside": 64})
    assert len(found) == 5
    assert all(any(word in problem for problem in found) for word in ("TUNIT1", "COORDSYS", "ORDERING", "NaN", "64"))


@pytest.mark.parametrize("kind", ["missing", "text", "truncated", "directory"])
@pytest.mark.filterwarnings("ignore:.*truncated.*")
def test_files_that_are_not_whole_fits_are_refused(tmp_path: Path, kind: str) -> None:
    path = tmp_path / "a.fits"
    if kind == "text":
        path.write_text("frequency, temperature\n60, 4000\n" * 200)
    elif kind == "truncated":
        write_healpix(path, ring_values())
        path.write_bytes(path.read_bytes()[:12000])
    elif kind == "directory":
        path.mkdir()
    readers: tuple[tuple[Callable[..., object], dict[str, Any]], ...] = (
        (read_healpix_map, HEALPIX),
        (read_image_map, IMAGE),
    )
    for reader, declared in readers:
        (problem,) = problems_of(reader, path, **declared)
        assert "a.fits" in problem


BAD_IMAGES: dict[str, tuple[Callable[[Values], Values], dict[str, Any], dict[str, Any], str]] = {
    "half the longitudes": (lambda v: v[:, :91], {"CRPIX1": 91.0}, {}, "CDELT1"),
    "north only": (lambda v: v[45:], {"CRPIX2": 1.0, "CDELT2": 2.0, "CDELT1": -2.0}, {}, "pole to pole"),
    "shifted off the poles": (lambda v: v, {"CRPIX2": 40.0}, {}, "pole to pole"),
    "rotated": (lambda v: v, {"PC1_1": 0.8, "PC1_2": 0.6, "PC2_1": -0.6, "PC2_2": 0.8}, {}, "evenly"),
    "another projection": (lambda v: v, {"CTYPE1": "GLON-SIN", "CTYPE2": "GLAT-SIN"}, {}, "CTYPE1"),
    "wrong frame": (lambda v: v, {}, {"frame": "icrs"}, "CTYPE1"),
    "contradicted unit": (lambda v: v, {"BUNIT": "mK"}, {}, "BUNIT"),
    "no coordinates": (lambda v: v, {"drop": ("CRVAL1",)}, {}, "CRVAL1"),
    "a cube": (lambda v: np.stack([v, v]), {}, {}, "shape"),
    "a hole": (lambda v: np.where(v > v.max() - 1e-9, np.nan, v), {}, {}, "NaN"),
    "finer than its cells": (lambda v: v, {}, {"nside": 64}, "nside 64"),
    "seam of two meridians": (lambda v: np.column_stack([v[:, :-1], 2.0 * v[:, 0]]), {}, {}, "repeat"),
}


@pytest.mark.parametrize("name", BAD_IMAGES)
def test_bad_images_are_refused(tmp_path: Path, name: str) -> None:
    change, keys, declared, word = BAD_IMAGES[name]
    path = write_image(tmp_path / "a.fits", change(image_values()), **keys)
    found = problems_of(read_image_map, path, **{**IMAGE, **declared})
    assert any(word in problem for problem in found), found
    assert all("a.fits" in problem for problem in found)


@pytest.mark.parametrize(
    ("keys", "frame", "word"),
    [
        ({"EQUINOX": 2000.0}, "fk4", "EQUINOX"),
        ({"EPOCH": 1950.0}, "icrs", "EPOCH"),
        ({"RADESYS": "FK5"}, "icrs", "RADESYS"),
    ],
)
def test_equatorial_systems_are_told_apart(tmp_path: Path, keys: dict[str, Any], frame: str, word: str) -> None:
    path = write_image(tmp_path / "a.fits", image_values(), CTYPE1="RA---CAR", CTYPE2="DEC--CAR", **keys)
    found = problems_of(read_image_map, path, **{**IMAGE, "frame": frame})
    assert any(word in problem for problem in found), found


@pytest.mark.parametrize(
    ("keys", "scale", "word"),
    [({}, -1.0, "sign"), ({"drop": ("COORDSYS",)}, 1.0, "COORDSYS"), ({"drop": ("ORDERING",)}, 1.0, "ORDERING")],
)
def test_bad_index_maps_are_refused(tmp_path: Path, keys: dict[str, Any], scale: float, word: str) -> None:
    path = write_healpix(tmp_path / "a.fits", scale * np.full(3072, 2.5), TUNIT1="", **keys)
    (problem,) = problems_of(read_index_map, path, nside=NSIDE, frame="galactic")
    assert word in problem
