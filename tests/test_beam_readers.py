"""Readers of beam tables: one pattern through every format, conventions of angles, and the same antenna temperature."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from reader_cases import (
    FREQUENCY_MHZ,
    PHI_DEG,
    THETA_DEG,
    grid_directions,
    on_grid,
    write_fields,
    write_healpix,
    write_netcdf,
    write_table,
)

from sims.beam import beam_from
from sims.beam_grid import GridBeam, grid_beam
from sims.beam_healpix import read_healpix_files
from sims.beam_netcdf import read_netcdf_file
from sims.beam_table_file import read_table_files
from sims.config_beam import Dipole
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


def test_one_pattern_through_every_reader_gives_one_antenna_temperature(tmp_path: Path) -> None:
    grid = pixel_grid(16)
    x, y, z = grid.directions.T
    sky_k = 2000.0 * np.exp(0.8 * z + 0.3 * x * y + 0.5 * y)
    exact = DIPOLE.directivity(FREQUENCY_MHZ, grid.directions)
    expected = (exact * (grid.weights * sky_k)[:, None]).mean(axis=0)
    for name, table in through_every_reader(tmp_path, DIPOLE.directivity).items():
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


def test_nested_maps_and_upper_halves(tmp_path: Path) -> None:
    ring = read_healpix_files(write_healpix(tmp_path, DIPOLE.directivity))
    nested = tmp_path / "nested"
    nested.mkdir()
    again = read_healpix_files(write_healpix(nested, DIPOLE.directivity, nest=True))
    assert again.power == pytest.approx(ring.power, abs=1e-12)
    over_plane = beam_from(
        Dipole(
            kind="dipole", length_m=2.0, height_m=1.0, wire="vertical", efficiency=1.0, structure_temperature_k=270.0
        )
    )
    with pytest.raises(InputError, match="jumps"):
        read_healpix_files(write_healpix(tmp_path, over_plane.directivity))


def test_both_ends_of_the_turn_and_the_poles_are_reconciled(tmp_path: Path) -> None:
    phi = np.append(PHI_DEG, 360.0)
    power = on_grid(DIPOLE.directivity, THETA_DEG, phi)
    power[:, 0] *= 1.0 + 1e-5 * np.random.default_rng(2).standard_normal(power[:, 0].shape)
    table = read_netcdf_file(write_netcdf(tmp_path, power, phi))
    assert len(table.phi_deg) == len(PHI_DEG)
    assert np.ptp(table.power[:, 0], axis=1).max() == 0.0
    assert any("taken once" in note for note in table.notes)
    assert any("averaged" in note for note in table.notes)
