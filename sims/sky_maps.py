"""Readers of diffuse-sky maps: HEALPix FITS and whole-sphere FITS images to kelvin on a HEALPix grid.

First stop of the flow: `sims.sky` lays a spectrum on what is read here. A map keeps its
own frame, so that nothing is interpolated; only its pixel centres are turned to ICRS.
What the user declares is held against the header, and every disagreement is reported at once.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import lru_cache
from pathlib import Path
from typing import Any

import astropy.units as u
import healpy
import numpy as np
from astropy.coordinates import SkyCoord
from numpy.typing import NDArray

from sims.errors import InputError, raise_if_any
from sims.sky_healpix import (
    COORDSYS_FRAMES,
    Ordering,
    check_coordsys,
    check_nside,
    coarser,
    healpix_column,
    missing_pixels,
    order_of,
    own_nside_of,
    ring_order,
    whole_ring,
)
from sims.sky_images import SkyImage, average_onto_healpix, read_image
from sims.sky_map_checks import Frame, Missing, check_missing, sha256_of, unit_in_kelvin

INDEX_RANGE = (1.0, 4.0)


@dataclass(frozen=True, eq=False)
class DiffuseMap:
    """A map of the diffuse sky at one frequency, whole and finite.

    Attributes
    ----------
    temperature_k : ndarray[pixel]
        Brightness temperature as read, K; HEALPix RING order, in `frame`.
    nside : int
        HEALPix resolution.
    frame : {"galactic", "icrs", "fk5", "fk4"}
        Frame of the pixels; fk5 is J2000, fk4 is B1950.
    filled_pixels : int
        Missing values, counted in the file, that were filled from their neighbours.
    source : str
        Name of the file, or "invented".
    sha256 : str
        Checksum of the file; of the values where there is no file.
    """

    temperature_k: NDArray[np.float64]
    nside: int
    frame: Frame
    filled_pixels: int
    source: str
    sha256: str


@lru_cache(maxsize=2)
def pixel_directions(nside: int, frame: Frame) -> NDArray[np.float64]:
    """Pixel centres of a RING map in `frame`, as ICRS unit vectors, ndarray[pixel, 3]; shared and read-only."""
    centres = np.column_stack(healpy.pix2vec(nside, np.arange(healpy.nside2npix(nside))))
    directions = turn_directions(centres, frame, "icrs")
    directions.flags.writeable = False
    return directions


def turn_directions(vectors: NDArray[np.float64], frame: Frame, to_frame: Frame) -> NDArray[np.float64]:
    """Unit vectors, ndarray[direction, 3], carried from one frame to another (fk5 is J2000, fk4 is B1950)."""
    if frame == to_frame:
        return np.ascontiguousarray(vectors)
    start = SkyCoord(*vectors.T, representation_type="cartesian", frame=frame)
    turned = np.ascontiguousarray(start.transform_to(to_frame).cartesian.xyz.value.T)
    return np.asarray(turned / np.linalg.norm(turned, axis=1, keepdims=True))


def read_healpix_map(
    path: Path, *, field: int, ordering: Ordering, frame: Frame, unit: str, missing: Missing, nside: int
) -> DiffuseMap:
    """Read one column of a full-sky HEALPix FITS file.

    Parameters
    ----------
    path : Path
        FITS file whose first HEALPix table is read.
    field : int
        Number of the column, from 0.
    ordering : {"header", "ring", "nested"}
        Order of the pixels; "header" demands the ORDERING key, the others must not contradict it.
    frame : {"galactic", "icrs", "fk5", "fk4"}
        Frame of the pixels; must not contradict COORDSYS.
    unit : str
        Unit of the values, a temperature as astropy writes it; must not contradict TUNIT.
    missing : {"refuse", "fill"}
        Refuse UNSEEN, BAD_DATA, NaN and infinite values, or fill them with the mean of valid
        neighbours, ring by ring inwards, up to a tenth of the map.
    nside : int
        Resolution wanted: that of the file, or coarser (plain average of the children).

    Returns
    -------
    DiffuseMap

    Raises
    ------
    InputError
        With every problem found.
    """
    read = read_healpix_ring(path, field=field, ordering=ordering, frame=frame, unit=unit, missing=missing, nside=nside)
    return replace(read, temperature_k=coarser(read.temperature_k, nside), nside=nside)


def read_healpix_ring(
    path: Path, *, field: int, ordering: Ordering, frame: Frame, unit: str, missing: Missing, nside: int
) -> DiffuseMap:
    """`read_healpix_map` at the file's own resolution, which must not be coarser than `nside`."""
    values, header, where = healpix_column(path, field)
    problems: list[str] = []
    kelvin = unit_in_kelvin(unit, header.get(f"TUNIT{field + 1}"), f"{where}: header TUNIT{field + 1}", problems)
    order = order_of(header, ordering, where, problems)
    check_coordsys(header, frame, where, problems)
    own_nside = own_nside_of(values.size, header, where, problems)
    bad = missing_pixels(values, header)
    check_missing(bad, missing, f"{where}, column {field}", "pixel", problems)
    check_nside(nside, own_nside, where, problems)
    raise_if_any(problems)
    return DiffuseMap(
        temperature_k=whole_ring(values, bad, order, own_nside) * kelvin,
        nside=own_nside,
        frame=frame,
        filled_pixels=int(bad.sum()),
        source=Path(path).name,
        sha256=sha256_of(path),
    )


def read_image_map(path: Path, *, frame: Frame, unit: str, missing: Missing, nside: int) -> DiffuseMap:
    """Read a plate-carree FITS image of the whole sphere and average it onto HEALPix pixels.

    Parameters
    ----------
    path, frame, unit, missing
        As for `sims.sky_images.read_image`; the averaging is that of `average_onto_healpix` there.
    nside : int
        Resolution wanted; its pixels must not be smaller than the cells of the image.

    Returns
    -------
    DiffuseMap

    Raises
    ------
    InputError
        With every problem found.
    """
    image = read_image_for(path, frame=frame, unit=unit, missing=missing, nside=nside)
    return DiffuseMap(
        temperature_k=average_onto_healpix(image, nside),
        nside=nside,
        frame=frame,
        filled_pixels=image.filled_cells,
        source=Path(path).name,
        sha256=sha256_of(path),
    )


def read_image_for(path: Path, *, frame: Frame, unit: str, missing: Missing, nside: int) -> SkyImage:
    """The image itself, whose cells must not be coarser than the pixels of `nside`."""
    problems: list[str] = []
    check_nside(nside, None, str(path), problems)
    try:
        image = read_image(path, frame=frame, unit=unit, missing=missing)
    except InputError as error:
        raise InputError([*problems, *error.problems]) from None
    finest = finest_nside(image)
    if nside > finest:
        problems.append(f"{path}: nside {nside} is finer than {image.step_deg:.4g} deg cells; allowed: up to {finest}")
    raise_if_any(problems)
    return image


def finest_nside(image: SkyImage) -> int:
    """Finest resolution whose pixels are no smaller than the cells of an image."""
    return int(2 ** int(math.log2(math.degrees(healpy.nside2resol(1)) / image.step_deg)))


def read_index_map(path: Path, *, nside: int, frame: Frame) -> NDArray[np.float64]:
    """Read a HEALPix FITS map of the spectral index beta (T ~ f^-beta, so about +2.5) onto a map's pixels.

    Parameters
    ----------
    path : Path
        FITS file; ORDERING and COORDSYS must stand in its header; its first column is read.
    nside, frame
        Of the map it will serve.

    Returns
    -------
    ndarray[pixel]
        Index, dimensionless; averaged down where it is finer than `nside` in the same frame,
        else interpolated bilinearly at the pixel centres.

    Raises
    ------
    InputError
        With every problem found; missing values and values outside 1 to 4 are refused.
    """
    low, high = INDEX_RANGE

    def judge(values: NDArray[np.float64], header: Any, where: str, problems: list[str]) -> None:
        outside = int(np.sum((values < low) | (values > high)))
        if outside:
            problems.append(
                f"{where}: {outside} spectral indices lie outside {low:g} to {high:g}; "
                "T ~ f^-index, so the sign is plus"
            )

    return _auxiliary_map(path, nside, frame, judge)


def read_emission_measure_map(path: Path, *, nside: int, frame: Frame) -> NDArray[np.float64]:
    """Read a HEALPix FITS map of the emission measure, pc cm^-6, onto a map's pixels, as `read_index_map` does.

    Raises
    ------
    InputError
        With every problem found; missing and negative values and another unit in TUNIT1 are refused.
    """

    def judge(values: NDArray[np.float64], header: Any, where: str, problems: list[str]) -> None:
        negative = int(np.sum(values < 0.0))
        if negative:
            problems.append(f"{where}: {negative} emission measures are negative; allowed: zero and above")
        text = str(header.get("TUNIT1", "")).strip()
        if text and not _is_emission_measure(text):
            problems.append(f"{where}: header TUNIT1 is {text!r}; allowed: 'pc cm-6', or none")

    return _auxiliary_map(path, nside, frame, judge)


def _is_emission_measure(text: str) -> bool:
    try:
        return bool(u.Unit(text) == u.pc / u.cm**6)
    except ValueError:
        return False


def _auxiliary_map(
    path: Path, nside: int, frame: Frame, judge: Callable[[NDArray[np.float64], Any, str, list[str]], None]
) -> NDArray[np.float64]:
    """First column of a file whose header says order and frame, brought onto the pixels of another map."""
    values, header, where = healpix_column(path, 0)
    problems: list[str] = []
    order = order_of(header, "header", where, problems)
    coordsys = str(header.get("COORDSYS", "")).strip().upper()
    if coordsys not in COORDSYS_FRAMES:
        problems.append(f"{where}: header COORDSYS is {coordsys!r}; allowed: {', '.join(COORDSYS_FRAMES)}")
    own_nside = own_nside_of(values.size, header, where, problems)
    bad = missing_pixels(values, header)
    check_missing(bad, "refuse", f"{where}, column 0", "pixel", problems)
    judge(values[~bad], header, where, problems)
    raise_if_any(problems)
    ring = ring_order(values, order)
    own_frame = COORDSYS_FRAMES[coordsys][0]
    if own_frame == frame and own_nside >= nside:
        return coarser(ring, nside)
    if own_nside > nside:
        ring = coarser(ring, nside)
    theta, phi = healpy.vec2ang(turn_directions(pixel_directions(nside, frame), "icrs", own_frame))
    return np.asarray(healpy.get_interp_val(ring, theta, phi), dtype=np.float64)
