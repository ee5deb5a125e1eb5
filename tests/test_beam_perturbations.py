"""Errors a beam may have: scale of its dimensions, ripple, and modes mixed in do what their settings say."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from nec_cases import listing, run, two_metre_dipole, written
from pydantic import ValidationError
from reader_cases import FREQUENCY_MHZ, PHI_DEG, on_grid, write_netcdf
from table_cases import LOSSLESS, dipole, few_sources, gaussian, random_directions

from sims import beam_files, config
from sims.beam import beam_from
from sims.beam_files import _Kept, antenna_from, read_far_field
from sims.beam_grid import GridBeam
from sims.config_beam import BeamMode, FileBeam, NecSource, NetcdfSource
from sims.errors import InputError

TOWARDS = random_directions(np.random.default_rng(3), 60)
FREQUENCY = np.array([52.0, 61.3, 78.0, 85.0])
BASE: dict[str, Any] = {
    "kind": "file", "quantity": "directivity", "missing_power": "numerical", **LOSSLESS,
}  # fmt: skip


def file_beam(source: NecSource | NetcdfSource, **settings: Any) -> GridBeam:
    beam = antenna_from(FileBeam(source=source, **(BASE | settings)))
    assert isinstance(beam, GridBeam)
    return beam


def stored(folder: Path, seed: int) -> NetcdfSource:
    """A random smooth pattern, positive everywhere, of mean one."""
    folder.mkdir()
    pattern = few_sources(np.random.default_rng(seed))
    power = on_grid(pattern) + 0.05
    weight = np.sin(np.radians(np.arange(0.0, 181.0, 3.0)))
    mean = power.mean(axis=2) @ weight / weight.sum()
    return write_netcdf(folder, power / mean[:, None, None], PHI_DEG)


@pytest.mark.parametrize("settings", [{}, {"height_m": 1.2}, {"height_m": 1.2, "wire": "vertical"}])
def test_a_larger_dipole_is_one_of_larger_dimensions(settings: dict[str, Any]) -> None:
    scaled = dipole(length_m=2.0, dimension_scale=1.1, **settings)
    larger = {**settings, "height_m": 1.1 * settings["height_m"]} if "height_m" in settings else settings
    # The same numbers in another order of multiplication.
    assert scaled.directivity(FREQUENCY, TOWARDS) == pytest.approx(
        dipole(length_m=2.2, **larger).directivity(FREQUENCY, TOWARDS), rel=1e-9, abs=1e-12
    )


def test_every_beam_scales_by_frequency(tmp_path: Path) -> None:
    """Maxwell's equations: an antenna larger by s at f is that of the design at f s."""
    narrow = beam_from(config.GaussianBeam(
        kind="gaussian", width_deg=40.0, frequency_mhz=60.0, width_exponent=1.0, dimension_scale=1.1, **LOSSLESS
    ))  # fmt: skip
    assert narrow.directivity(FREQUENCY, TOWARDS) == pytest.approx(
        gaussian(40.0).directivity(1.1 * FREQUENCY, TOWARDS), rel=1e-9, abs=1e-12
    )
    source = stored(tmp_path / "one", 1)
    assert file_beam(source, dimension_scale=1.05).directivity(FREQUENCY, TOWARDS) == pytest.approx(
        file_beam(source).directivity(1.05 * FREQUENCY, TOWARDS), rel=1e-9, abs=1e-9
    )


def test_a_scaled_table_is_that_of_the_larger_antenna(tmp_path: Path) -> None:
    """Against the antenna itself made larger, from an independent computation; radius and all."""
    frequency = np.arange(40.0, 101.0, 5.0)
    design = written(tmp_path / "design.txt", listing([two_metre_dipole(value) for value in frequency]))
    larger = written(
        tmp_path / "larger.txt",
        listing([run((-1.1, 0, 0, 1.1, 0, 0), 0.0011, 41, 21, value) for value in frequency]),
    )
    scaled = file_beam(design, dimension_scale=1.1).directivity(FREQUENCY, TOWARDS)
    # Printed to five digits, and cubics over 5 MHz.
    assert scaled == pytest.approx(file_beam(larger).directivity(FREQUENCY, TOWARDS), abs=1e-3)


def test_scale_does_not_carry_a_table_beyond_its_band(tmp_path: Path) -> None:
    source = stored(tmp_path / "one", 1)
    with pytest.raises(InputError, match="MHz"):
        file_beam(source, dimension_scale=1.1).directivity(np.array([88.0]), TOWARDS)


def rippled(kind: str, folder: Path, **ripple: Any) -> Any:
    if kind == "file":
        return file_beam(stored(folder / f"beam{len(ripple)}", 5), **ripple)
    if kind == "gaussian":
        return beam_from(config.GaussianBeam(
            kind="gaussian", width_deg=60.0, frequency_mhz=60.0, width_exponent=1.0, **LOSSLESS, **ripple
        ))  # fmt: skip
    if kind == "short":
        return beam_from(config.ShortDipole(kind="short-dipole", **LOSSLESS, **ripple))
    return dipole(length_m=2.0, **({"height_m": 1.0} if kind == "plane" else {}), **ripple)


@pytest.mark.parametrize("kind", ["short", "dipole", "plane", "gaussian", "file"])
def test_ripple_is_a_standing_wave_of_its_period(kind: str, tmp_path: Path) -> None:
    ripple = {"ripple_fraction": 0.1, "ripple_period_mhz": 8.0, "ripple_phase_deg": 30.0}
    plain, moved = (rippled(kind, tmp_path, **some) for some in ({}, ripple))
    before, after = (beam.directivity(FREQUENCY, TOWARDS) for beam in (plain, moved))
    wave = 0.1 * np.cos(2 * np.pi * FREQUENCY / 8.0 + np.radians(30.0))
    lit = (before > 1e-2).all(axis=1)
    # Up to the normalisation, one number a frequency; a table joins the product of the two by its own spline.
    ratio = after[lit] / before[lit] / (1.0 + TOWARDS[lit, 2:] * wave)
    assert ratio == pytest.approx(np.repeat(ratio[:1], len(ratio), axis=0), rel=1e-3 if kind == "file" else 1e-9)
    assert np.abs(after / np.where(before > 0, before, 1) - 1).max() > 0.03


def test_ripple_of_a_round_beam_weighs_up_and_down_equally() -> None:
    """A pattern even about the plane of the wire keeps its mean: the ripple is odd there."""
    plain, moved = dipole(length_m=2.0), dipole(length_m=2.0, ripple_fraction=0.1, ripple_period_mhz=8.0)
    wave = 0.1 * np.cos(2 * np.pi * FREQUENCY / 8.0)
    expected = plain.directivity(FREQUENCY, TOWARDS) * (1.0 + TOWARDS[:, 2:] * wave)
    assert moved.directivity(FREQUENCY, TOWARDS) == pytest.approx(expected, rel=1e-9, abs=1e-12)


def test_perturbed_beams_still_integrate_to_four_pi(tmp_path: Path) -> None:
    x, weight = np.polynomial.legendre.leggauss(120)
    turn = 2 * np.pi * (np.arange(240) + 0.5) / 240
    rho = np.sqrt(1 - x**2)
    direction = np.stack([np.outer(rho, np.cos(turn)), np.outer(rho, np.sin(turn)), np.repeat(x[:, None], 240, 1)], -1)
    modes = (BeamMode(source=stored(tmp_path / "mode", 6), amplitude=0.4),)
    beam = file_beam(stored(tmp_path / "one", 5), ripple_fraction=0.3, dimension_scale=0.99, modes=modes)
    values = beam.directivity(FREQUENCY, direction.reshape(-1, 3)).reshape(120, 240, -1).mean(axis=1)
    # The rule is exact to far below the spline's own third-order breaks at its cells.
    assert weight @ values / 2 == pytest.approx(1.0, abs=2e-6)


def test_modes_move_the_pattern_linearly(tmp_path: Path) -> None:
    one, two, three = (stored(tmp_path / f"beam{seed}", seed) for seed in (7, 8, 9))
    base, second, third = (file_beam(source).directivity(FREQUENCY, TOWARDS) for source in (one, two, three))
    modes = (BeamMode(source=two, amplitude=0.2), BeamMode(source=three, amplitude=0.3))
    mixed = file_beam(one, modes=modes).directivity(FREQUENCY, TOWARDS)
    # All tables have mean one, but for what the coarse sum that made it so differs from the spline's.
    assert mixed == pytest.approx(0.5 * base + 0.2 * second + 0.3 * third, abs=2e-3)
    still = file_beam(one, modes=(BeamMode(source=two), BeamMode(source=three, amplitude=0.0)))
    assert np.array_equal(still.directivity(FREQUENCY, TOWARDS), base)
    whole = file_beam(one, modes=(BeamMode(source=two, amplitude=1.0),)).directivity(FREQUENCY, TOWARDS)
    assert whole == pytest.approx(second, abs=1e-12)


def test_modes_keep_power_that_was_lost(tmp_path: Path) -> None:
    """A mode that radiates less lowers the efficiency by its amplitude."""
    one = stored(tmp_path / "one", 7)
    (tmp_path / "lossy").mkdir()
    lossy = write_netcdf(tmp_path / "lossy", 0.5 * read_far_field(one).power, PHI_DEG)
    beam = file_beam(
        one, quantity="gain", missing_power="efficiency", modes=(BeamMode(source=lossy, amplitude=0.2),)
    )  # fmt: skip
    full = file_beam(one, quantity="gain", missing_power="efficiency").efficiency_at(FREQUENCY)
    assert beam.efficiency_at(FREQUENCY) == pytest.approx(0.9 * np.minimum(full, 1.0), rel=2e-3)


def test_modes_on_another_grid_are_refused_by_both_names(tmp_path: Path) -> None:
    one = stored(tmp_path / "one", 7)
    other = written(tmp_path / "other.txt", listing([two_metre_dipole(value) for value in (50.0, 70.0, 90.0)]))
    with pytest.raises(InputError) as caught:
        file_beam(one, modes=(BeamMode(source=other, amplitude=0.1),))
    text = "\n".join(caught.value.problems)
    assert all(name in text for name in ("beam.modes.0", "other.txt", "beam.nc"))


def test_modes_that_turn_power_negative_are_refused(tmp_path: Path) -> None:
    one, two = stored(tmp_path / "one", 7), stored(tmp_path / "two", 8)
    with pytest.raises(InputError, match=r"beam\.modes\.0\.amplitude = 50.*negative"):
        file_beam(one, modes=(BeamMode(source=two, amplitude=50.0),))


def test_files_are_read_once_until_they_change(tmp_path: Path) -> None:
    source = stored(tmp_path / "one", 7)
    first = read_far_field(source)
    assert read_far_field(source) is first
    power = 2.0 * first.power
    write_netcdf(tmp_path / "one", power)
    path = source.file
    assert read_far_field(source).power == pytest.approx(power, rel=1e-12), path


def test_tables_are_kept_up_to_a_size_and_the_last_whatever_it_is(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    sources = [stored(tmp_path / f"beam{seed}", seed) for seed in (7, 8, 9)]
    size = read_far_field(sources[0]).power.nbytes
    kept = _Kept(int(2.5 * size))
    monkeypatch.setattr(beam_files, "_KEPT", kept)
    first, second = read_far_field(sources[0]), read_far_field(sources[1])
    assert read_far_field(sources[0]) is first
    third = read_far_field(sources[2])  # the second was used longest ago
    assert list(kept.tables) == [sources[0], sources[2]]
    assert read_far_field(sources[0]) is first
    assert read_far_field(sources[2]) is third
    assert read_far_field(sources[1]) is not second
    kept.limit_bytes = size // 2
    last = read_far_field(sources[0])
    assert read_far_field(sources[0]) is last
    assert list(kept.tables) == [sources[0]]


def test_a_table_that_changed_does_not_stay_beside_its_old_one(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    kept = _Kept(2**30)
    monkeypatch.setattr(beam_files, "_KEPT", kept)
    source = stored(tmp_path / "one", 7)
    first = read_far_field(source)
    write_netcdf(tmp_path / "one", 2.0 * first.power)
    assert read_far_field(source).power == pytest.approx(2.0 * first.power, rel=1e-12)
    assert len(kept.tables) == 1


def test_normalisation_is_declared_not_divided_away(tmp_path: Path) -> None:
    one = stored(tmp_path / "one", 7)
    (tmp_path / "half").mkdir()
    half = write_netcdf(tmp_path / "half", 0.5 * read_far_field(one).power, PHI_DEG)
    with pytest.raises(InputError, match=r"the mean of a directivity over the sphere is 1, here 0\.[45]"):
        file_beam(half, missing_power="efficiency")
    (tmp_path / "double").mkdir()
    double = write_netcdf(tmp_path / "double", 2.0 * read_far_field(one).power, PHI_DEG)
    with pytest.raises(InputError, match="radiates more than went in"):
        file_beam(double, quantity="gain", missing_power="ground-loss")
    lost = file_beam(half, quantity="gain", missing_power="ground-loss")
    assert lost.ground_share_at(FREQUENCY) == pytest.approx(0.5, abs=2e-3)
    assert np.all(lost.efficiency_at(FREQUENCY) == 1.0)


@pytest.mark.parametrize(
    ("field", "value"),
    [("ripple_fraction", 0.6), ("ripple_period_mhz", 0.0), ("dimension_scale", 0.5), ("dimension_scale", 2.0)],
)
def test_perturbations_beyond_sense_are_refused(field: str, value: float) -> None:
    with pytest.raises(ValidationError, match=field):
        config.ShortDipole(kind="short-dipole", **LOSSLESS, **{field: value})


def test_frequencies_of_the_cases_hold_the_band() -> None:
    assert FREQUENCY_MHZ[0] < FREQUENCY.min()
    assert 1.05 * FREQUENCY.max() < FREQUENCY_MHZ[-1]
