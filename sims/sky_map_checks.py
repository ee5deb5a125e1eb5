"""What every reader of sky maps shares: opening FITS strictly, units, and missing values.

It stands below `sims.sky_images` and `sims.sky_maps`. The checks append what they find to
a list of problems, so that a reader can report all of it at once.
"""

from __future__ import annotations

import hashlib
import math
import re
from collections.abc import Callable
from pathlib import Path
from typing import Any, Literal

import astropy.units as u
import numpy as np
from astropy.io import fits
from numpy.typing import NDArray

from sims.errors import InputError

Frame = Literal["galactic", "icrs", "fk5", "fk4"]
Missing = Literal["refuse", "fill"]

# Beyond this the border of the hole would decide what the hole holds (common practice).
MAX_FILLED_FRACTION = 0.1


def sha256_of(path: Path) -> str:
    """SHA-256 of a file, in hexadecimal."""
    with Path(path).open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def load_hdu(path: Path, wanted: Callable[[Any], bool], kind: str) -> tuple[int, Any, Any]:
    """Open a FITS file and take the first HDU that serves.

    Parameters
    ----------
    path : Path
        The file.
    wanted : callable
        Says of an HDU whether it serves.
    kind : str
        What `wanted` looks for, in words for the error.

    Returns
    -------
    tuple
        Number of the HDU, its header and its data.

    Raises
    ------
    InputError
        If there is no such file, it is not whole FITS, or no HDU serves.
    """
    if not Path(path).is_file():
        raise InputError(f"{path}: no such file")
    try:
        with fits.open(path, memmap=False) as hdus:
            for number, hdu in enumerate(hdus):
                if wanted(hdu):
                    return number, hdu.header.copy(), hdu.data
            found = ", ".join(f"[{number}] {type(hdu).__name__}" for number, hdu in enumerate(hdus))
    except (OSError, TypeError, ValueError, fits.VerifyError) as error:
        raise InputError(f"{path}: not a whole FITS file ({error})") from None
    raise InputError(f"{path}: holds {found}; allowed: a file with {kind}")


def unit_in_kelvin(declared: str, in_header: Any, key: str, problems: list[str]) -> float:
    """Kelvin in one of the `declared` unit; a problem if it is no temperature or the header's `key` says another."""
    try:
        unit = u.Unit(declared)
    except ValueError:
        unit = None
    if unit is None or not unit.is_equivalent(u.K):
        problems.append(
            f"{key}: the declared unit {declared!r} is no temperature; allowed: 'K', 'mK', '0.1 K' and such"
        )
        return math.nan
    kelvin = float(unit.to(u.K))
    text = "" if in_header is None else str(in_header).strip()
    if text and not _same_unit(text, kelvin):
        problems.append(
            f"{key} is {text!r} but {declared!r} is declared; allowed: the same unit, or no {key.split()[-1]}"
        )
    return kelvin


def _same_unit(text: str, kelvin: float) -> bool:
    # Headers name the temperature scale behind the unit ("K_CMB", "mK,thermodynamic"): below
    # 1 GHz these scales agree to 3e-5, for x^2/12 with x = h f/(k 2.7 K).
    plain = re.split(r"[,_(]", text)[0].strip()
    try:
        unit = u.Unit({"kelvin": "K"}.get(plain.lower(), plain))
    except ValueError:
        return False
    return bool(unit.is_equivalent(u.K)) and math.isclose(float(unit.to(u.K)), kelvin, rel_tol=1e-9)


def check_missing(bad: NDArray[np.bool_], missing: Missing, where: str, what: str, problems: list[str]) -> None:
    """Add a problem if values are missing and not to be filled, or too many to fill."""
    count = int(bad.sum())
    if count == 0:
        return
    first = ", ".join(str(index) for index in np.flatnonzero(bad)[:5])
    found = f"{where}: {count} of {bad.size} {what}s hold no finite value (UNSEEN, NaN, blank), first {what}s {first}"
    if missing == "refuse":
        problems.append(f"{found}; allowed: none, or missing = 'fill'")
    elif count > MAX_FILLED_FRACTION * bad.size:
        problems.append(f"{found}; missing = 'fill' is allowed up to {MAX_FILLED_FRACTION:.0%} of the map")


def fill_missing(
    values: NDArray[np.float64], bad: NDArray[np.bool_], neighbours: Callable[[NDArray[np.int64]], NDArray[np.int64]]
) -> NDArray[np.float64]:
    """Replace each missing value by the mean of its valid neighbours, from the border of a hole inwards.

    Parameters
    ----------
    values : ndarray[pixel]
        The map; what stands in missing pixels is not looked at.
    bad : ndarray[pixel] of bool
        Which are missing; not all.
    neighbours : callable
        Indices of the neighbours of some pixels, ndarray[neighbour, pixel]; -1 where there is none.

    Returns
    -------
    ndarray[pixel]
        The map with no value missing.
    """
    whole, left = np.where(bad, 0.0, values), bad.copy()
    while left.any():
        pixels = np.flatnonzero(left)
        beside = neighbours(pixels)
        valid = (beside >= 0) & ~left[beside]
        count = valid.sum(axis=0)
        reached = count > 0
        total = np.where(valid, whole[beside], 0.0).sum(axis=0)
        whole[pixels[reached]] = total[reached] / count[reached]
        left[pixels[reached]] = False
    return whole
