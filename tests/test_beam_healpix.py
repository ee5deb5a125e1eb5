"""Beams on HEALPix maps as they are stored: single precision, decibels, many files, and what is no map at all."""

from __future__ import annotations

from pathlib import Path

import healpy as hp
import numpy as np
import pytest
import xarray as xr
from astropy.io import fits
from reader_cases import FREQUENCY_MHZ, PHI_DEG, THETA_DEG, grid_directions, on_grid, over_plane, tilted, write_healpix

from sims.beam_grid import grid_beam
from sims.beam_healpix import read_healpix_files
from sims.beam_netcdf import read_netcdf_file
from sims.config_beam import HealpixSource, NetcdfSource
from sims.errors import InputError
from sims.pixels import pixel_grid

NSIDE = 32
TOWARDS = np.stack(hp.pix2vec(NSIDE, np.arange(12 * NSIDE**2)), axis=1)


def source_of(*paths: Path, unit: str = "linear", frequencies_mhz: tuple[float, ...] = (50.0,)) -> HealpixSource:
    return HealpixSource(format="healpix", files=paths, frequencies_mhz=frequencies_mhz, unit=unit)  # type: ignore[arg-type]


def decibels(power: np.ndarray) -> np.ndarray:
    return 10.0 * np.log10(np.maximum(power, 1e-30))


def test_a_tilted_dipole_in_decibels_a_file_a_frequency(tmp_path: Path) -> None:
    paths = []
    for frequency, power in zip(FREQUENCY_MHZ, tilted(FREQUENCY_MHZ, TOWARDS).T, strict=True):
        paths.append(tmp_path / f"{frequency:.0f}.fits")
        hp.write_map(paths[-1], decibels(power), dtype=np.float64)
    table = read_healpix_files(source_of(*paths, unit="dBi", frequencies_mhz=tuple(FREQUENCY_MHZ)))
    exact = tilted(FREQUENCY_MHZ, grid_directions(table.theta_deg, table.phi_deg))
    # A 2 m wire has no harmonics near degree 48: rounding is left.
    assert table.power == pytest.approx(exact.T.reshape(table.power.shape), abs=1e-11)


@pytest.mark.parametrize("unit", ["linear", "dBi"])
def test_an_upper_half_in_single_precision(unit: str, tmp_path: Path) -> None:
    power = over_plane(np.array([50.0]), TOWARDS)[:, 0]
    above = decibels(power) if unit == "dBi" else power
    values = np.where(TOWARDS[:, 2] > 0.0, above, hp.UNSEEN)
    hp.write_map(tmp_path / "half.fits", values, dtype=np.float32)
    table = read_healpix_files(source_of(tmp_path / "half.fits", unit=unit))
    assert table.upper_half
    exact = over_plane(np.array([50.0]), grid_directions(table.theta_deg, table.phi_deg))[:, 0]
    # Single precision rounds to 6e-8: of the power, or of the decibels, whose rounding is 30 dB * 6e-8 / 4.3 or less
    # of a power a thousandth of the peak; the harmonics gather a few of these.
    assert table.power.ravel() == pytest.approx(exact, abs=5e-7 * float(exact.max()))


def test_a_hole_in_single_precision_is_a_hole(tmp_path: Path) -> None:
    """The mark of a missing pixel, rounded, must not be taken for decibels of a deep null."""
    z = TOWARDS[:, 2]
    values = decibels(1e-9 + 7.0 * np.maximum(z, 0.0) ** 6)
    faint = np.flatnonzero((z > 0.1) & (z < 0.25))[::7]
    values[faint] = hp.UNSEEN
    hp.write_map(tmp_path / "holes.fits", values, dtype=np.float32)
    told = rf"holes\.fits: column 1: {len(faint)} pixels missing or not finite, first {faint[0]} in ring order"
    with pytest.raises(InputError, match=told):
        read_healpix_files(source_of(tmp_path / "holes.fits", unit="dBi"))


@pytest.mark.filterwarnings("ignore::astropy.utils.exceptions.AstropyUserWarning")
def test_a_file_cut_short_is_named(tmp_path: Path) -> None:
    source = write_healpix(tmp_path, tilted)
    whole = source.files[0].read_bytes()
    for size in (1000, 3000, len(whole) // 2):
        source.files[0].write_bytes(whole[:size])
        with pytest.raises(InputError, match=r"beam\.fits: cannot be read as FITS with a binary table"):
            read_healpix_files(source)


@pytest.mark.filterwarnings("ignore::astropy.utils.exceptions.AstropyWarning")
@pytest.mark.parametrize("keyword", ["ORDERING", "TTYPE1 ", "TFORM1 ", "TFORM2 ", "PCOUNT ", "NAXIS2 ", "TFIELDS"])
def test_a_damaged_header_is_named(keyword: str, tmp_path: Path) -> None:
    source = write_healpix(tmp_path, tilted, nside=8)
    whole = source.files[0].read_bytes()
    place = whole.rindex(keyword.encode())
    told = []
    for damage in (b"\xff", b"="):
        for offset in (0, 9, 11):
            source.files[0].write_bytes(whole[: place + offset] + damage + whole[place + offset + 1 :])
            try:
                table = read_healpix_files(source)
            except InputError as error:
                told += error.problems
            else:  # not all of the header is needed
                assert table.power.shape[0] == len(FREQUENCY_MHZ)
    assert all("beam.fits: " in line for line in told)


def test_infinite_pixels_are_named(tmp_path: Path) -> None:
    values = np.ones(768)
    values[[5, 9]] = np.inf
    hp.write_map(tmp_path / "infinite.fits", values, dtype=np.float64)
    with pytest.raises(InputError, match=r"column 1: 2 pixels missing or not finite, first 5 in ring order"):
        read_healpix_files(source_of(tmp_path / "infinite.fits"))


def table_file(path: Path, values: dict[str, np.ndarray], **header: str) -> Path:
    unit = fits.BinTableHDU.from_columns([fits.Column(name, "D", array=column) for name, column in values.items()])
    unit.header.update(header)
    unit.writeto(path)
    return path


def test_maps_of_other_layouts_are_refused(tmp_path: Path) -> None:
    cases = {
        "nested.fits": ({"A": np.ones(108)}, {"ORDERING": "NESTED"}, r"column 1: nside 3 cannot be nested"),
        "explicit.fits": (
            {"PIXEL": np.arange(768.0), "A": np.ones(768)},
            {"ORDERING": "RING", "INDXSCHM": "EXPLICIT"},
            r"header INDXSCHM is 'EXPLICIT'",
        ),
        "length.fits": ({"A": np.ones(700)}, {"ORDERING": "RING"}, r"column 1: 700 pixels are no HEALPix map"),
        "order.fits": ({"A": np.ones(768)}, {}, r"header ORDERING is None; declare ordering as ring or nested"),
    }
    for name, (values, header, told) in cases.items():
        path = table_file(tmp_path / name, values, **header)
        with pytest.raises(InputError, match=f"{name}: {told}"):
            read_healpix_files(source_of(path))


def test_a_dipole_over_a_plane_gives_the_same_temperature_from_maps_and_from_a_table(tmp_path: Path) -> None:
    """Over a plane, against the closed form, from both readers within what each says of itself."""

    def half(frequency_mhz: np.ndarray, directions: np.ndarray) -> np.ndarray:
        return over_plane(frequency_mhz, directions) * (directions[:, 2:] > -1e-14)

    theta_deg = THETA_DEG[THETA_DEG <= 90.0]
    axes = {"frequency": (FREQUENCY_MHZ, "MHz"), "theta": (theta_deg, "deg"), "phi": (PHI_DEG, "deg")}
    coords = {name: (name, values, {"units": unit}) for name, (values, unit) in axes.items()}
    dataset = xr.Dataset({"gain": (tuple(axes), on_grid(half, theta_deg))}, coords=coords)
    dataset.to_netcdf(tmp_path / "half.nc", engine="h5netcdf")
    tables = (
        read_netcdf_file(NetcdfSource(format="netcdf", file=tmp_path / "half.nc", variable="gain")),
        read_healpix_files(write_healpix(tmp_path, half)),
    )
    grid = pixel_grid(16)
    x, y, z = grid.directions.T
    sky_k = 2000.0 * np.exp(0.8 * z + 0.3 * x * y + 0.5 * y)
    exact = half(FREQUENCY_MHZ, grid.directions)
    for table in tables:
        assert table.upper_half
        beam = grid_beam(table, smoothing_mhz=None, mounting=np.eye(3), efficiency=1.0, structure_temperature_k=270.0)
        wrong = beam.directivity(FREQUENCY_MHZ, grid.directions) - exact
        error_k = np.abs((wrong * (grid.weights * sky_k)[:, None]).mean(axis=0))
        # The temperature errs by no more than the rms of the pattern's error times that of the sky (Cauchy, Schwarz).
        rms = beam.error_estimate(FREQUENCY_MHZ).rms * np.sqrt((exact**2).mean(axis=0))
        assert (error_k < rms * np.sqrt((sky_k**2).mean())).all()
        # A table of 3 deg misses 9 mK of 3000 K at 90 MHz, where the plane makes the finest lobes.
        assert error_k.max() < 0.015
