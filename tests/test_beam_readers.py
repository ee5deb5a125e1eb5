"""Readers of beam tables: one pattern through every format, conventions of angles, and the same antenna temperature."""

from __future__ import annotations

import re
from pathlib import Path

import healpy as hp
import numpy as np
import pytest
import xarray as xr
from reader_cases import (
    FREQUENCY_MHZ,
    PHI_DEG,
    THETA_DEG,
    Pattern,
    grid_directions,
    on_grid,
    table_source,
    tilted,
    write_fields,
    write_healpix,
    write_netcdf,
    write_table,
)

from sims.beam import Beam, beam_from
from sims.beam_grid import GridBeam, grid_beam
from sims.beam_healpix import read_healpix_files
from sims.beam_netcdf import read_netcdf_file
from sims.beam_table_file import read_table_files
from sims.config_beam import Dipole, FieldColumns
from sims.errors import InputError
from sims.far_field import FarField
from sims.pixels import pixel_grid

DIPOLE = beam_from(Dipole(kind="dipole", length_m=2.0, efficiency=1.0, structure_temperature_k=270.0))


def isotropic(frequency_mhz: np.ndarray, directions: np.ndarray) -> np.ndarray:
    return np.ones((len(directions), len(frequency_mhz)))


def through_every_reader(folder: Path, pattern: object) -> dict[str, FarField]:
    power = on_grid(pattern)  # type: ignore[arg-type]
    tables = {"netcdf": read_netcdf_file(write_netcdf(folder, power))}
    tables["table"] = read_table_files(write_table(folder, power))
    tables["decibels"] = read_table_files(write_table(folder, power, decibels=True, elevation=True, compass=True))
    tables["healpix"] = read_healpix_files(write_healpix(folder, pattern))  # type: ignore[arg-type]
    # Any split between the two fields will do: the power is their sum.
    share = np.cos(np.radians(PHI_DEG)) ** 2
    e_theta, e_phi = np.sqrt(power * share) * np.exp(0.3j), np.sqrt(power * (1 - share)) * np.exp(-1.1j)
    tables["fields"] = read_table_files(write_fields(folder, e_theta, e_phi))
    return tables


def beam_of(table: FarField) -> GridBeam:
    return grid_beam(table, smoothing_mhz=None, mounting=np.eye(3), efficiency=1.0, structure_temperature_k=270.0)


@pytest.mark.parametrize("pattern", [DIPOLE.directivity, tilted], ids=["upright", "tilted"])
def test_one_pattern_through_every_reader_gives_one_antenna_temperature(pattern: Pattern, tmp_path: Path) -> None:
    grid = pixel_grid(16)
    x, y, z = grid.directions.T
    sky_k = 2000.0 * np.exp(0.8 * z + 0.3 * x * y + 0.5 * y)
    exact = pattern(FREQUENCY_MHZ, grid.directions)
    expected = (exact * (grid.weights * sky_k)[:, None]).mean(axis=0)
    for name, table in through_every_reader(tmp_path, pattern).items():
        beam = beam_of(table)
        gain = beam.directivity(FREQUENCY_MHZ, grid.directions)
        got = (gain * (grid.weights * sky_k)[:, None]).mean(axis=0)
        error = beam.error_estimate(FREQUENCY_MHZ)
        # The estimate is of the pattern: the temperature errs by no more than its rms times that of the sky.
        allowed = error.rms * np.sqrt((exact**2).mean(axis=0)) * np.sqrt((sky_k**2).mean()) + 1e-6
        assert (np.abs(got - expected) < allowed).all(), name
        assert np.abs(got - expected).max() < 0.05, name
        assert table.radiated_fraction == pytest.approx(np.ones(3), abs=1e-5), name


def test_power_is_that_of_the_file_to_its_digits(tmp_path: Path) -> None:
    tables = through_every_reader(tmp_path, DIPOLE.directivity)
    for name, table in tables.items():
        exact = DIPOLE.directivity(table.frequency_mhz, grid_directions(table.theta_deg, table.phi_deg))
        # Sixteen digits are written; harmonics leave 1e-12, decibels rounding.
        assert table.power == pytest.approx(exact.T.reshape(table.power.shape), abs=1e-11), name
        assert not table.upper_half, name
    assert tables["fields"].e_theta is not None
    assert tables["table"].e_theta is None


def test_isotropic_pattern_stays_isotropic(tmp_path: Path) -> None:
    for name, table in through_every_reader(tmp_path, isotropic).items():
        towards = np.random.default_rng(1).normal(size=(200, 3))
        towards /= np.linalg.norm(towards, axis=1, keepdims=True)
        gain = beam_of(table).directivity(FREQUENCY_MHZ, towards)
        # The fields are squares of square roots: a few units of the last digit.
        assert np.abs(gain - 1.0).max() < 1e-12, name


def test_nested_maps_are_those_in_rings(tmp_path: Path) -> None:
    ring = read_healpix_files(write_healpix(tmp_path, DIPOLE.directivity))
    nested = tmp_path / "nested"
    nested.mkdir()
    again = read_healpix_files(write_healpix(nested, DIPOLE.directivity, nest=True))
    assert again.power == pytest.approx(ring.power, abs=1e-12)


def over_plane(wire: str) -> Beam:
    settings = {"length_m": 2.0, "height_m": 1.5, "efficiency": 1.0, "structure_temperature_k": 270.0}
    return beam_from(Dipole(kind="dipole", wire=wire, **settings))  # type: ignore[arg-type]


def over_ground(frequency_mhz: np.ndarray, directions: np.ndarray) -> np.ndarray:
    """A horizontal wire 1.5 m over earth of permittivity 4 - 1j, its reflection that of Fresnel across the wire."""
    z = np.maximum(directions[:, 2:], 0.0)
    within = np.sqrt(3.0 - 1.0j + z**2)
    reflected = (z - within) / (z + within) * np.exp(-2j * 2 * np.pi * frequency_mhz / 299.792458 * 1.5 * z)
    return np.abs(1.0 + reflected) ** 2 * (1.0 - directions[:, :1] ** 2) * (directions[:, 2:] > 0.0)


def upper_directions(table: FarField) -> np.ndarray:
    """Of the table's cells; those on the horizon lie a hair above it."""
    directions = grid_directions(table.theta_deg, table.phi_deg)
    directions[:, 2] = np.maximum(directions[:, 2], 1e-14)
    return directions


@pytest.mark.parametrize("wire", ["horizontal", "vertical"])
@pytest.mark.parametrize("below", [0.0, np.nan, hp.UNSEEN])
def test_maps_of_an_upper_half(wire: str, below: float, tmp_path: Path) -> None:
    """Above a plane the pattern is even about it (image theorem), so harmonics hold it though it jumps to nothing."""
    pattern = over_plane(wire).directivity

    def half(frequency_mhz: np.ndarray, directions: np.ndarray) -> np.ndarray:
        return np.where(directions[:, 2:] > 0.0, pattern(frequency_mhz, directions), below)

    table = read_healpix_files(write_healpix(tmp_path, half))
    assert table.upper_half
    assert any("taken as an upper half" in note for note in table.notes)
    exact = pattern(FREQUENCY_MHZ, upper_directions(table)).T.reshape(table.power.shape)
    # The band limit of nside 32 is far above that of a wire 1.5 m over a plane: rounding is left, on the horizon too,
    # where the maps have no value to go by.
    assert table.power == pytest.approx(exact, abs=1e-11)
    assert table.radiated_fraction == pytest.approx(np.ones(3), abs=1e-5)


def test_maps_over_lossy_ground_miss_what_the_notes_say(tmp_path: Path) -> None:
    missed, stated = [], []
    for nside in (16, 32, 64):
        table = read_healpix_files(write_healpix(tmp_path, over_ground, nside=nside))
        exact = over_ground(FREQUENCY_MHZ, upper_directions(table)).T.reshape(table.power.shape)
        missed.append(np.abs(table.power - exact).max() / exact.max())
        stated.append(float(re.search(r"at most (\S+) of the peak", table.notes[0])[1]))  # type: ignore[index]
    # On the horizon the third derivative jumps: an error that falls with the cube of nside, there largest, and the
    # pixels beside the horizon see a third of it.
    assert np.all(np.array(missed) < 3.5 * np.array(stated))
    assert np.log2(np.array(missed[:-1]) / missed[1:]) == pytest.approx([3.0, 3.0], abs=0.3)


def test_a_map_that_jumps_in_the_open_is_refused(tmp_path: Path) -> None:
    def capped(frequency_mhz: np.ndarray, directions: np.ndarray) -> np.ndarray:
        return DIPOLE.directivity(frequency_mhz, directions) * (directions[:, 2:] > 0.5)

    with pytest.raises(InputError, match="jumps"):
        read_healpix_files(write_healpix(tmp_path, capped))


def with_single_poles(text: str) -> str:
    """The table with one row for each pole, at phi 30 deg."""
    rows = [line.split(";") for line in text.splitlines()]
    return "\n".join(";".join(row) for row in rows if row[1] not in ("0.0", "180.0") or row[2] == "30.0") + "\n"


def test_a_pole_told_once_is_the_pole_at_every_phi(tmp_path: Path) -> None:
    whole = read_table_files(write_table(tmp_path, on_grid(DIPOLE.directivity)))
    path = tmp_path / "single.csv"
    path.write_text(with_single_poles((tmp_path / "beam.csv").read_text()))
    single = read_table_files(table_source(path))
    assert single.power == pytest.approx(whole.power, abs=1e-14)
    assert "a pole told once, by one row, taken for every phi" in single.notes


def test_fields_of_a_pole_told_once_turn_with_the_meridian(tmp_path: Path) -> None:
    """A field of a crossed pair of short dipoles: the parts of x + 0.4j y along theta and phi."""
    theta, phi = np.meshgrid(np.radians(THETA_DEG), np.radians(PHI_DEG), indexing="ij")
    e_theta = np.cos(theta) * (np.cos(phi) + 0.4j * np.sin(phi))
    e_phi = -np.sin(phi) + 0.4j * np.cos(phi)
    lines = ["MHz;theta;phi;a;b;c;d"]
    for j, k in np.ndindex(theta.shape):
        parts = (e_theta[j, k].real, e_theta[j, k].imag, e_phi[j, k].real, e_phi[j, k].imag)
        lines.append(";".join(map(str, (60.0, THETA_DEG[j], PHI_DEG[k], *map(float, parts)))))
    path = tmp_path / "fields.csv"
    path.write_text(with_single_poles("\n".join(lines)))
    columns = FieldColumns(columns=("a", "b", "c", "d"), parts="real-imaginary")
    table = read_table_files(table_source(path, power=None, fields=columns))
    assert len(path.read_text().splitlines()) == len(lines) - 2 * (len(PHI_DEG) - 1)
    assert table.e_theta is not None
    assert table.e_phi is not None
    assert table.e_theta[0] == pytest.approx(e_theta, abs=1e-14)
    assert table.e_phi[0] == pytest.approx(e_phi, abs=1e-14)


@pytest.mark.parametrize("heading", [b"\xef\xbb\xbfMHz;theta;phi;power", b"#MHz;theta;phi;power",
                                     b"# MHz; theta; phi; power", b'"MHz";"theta";"phi";"power"',
                                     b"MHz;theta;phi;power;\xb0"])  # fmt: skip
def test_headings_as_solvers_write_them(heading: bytes, tmp_path: Path) -> None:
    whole = read_table_files(write_table(tmp_path, on_grid(DIPOLE.directivity)))
    path = tmp_path / "headed.csv"
    path.write_bytes(heading + (tmp_path / "beam.csv").read_bytes().removeprefix(b"MHz;theta;phi;power"))
    assert np.array_equal(read_table_files(table_source(path)).power, whole.power)


@pytest.mark.parametrize("digits", [4, 5, 6])
def test_rounded_radians_close_the_turn_and_meet_the_poles(digits: int, tmp_path: Path) -> None:
    phi = np.append(PHI_DEG, 360.0)
    power = on_grid(DIPOLE.directivity, THETA_DEG, phi)
    rows = [
        f"{frequency};{np.radians(THETA_DEG[j]):.{digits}f};{np.radians(phi[k]):.{digits}f};{float(power[i, j, k])!r}"
        for i, frequency in enumerate(FREQUENCY_MHZ)
        for j, k in np.ndindex(power.shape[1:])
    ]
    path = tmp_path / "radians.csv"
    path.write_text("\n".join(["MHz;theta;phi;power", *rows]) + "\n")
    table = read_table_files(table_source(path, angle_unit="rad"))
    assert table.power.shape == (3, len(THETA_DEG), len(PHI_DEG))
    assert table.theta_deg[[0, -1]].tolist() == [0.0, 180.0]
    # Angles off by half a last digit move the pattern by that much of its slope, at most about twice its peak.
    assert table.radiated_fraction == pytest.approx(np.ones(3), abs=10.0**-digits)


@pytest.mark.parametrize(("unit", "per_degree"), [("degrees", 1.0), ("degree", 1.0), ("radians", np.pi / 180.0)])
def test_units_of_netcdf_as_they_are_spelt(unit: str, per_degree: float, tmp_path: Path) -> None:
    source = write_netcdf(tmp_path, on_grid(DIPOLE.directivity))
    with xr.open_dataset(source.file, engine="h5netcdf") as dataset:
        changed = dataset.load().assign_coords(phi=("phi", PHI_DEG * per_degree, {"units": unit}))
    changed.to_netcdf(tmp_path / "spelt.nc", engine="h5netcdf")
    table = read_netcdf_file(source.model_copy(update={"file": tmp_path / "spelt.nc"}))
    assert table.phi_deg == pytest.approx(PHI_DEG, abs=1e-10)


def test_both_ends_of_the_turn_and_the_poles_are_reconciled(tmp_path: Path) -> None:
    phi = np.append(PHI_DEG, 360.0)
    power = on_grid(DIPOLE.directivity, THETA_DEG, phi)
    power[:, 0] *= 1.0 + 1e-5 * np.random.default_rng(2).standard_normal(power[:, 0].shape)
    table = read_netcdf_file(write_netcdf(tmp_path, power, phi))
    assert len(table.phi_deg) == len(PHI_DEG)
    assert np.ptp(table.power[:, 0], axis=1).max() == 0.0
    assert any("taken once" in note for note in table.notes)
    assert any("averaged" in note for note in table.notes)
