"""Reader of beams on HEALPix maps, one a frequency: brought to a grid of theta and phi through their harmonics.

One of the readers behind `sims.beam_files`. The pole of the map is the boresight, its zero meridian
the x axis. A pattern that jumps, as at the horizon of a ground plane, has harmonics without
end: the reader measures what the harmonics miss at the map's own pixels, and refuses more
than `LARGEST_MISFIT` of the peak.
"""

from __future__ import annotations

from pathlib import Path

import healpy as hp
import numpy as np
from astropy.io import fits
from numpy.typing import NDArray
from scipy.special import sph_legendre_p

from sims.config_beam import HealpixSource
from sims.errors import InputError, raise_if_any
from sims.far_field import FarField, far_field

FloatArray = NDArray[np.float64]
ITERATIONS = 10
LARGEST_MISFIT = 1e-3
PER_BAND_LIMIT = 2  # thetas and phis for each degree of the harmonics


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
    for path in source.files:
        maps += _maps(path, source, problems)
    raise_if_any(problems)
    name = ", ".join(str(path) for path in source.files)
    if len(maps) != len(source.frequencies_mhz):
        raise InputError(f"{name}: {len(maps)} maps for the {len(source.frequencies_mhz)} frequencies declared")
    sizes = sorted({hp.npix2nside(len(values)) for values in maps})
    if len(sizes) > 1:
        raise InputError(f"{name}: maps of nside {', '.join(map(str, sizes))}; all must be of one")
    nside = sizes[0]
    top = 3 * nside // 2
    theta_deg = np.linspace(0.0, 180.0, PER_BAND_LIMIT * top + 1)
    phi_deg = np.arange(2 * PER_BAND_LIMIT * top) * (360.0 / (2 * PER_BAND_LIMIT * top))
    power, misfits = [], []
    for frequency, values in zip(source.frequencies_mhz, maps, strict=True):
        alm = hp.map2alm(values, lmax=top, iter=ITERATIONS)
        misfit = float(np.abs(hp.alm2map(alm, nside, lmax=top) - values).max() / values.max())
        if misfit > LARGEST_MISFIT:
            problems.append(
                f"{name}: {frequency:g} MHz: harmonics to degree {top} miss {misfit:.1e} of the peak; allowed is "
                f"{LARGEST_MISFIT:g}: the pattern is too fine for nside {nside}, or jumps: give a theta-phi table"
            )
        misfits.append(misfit)
        power.append(np.maximum(_synthesis(alm, top, np.radians(theta_deg), len(phi_deg)), 0.0))
    raise_if_any(problems)
    note = f"harmonics to degree {top} miss at most {max(misfits):.1e} of the peak at the pixels of the maps"
    return far_field(
        np.asarray(source.frequencies_mhz), theta_deg, phi_deg, np.stack(power), name, notes=(note,)
    )  # fmt: skip


def _maps(path: Path, source: HealpixSource, problems: list[str]) -> list[FloatArray]:
    """The maps of a file in ring order, linear."""
    try:
        with fits.open(path) as opened:
            table = next(unit for unit in opened if isinstance(unit, fits.BinTableHDU))
            header, columns = table.header, [np.asarray(table.data.field(n)).ravel() for n in range(len(table.columns))]
    except (OSError, StopIteration, ValueError) as error:
        problems.append(f"{path}: cannot be read as FITS with a binary table ({error or 'none found'})")
        return []
    ordering: str = source.ordering
    if ordering == "header":
        ordering = {"RING": "ring", "NESTED": "nested"}.get(str(header.get("ORDERING", "")).upper(), "header")
        if ordering == "header":
            problems.append(
                f"{path}: header ORDERING is {header.get('ORDERING')!r}; declare ordering as ring or nested"
            )
            return []
    found = []
    for number, values in enumerate(columns):
        data = values.astype(np.float64)
        if not hp.isnpixok(len(data)):
            problems.append(f"{path}: column {number + 1}: {len(data)} pixels are no HEALPix map")
            continue
        wrong = ~np.isfinite(data) | (data == hp.UNSEEN)
        if wrong.any():
            problems.append(
                f"{path}: column {number + 1}: {int(wrong.sum())} pixels missing or not finite, first {wrong.argmax()}"
            )
            continue
        if ordering == "nested":
            data = hp.reorder(data, n2r=True)
        found.append(10.0 ** (data / 10.0) if source.unit == "dBi" else data)
        if source.unit == "linear" and (data < 0.0).any():
            problems.append(f"{path}: column {number + 1}: negative power in {int((data < 0.0).sum())} pixels")
    return found


def _synthesis(alm: NDArray[np.complex128], top: int, theta_rad: FloatArray, phis: int) -> FloatArray:
    """Harmonics summed on a grid: Legendre functions in theta, a Fourier transform in phi."""
    ring = np.zeros((len(theta_rad), phis // 2 + 1), dtype=complex)
    for order in range(top + 1):
        degree = np.arange(order, top + 1)
        legendre = sph_legendre_p(degree[:, None], order, theta_rad[None])[0]
        ring[:, order] = alm[hp.Alm.getidx(top, degree, order)] @ legendre
    return np.fft.irfft(ring * phis, n=phis, axis=1)
