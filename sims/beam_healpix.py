"""Reader of beams on HEALPix maps, one a frequency: brought to a grid of theta and phi through their harmonics.

One of the readers behind `sims.beam_files`. The pole of the map is the boresight, its zero meridian
the x axis. A map with nothing below its equator, or without pixels there, is an upper half: the pattern
may jump at the horizon, so harmonics are fitted to the upper half and its mirror image, which go on smoothly into
each other as over a ground plane (image theorem), and the ring on the horizon itself is left open. A pattern that
jumps elsewhere has harmonics without end: the reader measures what the harmonics miss at the map's own pixels, and
refuses more than `LARGEST_MISFIT` of the peak.
"""

from __future__ import annotations

from pathlib import Path

import healpy as hp
import numpy as np
from astropy.io import fits
from numpy.typing import NDArray

from sims.config_beam import HealpixSource
from sims.errors import raise_if_any
from sims.far_field import FarField, far_field

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
MOST_ITERATIONS = 40
CONVERGED = 1e-13  # of the peak
LARGEST_MISFIT = 1e-3
PER_BAND_LIMIT = 2  # thetas and phis for each degree of the harmonics
NOTHING = 1e-12  # of the peak: power below the horizon up to this is none


def read_healpix_files(source: HealpixSource) -> FarField:
    """Read a beam from HEALPix maps.

    Parameters
    ----------
    source : HealpixSource
        FITS files whose columns, in order, are the maps of the frequencies declared.

    Returns
    -------
    FarField
        On a regular grid that holds the harmonics to degree 1.5 nside; the notes say what
        they miss.

    Raises
    ------
    InputError
        If a file cannot be read, the number of maps is not that of the frequencies, a pixel is
        missing or not finite, or the harmonics miss too much.
    """
    problems: list[str] = []
    maps: list[FloatArray] = []
    places: list[str] = []
    for path in source.files:
        found = _columns(path, source, problems)
        maps += found
        places += [f"{path}: column {number + 1}" for number in range(len(found))]
    raise_if_any(problems)
    name = ", ".join(str(path) for path in source.files)
    if len(maps) != len(source.frequencies_mhz):
        problems.append(f"{name}: {len(maps)} maps for the {len(source.frequencies_mhz)} frequencies declared")
    sizes = sorted({hp.npix2nside(len(values)) for values in maps})
    if len(sizes) > 1:
        problems.append(f"{name}: maps of nside {', '.join(map(str, sizes))}; all must be of one")
    raise_if_any(problems)
    nside = sizes[0]
    z = np.asarray(hp.pix2vec(nside, np.arange(12 * nside**2))[2])
    upper_half = all(_is_dark(values[z < 0.0], values) for values in maps)
    for values, place in zip(maps, places, strict=True):
        problems += [f"{place}: {line}" for line in _pixel_problems(values, z > 0.0 if upper_half else z > -2.0)]
    raise_if_any(problems)
    return _far_field(source, maps, z, upper_half, name)


def _columns(path: Path, source: HealpixSource, problems: list[str]) -> list[FloatArray]:
    """The maps of a file in ring order, linear, not a number where there is none."""
    opened = _opened(path, problems)
    if opened is None:
        return []
    header, columns = opened
    ordering: str = source.ordering
    if ordering == "header":
        ordering = {"RING": "ring", "NESTED": "nested"}.get(str(header["ORDERING"]).upper(), "header")
        if ordering == "header":
            problems.append(f"{path}: header ORDERING is {header['ORDERING']!r}; declare ordering as ring or nested")
            return []
    if str(header["INDXSCHM"]).upper() == "EXPLICIT":
        problems.append(f"{path}: header INDXSCHM is 'EXPLICIT', pixels by number; maps of all pixels are needed")
        return []
    found = []
    for number, values in enumerate(columns):
        if values.dtype.kind not in "fiu":
            problems.append(f"{path}: column {number + 1}: holds {values.dtype}; real numbers are needed")
            continue
        data = values.astype(np.float64)
        if not hp.isnpixok(len(data)):
            problems.append(f"{path}: column {number + 1}: {len(data)} pixels are no HEALPix map")
            continue
        if ordering == "nested" and not hp.isnsideok(hp.npix2nside(len(data)), nest=True):
            nside = hp.npix2nside(len(data))
            problems.append(f"{path}: column {number + 1}: nside {nside} cannot be nested; a power of 2 is needed")
            continue
        with np.errstate(invalid="ignore"):  # infinite ones are counted as not finite
            data[hp.mask_bad(data)] = np.nan  # also as single precision rounds it
        if ordering == "nested":
            data = hp.reorder(data, n2r=True)
        found.append(_linear(data) if source.unit == "dBi" else data)
    return found


def _opened(path: Path, problems: list[str]) -> tuple[dict[str, object], list[NDArray[np.generic]]] | None:
    """What the header of a file says of the order of its pixels, and its columns."""
    try:
        with fits.open(path) as opened:
            table = next(unit for unit in opened if isinstance(unit, fits.BinTableHDU))
            columns = [np.asarray(table.data.field(n)).ravel() for n in range(len(table.columns))]
            return {name: table.header.get(name) for name in ("ORDERING", "INDXSCHM")}, columns
    except (OSError, StopIteration, LookupError, TypeError, ValueError, fits.VerifyError) as error:
        # astropy's of a file cut short or damaged are of all these kinds
        problems.append(f"{path}: cannot be read as FITS with a binary table ({error or 'none found'})")
        return None


def _linear(decibels: FloatArray) -> FloatArray:
    with np.errstate(over="ignore"):  # becomes a pixel that is not finite, and is counted as such
        return np.asarray(10.0 ** (decibels / 10.0))


def _is_dark(below: FloatArray, values: FloatArray) -> bool:
    """Whether nothing is told of, or radiated to, the pixels below the horizon."""
    peak = np.nanmax(np.where(np.isfinite(values), values, 0.0))
    return bool(np.all(np.isnan(below) | (np.abs(below) <= NOTHING * peak)))


def _pixel_problems(values: FloatArray, needed: NDArray[np.bool_]) -> list[str]:
    problems = []
    wrong = needed & ~np.isfinite(values)
    if wrong.any():
        problems.append(f"{int(wrong.sum())} pixels missing or not finite, first {wrong.argmax()} in ring order")
    negative = needed & (values < 0.0)
    if negative.any():
        problems.append(
            f"negative power in {int(negative.sum())} pixels, first {negative.argmax()} in ring order: "
            f"{values[negative.argmax()]:g}"
        )
    return problems


def _far_field(source: HealpixSource, maps: list[FloatArray], z: FloatArray, upper_half: bool, name: str) -> FarField:
    nside = hp.npix2nside(len(z))
    top = 3 * nside // 2
    thetas = PER_BAND_LIMIT * top
    theta_deg = np.linspace(0.0, 180.0, thetas + 1)[: thetas // 2 + 1 if upper_half else None]
    phi_deg = np.arange(2 * thetas) * (180.0 / thetas)
    mirror = hp.vec2pix(nside, *(part * sign for part, sign in zip(
        hp.pix2vec(nside, np.arange(len(z))), (1, 1, -1), strict=True
    )))  # fmt: skip
    known = z != 0.0 if upper_half else np.ones(len(z), dtype=bool)
    problems, misfits, harmonics = [], [], []
    for frequency, values in zip(source.frequencies_mhz, maps, strict=True):
        alm, misfit = _fitted(np.where(z < 0.0, values[mirror], values) if upper_half else values, known, nside, top)
        if misfit > LARGEST_MISFIT:
            problems.append(
                f"{name}: {frequency:g} MHz: harmonics to degree {top} miss {misfit:.1e} of the peak; allowed is "
                f"{LARGEST_MISFIT:g}: the pattern is too fine for nside {nside}, or jumps: give a theta-phi table"
            )
        misfits.append(misfit)
        harmonics.append(alm)
    raise_if_any(problems)
    power = np.maximum(_synthesis(np.stack(harmonics), top, np.radians(theta_deg), len(phi_deg)), 0.0)
    notes = [f"harmonics to degree {top} miss at most {max(misfits):.1e} of the peak at the pixels of the maps"]
    if upper_half:
        notes.append("nothing is radiated below theta 90 deg: taken as an upper half")
    return far_field(np.asarray(source.frequencies_mhz), theta_deg, phi_deg, power, name, notes=tuple(notes))


def _fitted(values: FloatArray, known: NDArray[np.bool_], nside: int, top: int) -> tuple[ComplexArray, float]:
    """Harmonics improved by those of what they miss at the known pixels, until they miss no less; and what they miss.

    A missing ring falls in by a factor of about three each time: rings lie three times as close as the harmonics ask.
    """
    peak = float(values[known].max())
    if not peak > 0.0:
        return np.zeros(hp.Alm.getsize(top), dtype=complex), 0.0
    best, least = np.zeros(hp.Alm.getsize(top), dtype=complex), 1.0
    alm, missed = best, np.where(known, values, 0.0)
    for _ in range(MOST_ITERATIONS):
        alm = alm + hp.map2alm(missed, lmax=top, iter=0)
        missed = np.where(known, values - hp.alm2map(alm, nside, lmax=top), 0.0)
        misfit = float(np.abs(missed).max()) / peak
        if not misfit < 0.9 * least:
            break
        best, least = alm, misfit
        if least < CONVERGED:
            break
    return best, least


def _synthesis(alm: ComplexArray, top: int, theta_rad: FloatArray, phis: int) -> FloatArray:
    """Harmonics of all frequencies on a grid: Legendre functions in theta, a Fourier transform in phi."""
    ring = np.zeros((len(alm), len(theta_rad), phis // 2 + 1), dtype=complex)
    cosine, sine = np.cos(theta_rad), np.sin(theta_rad)
    sectoral = np.full(len(theta_rad), np.sqrt(0.25 / np.pi))
    for order in range(top + 1):
        if order:
            sectoral = -np.sqrt(1.0 + 0.5 / order) * sine * sectoral
        legendre = _legendre(order, top, cosine, sectoral)
        ring[:, :, order] = alm[:, hp.Alm.getidx(top, np.arange(order, top + 1), order)] @ legendre
    return np.fft.irfft(ring * phis, n=phis, axis=2)


def _legendre(order: int, top: int, cosine: FloatArray, sectoral: FloatArray) -> FloatArray:
    """Normalised associated Legendre functions of an order, ndarray[degree - order, theta], by their recurrence
    in the degree (Press et al. 2007, Numerical Recipes, section 6.7)."""
    values = np.zeros((top + 1 - order, len(cosine)))
    values[0] = sectoral
    before = 0.0
    for row in range(1, len(values)):
        degree = order + row
        factor = np.sqrt((4.0 * degree**2 - 1.0) / (degree**2 - order**2))
        values[row] = factor * (cosine * values[row - 1] - (values[row - 2] / before if row > 1 else 0.0))
        before = factor
    return values
