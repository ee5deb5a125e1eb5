"""Beams in NetCDF: any order of dims, decibels, complex fields, and units that are neither."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from reader_cases import FREQUENCY_MHZ, PHI_DEG, THETA_DEG, grid_directions, on_grid, tilted, write_netcdf

from sims.beam_netcdf import read_netcdf_file
from sims.config_beam import NetcdfSource
from sims.errors import InputError

DIMS = ("frequency", "theta", "phi")
POWER = on_grid(tilted)


@pytest.fixture
def dataset(tmp_path: Path) -> xr.Dataset:
    with xr.open_dataset(write_netcdf(tmp_path, POWER).file, engine="h5netcdf") as opened:
        return opened.load()


def written(folder: Path, dataset: xr.Dataset) -> Path:
    dataset.to_netcdf(folder / "changed.nc", engine="h5netcdf")
    return folder / "changed.nc"


@pytest.mark.parametrize("dims", [("phi", "frequency", "theta"), ("theta", "phi", "frequency")])
def test_dims_stand_in_any_order(dims: tuple[str, ...], dataset: xr.Dataset, tmp_path: Path) -> None:
    path = written(tmp_path, dataset.transpose(*dims))
    table = read_netcdf_file(NetcdfSource(format="netcdf", file=path, variable="gain"))
    # A pole is averaged over phi, in an order that the layout in memory decides.
    assert table.power == pytest.approx(POWER, abs=1e-15)


@pytest.mark.parametrize("stated", ["dBi", "dB", None])
def test_decibels_are_those_of_power(stated: str | None, dataset: xr.Dataset, tmp_path: Path) -> None:
    dataset["gain"] = (DIMS, 10.0 * np.log10(POWER), {} if stated is None else {"units": stated})
    path = written(tmp_path, dataset)
    table = read_netcdf_file(NetcdfSource(format="netcdf", file=path, variable="gain", unit="dBi"))
    # Rounding of logarithm and power.
    assert table.power == pytest.approx(POWER, abs=1e-14)


@pytest.mark.parametrize("unit", ["linear", "dBi"])
@pytest.mark.parametrize("stated", ["dBd", "dBm", "V/m", "%"])
def test_a_unit_that_is_neither_is_refused(stated: str, unit: str, dataset: xr.Dataset, tmp_path: Path) -> None:
    """Decibels over a dipole would be a beam 2.15 dB off."""
    dataset["gain"].attrs["units"] = stated
    path = written(tmp_path, dataset)
    with pytest.raises(InputError, match=rf"changed\.nc: gain: units '{stated.lower()}' in the file; allowed are dBi"):
        read_netcdf_file(NetcdfSource(format="netcdf", file=path, variable="gain", unit=unit))  # type: ignore[arg-type]


def test_fields_are_kept_and_their_squares_are_the_power(tmp_path: Path) -> None:
    """A short dipole along x: its far field is what is left of x across the ray."""
    theta, phi = np.meshgrid(np.radians(THETA_DEG), np.radians(PHI_DEG), indexing="ij")
    turn = np.exp(1j * FREQUENCY_MHZ / 30.0)[:, None, None] * np.sqrt(1.5)
    e_theta, e_phi = turn * np.cos(theta) * np.cos(phi), -turn * np.sin(phi)
    parts = {"a": e_theta.real, "b": e_theta.imag, "c": e_phi.real, "d": e_phi.imag}
    axes = {"frequency": (FREQUENCY_MHZ, "MHz"), "theta": (THETA_DEG, "deg"), "phi": (PHI_DEG, "deg")}
    coords = {name: (name, values, {"units": unit}) for name, (values, unit) in axes.items()}
    path = written(tmp_path, xr.Dataset({name: (DIMS, part) for name, part in parts.items()}, coords=coords))
    table = read_netcdf_file(NetcdfSource(format="netcdf", file=path, field_variables=("a", "b", "c", "d")))
    assert table.e_theta is not None
    assert table.e_phi is not None
    assert np.array_equal(table.e_theta, e_theta)
    assert np.array_equal(table.e_phi, e_phi)
    x = grid_directions(THETA_DEG, PHI_DEG)[:, 0].reshape(theta.shape)
    # Rounding.
    assert table.power == pytest.approx(np.broadcast_to(1.5 * (1.0 - x**2), table.power.shape), abs=1e-14)


def test_a_file_cut_short_is_named(dataset: xr.Dataset, tmp_path: Path) -> None:
    path = written(tmp_path, dataset)
    path.write_bytes(path.read_bytes()[:20000])
    with pytest.raises(InputError, match=r"changed\.nc: cannot be read as NetCDF-4"):
        read_netcdf_file(NetcdfSource(format="netcdf", file=path, variable="gain"))


@pytest.mark.filterwarnings("ignore::pytest.PytestUnraisableExceptionWarning")  # h5netcdf's, closing what never opened
def test_a_damaged_file_is_named(dataset: xr.Dataset, tmp_path: Path) -> None:
    """A byte wrong among the headers, which hold checksums; each is told in another way by the libraries below."""
    path = written(tmp_path, dataset)
    whole = path.read_bytes()
    told = []
    for place in range(0, 6000, 150):
        path.write_bytes(whole[:place] + bytes([whole[place] ^ 0xFF]) + whole[place + 1 :])
        try:
            table = read_netcdf_file(NetcdfSource(format="netcdf", file=path, variable="gain"))
        except InputError as error:
            told += error.problems
        else:
            assert table.power.shape == POWER.shape
    assert len(told) > 5
    assert all("changed.nc: " in line for line in told)


def test_decibels_beyond_all_numbers_are_named_by_their_cell(dataset: xr.Dataset, tmp_path: Path) -> None:
    values = 10.0 * np.log10(POWER)
    values[1, 20, 30] = 9999.0
    dataset["gain"] = (DIMS, values)
    path = written(tmp_path, dataset)
    with pytest.raises(InputError, match=r"not finite in 1 of \d+ cells: 70 MHz, theta 60, phi 90: inf"):
        read_netcdf_file(NetcdfSource(format="netcdf", file=path, variable="gain", unit="dBi"))
