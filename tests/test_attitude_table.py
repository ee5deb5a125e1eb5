"""Attitudes from a file: a constant turn is met exactly, and gaps, ends and bad lines are refused."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from sims.attitude_table import AttitudeTable, attitudes_at, read_attitude_table
from sims.errors import InputError

START = np.datetime64("2027-06-01T00:00:00", "ns")
HEADING = "time_utc,qx,qy,qz,qw\n"
AXIS = np.array([0.48, -0.6, 0.64])
FIRST = Rotation.from_euler("xyz", [0.3, -1.1, 2.0])


def after(seconds: NDArray[np.float64]) -> NDArray[np.datetime64]:
    return np.asarray(START + np.round(seconds * 1e9).astype("timedelta64[ns]"))


def turned(seconds: NDArray[np.float64], rate_rad_per_s: float) -> Rotation:
    return Rotation.from_rotvec(seconds[:, None] * rate_rad_per_s * AXIS) * FIRST


def written(folder: Path, text: str) -> Path:
    path = folder / "attitude.csv"
    path.write_text(text, encoding="utf-8")
    return path


def apart_rad(found: NDArray[np.float64], expected: Rotation) -> float:
    return float((Rotation.from_quat(found).inv() * expected).magnitude().max())


def test_a_turn_at_constant_rate_is_met_exactly(tmp_path: Path) -> None:
    seconds, rate = np.array([0.0, 10.0, 25.0, 100.0, 160.0, 400.0]), 2.0 * np.pi / 600.0
    rows = turned(seconds, rate).as_quat()
    rows[1::2] *= -1.0  # the other sign is the same attitude
    text = HEADING + "".join(
        f"{time}Z," + ",".join(f"{part:.17g}" for part in row) + "\n"
        for time, row in zip(after(seconds).astype("datetime64[us]"), rows, strict=True)
    )
    table = read_attitude_table(written(tmp_path, text))
    wanted = np.sort(np.random.default_rng(7).uniform(0.0, 400.0, 2000))
    wanted[[0, -1]] = 0.0, 400.0
    found = attitudes_at(table, after(wanted), longest_gap_s=300.0)
    assert found.shape == (2000, 4)
    # Rounding, and half a nanosecond of time.
    assert apart_rad(found, turned(wanted, rate)) < 1e-10
    np.testing.assert_allclose(np.linalg.norm(found, axis=1), 1.0, atol=1e-14)  # rounding
    assert np.all(found[:, 3] >= 0.0)


def test_samples_may_come_in_any_order_and_unit() -> None:
    seconds = np.array([0.0, 60.0])
    table = AttitudeTable(after(seconds), turned(seconds, 0.01).as_quat())
    wanted = np.array([42.0, 3.0, 60.0, 0.0])
    found = attitudes_at(table, after(wanted).astype("datetime64[ms]"), longest_gap_s=60.0)
    assert apart_rad(found, turned(wanted, 0.01)) < 1e-12  # rounding


def test_forms_of_time_and_length(tmp_path: Path) -> None:
    text = HEADING + "# comment\n2027-06-01T02:00:00+02:00,0,0,0,1.0009\n2027-06-01 00:00:30.25, 0, 0, 0.6, 0.8\n"
    table = read_attitude_table(written(tmp_path, text))
    np.testing.assert_array_equal(table.times_utc, after(np.array([0.0, 30.25])))
    np.testing.assert_array_equal(table.quaternions, [[0, 0, 0, 1], [0, 0, 0.6, 0.8]])


def test_samples_outside_or_in_gaps_are_refused_and_named() -> None:
    seconds = np.array([0.0, 10.0, 20.0, 100.0, 110.0])
    table = AttitudeTable(after(seconds), turned(seconds, 0.001).as_quat())
    good = np.array([0.0, 5.0, 20.0, 100.0, 110.0])  # the rows beside the gap are themselves given
    assert len(attitudes_at(table, after(good), longest_gap_s=10.0)) == 5
    with pytest.raises(InputError) as caught:
        attitudes_at(table, after(np.array([-1.0, 5.0, 50.0, 60.0, 110.5])), longest_gap_s=10.0)
    outside, gap = caught.value.problems
    assert outside.startswith("vantage.boresight.file: 2 samples, from 2027-05-31T23:59:59")
    assert "2027-06-01T00:01:50.500000000, lie outside the table" in outside
    assert gap.startswith("vantage.boresight.file: 2 samples, from 2027-06-01T00:00:50")
    assert "longer than longest_gap, 10 s" in gap
    assert "from 2027-06-01T00:00:20.000000000 to 2027-06-01T00:01:40" in gap
    with pytest.raises(InputError, match=r"1 sample, at 2027-06-01T00:00:21.* lies in gaps"):
        attitudes_at(table, after(np.array([21.0])), longest_gap_s=79.9)
    with pytest.raises(InputError, match="outside the table"):
        attitudes_at(table, np.array(["NaT"], dtype="datetime64[ns]"), longest_gap_s=79.9)


@pytest.mark.parametrize(
    ("text", "parts"),
    [
        ("", ["no lines"]),
        ("time,qx,qy,qz,qw\n", ["line 1: heading 'time,qx,qy,qz,qw'; it must be time_utc,qx,qy,qz,qw"]),
        (HEADING + "2027-06-01T00:00:00Z,0,0,0,1\n", ["1 rows; at least 2"]),
        (
            HEADING
            + "2027-06-01T00:00:00Z,0,0,0,1\nyesterday,0,0,0,1\n2027-06-01T00:00:10Z,0,0,0,1.002\n"
            + "2027-06-01T00:00:20Z,0,0,nan,x\n2027-06-01T00:00:20Z,0,0,1\n2027-06-01T00:00:05Z,0,0,0,1\n"
            + "2016-12-31T23:59:60Z,0,0,0,0\n2027-06-01T00:00:30Z,1,0,0,0\n",
            [
                "line 3: time_utc is 'yesterday'",
                "line 4: length of the quaternion is 1.002; it must be within 0.001 of 1",
                "line 5: qz is 'nan', qw is 'x'; each must be a finite number",
                "line 6: 4 columns; 5 are needed",
                "line 7: time 2027-06-01T00:00:05.000000Z does not follow 2027-06-01T00:00:20.000000Z",
                "line 8: time_utc is '2016-12-31T23:59:60Z'",
                "line 8: length of the quaternion is 0;",
                "line 9: the antenna turns by 180.0 deg since line 7",
            ],
        ),
    ],
)
def test_bad_files_are_refused_with_their_lines(tmp_path: Path, text: str, parts: list[str]) -> None:
    path = written(tmp_path, text)
    with pytest.raises(InputError) as caught:
        read_attitude_table(path)
    assert len(caught.value.problems) == len(parts)
    assert all(str(path) in problem for problem in caught.value.problems)
    for part in parts:
        assert part in str(caught.value)
