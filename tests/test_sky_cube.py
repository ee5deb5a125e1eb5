"""Cubes: what is written comes back, and bad files never give a plausible sky."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import healpy
import numpy as np
import pytest
import xarray as xr
from pydantic import ValidationError
from sky_cases import NSIDE, PIXELS, cube, curved_sky_k, write_netcdf, write_table

from sims.errors import InputError
from sims.sky_cube import read_cube

MHZ = (50.0, 80.0, 120.0)


def values() -> np.ndarray:
    return curved_sky_k(MHZ).T


def netcdf(file: Path, **changes: Any) -> Any:
    return cube(file, MHZ, **{"format": "netcdf", "variable": "sky", **changes})


def test_columns_and_rows_come_back_bit_for_bit(tmp_path: Path) -> None:
    table = read_cube(cube(write_table(tmp_path / "a.fits", list(values())), MHZ))
    netcdf_cube = read_cube(netcdf(write_netcdf(tmp_path / "a.nc", values(), MHZ)))
    for found in (table, netcdf_cube):
        assert np.array_equal(found.temperature_k, values())
        assert (found.nside, found.frame) == (NSIDE, "galactic")
        assert found.frequency_mhz.tolist() == list(MHZ)
        assert [note.filled for note in found.notes] == [0, 0, 0]
    assert [note.source for note in table.notes] == [f"a.fits, column {n}" for n in range(3)]


def test_nested_transposed_coarser_and_in_millikelvin(tmp_path: Path) -> None:
    fine = curved_sky_k(MHZ, 8).T
    nested = 1e3 * np.array([healpy.reorder(one, r2n=True) for one in fine])
    file = write_table(tmp_path / "a.fits", list(nested), unit="mK", ORDERING="NESTED")
    expected = np.array([healpy.ud_grade(one, NSIDE) for one in fine])
    assert read_cube(cube(file, MHZ, unit="mK")).temperature_k == pytest.approx(expected, rel=1e-14)
    write_netcdf(tmp_path / "a.nc", nested, MHZ, units="mK", ordering="NESTED")
    xr.load_dataset(tmp_path / "a.nc").transpose("pixel", "frequency").to_netcdf(tmp_path / "b.nc", engine="h5netcdf")
    assert read_cube(netcdf(tmp_path / "b.nc", unit="mK")).temperature_k == pytest.approx(expected, rel=1e-14)


def test_holes_are_filled_where_allowed(tmp_path: Path) -> None:
    holed = values()
    holed[1, [5, 60]] = healpy.UNSEEN
    file = write_table(tmp_path / "a.fits", list(holed))
    found = read_cube(cube(file, MHZ, missing="fill"))
    assert [note.filled for note in found.notes] == [0, 2, 0]
    beside = healpy.get_all_neighbours(NSIDE, 5)
    assert found.temperature_k[1, 5] == pytest.approx(holed[1, beside[beside >= 0]].mean(), rel=1e-14)
    with pytest.raises(InputError, match=r"column 1: 2 of 192 pixels .* 5, 60"):
        read_cube(cube(file, MHZ))


def bad_netcdf(path: Path, case: str) -> Path:
    write_netcdf(path, values(), MHZ)
    dataset = xr.load_dataset(path)
    if case == "no units of frequency":
        dataset["frequency"].attrs.clear()
    elif case == "no frequency":
        dataset = dataset.drop_vars("frequency")
    elif case == "other frequencies":
        dataset = dataset.assign_coords(frequency=("frequency", np.array([50e6, 81e6, 120e6]), {"units": "Hz"}))
    elif case == "other dimensions":
        dataset = dataset.rename(pixel="place")
    elif case == "text":
        dataset["sky"] = (("frequency", "pixel"), np.full((3, PIXELS), "warm"))
    elif case == "a frequency less":
        dataset = dataset.isel(frequency=slice(2))
    elif case == "not a sphere":
        dataset = dataset.isel(pixel=slice(100))
    elif case in ("units", "ordering", "coordsys"):
        dataset["sky"].attrs[case] = {"units": "mK", "ordering": "SPIRAL", "coordsys": "C"}[case]
    path.unlink()
    dataset.to_netcdf(path, engine="h5netcdf")
    return path


NETCDF_WORDS = {
    "no units of frequency": "frequency has units None",
    "no frequency": "no coordinate frequency",
    "other frequencies": "frequency 1 is 81 MHz but 80 MHz",
    "other dimensions": "sky(frequency, place)",
    "text": "real numbers",
    "a frequency less": "2 frequencies, 3 are declared",
    "not a sphere": "100 pixels",
    "units": "attribute units is 'mK'",
    "ordering": "SPIRAL",
    "coordsys": "COORDSYS is 'C'",
}


@pytest.mark.parametrize("case", NETCDF_WORDS)
def test_bad_netcdf_cubes_are_refused(tmp_path: Path, case: str) -> None:
    file = bad_netcdf(tmp_path / "bad.nc", case)
    with pytest.raises(InputError) as caught:
        read_cube(netcdf(file))
    assert any(NETCDF_WORDS[case] in problem for problem in caught.value.problems), caught.value.problems
    assert all("bad.nc" in problem for problem in caught.value.problems)


@pytest.mark.parametrize(
    ("keys", "changes", "word"),
    [
        ({}, {"columns": 2}, "2 columns for 3 frequencies"),
        ({"ORDERING": "SPIRAL"}, {}, "SPIRAL"),
        ({"COORDSYS": "C"}, {}, "COORDSYS"),
        ({}, {"unit": "mK"}, "TUNIT1"),
        ({}, {"nside": 8}, "nside 8 is finer"),
        ({"INDXSCHM": "EXPLICIT"}, {}, "partial map"),
        ({"PIXTYPE": "OTHER"}, {}, "PIXTYPE"),
    ],
)
def test_bad_fits_cubes_are_refused(tmp_path: Path, keys: dict[str, Any], changes: dict[str, Any], word: str) -> None:
    columns = list(values())[: changes.pop("columns", 3)]
    file = write_table(tmp_path / "bad.fits", columns, **keys)
    with pytest.raises(InputError) as caught:
        read_cube(cube(file, MHZ, **changes))
    assert any(word in problem for problem in caught.value.problems), caught.value.problems
    assert all("bad.fits" in problem for problem in caught.value.problems)


def test_no_file_and_no_netcdf_are_refused(tmp_path: Path) -> None:
    (tmp_path / "text.nc").write_text("frequency, pixel\n", encoding="utf-8")
    for name in ("text.nc", "absent.nc"):
        with pytest.raises(InputError, match=name):
            read_cube(netcdf(tmp_path / name))


@pytest.mark.parametrize(
    ("changes", "word"),
    [
        ({"zero_levels_k": (1.0,)}, "zero_levels: 1 given; allowed: 3"),
        ({"scales": (1.0, 0.0, 1.0)}, "scales: 0"),
        ({"variable": "sky"}, "variable: allowed with format 'netcdf' only"),
        ({"format": "netcdf"}, "variable: missing"),
        ({"frequencies_mhz": (50.0, 50.0, 120.0)}, "50 MHz stands more than once"),
        ({"frequencies_mhz": (-50.0, 80.0, 120.0)}, "above zero"),
        ({"join": "polynomial", "order": 3}, "1 to 2"),
    ],
)
def test_bad_tables_are_refused(tmp_path: Path, changes: dict[str, Any], word: str) -> None:
    with pytest.raises(ValidationError, match=word):
        cube(tmp_path / "a.fits", MHZ, **changes)
