"""Tables of the whole sphere with nothing below the horizon: the pattern may jump there, and no spline goes across."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from engine_cases import SmoothSky, moving_scene
from reader_cases import FREQUENCY_MHZ, PHI_DEG, THETA_DEG, on_grid, over_plane, write_netcdf, write_table
from table_cases import LOSSLESS, beam_of, dipole, gaussian, random_directions, unit_vectors

from sims.beam_files import antenna_from, read_far_field
from sims.beam_grid import GridBeam
from sims.config_beam import FileBeam
from sims.errors import InputError
from sims.far_field import far_field
from sims.sky_average import evaluate

VERTICAL = dipole(length_m=1.0, height_m=0.6, wire="vertical")
HORIZONTAL = dipole(length_m=2.0, height_m=1.5)
BELOW = THETA_DEG > 90.0
HORIZON = THETA_DEG == 90.0
Write = Callable[[Path, np.ndarray], Any]


def whole_sphere(pattern: Any = VERTICAL.directivity, theta_deg: np.ndarray = THETA_DEG) -> np.ndarray:
    """Power on all thetas, those on the horizon as seen from above; zero below."""
    power = pattern(FREQUENCY_MHZ, unit_vectors(theta_deg, PHI_DEG))
    return np.moveaxis(power.reshape(len(theta_deg), len(PHI_DEG), -1), -1, 0).copy()


def quiet(samples: int) -> None:
    """No progress bar."""


def kelvin(beam: Any, closed: Any) -> np.ndarray:
    """Antenna temperature of a beam in the scene of a closed form whose first axis is z or x, and second is z."""
    scene = moving_scene(SmoothSky(16), closed, 4)
    if isinstance(beam, GridBeam):
        first, z = scene.pointing.axes[:, 0], scene.pointing.axes[:, 1]
        x = first if abs(np.sum(first[0] * z[0])) < 0.5 else np.cross(z, [0.3, -0.5, 0.8])
        x = x / np.linalg.norm(x, axis=1, keepdims=True)
        axes = np.ascontiguousarray(np.stack([x, np.cross(z, x), z], axis=1))
        scene = replace(scene, beam=beam, pointing=replace(scene.pointing, axes=axes))
    return evaluate(scene, FREQUENCY_MHZ, quiet)[0]


def as_table(folder: Path, power: np.ndarray) -> Any:
    return write_table(folder, power)


def as_decibels(folder: Path, power: np.ndarray) -> Any:
    """Zero becomes -300 dBi."""
    return write_table(folder, power, decibels=True)


def as_netcdf(folder: Path, power: np.ndarray) -> Any:
    return write_netcdf(folder, power)


def file_beam(source: Any) -> GridBeam:
    beam = antenna_from(
        FileBeam(kind="file", source=source, quantity="directivity", missing_power="efficiency", **LOSSLESS)
    )  # fmt: skip
    assert isinstance(beam, GridBeam)
    return beam


@pytest.mark.parametrize("write", [as_table, as_decibels, as_netcdf])
@pytest.mark.parametrize("closed", [VERTICAL, HORIZONTAL], ids=["vertical", "horizontal"])
def test_a_dipole_over_a_plane_on_the_whole_sphere_is_its_closed_form(
    closed: Any, write: Write, tmp_path: Path
) -> None:
    source = write(tmp_path, whole_sphere(closed.directivity))
    table = read_far_field(source)
    assert table.upper_half
    assert "nothing is radiated below theta 90 deg: taken as an upper half" in table.notes
    beam = file_beam(source)
    below = np.array([[0.6, 0.0, -0.8], [0.0, 1.0, -1e-9]])
    assert np.all(beam.directivity(FREQUENCY_MHZ, below) == 0.0)
    # Steps of 3 degrees miss up to 4e-5 of the pattern, mostly in waves finer than the sky: 2 mK here.
    # A spline across the jump is off by 75 K for the vertical wire.
    assert np.abs(kelvin(beam, closed) - kelvin(closed, closed)).max() < 0.01


@pytest.mark.parametrize("floor_dbi", [-99.99, -100.0, -999.99])
def test_a_floor_of_decibels_is_nothing(floor_dbi: float, tmp_path: Path) -> None:
    power = whole_sphere()
    power[:, BELOW] = 10.0 ** (floor_dbi / 10.0)
    assert read_far_field(as_netcdf(tmp_path, power)).upper_half


def test_what_is_faint_below_the_horizon_is_not_cut(tmp_path: Path) -> None:
    power = whole_sphere()
    power[:, BELOW] = 1e-6
    assert not read_far_field(as_netcdf(tmp_path, power)).upper_half
    power[:, BELOW] = 0.0
    power[1, THETA_DEG == 150.0, 17] = 1e-6
    assert not read_far_field(as_netcdf(tmp_path, power)).upper_half


def test_fields_are_cut_with_their_power() -> None:
    root = np.sqrt(whole_sphere())
    table = far_field(FREQUENCY_MHZ, THETA_DEG, PHI_DEG, root**2, "beam.nc", fields=(-1j * root, 0j * root))
    assert table.e_theta is not None
    assert table.e_phi is not None
    assert table.e_theta.shape == table.e_phi.shape == table.power.shape == (3, 31, 120)
    assert np.abs(table.e_theta) ** 2 == pytest.approx(table.power, rel=1e-12)


def problems_of(write: Write, folder: Path, power: np.ndarray) -> str:
    with pytest.raises(InputError) as caught:
        read_far_field(write(folder, power))
    assert len(caught.value.problems) == 1
    assert "beam." in caught.value.problems[0]
    return str(caught.value.problems[0])


@pytest.mark.parametrize("share", [0.0, 0.5])
@pytest.mark.parametrize("write", [as_table, as_netcdf])
def test_a_horizon_on_the_dark_side_or_halfway_is_refused(write: Write, share: float, tmp_path: Path) -> None:
    power = whole_sphere()
    power[:, HORIZON] *= share
    told = problems_of(write, tmp_path, power)
    assert "at theta 87 to" in told
    assert "must hold what is radiated just above the horizon" in told


def test_one_frequency_whose_horizon_is_dark_is_named(tmp_path: Path) -> None:
    power = whole_sphere()
    power[1, HORIZON] = 0.0
    assert "to 0 at 90 deg (70 MHz, means over phi)" in problems_of(as_netcdf, tmp_path, power)


@pytest.mark.parametrize(("permittivity", "step_deg"), [(3.0, 5.0), (3.0, 1.0), (15.0 - 2.0j, 3.0), (80.0, 2.0)])
def test_the_steep_fall_over_real_ground_is_no_jump(permittivity: complex, step_deg: float) -> None:
    """A short vertical wire on soil: direct wave and Fresnel's reflected one, which cancel on the horizon."""
    theta = np.arange(0.0, 180.0 + step_deg / 2, step_deg)
    cosine, sine = np.cos(np.radians(theta)), np.sin(np.radians(theta))
    root = np.sqrt(permittivity - sine**2 + 0j)
    reflected = (permittivity * cosine - root) / (permittivity * cosine + root)
    power = np.where(theta < 90.0, sine**2 * np.abs(1.0 + reflected) ** 2, 0.0)
    table = far_field(np.array([70.0]), theta, PHI_DEG, np.tile(power[None, :, None], (1, 1, len(PHI_DEG))), "soil")
    assert table.upper_half
    assert table.power[0, -1].max() == 0.0


@pytest.mark.parametrize(
    ("pattern", "step_deg"), [(VERTICAL.directivity, 1.0), (VERTICAL.directivity, 5.0), (HORIZONTAL.directivity, 5.0)]
)
def test_a_grid_without_the_horizon_is_refused(pattern: Any, step_deg: float) -> None:
    theta = np.arange(step_deg / 2, 180.0, step_deg)
    with pytest.raises(InputError, match=r"beam\.txt: .* no row stands there") as caught:
        far_field(FREQUENCY_MHZ, theta, PHI_DEG, whole_sphere(pattern, theta), "beam.txt")
    assert len(caught.value.problems) == 1


@pytest.mark.parametrize("beam", [HORIZONTAL, gaussian(30.0)], ids=["horizontal", "narrow"])
def test_what_fades_away_before_the_horizon_needs_no_row_there(beam: Any) -> None:
    """No jump: over a plane the power of a horizontal wire goes as the square of the height, and a horn has none."""
    theta = np.arange(0.5, 180.0, 1.0)
    power = whole_sphere(beam.directivity, theta)
    power[:, theta > 90.0] = 0.0
    table = beam_of(far_field(FREQUENCY_MHZ, theta, PHI_DEG, power, "beam.txt"))
    # The second derivative jumps, by which a cubic spline of 1-degree steps is off by less than a ten-thousandth.
    towards = random_directions(np.random.default_rng(2), 3000)
    expected = beam.directivity(FREQUENCY_MHZ, towards)
    assert np.abs(table.directivity(FREQUENCY_MHZ, towards) - expected).max() < 1e-4 * expected.max()


def test_all_sides_of_the_sphere_are_as_before(tmp_path: Path) -> None:
    """A free dipole radiates below the horizon, and a plane's upper half alone needs no cut."""
    free = read_far_field(as_netcdf(tmp_path, on_grid(dipole(length_m=2.0).directivity)))
    assert (free.upper_half, len(free.theta_deg)) == (False, 61)
    half = THETA_DEG[~BELOW]
    table = far_field(FREQUENCY_MHZ, half, PHI_DEG, on_grid(over_plane, half), "beam.nc")
    assert table.upper_half
    assert not any("upper half" in note for note in table.notes)
