"""How the antenna is turned: every kind of boresight against its definition."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from sims.attitude import Surroundings, attitudes
from sims.config_vantage import (
    AntiSunBoresight,
    Boresight,
    HorizontalBoresight,
    ScheduledBoresight,
    SpinBoresight,
    TabulatedBoresight,
    Target,
    VelocityBoresight,
)
from sims.errors import InputError

COUNT = 40
START = np.datetime64("2027-06-01T00:00:00", "ns")


def around() -> Surroundings:
    """An eccentric orbit's kind of surroundings: motion that climbs, a Sun anywhere."""
    turned = np.linspace(0.0, 5.0, COUNT)
    zero = np.zeros(COUNT)
    tilt = Rotation.from_euler("xz", [0.7, 0.4]).as_matrix()
    zenith = np.stack([np.cos(turned), np.sin(turned), zero], axis=1) @ tilt.T
    forward = np.stack([-np.sin(turned), np.cos(turned), zero], axis=1) @ tilt.T
    velocity = np.cos(0.2) * forward + np.sin(0.2) * zenith
    sun = np.tile(np.array([0.6, -0.64, 0.48]), (COUNT, 1))
    elapsed_s = 30.0 * np.arange(COUNT)
    times = START + (elapsed_s * 1e9).astype("timedelta64[ns]")
    return Surroundings(times, elapsed_s, zenith, forward, velocity, sun)


def axes(boresight: Boresight) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    matrices = Rotation.from_quat(attitudes(boresight, around())[0]).as_matrix()
    return matrices[:, :, 0], matrices[:, :, 1], matrices[:, :, 2]


def test_horizontal_looks_along_the_ground_with_x_up() -> None:
    x, _, z = axes(HorizontalBoresight(kind="horizontal", azimuth_deg=90.0))
    assert z == pytest.approx(np.cross(around().forward, around().zenith), abs=1e-14)
    assert x == pytest.approx(around().zenith, abs=1e-14)
    rolled, _, _ = axes(HorizontalBoresight(kind="horizontal", azimuth_deg=90.0, roll_deg=90.0))
    # Clockwise as seen along the boresight: from up over to the right hand side of one who looks to the right, aft.
    assert rolled == pytest.approx(np.cross(z, x), abs=1e-14)


def test_velocity_looks_where_the_spacecraft_goes_with_x_as_far_up_as_that_allows() -> None:
    x, _, z = axes(VelocityBoresight(kind="velocity"))
    assert z == pytest.approx(around().velocity, abs=1e-14)
    up = np.einsum("ta,ta->t", x, around().zenith)
    assert up == pytest.approx(np.full(COUNT, np.cos(0.2)), abs=1e-14)


def test_anti_sun_turns_its_back_on_the_sun_with_x_to_the_north() -> None:
    x, _, z = axes(AntiSunBoresight(kind="anti-sun", roll_deg=0.0))
    assert z == pytest.approx(-around().sun, abs=1e-14)
    assert (x[:, 2] > 0).all()
    east = np.cross([0.0, 0.0, 1.0], z)
    assert np.einsum("ta,ta->t", x, east) == pytest.approx(np.zeros(COUNT), abs=1e-14)
    rolled, _, _ = axes(AntiSunBoresight(kind="anti-sun", roll_deg=90.0))
    # From north through east: of a direction seen from inside the sphere east lies along the pole times the direction.
    assert np.einsum("ta,ta->t", rolled, east) == pytest.approx(np.linalg.norm(east, axis=1), abs=1e-13)


def test_spin_goes_round_its_axis_once_a_period() -> None:
    spin = SpinBoresight(kind="spin", axis_deg=(120.0, 30.0), angle_deg=25.0, period_s=600.0, phase_deg=15.0)
    x, _, z = axes(spin)
    axis = np.array([np.cos(2 * np.pi / 3), np.sin(2 * np.pi / 3), 0.0]) * np.cos(np.pi / 6)
    axis[2] = 0.5
    assert z @ axis == pytest.approx(np.full(COUNT, np.cos(np.radians(25.0))), abs=1e-14)
    assert x @ axis == pytest.approx(np.full(COUNT, -np.sin(np.radians(25.0))), abs=1e-14)
    assert z[20] == pytest.approx(z[0], abs=1e-13)  # 20 samples of 30 s are a period
    quarter = z[5] - axis * (z[5] @ axis)
    start = z[0] - axis * (z[0] @ axis)
    assert quarter @ start == pytest.approx(0.0, abs=1e-14)
    north = np.array([0.0, 0.0, 1.0]) - 0.5 * axis
    # Phase counts from north: 15 deg of it are left between them at the start.
    assert start @ north / np.linalg.norm(start) / np.linalg.norm(north) == pytest.approx(np.cos(np.radians(15.0)))
    # From north through east is clockwise seen from outside, against the axis's own right-handed turn.
    assert np.cross(start, quarter) @ axis < 0


def test_schedule_keeps_each_target_until_the_next() -> None:
    boresight = ScheduledBoresight(
        kind="schedule",
        targets=(
            Target(start=datetime(2027, 5, 31, tzinfo=UTC), direction_deg=(10.0, 20.0)),
            Target(start=datetime(2027, 6, 1, 0, 5, tzinfo=UTC), direction_deg=(80.0, -40.0), roll_deg=30.0),
        ),
    )
    attitude, turn = attitudes(boresight, around())
    assert turn.tolist() == [0] * 10 + [1] * 30
    z = Rotation.from_quat(attitude).as_matrix()[:, :, 2]
    for number, (ra, dec) in enumerate(np.radians([(10.0, 20.0), (80.0, -40.0)])):
        there = [np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)]
        assert z[turn == number] == pytest.approx(np.tile(there, ((turn == number).sum(), 1)), abs=1e-14)
    late = boresight.model_copy(update={"targets": boresight.targets[1:]})
    with pytest.raises(InputError, match=r"vantage\.boresight\.targets: the first starts at 2027-06-01T00:05"):
        attitudes(late, around())


def test_table_is_turned_through_at_constant_rate(tmp_path: Path) -> None:
    half = np.sqrt(0.5)
    path = tmp_path / "attitude.csv"
    path.write_text(
        "time_utc,qx,qy,qz,qw\n"
        "2027-06-01T00:00:00Z,0,0,0,1\n"
        f"2027-06-01T00:20:00Z,0,0,{half},{half}\n"
    )  # fmt: skip
    boresight = TabulatedBoresight(kind="table", file=path, longest_gap_s=1500.0)
    x, _, z = axes(boresight)
    angle = np.degrees(np.unwrap(np.arctan2(x[:, 1], x[:, 0])))
    # A quarter turn about z in 20 minutes, 30 s a sample.
    assert angle == pytest.approx(90.0 * np.arange(COUNT) / 40.0, abs=1e-9)
    assert z == pytest.approx(np.tile([0.0, 0.0, 1.0], (COUNT, 1)), abs=1e-14)


@pytest.mark.parametrize(
    "boresight",
    [
        HorizontalBoresight(kind="horizontal", azimuth_deg=33.0, roll_deg=12.0),
        VelocityBoresight(kind="velocity", roll_deg=-50.0),
        AntiSunBoresight(kind="anti-sun", roll_deg=77.0),
        SpinBoresight(kind="spin", axis_deg=(0.0, 90.0), angle_deg=0.0, period_s=100.0),
    ],
)
def test_axes_are_right_handed_and_at_right_angles(boresight: Boresight) -> None:
    x, y, z = axes(boresight)
    assert np.cross(x, y) == pytest.approx(z, abs=1e-13)
    assert np.einsum("ta,ta->t", x, z) == pytest.approx(np.zeros(COUNT), abs=1e-13)
