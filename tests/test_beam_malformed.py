"""Malformed beam files: each refused in a sentence that names the file and the line, cell, column or axis."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import h5netcdf
import healpy as hp
import numpy as np
import pytest
import xarray as xr
from reader_cases import on_grid, table_source, table_text, write_healpix, write_netcdf

from sims.beam import beam_from
from sims.beam_healpix import read_healpix_files
from sims.beam_netcdf import read_netcdf_file
from sims.beam_table_file import read_table_files
from sims.config_beam import Dipole, HealpixSource
from sims.errors import InputError

DIPOLE = beam_from(Dipole(kind="dipole", length_m=2.0, efficiency=1.0, structure_temperature_k=270.0))
POWER = on_grid(DIPOLE.directivity)
TEXT = table_text(POWER)
LINES = TEXT.splitlines()


def edited(number: int, line: str | None) -> str:
    """The table with one line (counted from 1) changed or left out."""
    lines = list(LINES)
    if line is None:
        del lines[number - 1]
    else:
        lines[number - 1] = line
    return "\n".join(lines) + "\n"


TABLES: dict[str, tuple[str, str]] = {
    "word for a number": (edited(7, "50.0;0.0;15.0;strong"), r"line 7, column 4: 'strong' is not a number"),
    "comma for a point": (edited(9, "50.0;0.0;21.0;1,5"), r"line 9, column 4: '1,5' is not a number"),
    "ten in Python only": (edited(7, "50.0;0.0;15.0;1_0"), r"line 7, column 4: '1_0' is not a number"),
    "angles without a grid": (
        "\n".join([LINES[0]] + [f"50;{180 * (n / 999) ** 0.5};{n * 222.49 % 360};1" for n in range(1000)]) + "\n",
        r"1000 rows hold 1 frequencies, 1000 thetas and 1000 phis, whose grid has 1000000 cells",
    ),
    "line cut short": (edited(12, "50.0;0.0"), r"line 12: 2 columns; column 3 is needed"),
    "row left out": (edited(5, None), r"1 of \d+ cells of the grid: 50 MHz, theta 0, phi 9 deg is missing"),
    "row twice": (TEXT + LINES[4] + "\n", r"1 of \d+ cells of the grid: 50 MHz, theta 0, phi 9 deg is given twice"),
    "not a number": (
        edited(300, LINES[299].rsplit(";", 1)[0] + ";nan"),
        r"power not finite in 1 of \d+ cells: 50 MHz, theta",
    ),
    "negative power": (
        edited(300, LINES[299].rsplit(";", 1)[0] + ";-0.5"),
        r"power negative in 1 of \d+ cells: 50 MHz, theta",
    ),
    "theta beyond the pole": (
        "\n".join(
            [LINES[0]] + [x.replace(";180.0;", ";183.0;", 1) if x.split(";")[1] == "180.0" else x for x in LINES[1:]]
        ),
        r"theta must lie within 0 to 180 deg, got 183",
    ),
    "angle not finite": (edited(40, "50.0;inf;15.0;1.0"), r"frequencies and angles must be finite"),
    "poles disagree": (edited(3, "50.0;0.0;3.0;9.0"), r"at theta 0 deg, one direction, the power differs over phi"),
    "other headings": (
        TEXT.replace("theta", "elevation"),
        r"no column 'theta'; line 1 names MHz, elevation, phi, power",
    ),
    "no row": (LINES[0] + "\n", r"no row after 1 header lines|cannot be read"),
    "a gap in theta": (
        "\n".join([LINES[0]] + [x for x in LINES[1:] if not 30 < float(x.split(";")[1]) < 100]) + "\n",
        r"a gap of 72 deg in theta",
    ),
    "a third of the turn": (
        "\n".join([LINES[0]] + [x for x in LINES[1:] if float(x.split(";")[2]) < 120]) + "\n",
        r"a gap of \d+ deg in phi",
    ),
    "no power at a frequency": (
        "\n".join([LINES[0]] + [x.rsplit(";", 1)[0] + ";0" if x.startswith("70") else x for x in LINES[1:]]) + "\n",
        r"the power at 70 MHz is zero everywhere",
    ),
}


@pytest.mark.parametrize("case", TABLES)
@pytest.mark.filterwarnings("ignore:loadtxt:UserWarning")
def test_malformed_table(case: str, tmp_path: Path) -> None:
    text, told = TABLES[case]
    path = tmp_path / "beam.csv"
    path.write_text(text)
    with pytest.raises(InputError, match=told) as caught:
        read_table_files(table_source(path))
    assert all("beam.csv" in problem for problem in caught.value.problems)


def test_everything_wrong_with_a_table_is_told_at_once(tmp_path: Path) -> None:
    path = tmp_path / "beam.csv"
    path.write_text(edited(7, "50.0;0.0;15.0;strong").replace(LINES[20], "50.0;x;y;1.0"))
    with pytest.raises(InputError) as caught:
        read_table_files(table_source(path))
    assert len(caught.value.problems) == 3


def without(name: str) -> Callable[[xr.Dataset], xr.Dataset]:
    return lambda dataset: dataset.drop_vars(name)


def with_units(name: str, unit: str) -> Callable[[xr.Dataset], xr.Dataset]:
    def changed(dataset: xr.Dataset) -> xr.Dataset:
        dataset = dataset.copy()
        dataset[name].attrs["units"] = unit
        return dataset

    return changed


def repeated_frequency(dataset: xr.Dataset) -> xr.Dataset:
    return dataset.assign_coords(frequency=dataset["frequency"].copy(data=[50e6, 70e6, 70e6]))


NETCDFS: dict[str, tuple[Callable[[xr.Dataset], xr.Dataset], str]] = {
    "variable of another name": (lambda d: d.rename(gain="pattern"), r"no variable 'gain'; it has pattern"),
    "no theta": (without("theta"), r"no coordinate 'theta'"),
    "angle without a unit": (with_units("phi", ""), r"phi: units ''; a unit like deg is needed"),
    "angle in metres": (with_units("theta", "m"), r"theta: units 'm'; a unit like deg is needed"),
    "another dimension": (lambda d: d.expand_dims(port=1), r"gain: dims port, frequency, theta, phi; needed are"),
    "frequency twice": (repeated_frequency, r"given twice: 70 MHz"),
    "degrees called radians": (with_units("phi", "rad"), r"phi must stay within one turn, got 0 to 20454\.\d+ deg"),
    "decibels called linear": (
        with_units("gain", "dBi"),
        r"gain: units 'dbi' in the file, but declared is unit = 'linear'",
    ),
    "words for numbers": (lambda d: d.assign(gain=d["gain"].astype("S8")), r"gain: holds .*; real numbers are needed"),
    "angle over two dimensions": (
        lambda d: d.drop_vars("theta").assign_coords(theta=(("theta", "phi"), POWER[0], {"units": "deg"})),
        r"theta: dims theta, phi; needed is theta alone",
    ),
    "not finite": (
        lambda d: d.where(d["phi"] != 9.0),
        r"power not finite in 183 of \d+ cells: 50 MHz, theta 0, phi 9: nan",
    ),
}


@pytest.mark.parametrize("case", NETCDFS)
def test_malformed_netcdf(case: str, tmp_path: Path) -> None:
    change, told = NETCDFS[case]
    source = write_netcdf(tmp_path, POWER)
    with xr.open_dataset(source.file, engine="h5netcdf") as dataset:
        changed = change(dataset.load())
    changed.to_netcdf(tmp_path / "changed.nc", engine="h5netcdf")
    with pytest.raises(InputError, match=told) as caught:
        read_netcdf_file(source.model_copy(update={"file": tmp_path / "changed.nc"}))
    assert all("changed.nc" in problem for problem in caught.value.problems)


def test_files_that_are_something_else(tmp_path: Path) -> None:
    path = tmp_path / "beam.any"
    path.write_bytes(b"\x00\x01\xff\xfe" * 50)
    netcdf = write_netcdf(tmp_path, POWER).model_copy(update={"file": path})
    healpix = write_healpix(tmp_path, DIPOLE.directivity, nside=8).model_copy(update={"files": (path,)})
    for read, source in (
        (read_netcdf_file, netcdf),
        (read_healpix_files, healpix),
        (read_table_files, table_source(path)),
    ):
        with pytest.raises(InputError, match=r"beam\.any: (cannot be read|no column)"):
            read(source)  # type: ignore[operator]


def test_malformed_maps(tmp_path: Path) -> None:
    source = write_healpix(tmp_path, DIPOLE.directivity, nside=8)
    with pytest.raises(InputError, match=r"beam\.fits: 3 maps for the 2 frequencies declared"):
        read_healpix_files(source.model_copy(update={"frequencies_mhz": (50.0, 70.0)}))
    values = np.ones(768)
    values[[5, 9]] = hp.UNSEEN
    hp.write_map(tmp_path / "holes.fits", values, dtype=np.float64)
    holes = HealpixSource(format="healpix", files=(tmp_path / "holes.fits",), frequencies_mhz=(50.0,), unit="linear")
    with pytest.raises(InputError, match=r"holes\.fits: column 1: 2 pixels missing or not finite, first 5"):
        read_healpix_files(holes)
    hp.write_map(tmp_path / "negative.fits", np.linspace(-1, 1, 768), dtype=np.float64)
    with pytest.raises(
        InputError, match=r"negative\.fits: column 1: negative power in 384 pixels, first 0 in ring order"
    ):
        read_healpix_files(holes.model_copy(update={"files": (tmp_path / "negative.fits",)}))
    rough = np.random.default_rng(1).random(768)
    hp.write_map(tmp_path / "rough.fits", rough, dtype=np.float64)
    with pytest.raises(InputError, match=r"rough\.fits: 50 MHz: harmonics to degree 12 miss"):
        read_healpix_files(holes.model_copy(update={"files": (tmp_path / "rough.fits",)}))


def test_complex_numbers_are_not_halved(tmp_path: Path) -> None:
    """What NumPy would do with a warning only: the real part would be a beam of its own."""
    source = write_netcdf(tmp_path, POWER)
    with h5netcdf.File(tmp_path / "complex.h5", "w", invalid_netcdf=True) as out:
        with xr.open_dataset(source.file, engine="h5netcdf") as dataset:
            for name in ("frequency", "theta", "phi"):
                out.dimensions[name] = len(dataset[name])
                axis = out.create_variable(name, (name,), float, data=dataset[name].values)
                axis.attrs["units"] = dataset[name].attrs["units"]
        out.create_variable("gain", ("frequency", "theta", "phi"), complex, data=POWER * np.exp(1j))
    with pytest.raises(InputError, match=r"complex\.h5: gain: holds complex128; real numbers are needed"):
        read_netcdf_file(source.model_copy(update={"file": tmp_path / "complex.h5"}))


def test_half_a_hole_in_a_map_is_no_upper_half(tmp_path: Path) -> None:
    """Pixels missing below the horizon beside others that are not: the map is a sphere with holes."""
    values = np.ones(768)
    values[700:] = hp.UNSEEN
    hp.write_map(tmp_path / "holes.fits", values, dtype=np.float64)
    source = HealpixSource(format="healpix", files=(tmp_path / "holes.fits",), frequencies_mhz=(50.0,), unit="linear")
    with pytest.raises(InputError, match=r"holes\.fits: column 1: 68 pixels missing or not finite, first 700"):
        read_healpix_files(source)
