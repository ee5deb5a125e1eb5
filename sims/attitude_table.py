"""Attitudes from a file: a plain table of UTC times and quaternions, turned evenly between its rows.

It stands beside the other ways to point the antenna and feeds `sims.vantage`.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime
from itertools import pairwise
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation, Slerp

from sims.csv_table import CsvRow, finite_number, read_csv_rows
from sims.errors import raise_if_any

FloatArray = NDArray[np.float64]
COLUMNS = ("time_utc", "qx", "qy", "qz", "qw")
LEAST_ROWS = 2
NORM_TOLERANCE = 1e-3
GREATEST_TURN_DEG = 179.0  # from row to row; at half a turn the way from one to the other is open


@dataclass(frozen=True)
class AttitudeTable:
    """Attitudes at instants.

    Parameters
    ----------
    times_utc : ndarray[row] of datetime64[ns]
        UTC, strictly rising.
    quaternions : ndarray[row, quaternion]
        Antenna to ICRS axes, scalar last, of unit length.
    """

    times_utc: NDArray[np.datetime64]
    quaternions: FloatArray


def read_attitude_table(path: Path) -> AttitudeTable:
    """Read attitudes from a CSV file with the heading ``time_utc,qx,qy,qz,qw``.

    Parameters
    ----------
    path : Path
        The file, UTF-8. Times are ISO 8601, UTC unless they carry an offset, strictly rising;
        quaternions rotate antenna vectors into ICRS, scalar last, their length within 1e-3 of 1.

    Returns
    -------
    AttitudeTable

    Raises
    ------
    InputError
        If the file cannot be read, or anything in it is not allowed; lists each with its line.
    """
    rows, problems = read_csv_rows(path, COLUMNS, LEAST_ROWS)
    times: list[tuple[int, datetime]] = []
    quaternions: list[tuple[int, FloatArray]] = []
    for row in rows:
        time, quaternion = _time(row.fields[0]), [finite_number(field) for field in row.fields[1:]]
        if time is None:
            problems.append(
                f"{path}: line {row.line}: time_utc is {row.fields[0]!r}; write it as 2027-06-01T00:00:00Z "
                "(a leap second itself, :60, cannot be given)"
            )
        else:
            times.append((row.line, time))
        quaternion_problem = _quaternion_problem(row, quaternion)
        if quaternion_problem:
            problems.append(f"{path}: line {row.line}: {quaternion_problem}")
        else:
            quaternions.append((row.line, np.array(quaternion, dtype=float)))
    problems += [
        f"{path}: line {line}: time {time:%Y-%m-%dT%H:%M:%S.%fZ} does not follow {before:%Y-%m-%dT%H:%M:%S.%fZ}; "
        "times must rise strictly"
        for (_, before), (line, time) in pairwise(times)
        if not time > before
    ]
    problems += [
        f"{path}: line {line}: the antenna turns by {turn:.1f} deg since line {before}, above "
        f"{GREATEST_TURN_DEG:g} deg: the sense of the turn is open, give rows between"
        for (before, first), (line, second) in pairwise(quaternions)
        if (turn := _turn_deg(first, second)) > GREATEST_TURN_DEG
    ]
    raise_if_any(problems)
    values = np.array([quaternion for _, quaternion in quaternions])
    return AttitudeTable(
        times_utc=np.array([time.replace(tzinfo=None) for _, time in times], dtype="datetime64[ns]"),
        quaternions=values / np.linalg.norm(values, axis=1, keepdims=True),
    )


def _time(text: str) -> datetime | None:
    try:
        time = datetime.fromisoformat(text)
        return time.replace(tzinfo=UTC) if time.tzinfo is None else time.astimezone(UTC)
    except (ValueError, OverflowError):
        return None


def _quaternion_problem(row: CsvRow, quaternion: list[float | None]) -> str | None:
    wrong = [
        f"{name} is {field!r}"
        for name, field, value in zip(COLUMNS[1:], row.fields[1:], quaternion, strict=True)
        if value is None
    ]
    if wrong:
        return ", ".join(wrong) + "; each must be a finite number"
    norm = float(np.linalg.norm(np.array(quaternion, dtype=float)))
    if not abs(norm - 1.0) <= NORM_TOLERANCE:
        return f"length of the quaternion is {norm:.6g}; it must be within {NORM_TOLERANCE:g} of 1"
    return None


def _turn_deg(first: FloatArray, second: FloatArray) -> float:
    """Angle of the shorter rotation between two attitudes, deg."""
    product = Rotation.from_quat(first).inv() * Rotation.from_quat(second)
    return float(np.rad2deg(product.magnitude()))


def attitudes_at(table: AttitudeTable, times_utc: NDArray[np.datetime64], longest_gap_s: float) -> FloatArray:
    """Attitudes at the samples: a turn at constant rate, the shorter way, from row to row.

    Parameters
    ----------
    table : AttitudeTable
    times_utc : ndarray[time] of datetime64
        UTC. Like the samples themselves, time is counted on the labels: between two rows round
        a leap second the turn is spread over one second less than it took.
    longest_gap_s : float
        Greatest step between rows, s, that is still bridged.

    Returns
    -------
    ndarray[time, quaternion]
        Antenna to ICRS axes, scalar last and not negative.

    Raises
    ------
    InputError
        If samples lie outside the table, or between rows further apart than that; names them.
    """
    wanted = times_utc.astype("datetime64[ns]")
    first, last = table.times_utc[0], table.times_utc[-1]
    problems = []
    outside = wanted[~((wanted >= first) & (wanted <= last))]
    if outside.size:
        problems.append(
            f"vantage.boresight.file: {_listed(outside)} outside the table of attitudes, which runs from {first} to "
            f"{last} UTC"
        )
    after = np.searchsorted(table.times_utc, wanted, side="left").clip(1, len(table.times_utc) - 1)
    before = after - 1
    gap_s = (table.times_utc[after] - table.times_utc[before]) / np.timedelta64(1, "s")
    between = (wanted > table.times_utc[before]) & (wanted < table.times_utc[after])
    unbridged = np.flatnonzero(between & (gap_s > longest_gap_s))
    if unbridged.size:
        row = before[unbridged[0]]
        problems.append(
            f"vantage.boresight.file: {_listed(wanted[unbridged])} in gaps longer than longest_gap, "
            f"{longest_gap_s:g} s; the first gap runs from {table.times_utc[row]} to {table.times_utc[row + 1]}"
        )
    raise_if_any(problems)
    turning = Slerp((table.times_utc - first) / np.timedelta64(1, "s"), Rotation.from_quat(table.quaternions))
    rotations = turning((wanted - first) / np.timedelta64(1, "s"))
    return np.asarray(rotations.as_quat(canonical=True))


def _listed(times: NDArray[np.datetime64]) -> str:
    if times.size == 1:
        return f"1 sample, at {times[0]}, lies"
    return f"{times.size} samples, from {times.min()} to {times.max()}, lie"
