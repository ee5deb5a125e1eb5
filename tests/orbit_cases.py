"""Orbits round the Moon to test with: by elements, and integrated in the field of an oblate Moon."""

from __future__ import annotations

import numpy as np
from astropy.time import Time
from numpy.typing import NDArray
from scipy.integrate import solve_ivp

from sims.config import LunarOrbit, VerticalBoresight
from sims.constants import MOON_GM_KM3_PER_S2, MOON_J2_RADIUS_KM
from sims.moon_frame import lunar_equator_axes
from sims.orbit import OrbitTrack, lunar_orbit

FloatArray = NDArray[np.float64]
START = Time("2027-06-01T00:00:00", scale="tdb").tt
# Equator of that instant: elements of the tests refer to it.
EQUATOR = lunar_equator_axes(START)


def orbit(**changes: object) -> LunarOrbit:
    elements = {"altitude_km": 100.0, "inclination_deg": 60.0, "node_deg": 40.0, "phase_deg": 0.0} | changes
    return LunarOrbit(kind="lunar-orbit", boresight=VerticalBoresight(kind="vertical"), **elements)


def after(seconds: FloatArray | list[float]) -> Time:
    return Time(START.jd1, START.jd2 + np.asarray(seconds, dtype=float) / 86_400.0, format="jd", scale="tt")


def track(settings: LunarOrbit, seconds: FloatArray | list[float]) -> OrbitTrack:
    return lunar_orbit(settings, after(seconds), START)


def acceleration(place: FloatArray, j2: float) -> FloatArray:
    """Of an oblate Moon whose axis is z, km/s^2; the gradient of `potential`."""
    distance = np.sqrt(place @ place)
    pull = 1.5 * j2 * MOON_GM_KM3_PER_S2 * MOON_J2_RADIUS_KM**2 / distance**5
    height = 5.0 * (place[2] / distance) ** 2
    return -MOON_GM_KM3_PER_S2 * place / distance**3 + pull * place * (height - np.array([1.0, 1.0, 3.0]))


def potential(place: FloatArray, j2: float) -> FloatArray:
    distance = np.linalg.norm(place, axis=-1)
    oblate = 0.5 * j2 * (MOON_J2_RADIUS_KM / distance) ** 2 * (3.0 * (place[..., 2] / distance) ** 2 - 1.0)
    return np.asarray(-MOON_GM_KM3_PER_S2 / distance * (1.0 - oblate))


def integrated(state: FloatArray, seconds: FloatArray, j2: float) -> FloatArray:
    """States on the equator's axes by an eighth-order Runge-Kutta method: ndarray[time, 6]."""
    found = solve_ivp(
        lambda _, y: np.concatenate([y[3:], acceleration(y[:3], j2)]),
        (0.0, seconds[-1]), state, method="DOP853", rtol=1e-13, atol=1e-11, t_eval=seconds,
    )  # fmt: skip
    states = np.asarray(found.y.T)
    energy = 0.5 * (states[:, 3:] ** 2).sum(axis=1) + potential(states[:, :3], j2)
    # Energy in the potential that the force is the gradient of: what the integrator's tolerance leaves.
    np.testing.assert_allclose(energy, energy[0], rtol=1e-9)
    return states


def first_state(settings: LunarOrbit) -> FloatArray:
    found = track(settings, [0.0])
    return np.concatenate([EQUATOR @ found.position_km[0], EQUATOR @ found.velocity_km_per_s[0]])
