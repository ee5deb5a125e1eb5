"""Plate-carree FITS images of the whole sphere: read strictly, then averaged onto HEALPix pixels.

It stands below `sims.sky_maps`, which makes a `DiffuseMap` of what is read here.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import healpy
import numpy as np
from astropy.io import fits
from astropy.wcs import WCS
from numpy.typing import NDArray

from sims.errors import InputError, raise_if_any
from sims.sky_map_checks import Frame, Missing, check_missing, fill_missing, load_hdu, unit_in_kelvin

# Children to a cell of the image, each way, for the mean over the sphere to hold to 1e-4.
_CHILDREN_PER_CELL = 4
# What of a header makes the world coordinates; the rest (dates, observer) is of no use and often malformed.
_AXIS_KEYS = re.compile(r"(CTYPE|CRVAL|CRPIX|CDELT|CUNIT|CROTA)[12]|(PC|CD)[12]_[12]|PV[12]_\d+|LONPOLE|LATPOLE")


@dataclass(frozen=True, eq=False)
class SkyImage:
    """A plate-carree image of the whole sphere, without a repeated seam column.

    Attributes
    ----------
    temperature_k : ndarray[row, column]
        Brightness temperature, K.
    longitude_deg : ndarray[column]
        Longitude of the cell centres, deg, evenly stepped, not wrapped.
    latitude_deg : ndarray[row]
        Latitude of the cell centres, deg, evenly stepped; rows on a pole are half as high.
    filled_cells : int
        Missing values that were filled from their neighbours.
    """

    temperature_k: NDArray[np.float64]
    longitude_deg: NDArray[np.float64]
    latitude_deg: NDArray[np.float64]
    filled_cells: int

    @property
    def step_deg(self) -> float:
        """Larger side of a cell, deg."""
        return max(abs(_step(self.longitude_deg)), abs(_step(self.latitude_deg)))

    def mean_k(self) -> float:
        """Mean over the sphere, K, each row weighted by the exact solid angle of its cells."""
        half = abs(self.latitude_deg[1] - self.latitude_deg[0]) / 2.0
        upper, lower = np.minimum(self.latitude_deg + half, 90.0), np.maximum(self.latitude_deg - half, -90.0)
        weight = np.sin(np.radians(upper)) - np.sin(np.radians(lower))
        return float(np.average(self.temperature_k.mean(axis=1), weights=weight))


def read_image(path: Path, *, frame: Frame, unit: str, missing: Missing) -> SkyImage:
    """Read a plate-carree FITS image of the whole sphere as it stands.

    Parameters
    ----------
    path : Path
        FITS file; its first image is read, two-dimensional but for axes of length one.
    frame : {"galactic", "icrs", "fk5", "fk4"}
        Frame of the axes; must not contradict CTYPE, RADESYS, EQUINOX or EPOCH.
    unit : str
        Unit of the values, a temperature as astropy writes it; must not contradict BUNIT.
    missing : {"refuse", "fill"}
        Refuse BLANK, NaN and infinite values, or fill them from their neighbours.

    Returns
    -------
    SkyImage
        A last column that repeats the first is averaged with it.

    Raises
    ------
    InputError
        With every problem found.
    """
    hdu_number, header, data = load_hdu(path, lambda hdu: hdu.is_image and hdu.header["NAXIS"] >= 2, "an image")
    where = f"{path}[{hdu_number}]"
    values = np.asarray(data, dtype=np.float64)
    while values.ndim > 2 and values.shape[0] == 1:
        values = values[0]
    if values.ndim != 2 or min(values.shape) < 4:
        raise InputError(f"{where}: shape {data.shape}; allowed: a two-dimensional image, leading axes of length one")
    problems: list[str] = []
    kelvin = unit_in_kelvin(unit, header.get("BUNIT"), f"{where}: header BUNIT", problems)
    _check_image_frame(header, frame, where, problems)
    longitude, latitude, seam = _image_axes(header, values.shape, where, problems)
    bad = ~np.isfinite(values)
    check_missing(bad.ravel(), missing, where, "cell", problems)
    raise_if_any(problems)
    rows, columns = values.shape

    def neighbours(cells: NDArray[np.int64]) -> NDArray[np.int64]:
        row, column = np.divmod(cells, columns)
        beside = [row * columns + (column + 1) % columns, row * columns + (column - 1) % columns]
        below, above = np.where(row > 0, cells - columns, -1), np.where(row < rows - 1, cells + columns, -1)
        return np.stack([*beside, below, above])

    whole = fill_missing(values.ravel(), bad.ravel(), neighbours).reshape(rows, columns) * kelvin
    if seam:
        whole = _without_seam(whole, where)
    return SkyImage(whole, longitude[: whole.shape[1]], latitude, int(bad.sum()))


def average_onto_healpix(
    image: SkyImage, nside: int, rotation: NDArray[np.float64] | None = None
) -> NDArray[np.float64]:
    """Average an image over the area of each HEALPix pixel, of its own frame or of a turned one.

    Each pixel is cut into equal-area HEALPix children, at least four to a cell of the image
    each way; a child takes the value of the cell its centre lies in, and a pixel the mean of
    its children. That is the average over the pixel's area to the children's size: it keeps
    the mean over the sphere and never leaves the range of the image.

    Parameters
    ----------
    image : SkyImage
        The whole sphere.
    nside : int
        HEALPix resolution, a power of two.
    rotation : ndarray[3, 3], optional
        Carries row vectors of the pixels' frame into the image's, as `sims.sky_grid.frame_rotation` gives it.

    Returns
    -------
    ndarray[pixel]
        Brightness temperature, K; RING order.
    """
    rows, columns = image.temperature_k.shape
    step_longitude, step_latitude = _step(image.longitude_deg), _step(image.latitude_deg)
    pixel_deg = math.degrees(healpy.nside2resol(nside))
    finest = _CHILDREN_PER_CELL * pixel_deg / min(abs(step_longitude), abs(step_latitude))
    split = 2 ** max(1, math.ceil(math.log2(finest)))
    nested = np.empty(healpy.nside2npix(nside))
    block = max(1, 2**20 // split**2)
    for start in range(0, nested.size, block):
        stop = min(start + block, nested.size)
        children = np.arange(start * split**2, stop * split**2)
        longitude, latitude = healpy.pix2ang(nside * split, children, nest=True, lonlat=True)
        if rotation is not None:
            turned = healpy.ang2vec(longitude, latitude, lonlat=True) @ rotation
            longitude, latitude = healpy.vec2ang(turned, lonlat=True)
        column = np.rint((longitude - image.longitude_deg[0]) / step_longitude).astype(np.int64) % columns
        row = np.clip(np.rint((latitude - image.latitude_deg[0]) / step_latitude).astype(np.int64), 0, rows - 1)
        nested[start:stop] = image.temperature_k[row, column].reshape(-1, split**2).mean(axis=1)
    return np.asarray(healpy.reorder(nested, n2r=True), dtype=np.float64)


def _step(axis: NDArray[np.float64]) -> float:
    return float((axis[-1] - axis[0]) / (axis.size - 1))


def _check_image_frame(header: Any, frame: Frame, where: str, problems: list[str]) -> None:
    wanted = ("GLON", "GLAT") if frame == "galactic" else ("RA", "DEC")
    for axis, name in enumerate(wanted, start=1):
        words = [word for word in str(header.get(f"CTYPE{axis}", "")).strip().upper().split("-") if word]
        if words[:1] != [name] or words[1:] not in ([], ["CAR"]):
            problems.append(
                f"{where}: header CTYPE{axis} is {header.get(f'CTYPE{axis}')!r} but frame {frame!r} is declared; "
                f"allowed: {name} alone or with projection CAR"
            )
    if frame == "galactic":
        return
    system = str(header.get("RADESYS", header.get("RADECSYS", ""))).strip().upper()
    if system and system != frame.upper():
        problems.append(
            f"{where}: header RADESYS is {system!r} but frame {frame!r} is declared; allowed: {frame.upper()!r}"
        )
    equinox = 1950.0 if frame == "fk4" else 2000.0
    problems.extend(
        f"{where}: header {key} is {header[key]} but frame {frame!r} is declared; allowed: {equinox:g}"
        for key in ("EQUINOX", "EPOCH")
        if key in header and str(header[key]).strip(" JB") not in (f"{equinox:g}", f"{equinox:.1f}")
    )


def _image_axes(
    header: Any, shape: tuple[int, ...], where: str, problems: list[str]
) -> tuple[NDArray[np.float64], NDArray[np.float64], bool]:
    """Longitude of each column, latitude of each row, and whether the last column repeats the first."""
    rows, columns = shape
    nothing = np.zeros(columns), np.zeros(rows), False
    keys = [f"{key}{axis}" for key in ("CRVAL", "CRPIX") for axis in (1, 2) if f"{key}{axis}" not in header]
    keys += [f"CDELT{axis}" for axis in (1, 2) if not {f"CDELT{axis}", f"CD{axis}_{axis}"} & set(header)]
    if keys:
        problems.append(f"{where}: header lacks {', '.join(keys)}; allowed: an image with a world coordinate system")
        return nothing
    world = WCS(fits.Header([card for card in header.cards if _AXIS_KEYS.fullmatch(card.keyword)]), naxis=2)
    world.wcs.bounds_check(False, False)
    column, row = np.meshgrid(np.arange(columns), np.arange(rows))
    seen_longitude, seen_latitude = world.wcs_pix2world(column, row, 0)
    longitude = np.unwrap(seen_longitude[rows // 2], period=360.0)
    latitude = np.asarray(seen_latitude[:, columns // 2])
    turn = np.abs((seen_longitude - longitude + 180.0) % 360.0 - 180.0)
    off_pole = np.abs(latitude) < 89.99
    steps_even = np.allclose(np.diff(longitude), _step(longitude)) and np.allclose(np.diff(latitude), _step(latitude))
    straight = turn[off_pole].max() <= 1e-3 and np.abs(seen_latitude - latitude[:, np.newaxis]).max() <= 1e-3
    if not (steps_even and straight):
        problems.append(
            f"{where}: rows and columns do not follow latitude and longitude evenly; "
            "allowed: plate carree (CAR) with CRVAL2 = 0 and no rotation in PC, CD or CROTA"
        )
        return nothing
    step_longitude, step_latitude = abs(_step(longitude)), abs(_step(latitude))
    cells_round, cells_up = 360.0 / step_longitude, 180.0 / step_latitude
    seam = math.isclose(columns, cells_round + 1.0, abs_tol=0.01)
    if not seam and not math.isclose(columns, cells_round, abs_tol=0.01):
        problems.append(
            f"{where}: {columns} columns of {step_longitude:.6g} deg (CDELT1) do not go round the sphere once; "
            f"allowed: {cells_round:.6g} columns, or one more that repeats the first"
        )
    ends = max(abs(latitude[0] + latitude[-1]), abs(rows - cells_up - (latitude.max() > 90.0 - step_latitude / 4)))
    if ends > 0.01:
        problems.append(
            f"{where}: {rows} rows of {step_latitude:.6g} deg (CDELT2) from {latitude[0]:.6g} to {latitude[-1]:.6g} "
            "deg do not reach from pole to pole; allowed: cells that tile it, or rows centred on both poles"
        )
    return longitude, latitude, seam


def _without_seam(image: NDArray[np.float64], where: str) -> NDArray[np.float64]:
    first, last = image[:, 0], image[:, -1]
    # A real repeated column may differ by a step of its integers; a tenth of the brightness is another meridian.
    apart = int(np.sum(np.abs(first - last) > 0.1 * np.abs(first)))
    if apart:
        raise InputError(
            f"{where}: the last column should repeat the first, one turn on, but differs by over 10 % in {apart} rows"
        )
    joined = image[:, :-1].copy()
    joined[:, 0] = 0.5 * (first + last)
    return joined
