"""Whether states of an orbit file follow one from the other, as gravity has it: a wrong digit shows.

Stands between `sims.orbit_lines` and `sims.orbit_message`. Interpolation goes through its nodes
whatever they are; a state that is 10 km off, or a sign lost from its motion, would come out
as a plausible orbit. Places, motions and the Moon's pull at two states are tied together
by the trapezoidal rule with end corrections, without solving for an orbit.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sims.constants import EARTH_EQUATORIAL_RADIUS_KM, EARTH_GM_KM3_PER_S2, MOON_GM_KM3_PER_S2, MOON_MEAN_RADIUS_KM

FloatArray = NDArray[np.float64]
PLACE_SLACK_KM, MOTION_SLACK_KM_PER_S = 0.5, 1e-3  # of states that are good to their purpose
# Free-air gravity anomalies of the Moon reach 500 mGal on the ground (from memory); the oblateness makes 50.
_ANOMALY_KM_PER_S2 = 5e-6
_PERIGEE_KM = 356_400.0  # least distance of the Earth (common knowledge)
# Fifth derivatives of place and motion in units of distance and rate are 1 on a circle and at most 2 + 40 e^2 and
# 2 + 300 e^2 on a Kepler orbit (computed along orbits of e = 0 to 2); half as much again for the terms beyond.
_PLACE_REMAINDER, _MOTION_REMAINDER = (3.0, 60.0), (3.0, 450.0)


@dataclass(frozen=True)
class Steps:
    """What two states in a row leave unexplained, and what may be left.

    Attributes
    ----------
    place_km, motion_km_per_s : ndarray[step]
        Amount of the place and the motion that the Moon's gravity leaves over, km and km/s.
    place_limit_km, motion_limit_km_per_s : ndarray[step]
        What the slack, other forces and the rule's own remainder account for.
    """

    place_km: FloatArray
    motion_km_per_s: FloatArray
    place_limit_km: FloatArray
    motion_limit_km_per_s: FloatArray

    @property
    def broken(self) -> NDArray[np.bool_]:
        """Steps that no orbit makes."""
        return (self.place_km > self.place_limit_km) | (self.motion_km_per_s > self.motion_limit_km_per_s)


def steps_between(seconds: FloatArray, place_km: FloatArray, motion_km_per_s: FloatArray) -> Steps:
    """Hold each state against the one before it.

    Parameters
    ----------
    seconds : ndarray[node]
        Time of the states, s, rising.
    place_km, motion_km_per_s : ndarray[node, axis]
        States from the Moon's centre, on axes that do not turn, km and km/s.

    Returns
    -------
    Steps
        Euler-Maclaurin: over a step h, a rate and its slope at both ends give the change
        but for h^5/720 of the fifth derivative, for place and motion alike. At 100 km a circle is judged
        to 0.7 km and 3 m/s at 16 states a turn, to 3.3 km and 7 m/s at 8.
    """
    step = np.diff(seconds)[:, None]
    pull, change = _gravity(place_km, motion_km_per_s)
    place = _left_over(place_km, motion_km_per_s, pull, step)
    motion = _left_over(motion_km_per_s, pull, change, step)
    h = step[:, 0]
    place_rest_km, motion_rest_km_per_s = remainders(seconds, place_km, motion_km_per_s)
    other = _other_forces_km_per_s2(np.linalg.norm(place_km, axis=1))
    return Steps(
        place_km=place,
        motion_km_per_s=motion,
        # A steady force is explained by the motions at both ends; one that turns round leaves at most a sixth.
        place_limit_km=PLACE_SLACK_KM + other * h**2 / 6.0 + place_rest_km,
        motion_limit_km_per_s=MOTION_SLACK_KM_PER_S + other * h + motion_rest_km_per_s,
    )


def remainders(
    seconds: FloatArray, place_km: FloatArray, motion_km_per_s: FloatArray
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """What the rule itself leaves over on a Kepler orbit at most.

    Parameters
    ----------
    seconds : ndarray[node]
        Time of the states, s, rising.
    place_km, motion_km_per_s : ndarray[node, axis]
        As for `steps_between`.

    Returns
    -------
    place_km, motion_km_per_s : ndarray[step]
        By the fifth derivatives at the lowest point of each step: an end or, between
        falling and climbing, the pericentre.
    """
    distance = np.linalg.norm(place_km, axis=1)
    momentum = np.cross(place_km, motion_km_per_s)
    laplace = np.cross(motion_km_per_s, momentum) / MOON_GM_KM3_PER_S2 - place_km / distance[:, None]
    eccentricity = np.linalg.norm(laplace, axis=1)
    pericentre = np.einsum("na,na->n", momentum, momentum) / MOON_GM_KM3_PER_S2 / (1.0 + eccentricity)
    climbs = np.einsum("na,na->n", place_km, motion_km_per_s) > 0.0
    ends = _lesser(distance)
    passed = np.minimum(ends, np.maximum(_lesser(pericentre), MOON_MEAN_RADIUS_KM))
    lowest = np.where(~climbs[:-1] & climbs[1:], passed, ends)
    # Speed at the lowest point, by energy.
    vis_viva = _greater(np.einsum("na,na->n", motion_km_per_s, motion_km_per_s) - 2.0 * MOON_GM_KM3_PER_S2 / distance)
    speed_squared = vis_viva + 2.0 * MOON_GM_KM3_PER_S2 / lowest
    rate = np.sqrt(np.maximum(MOON_GM_KM3_PER_S2 / lowest, speed_squared)) / lowest
    unit_km = lowest * (rate * np.diff(seconds)) ** 5 / 720.0
    squared = np.minimum(_greater(eccentricity), 1.0) ** 2
    place, motion = (least + most * squared for least, most in (_PLACE_REMAINDER, _MOTION_REMAINDER))
    return place * unit_km, motion * rate * unit_km


def _lesser(value: FloatArray) -> FloatArray:
    """The lesser of the two ends of each step."""
    return np.minimum(value[1:], value[:-1])


def _greater(value: FloatArray) -> FloatArray:
    return np.maximum(value[1:], value[:-1])


def _left_over(value: FloatArray, rate: FloatArray, change: FloatArray, step: FloatArray) -> FloatArray:
    explained = step / 2.0 * (rate[:-1] + rate[1:]) - step**2 / 12.0 * (change[1:] - change[:-1])
    return np.asarray(np.linalg.norm(np.diff(value, axis=0) - explained, axis=1))


def _gravity(place_km: FloatArray, motion_km_per_s: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Pull of a point-mass Moon and its rate of change, km/s^2 and km/s^3."""
    distance = np.linalg.norm(place_km, axis=1)[:, None]
    climb = np.einsum("na,na->n", place_km, motion_km_per_s)[:, None] / distance**2
    strength = MOON_GM_KM3_PER_S2 / distance**3
    return -strength * place_km, -strength * (motion_km_per_s - 3.0 * climb * place_km)


def _other_forces_km_per_s2(distance_km: FloatArray) -> FloatArray:
    """Bound of what pulls besides the Moon as a point: its anomalies, and the Earth's tide."""
    anomaly = _ANOMALY_KM_PER_S2 * (MOON_MEAN_RADIUS_KM / _lesser(distance_km)) ** 4
    from_earth_km = np.maximum(_PERIGEE_KM - _greater(distance_km), EARTH_EQUATORIAL_RADIUS_KM)
    tide = EARTH_GM_KM3_PER_S2 * (1.0 / from_earth_km**2 - 1.0 / _PERIGEE_KM**2)
    return np.asarray(anomaly + tide)
