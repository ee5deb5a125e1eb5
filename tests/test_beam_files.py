"""Beams from files in the engine: the errors that a pattern may have, and where missing power goes."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from engine_cases import EvenSky, SmoothSky, moving_scene
from reader_cases import FREQUENCY_MHZ, grid_directions, on_grid, write_netcdf

from sims.beam import Beam, beam_from
from sims.beam_files import antenna_from
from sims.beam_grid import GridBeam
from sims.config_beam import BeamMode, Dipole, FileBeam, GaussianBeam, NetcdfSource, ShortDipole
from sims.constants import rayleigh_jeans_k
from sims.errors import InputError
from sims.pixels import pixel_grid
from sims.sky_average import evaluate

MOUNT = {"efficiency": 1.0, "structure_temperature_k": 270.0}
WIRE = Dipole(kind="dipole", length_m=2.0, **MOUNT)
DIPOLE = beam_from(WIRE)
TOWARDS = grid_directions(np.array([10.0, 50.0, 80.0, 130.0]), np.array([0.0, 40.0, 200.0]))


def quiet(samples: int) -> None:
    """No progress bar."""


def file_beam(source: NetcdfSource, **changes: object) -> FileBeam:
    settings = {"kind": "file", "source": source, "quantity": "gain", "missing_power": "efficiency", **MOUNT}
    return FileBeam(**(settings | changes))  # type: ignore[arg-type]


def written(folder: Path, power: np.ndarray) -> NetcdfSource:
    folder.mkdir(exist_ok=True)
    return write_netcdf(folder, power)


def grid_of(settings: FileBeam) -> GridBeam:
    beam = antenna_from(settings)
    assert isinstance(beam, GridBeam)
    return beam


def test_table_in_the_engine_is_the_closed_form_in_the_engine(tmp_path: Path) -> None:
    table = grid_of(file_beam(written(tmp_path, on_grid(DIPOLE.directivity))))
    frequency = np.array([55.0, 85.0])
    scene = moving_scene(SmoothSky(16), DIPOLE, 4)
    exact = evaluate(scene, frequency, quiet)
    # The antenna axes of the closed form's scene: x is the wire; any y and z at right angles serve a free dipole.
    x = scene.pointing.axes[:, 0]
    y = np.cross(x, [0.3, -0.5, 0.8])
    y /= np.linalg.norm(y, axis=1, keepdims=True)
    axes = np.ascontiguousarray(np.stack([x, y, np.cross(x, y)], axis=1))
    got = evaluate(replace(scene, beam=table, pointing=replace(scene.pointing, axes=axes)), frequency, quiet)
    # Three frequencies and steps of three degrees: the estimate of the table says 1e-5 of the pattern.
    assert np.abs(got[0] - exact[0]).max() < 0.3
    assert np.abs(got[1] - exact[1]).max() < 1e-4


def test_missing_power_is_lost_where_it_is_said_to_be(tmp_path: Path) -> None:
    source = written(tmp_path, 0.8 * on_grid(DIPOLE.directivity))
    frequency = np.array([55.0, 85.0])
    sky_k, ground_k, structure_k = (rayleigh_jeans_k(t, frequency) for t in (1000.0, 230.0, 270.0))
    found = {}
    for kind in ("efficiency", "ground-loss", "numerical"):
        beam = grid_of(file_beam(source, missing_power=kind, efficiency=0.9))
        scene = moving_scene(EvenSky(16, 1000.0, None), beam, 2)
        found[kind] = evaluate(scene, frequency, quiet)
    whole = found["numerical"][1] / 0.9  # the share of the beam that meets the sky
    expected = {
        "efficiency": (0.72 * (whole * sky_k + (1 - whole) * ground_k) + 0.28 * structure_k, 0.72 * whole),
        "ground-loss": (
            0.9 * (0.8 * (whole * sky_k + (1 - whole) * ground_k) + 0.2 * ground_k) + 0.1 * structure_k,
            0.72 * whole,
        ),
        "numerical": (0.9 * (whole * sky_k + (1 - whole) * ground_k) + 0.1 * structure_k, 0.9 * whole),
    }
    for kind, (temperature, response) in expected.items():
        # 0.8 of the closed form's directivity has a mean of 0.8 to the quadrature of the table, 3e-7.
        assert found[kind][0] == pytest.approx(temperature, rel=1e-6), kind
        assert found[kind][1] == pytest.approx(response, rel=1e-6), kind


def test_normalisation_that_cannot_be_is_refused(tmp_path: Path) -> None:
    low = written(tmp_path / "low", 0.8 * on_grid(DIPOLE.directivity))
    high = written(tmp_path / "high", 1.3 * on_grid(DIPOLE.directivity))
    with pytest.raises(InputError, match=r"beam\.nc: the mean of a directivity over the sphere is 1, here 0\.8000"):
        antenna_from(file_beam(low, quantity="directivity"))
    with pytest.raises(
        InputError, match=r"beam\.nc: a mean gain of 1\.3000 over the sphere radiates more than went in"
    ):
        antenna_from(file_beam(high))
    assert grid_of(file_beam(high, missing_power="numerical")).efficiency_at(FREQUENCY_MHZ) == pytest.approx(1.0)


@pytest.mark.parametrize(
    "settings",
    [
        ShortDipole(kind="short-dipole", **MOUNT),
        WIRE,
        Dipole(kind="dipole", length_m=2.0, height_m=1.0, **MOUNT),
        Dipole(kind="dipole", length_m=2.0, height_m=1.5, wire="vertical", **MOUNT),
        GaussianBeam(kind="gaussian", width_deg=70.0, frequency_mhz=60.0, width_exponent=0.5, **MOUNT),
    ],
)
def test_ripple_is_a_wave_in_frequency_towards_the_boresight(settings: object) -> None:
    ripple = {"ripple_fraction": 0.02, "ripple_period_mhz": 16.0, "ripple_phase_deg": 30.0}
    plain, waved = beam_from(settings), beam_from(settings.model_copy(update=ripple))  # type: ignore[arg-type, attr-defined]
    assert len(waved.profiles) <= 2
    wave = 0.02 * np.cos(2 * np.pi * FREQUENCY_MHZ / 16.0 + np.radians(30.0))
    expected = plain.relative_power(FREQUENCY_MHZ, TOWARDS) * (1 + TOWARDS[:, 2:] * wave)
    assert waved.relative_power(FREQUENCY_MHZ, TOWARDS) == pytest.approx(expected, abs=1e-13)


def test_larger_antenna_has_the_pattern_of_a_shorter_wave(tmp_path: Path) -> None:
    over_plane = Dipole(kind="dipole", length_m=2.0, height_m=1.0, **MOUNT)
    for settings in (WIRE, over_plane):
        grown = beam_from(settings.model_copy(update={"dimension_scale": 1.1}))
        expected = beam_from(settings).directivity(1.1 * FREQUENCY_MHZ, TOWARDS)
        assert grown.directivity(FREQUENCY_MHZ, TOWARDS) == pytest.approx(expected, rel=1e-12)
    source = written(tmp_path, on_grid(DIPOLE.directivity))
    table, grown_table = grid_of(file_beam(source)), grid_of(file_beam(source, dimension_scale=1.02))
    frequency = np.array([60.0, 80.0])
    expected = table.directivity(1.02 * frequency, TOWARDS)
    assert grown_table.directivity(frequency, TOWARDS) == pytest.approx(expected, abs=1e-6)
    with pytest.raises(InputError, match=r"89\.5"):
        grown_table.directivity(np.array([89.5]), TOWARDS)


def test_ripple_and_modes_of_a_table(tmp_path: Path) -> None:
    longer = beam_from(WIRE.model_copy(update={"length_m": 2.2}))
    base = written(tmp_path / "base", on_grid(DIPOLE.directivity))
    other = written(tmp_path / "other", on_grid(longer.directivity))
    plain = grid_of(file_beam(base)).directivity(FREQUENCY_MHZ, TOWARDS)
    there = grid_of(file_beam(other)).directivity(FREQUENCY_MHZ, TOWARDS)
    half = grid_of(file_beam(base, modes=(BeamMode(source=other, amplitude=0.5),)))
    # Both patterns are normalised to 1 within 3e-7, so the mean of them is.
    assert half.directivity(FREQUENCY_MHZ, TOWARDS) == pytest.approx((plain + there) / 2, abs=1e-5)
    waved = grid_of(file_beam(base, ripple_fraction=0.1, ripple_period_mhz=13.0))
    wave = 0.1 * np.cos(2 * np.pi * FREQUENCY_MHZ / 13.0)
    # A free dipole is even in z: the wave leaves its mean alone.
    assert waved.directivity(FREQUENCY_MHZ, TOWARDS) == pytest.approx(plain * (1 + TOWARDS[:, 2:] * wave), abs=1e-4)


def test_modes_on_another_grid_or_past_zero_are_refused(tmp_path: Path) -> None:
    base = written(tmp_path / "base", on_grid(DIPOLE.directivity))
    coarse = tmp_path / "coarse"
    coarse.mkdir()
    phi = np.arange(0.0, 360.0, 10.0)
    other = write_netcdf(coarse, on_grid(DIPOLE.directivity, phi_deg=phi), phi)
    with pytest.raises(InputError, match=r"beam\.modes\.0: .* has another grid than"):
        antenna_from(file_beam(base, modes=(BeamMode(source=other, amplitude=1.0),)))
    longer = written(tmp_path / "longer", on_grid(beam_from(WIRE.model_copy(update={"length_m": 2.2})).directivity))
    with pytest.raises(InputError, match=r"beam\.modes\.0\.amplitude = -90: the power becomes negative"):
        antenna_from(file_beam(base, modes=(BeamMode(source=longer, amplitude=-90.0),)))


def test_a_changed_file_is_read_again(tmp_path: Path) -> None:
    source = written(tmp_path, on_grid(DIPOLE.directivity))
    before = grid_of(file_beam(source)).directivity(FREQUENCY_MHZ, TOWARDS)
    source.file.unlink()
    written(tmp_path, on_grid(beam_from(WIRE.model_copy(update={"length_m": 3.0})).directivity))
    after = grid_of(file_beam(source)).directivity(FREQUENCY_MHZ, TOWARDS)
    assert np.abs(after - before).max() > 0.01


def test_a_file_that_is_gone_is_named(tmp_path: Path) -> None:
    source = written(tmp_path, on_grid(DIPOLE.directivity))
    source.file.unlink()
    with pytest.raises(InputError, match=r"beam\.nc: cannot be read"):
        antenna_from(file_beam(source))


def test_an_even_sky_is_seen_through_a_table_as_it_is(tmp_path: Path) -> None:
    beam = grid_of(file_beam(written(tmp_path, on_grid(DIPOLE.directivity))))
    scene = moving_scene(EvenSky(16, 230.0, None), beam, 3)
    temperature, _ = evaluate(scene, FREQUENCY_MHZ, quiet)
    # The beam's own sum normalises it, and radiation and losses share the temperature of nothing else: efficiency is 1
    # but for the 3e-7 by which the table's quadrature misses the pattern's mean.
    assert temperature == pytest.approx(np.tile(rayleigh_jeans_k(230.0, FREQUENCY_MHZ), (3, 1)), rel=1e-6)
    assert isinstance(DIPOLE, Beam)
    assert pixel_grid(16).side_rad > 0
