"""Skies for tests: maps written to files by astropy and xarray alone, and the tables that name them."""

from __future__ import annotations

import importlib.util
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import h5py
import healpy
import numpy as np
import xarray as xr
from astropy.io import fits
from numpy.typing import NDArray

from sims.config_sky import CubeSky, JoinedSky, SurveyMap
from sims.constants import CMB_TEMPERATURE_K, rayleigh_jeans_k

Values = NDArray[np.float64]
NSIDE = 4
PIXELS = 12 * NSIDE**2
FREQUENCIES_MHZ = (45.0, 90.0, 150.0, 408.0)


def cmb_k(frequency_mhz: Any) -> Values:
    return rayleigh_jeans_k(CMB_TEMPERATURE_K, frequency_mhz)


def curved_sky_k(frequency_mhz: Any, nside: int = NSIDE, cubic: float = 0.0) -> Values:
    """ndarray[pixel, frequency]: CMB and, pixel by pixel another, exp of a polynomial of ln f of order 2 or 3."""
    number = np.arange(12 * nside**2)[:, np.newaxis] / (12 * nside**2)
    x = np.log(np.atleast_1d(frequency_mhz) / 150.0)
    logarithm = np.log(200.0 + 300.0 * number) - (2.4 + 0.2 * number) * x - 0.1 * number * x**2 + cubic * x**3
    return np.asarray(np.exp(logarithm) + cmb_k(np.atleast_1d(frequency_mhz)))


def write_table(
    path: Path, columns: Sequence[Values], drop: tuple[str, ...] = (), unit: str = "K", **keys: Any
) -> Path:
    """HEALPix table in FITS, a column a map."""
    table = fits.BinTableHDU.from_columns(
        [fits.Column(name=f"T{n}", format="D", unit=unit, array=one) for n, one in enumerate(columns)]
    )
    header = {"PIXTYPE": "HEALPIX", "ORDERING": "RING", "COORDSYS": "G", "INDXSCHM": "IMPLICIT"}
    for key, value in {**header, **keys}.items():
        if key not in drop:
            table.header[key] = value
    fits.HDUList([fits.PrimaryHDU(), table]).writeto(path, overwrite=True)
    return path


def write_netcdf(path: Path, values: Values, frequency_mhz: Sequence[float], **attributes: Any) -> Path:
    """NetCDF cube of values ndarray[frequency, pixel]."""
    attributes = {"units": "K", "ordering": "RING", "coordsys": "G", **attributes}
    dataset = xr.Dataset(
        {"sky": (("frequency", "pixel"), values, attributes)},
        coords={"frequency": ("frequency", np.asarray(frequency_mhz) * 1e6, {"units": "Hz"})},
    )
    dataset.to_netcdf(path, engine="h5netcdf")
    return path


def survey(file: Path, frequency_mhz: float, **changes: Any) -> dict[str, Any]:
    table = {"format": "healpix", "file": file, "frame": "galactic", "unit": "K", "frequency_mhz": frequency_mhz}
    return {**table, **changes}


def joined(maps: Sequence[dict[str, Any]], **changes: Any) -> JoinedSky:
    table: dict[str, Any] = {
        "kind": "joined", "nside": NSIDE, "frame": "galactic", "join": "spline", "frequency_mhz": 100.0,
        "valid_from_mhz": 30.0, "valid_to_mhz": 500.0, "maps": tuple(SurveyMap.model_validate(one) for one in maps),
    }  # fmt: skip
    return JoinedSky.model_validate({**table, **changes})


def joined_files(folder: Path, values: Values, frequency_mhz: Sequence[float], **changes: Any) -> JoinedSky:
    """A joined sky of values ndarray[pixel, frequency], a file a map."""
    files = [write_table(folder / f"map{n}.fits", [one]) for n, one in enumerate(values.T)]
    return joined([survey(file, f) for file, f in zip(files, frequency_mhz, strict=True)], **changes)


def cube(file: Path, frequency_mhz: Sequence[float], **changes: Any) -> CubeSky:
    table: dict[str, Any] = {
        "kind": "cube", "format": "fits", "file": file, "nside": NSIDE, "frame": "galactic", "unit": "K",
        "frequencies_mhz": tuple(float(f) for f in frequency_mhz), "join": "spline", "frequency_mhz": 100.0,
        "valid_from_mhz": 30.0, "valid_to_mhz": 500.0,
    }  # fmt: skip
    return CubeSky.model_validate({**table, **changes})


def package_file(package: str, name: str) -> Path:
    """Data file of a package, found without importing it."""
    spec = importlib.util.find_spec(package)
    assert spec is not None, f"{package} is a test dependency: pip install --no-deps {package}"
    assert spec.origin is not None
    path = Path(spec.origin).parent / "data" / name
    assert path.is_file(), path
    return path


def model_cube() -> tuple[Values, Values]:
    """Frequencies, MHz, and values ndarray[frequency, pixel], K, of a global model: nside 8, RING, ICRS."""
    with h5py.File(package_file("pyradiosky", "gsm_icrs.skyh5"), "r") as file:
        return file["Header/freq_array"][:] / 1e6, file["Data/stokes"][0]


def fwhm_deg(values: Values, pixel: int) -> float:
    """Width of a round source at a pixel, deg, from its second moment, as that of a Gaussian."""
    nside = healpy.npix2nside(values.size)
    vectors = np.column_stack(healpy.pix2vec(nside, np.arange(values.size)))
    near = vectors @ vectors[pixel] > np.cos(np.radians(40.0))
    squared = 2.0 * (1.0 - vectors[near] @ vectors[pixel])
    sd = np.sqrt(np.sum(values[near] * squared) / np.sum(values[near]) / 2.0)
    return float(np.degrees(sd) * 2.0 * np.sqrt(2.0 * np.log(2.0)))
