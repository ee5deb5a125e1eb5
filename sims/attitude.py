"""How the antenna is turned at each sample: one function a kind of boresight.

Stands between the places of a vantage (`View`) and the geometry of the samples. An attitude
is a quaternion, scalar last, that takes antenna-frame vectors (z the boresight, x along a
horizontal wire) to ICRS axes.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from sims.attitude_table import attitudes_at, read_attitude_table
from sims.config_vantage import (
    AntiSunBoresight,
    Boresight,
    FixedBoresight,
    HorizontalBoresight,
    ScheduledBoresight,
    SpinBoresight,
    TabulatedBoresight,
    VelocityBoresight,
    VerticalBoresight,
)
from sims.errors import InputError

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Surroundings:
    """What an attitude can be laid along, one row a sample, ICRS axes.

    Parameters
    ----------
    times_utc : ndarray[time] of datetime64[ns]
        UTC.
    elapsed_s : ndarray[time]
        Since the start of the observation, s.
    zenith, forward : ndarray[time, axis]
        Unit vectors at right angles: up, and the direction azimuth is counted from (motion in
        orbit, north on the ground).
    velocity : ndarray[time, axis]
        Unit vector of the motion round the body below.
    sun : ndarray[time, axis]
        Unit vector to the Sun.
    """

    times_utc: NDArray[np.datetime64]
    elapsed_s: FloatArray
    zenith: FloatArray
    forward: FloatArray
    velocity: FloatArray
    sun: FloatArray

    @property
    def right(self) -> FloatArray:
        """Unit vector at azimuth 90 deg: east on the ground."""
        return np.cross(self.forward, self.zenith)


def attitudes(boresight: Boresight, around: Surroundings) -> tuple[FloatArray, NDArray[np.int64]]:
    """Attitude of every sample, and which of the listed directions it belongs to.

    Parameters
    ----------
    boresight : Boresight
        The ``[vantage.boresight]`` table.
    around : Surroundings
        What it may be laid along.

    Returns
    -------
    attitude : ndarray[time, quaternion]
        Antenna to ICRS, scalar last.
    pointing : ndarray[time] of int
        Number of the direction or target in turn; zero for boresights that list none.

    Raises
    ------
    InputError
        If a schedule or a table does not cover the samples.
    """
    none = np.zeros(len(around.elapsed_s), dtype=np.int64)
    if isinstance(boresight, FixedBoresight):
        turn = pointing_turns(around.elapsed_s, boresight.dwell_s, len(boresight.directions_deg))
        return fixed_attitudes(boresight)[turn], turn
    if isinstance(boresight, ScheduledBoresight):
        return _scheduled(boresight, around.times_utc)
    if isinstance(boresight, TabulatedBoresight):
        table = read_attitude_table(boresight.file)
        return attitudes_at(table, around.times_utc, boresight.longest_gap_s), none
    return _along(boresight, around), none


def _along(
    boresight: VerticalBoresight | HorizontalBoresight | VelocityBoresight | AntiSunBoresight | SpinBoresight,
    around: Surroundings,
) -> FloatArray:
    """Attitudes that follow from the directions round the antenna alone."""
    if isinstance(boresight, VerticalBoresight):
        return attitude_from(around.zenith, _at_azimuth(around, boresight.azimuth_deg))
    if isinstance(boresight, HorizontalBoresight):
        z = _at_azimuth(around, boresight.azimuth_deg)
        return attitude_from(z, _rolled(z, around.zenith, boresight.roll_deg))
    if isinstance(boresight, VelocityBoresight):
        up = _across(around.zenith, around.velocity)
        return attitude_from(around.velocity, _rolled(around.velocity, up, boresight.roll_deg))
    if isinstance(boresight, AntiSunBoresight):
        return attitude_from(-around.sun, _rolled_from_north(-around.sun, boresight.roll_deg))
    return _spinning(boresight, around.elapsed_s)


def pointing_turns(elapsed_s: FloatArray, dwell_s: float, directions: int) -> NDArray[np.int64]:
    """Number of the boresight direction in turn at each time.

    Parameters
    ----------
    elapsed_s : ndarray[time]
        Time since the start, s.
    dwell_s : float
        Time spent on each direction before the next has its turn, s.
    directions : int
        Number of directions; after the last comes the first again.

    Returns
    -------
    ndarray[time]
    """
    turns = elapsed_s / dwell_s
    whole = np.round(turns)
    # Seven steps of 0.7 s fall short of a dwell of 4.9 s by rounding alone: the next has its turn.
    arrived = np.abs(turns - whole) <= 4.0 * np.finfo(float).eps * whole
    return np.asarray(np.where(arrived, whole, np.floor(turns)).astype(np.int64) % directions)


def attitude_from(z: FloatArray, x: FloatArray) -> FloatArray:
    """Quaternions (scalar last, not negative) that take the antenna's z and x to these unit vectors at right angles."""
    matrices = np.stack([x, np.cross(z, x), z], axis=-1)
    return np.asarray(Rotation.from_matrix(matrices).as_quat(canonical=True))


def fixed_attitudes(boresight: FixedBoresight) -> FloatArray:
    """Attitudes of an antenna that holds its boresight on directions in the sky.

    Parameters
    ----------
    boresight : FixedBoresight
        ICRS directions and the roll about them.

    Returns
    -------
    ndarray[direction, quaternion]
        Antenna to ICRS, scalar last: z to the direction, x at the roll angle from ICRS north
        through east.
    """
    return _to_directions(np.asarray(boresight.directions_deg, dtype=float), np.full(1, boresight.roll_deg))


def _to_directions(directions_deg: FloatArray, roll_deg: FloatArray) -> FloatArray:
    ra, dec = np.deg2rad(directions_deg).T
    z = np.stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)], axis=-1)
    north = np.stack([-np.sin(dec) * np.cos(ra), -np.sin(dec) * np.sin(ra), np.cos(dec)], axis=-1)
    east = np.stack([-np.sin(ra), np.cos(ra), np.zeros_like(ra)], axis=-1)
    roll = np.deg2rad(roll_deg)[:, None]
    return attitude_from(z, np.cos(roll) * north + np.sin(roll) * east)


def _scheduled(
    boresight: ScheduledBoresight, times_utc: NDArray[np.datetime64]
) -> tuple[FloatArray, NDArray[np.int64]]:
    starts = np.array(
        [np.datetime64(target.start.astimezone(UTC).replace(tzinfo=None), "ns") for target in boresight.targets]
    )
    if times_utc[0] < starts[0]:
        raise InputError(
            f"vantage.boresight.targets: the first starts at {starts[0]}, after the first sample at {times_utc[0]}; "
            "a schedule must cover the observation from its start"
        )
    turn = np.searchsorted(starts, times_utc, side="right") - 1
    directions_deg = np.array([target.direction_deg for target in boresight.targets])
    roll_deg = np.array([target.roll_deg for target in boresight.targets])
    return _to_directions(directions_deg, roll_deg)[turn], np.asarray(turn, dtype=np.int64)


def _spinning(boresight: SpinBoresight, elapsed_s: FloatArray) -> FloatArray:
    """Boresight going round the axis, from ICRS north through east, its x axis always away from the axis."""
    ra, dec = np.deg2rad(boresight.axis_deg)
    axis = np.array([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)])
    north = np.array([-np.sin(dec) * np.cos(ra), -np.sin(dec) * np.sin(ra), np.cos(dec)])
    east = np.array([-np.sin(ra), np.cos(ra), 0.0])
    turned = (np.deg2rad(boresight.phase_deg) + 2.0 * np.pi * elapsed_s / boresight.period_s)[:, None]
    outward = np.cos(turned) * north + np.sin(turned) * east
    angle = np.deg2rad(boresight.angle_deg)
    z = np.cos(angle) * axis + np.sin(angle) * outward
    return attitude_from(z, np.cos(angle) * outward - np.sin(angle) * axis)


def _at_azimuth(around: Surroundings, azimuth_deg: float) -> FloatArray:
    azimuth = np.deg2rad(azimuth_deg)
    return np.asarray(np.cos(azimuth) * around.forward + np.sin(azimuth) * around.right)


def _rolled(z: FloatArray, x: FloatArray, roll_deg: float) -> FloatArray:
    """The unit vectors `x`, turned about `z` clockwise as seen along it."""
    roll = np.deg2rad(roll_deg)
    return np.asarray(np.cos(roll) * x + np.sin(roll) * np.cross(z, x))


def _rolled_from_north(z: FloatArray, roll_deg: float) -> FloatArray:
    """Unit vectors across `z` at the roll angle from ICRS north through east."""
    north = _across(np.broadcast_to([0.0, 0.0, 1.0], z.shape), z)
    return _rolled(z, north, -roll_deg)


def _across(vector: FloatArray, z: FloatArray) -> FloatArray:
    """Unit vectors along what of `vector` lies across `z`."""
    across = vector - np.einsum("ta,ta->t", vector, z)[:, None] * z
    return np.asarray(across / np.linalg.norm(across, axis=-1, keepdims=True))
