"""HEALPix files: the table, and its header held against what is declared.

It stands below `sims.sky_maps` and `sims.sky_cube`. The checks append what they find to a
list of problems, so that a reader can report all of it at once.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any, Literal

import healpy
import numpy as np
from astropy.io import fits
from numpy.typing import NDArray

from sims.errors import InputError
from sims.sky_map_checks import Frame, fill_missing, load_hdu

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


def healpix_table(path: Path) -> tuple[Any, Any, str]:
    """Header and data of the first HEALPix table of a FITS file, and where it stands in words.

    Raises
    ------
    InputError
        If there is none, or it holds part of the sphere only.
    """

    def is_healpix(hdu: Any) -> bool:
        return isinstance(hdu, fits.BinTableHDU) and str(hdu.header.get("PIXTYPE", "")).strip().upper() == "HEALPIX"

    number, header, table = load_hdu(path, is_healpix, "a binary table whose header says PIXTYPE = 'HEALPIX'")
    where = f"{path}[{number}]"
    if str(header.get("INDXSCHM", "IMPLICIT")).strip().upper() != "IMPLICIT":
        raise InputError(f"{where}: header INDXSCHM is {header['INDXSCHM']!r}, a partial map; allowed: 'IMPLICIT'")
    return header, table, where


def healpix_column(path: Path, field: int) -> tuple[NDArray[np.float64], Any, str]:
    """One column of the first HEALPix table as numbers ndarray[pixel], its header, and where it stands."""
    header, table, where = healpix_table(path)
    names = list(table.names)
    if not 0 <= field < len(names):
        raise InputError(f"{where}: no column {field}; allowed: 0 to {len(names) - 1}, that is {', '.join(names)}")
    return column_values(table, field, where), header, where


def column_values(table: Any, field: int, where: str) -> NDArray[np.float64]:
    """Numbers ndarray[pixel] of a column, whatever the length of its rows."""
    raw = np.asarray(table.field(field))
    if raw.dtype.kind not in "fiu":
        raise InputError(f"{where}: column {field} ({table.names[field]}) holds {raw.dtype}; allowed: real numbers")
    return raw.astype(np.float64).ravel()


def missing_pixels(values: NDArray[np.float64], header: Any) -> NDArray[np.bool_]:
    """Which values stand for nothing: UNSEEN, BAD_DATA, NaN, infinity."""
    bad = ~np.isfinite(values) | np.asarray(healpy.mask_bad(values), dtype=bool)
    flag = header.get("BAD_DATA")
    return bad if flag is None else np.asarray(bad | (np.abs(values - float(flag)) <= 1e-6 * abs(float(flag))))


def order_of(header: Any, declared: Ordering, where: str, problems: list[str]) -> str:
    """Order of the pixels, "ring" or "nested"; a problem if header and declaration clash or neither says."""
    text = str(header.get("ORDERING", "")).strip().upper()
    found = ORDERINGS.get(text)
    if text and found is None:
        problems.append(f"{where}: header ORDERING is {text!r}; allowed: {', '.join(ORDERINGS)}")
    elif declared == "header" and found is None:
        problems.append(f"{where}: no ORDERING in the header; declare ordering = 'ring' or 'nested'")
    elif declared != "header" and found is not None and found != declared:
        problems.append(f"{where}: header ORDERING is {text!r} but {declared!r} is declared; allowed: the same")
    return found if declared == "header" and found is not None else declared


def check_coordsys(header: Any, frame: Frame, where: str, problems: list[str]) -> None:
    """Add a problem if COORDSYS contradicts the declared frame."""
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


def own_nside_of(pixels: int, header: Any, where: str, problems: list[str]) -> int:
    """Resolution that a count of pixels makes; 0 and a problem if none."""
    if not healpy.isnpixok(pixels) or not healpy.isnsideok(healpy.npix2nside(pixels), nest=True):
        problems.append(f"{where}: {pixels} pixels; allowed: 12 nside^2, nside a power of two, the whole sphere")
        return 0
    nside = int(healpy.npix2nside(pixels))
    if header.get("NSIDE", nside) != nside:
        problems.append(f"{where}: header NSIDE is {header['NSIDE']} but {pixels} pixels make nside {nside}")
    return nside


def check_nside(nside: int, own_nside: int | None, where: str, problems: list[str]) -> None:
    """Add a problem if the resolution wanted is none, or finer than the map's own."""
    if nside < 1 or not healpy.isnsideok(nside, nest=True):
        problems.append(f"{where}: nside {nside} is wanted; allowed: a power of two")
    elif own_nside and nside > own_nside:
        problems.append(f"{where}: nside {nside} is finer than the map's {own_nside}; allowed: up to {own_nside}")


def coarser(ring: NDArray[np.float64], nside: int) -> NDArray[np.float64]:
    """Plain average of the children."""
    return np.asarray(healpy.ud_grade(ring, nside), dtype=np.float64)


def ring_order(values: NDArray[Any], order: str) -> NDArray[Any]:
    """Values of either order, in RING order."""
    return values if order == "ring" else np.asarray(healpy.reorder(values, n2r=True))


def whole_ring(values: NDArray[np.float64], bad: NDArray[np.bool_], order: str, nside: int) -> NDArray[np.float64]:
    """Values in RING order, the missing ones filled from their neighbours."""
    bad_ring = ring_order(bad.astype(np.float64), order) > 0.5
    return fill_missing(
        ring_order(values, order), bad_ring, lambda pixels: np.asarray(healpy.get_all_neighbours(nside, pixels))
    )
