"""Readers of diffuse-sky maps: HEALPix FITS and whole-sphere FITS images to kelvin on a HEALPix grid.

First stop of the flow: `sims.sky` lays a spectrum on what is read here. A map keeps its
own frame, so that nothing is interpolated; only its pixel centres are turned to ICRS.
What the user declares is held against the header, and every disagreement is reported at once.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import healpy
import numpy as np
from astropy.coordinates import SkyCoord
from astropy.io import fits
from numpy.typing import NDArray

from sims.errors import InputError, raise_if_any
from sims.sky_images import average_onto_healpix, read_image
from sims.sky_map_checks import Frame, Missing, check_missing, fill_missing, load_hdu, sha256_of, unit_in_kelvin

Ordering = Literal["header", "ring", "nested"]

COORDSYS_FRAMES: dict[str, tuple[Frame, ...]] = {
    "G": ("galactic",),
    "GALACTIC": ("galactic",),
    "C": ("icrs", "fk5", "fk4"),
    "Q": ("icrs", "fk5", "fk4"),
    "EQUATORIAL": ("icrs", "fk5", "fk4"),
    "CELESTIAL": ("icrs", "fk5", "fk4"),
    "ICRS": ("icrs",),
    "FK5": ("fk5",),
    "FK4": ("fk4",),
}
ORDERINGS = {"RING": "ring", "NEST": "nested", "NESTED": "nested"}
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


def pixel_directions(nside: int, frame: Frame) -> NDArray[np.float64]:
    """Pixel centres of a RING map in `frame`, as ICRS unit vectors, ndarray[pixel, 3]."""
    centres = np.column_stack(healpy.pix2vec(nside, np.arange(healpy.nside2npix(nside))))
    return turn_directions(centres, frame, "icrs")


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
    values, header, where = _healpix_column(path, field)
    problems: list[str] = []
    kelvin = unit_in_kelvin(unit, header.get(f"TUNIT{field + 1}"), f"{where}: header TUNIT{field + 1}", problems)
    order = _order(header, ordering, where, problems)
    _check_coordsys(header, frame, where, problems)
    own_nside = _own_nside(values.size, header, where, problems)
    bad = _missing_pixels(values, header)
    check_missing(bad, missing, f"{where}, column {field}", "pixel", problems)
    _check_nside(nside, own_nside, where, problems)
    raise_if_any(problems)
    ring = values if order == "ring" else healpy.reorder(values, n2r=True)
    bad_ring = bad if order == "ring" else healpy.reorder(bad.astype(float), n2r=True) > 0.5
    whole = fill_missing(ring, bad_ring, lambda pixels: healpy.get_all_neighbours(own_nside, pixels))
    return DiffuseMap(
        temperature_k=_coarser(whole * kelvin, nside),
        nside=nside,
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
    problems: list[str] = []
    _check_nside(nside, None, str(path), problems)
    try:
        image = read_image(path, frame=frame, unit=unit, missing=missing)
    except InputError as error:
        raise InputError([*problems, *error.problems]) from None
    finest = 2 ** int(math.log2(math.degrees(healpy.nside2resol(1)) / image.step_deg))
    if nside > finest:
        problems.append(f"{path}: nside {nside} is finer than {image.step_deg:.4g} deg cells; allowed: up to {finest}")
    raise_if_any(problems)
    return DiffuseMap(
        temperature_k=average_onto_healpix(image, nside),
        nside=nside,
        frame=frame,
        filled_pixels=image.filled_cells,
        source=Path(path).name,
        sha256=sha256_of(path),
    )


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
    values, header, where = _healpix_column(path, 0)
    problems: list[str] = []
    order = _order(header, "header", where, problems)
    coordsys = str(header.get("COORDSYS", "")).strip().upper()
    if coordsys not in COORDSYS_FRAMES:
        problems.append(f"{where}: header COORDSYS is {coordsys!r}; allowed: {', '.join(COORDSYS_FRAMES)}")
    own_nside = _own_nside(values.size, header, where, problems)
    bad = _missing_pixels(values, header)
    check_missing(bad, "refuse", f"{where}, column 0", "pixel", problems)
    low, high = INDEX_RANGE
    outside = int(np.sum((values[~bad] < low) | (values[~bad] > high)))
    if outside:
        problems.append(
            f"{where}: {outside} spectral indices lie outside {low:g} to {high:g}; T ~ f^-index, so the sign is plus"
        )
    raise_if_any(problems)
    ring = values if order == "ring" else healpy.reorder(values, n2r=True)
    own_frame = COORDSYS_FRAMES[coordsys][0]
    if own_frame == frame and own_nside >= nside:
        return _coarser(ring, nside)
    if own_nside > nside:
        ring = _coarser(ring, nside)
    theta, phi = healpy.vec2ang(turn_directions(pixel_directions(nside, frame), "icrs", own_frame))
    return np.asarray(healpy.get_interp_val(ring, theta, phi), dtype=np.float64)


def _healpix_column(path: Path, field: int) -> tuple[NDArray[np.float64], Any, str]:
    def is_healpix(hdu: Any) -> bool:
        return isinstance(hdu, fits.BinTableHDU) and str(hdu.header.get("PIXTYPE", "")).strip().upper() == "HEALPIX"

    number, header, table = load_hdu(path, is_healpix, "a binary table whose header says PIXTYPE = 'HEALPIX'")
    where = f"{path}[{number}]"
    names = list(table.names)
    if str(header.get("INDXSCHM", "IMPLICIT")).strip().upper() != "IMPLICIT":
        raise InputError(f"{where}: header INDXSCHM is {header['INDXSCHM']!r}, a partial map; allowed: 'IMPLICIT'")
    if not 0 <= field < len(names):
        raise InputError(f"{where}: no column {field}; allowed: 0 to {len(names) - 1}, that is {', '.join(names)}")
    raw = np.asarray(table.field(field))
    if raw.dtype.kind not in "fiu":
        raise InputError(f"{where}: column {field} ({names[field]}) holds {raw.dtype}; allowed: real numbers")
    return raw.astype(np.float64).ravel(), header, where


def _missing_pixels(values: NDArray[np.float64], header: Any) -> NDArray[np.bool_]:
    bad = ~np.isfinite(values) | np.asarray(healpy.mask_bad(values), dtype=bool)
    flag = header.get("BAD_DATA")
    return bad if flag is None else np.asarray(bad | (np.abs(values - float(flag)) <= 1e-6 * abs(float(flag))))


def _order(header: Any, declared: Ordering, where: str, problems: list[str]) -> str:
    text = str(header.get("ORDERING", "")).strip().upper()
    found = ORDERINGS.get(text)
    if text and found is None:
        problems.append(f"{where}: header ORDERING is {text!r}; allowed: {', '.join(ORDERINGS)}")
    elif declared == "header" and found is None:
        problems.append(f"{where}: no ORDERING in the header; declare ordering = 'ring' or 'nested'")
    elif declared != "header" and found is not None and found != declared:
        problems.append(f"{where}: header ORDERING is {text!r} but {declared!r} is declared; allowed: the same")
    return found if declared == "header" and found is not None else declared


def _check_coordsys(header: Any, frame: Frame, where: str, problems: list[str]) -> None:
    text = str(header.get("COORDSYS", "")).strip().upper()
    if not text:
        return
    frames = COORDSYS_FRAMES.get(text)
    if frames is None:
        problems.append(f"{where}: header COORDSYS is {text!r}; allowed: {', '.join(COORDSYS_FRAMES)}")
    elif frame not in frames:
        problems.append(
            f"{where}: header COORDSYS is {text!r} but frame {frame!r} is declared; allowed: {', '.join(frames)}"
        )


def _own_nside(pixels: int, header: Any, where: str, problems: list[str]) -> int:
    if not healpy.isnpixok(pixels) or not healpy.isnsideok(healpy.npix2nside(pixels), nest=True):
        problems.append(f"{where}: {pixels} pixels; allowed: 12 nside^2, nside a power of two, the whole sphere")
        return 0
    nside = int(healpy.npix2nside(pixels))
    if header.get("NSIDE", nside) != nside:
        problems.append(f"{where}: header NSIDE is {header['NSIDE']} but {pixels} pixels make nside {nside}")
    return nside


def _check_nside(nside: int, own_nside: int | None, where: str, problems: list[str]) -> None:
    if nside < 1 or not healpy.isnsideok(nside, nest=True):
        problems.append(f"{where}: nside {nside} is wanted; allowed: a power of two")
    elif own_nside and nside > own_nside:
        problems.append(f"{where}: nside {nside} is finer than the map's {own_nside}; allowed: up to {own_nside}")


def _coarser(ring: NDArray[np.float64], nside: int) -> NDArray[np.float64]:
    return np.asarray(healpy.ud_grade(ring, nside), dtype=np.float64)
