"""The horizon of a site: reading, interpolation round the north, the lookup's error, and what is refused."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from numba import njit
from numpy.typing import NDArray

from sims.errors import InputError
from sims.horizon import (
    LOOKUP_TOLERANCE,
    MOST_CELLS,
    Horizon,
    horizon_sine,
    horizon_table,
    pseudo_azimuth,
    read_horizon,
)

FloatArray = NDArray[np.float64]
HILLS = "azimuth_deg,elevation_deg\n10,2\n95,5.5\n170,0\n260,-1.5\n340,8\n"


@njit
def look_up(table, north, east):  # type: ignore[no-untyped-def]
    found = np.empty(len(north))
    for k in range(len(north)):
        found[k] = horizon_sine(table, north[k], east[k])
    return found


@njit
def pseudo_azimuths(north, east):  # type: ignore[no-untyped-def]
    found = np.empty(len(north))
    for k in range(len(north)):
        found[k] = pseudo_azimuth(north[k], east[k])
    return found


def written(folder: Path, text: str) -> Path:
    path = folder / "horizon.csv"
    path.write_text(text, encoding="utf-8")
    return path


def horizon_of(azimuths_deg: list[float], elevations_deg: list[float]) -> Horizon:
    return Horizon(np.deg2rad(azimuths_deg), np.deg2rad(elevations_deg))


def test_file_is_read_and_interpolated_linearly_round_the_north(tmp_path: Path) -> None:
    horizon = read_horizon(written(tmp_path, "# of a survey\n\n" + HILLS))
    # Rows themselves, halfway between two, and between 340 and 370 deg, on either side of the north and by other turns.
    azimuths_deg = [10.0, 95.0, 52.5, 215.0, 355.0, 0.0, 360.0, -5.0, 5.0, 725.0]
    expected_deg = [2.0, 5.5, 3.75, -0.75, 5.0, 4.0, 4.0, 5.0, 3.0, 3.0]
    np.testing.assert_allclose(np.rad2deg(horizon.elevation_rad(np.deg2rad(azimuths_deg))), expected_deg, atol=1e-12)
    np.testing.assert_allclose(
        np.rad2deg([horizon.lowest_rad, horizon.highest_rad]), [-1.5, 8.0], atol=1e-13
    )  # rounding


def test_rows_at_0_and_360_are_one_place(tmp_path: Path) -> None:
    open_deg = "azimuth_deg,elevation_deg\n0,1\n100,2\n200,3\n"
    azimuth = np.linspace(0.0, 7.0, 50)
    first, second = (
        read_horizon(written(tmp_path, text)).elevation_rad(azimuth) for text in (open_deg, open_deg + "360,1\n")
    )
    np.testing.assert_array_equal(first, second)


def test_pseudo_azimuth_rises_a_quarter_for_a_quarter_turn() -> None:
    azimuth = np.linspace(0.0, 2.0 * np.pi, 100_000, endpoint=False)
    found = pseudo_azimuths(np.cos(azimuth), np.sin(azimuth))
    assert np.all(np.diff(found) > 0.0)
    assert found.min() >= 0.0
    assert found.max() < 4.0
    cardinal = pseudo_azimuths(np.array([1.0, 0.0, -1.0, 0.0, 1.0, 0.0]), np.array([0.0, 1.0, 0.0, -1.0, -1e-300, 0.0]))
    np.testing.assert_array_equal(cardinal, [0.0, 1.0, 2.0, 3.0, 0.0, 0.0])
    # The diagonals lie halfway; length does not matter.
    np.testing.assert_allclose(pseudo_azimuths(np.array([3.0, -0.2]), np.array([3.0, -0.2])), [0.5, 2.5], rtol=1e-15)


@pytest.mark.parametrize(
    "horizon",
    [
        horizon_of([10, 95, 170, 260, 340], [2, 5.5, 0, -1.5, 8]),
        horizon_of([0, 90, 180, 270], [0, 30, 0, 30]),
        Horizon(np.linspace(0.0, 6.2, 400), np.deg2rad(6.0 + 5.0 * np.sin(9.0 * np.linspace(0.0, 6.2, 400)))),
    ],
)
def test_lookup_is_within_its_tolerance(horizon: Horizon) -> None:
    azimuth = np.random.default_rng(20270601).uniform(0.0, 2.0 * np.pi, 200_000)
    azimuth = np.concatenate([azimuth, horizon.azimuths_rad, [0.0, np.pi / 2, np.pi, 1.5 * np.pi, 2 * np.pi - 1e-12]])
    height = np.random.default_rng(1).uniform(0.05, 1.0, azimuth.size)
    table = horizon_table(horizon)
    found = look_up(horizon.table, height * np.cos(azimuth), height * np.sin(azimuth))
    worst = np.abs(found - np.sin(horizon.elevation_rad(azimuth))).max()
    assert worst < LOOKUP_TOLERANCE
    # The error it states is taken at finer places than any of these fall on by much.
    assert worst < 1.1 * table.error
    assert table.error <= LOOKUP_TOLERANCE


def test_level_horizon_is_exact() -> None:
    horizon = horizon_of([0, 120, 240], [3, 3, 3])
    azimuth = np.linspace(0.0, 6.28, 1000)
    found = look_up(horizon.table, np.cos(azimuth), np.sin(azimuth))
    np.testing.assert_allclose(found, np.sin(np.deg2rad(3.0)), rtol=1e-15)  # rounding


def test_a_wall_is_met_within_its_azimuth() -> None:
    # From 0 to 60 deg within a millidegree: no even table follows it, but it stands where it should.
    horizon = horizon_of([50, 50.001, 130, 130.001], [0, 60, 60, 0])
    table = horizon_table(horizon)
    assert len(table.sine) == MOST_CELLS + 1
    assert table.error > LOOKUP_TOLERANCE
    azimuth = np.deg2rad(np.linspace(0.0, 360.0, 400_001))
    found = look_up(table.sine, np.cos(azimuth), np.sin(azimuth))
    step = 1e-4
    around = np.sin(np.stack([horizon.elevation_rad(azimuth + shift) for shift in np.linspace(-step, step, 41)]))
    # Each value is one the horizon takes within 1e-4 rad of azimuth.
    assert np.all(found <= around.max(axis=0) + 1e-12)
    assert np.all(found >= around.min(axis=0) - 1e-12)


@pytest.mark.parametrize(
    ("text", "parts"),
    [
        ("", ["no lines"]),
        ("# nothing but this\n", ["no lines"]),
        ("azimuth,elevation\n0,1\n", ["line 1: heading 'azimuth,elevation'", "azimuth_deg,elevation_deg"]),
        ("azimuth_deg,elevation_deg\n0,1\n90,1\n", ["2 rows; at least 3"]),
        (
            "azimuth_deg,elevation_deg\n0,1\n\n90,95\n90,x\n80,1,2\n-5,nan\n361,1_0\n",
            [
                "line 4: elevation_deg is '95'; it must be a number within -10 to 89",
                "line 5: elevation_deg is 'x'",
                "line 6: 3 columns; 2 are needed",
                "line 7: azimuth_deg is '-5'; it must be a number within 0 to 360",
                "line 7: elevation_deg is 'nan'",
                "line 8: azimuth_deg is '361'",
                "line 8: elevation_deg is '1_0'",
            ],
        ),
        (
            "azimuth_deg,elevation_deg\n0,1\n90,1\n90,2\n45,3\n",
            ["line 4: azimuth_deg 90 follows 90", "line 5: azimuth_deg 45"],
        ),
        ("azimuth_deg,elevation_deg\n0,1\n90,1\n180,1\n360,2\n", ["line 5: elevation_deg at 360 is 2, at 0 it is 1"]),
        ("azimuth_deg,elevation_deg\n0,1\n90,1\n360,1\n", ["2 places on the horizon; at least 3"]),
    ],
)
def test_bad_files_are_refused_with_their_lines(tmp_path: Path, text: str, parts: list[str]) -> None:
    path = written(tmp_path, text)
    with pytest.raises(InputError) as caught:
        read_horizon(path)
    assert all(str(path) in problem for problem in caught.value.problems)
    for part in parts:
        assert part in str(caught.value)


def test_missing_and_binary_files_are_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="cannot be read"):
        read_horizon(tmp_path / "none.csv")
    (tmp_path / "binary.csv").write_bytes(b"\xff\xfe\x00\x9f")
    with pytest.raises(InputError, match="cannot be read as UTF-8"):
        read_horizon(tmp_path / "binary.csv")
