"""States that follow one from the other: true motion passes whatever pulls at it, a wrong digit does not."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from orbit_cases import acceleration, first_state, integrated, orbit, track
from scipy.integrate import solve_ivp

from sims.constants import EARTH_GM_KM3_PER_S2, MOON_J2
from sims.orbit import period_s
from sims.orbit_sequence import remainders, steps_between

FloatArray = NDArray[np.float64]
ELLIPSES = [(100.0, 0.0), (500.0, 0.15), (1400.0, 0.4), (5000.0, 0.7), (18_000.0, 0.9), (58_000.0, 0.96)]


def test_what_a_circle_leaves_over_has_its_closed_form() -> None:
    step, radius_km = 0.1, 1837.4  # rad, km
    angles = step * np.arange(5)
    rate = 2.0 * np.pi / period_s(100.0)
    place = radius_km * np.stack([np.cos(angles), np.sin(angles), 0.0 * angles], axis=1)
    motion = radius_km * rate * np.stack([-np.sin(angles), np.cos(angles), 0.0 * angles], axis=1)
    found = steps_between(angles / rate, place, motion)
    # Euler-Maclaurin: h^5/720 of the fifth derivative; the next term is h^2/42 of it.
    np.testing.assert_allclose(found.place_km, radius_km * step**5 / 720.0, rtol=1e-3)
    np.testing.assert_allclose(found.motion_km_per_s, rate * radius_km * step**5 / 720.0, rtol=1e-3)


@pytest.mark.parametrize(("altitude_km", "eccentricity"), ELLIPSES)
@pytest.mark.parametrize("states_a_turn", [6, 12, 25, 50, 100, 400])
def test_what_any_ellipse_leaves_over_is_within_its_bound(
    altitude_km: float, eccentricity: float, states_a_turn: int
) -> None:
    settings = orbit(altitude_km=altitude_km, eccentricity=eccentricity, oblateness=False)
    for offset in np.linspace(0.0, 1.0, 11):
        seconds = (np.arange(2 * states_a_turn + 1) + offset) * period_s(altitude_km) / states_a_turn
        found = track(settings, seconds)
        states = (seconds, found.position_km, found.velocity_km_per_s)
        steps, (place_km, motion_km_per_s) = steps_between(*states), remainders(*states)
        assert not steps.broken.any()
        # Without the slack, which is for the states themselves: but for rounding.
        assert (steps.place_km < place_km + 1e-6).all()
        assert (steps.motion_km_per_s < motion_km_per_s + 1e-9).all()


def test_an_oblate_moon_passes() -> None:
    settings = orbit(altitude_km=100.0, eccentricity=0.02)
    seconds = np.linspace(0.0, 5.0 * period_s(100.0), 500)
    states = integrated(first_state(settings), seconds, MOON_J2)
    found = steps_between(seconds, states[:, :3], states[:, 3:])
    # 5e-4 of the Moon's pull for 70 s leaves 5 cm/s: ten times less than the anomalies are allowed.
    assert found.motion_km_per_s.max() < 1e-4
    assert found.place_km.max() < 1e-2


@pytest.mark.parametrize("altitude_km", [20_000.0, 40_000.0])
def test_an_earth_at_perigee_passes(altitude_km: float) -> None:
    settings = orbit(altitude_km=altitude_km, eccentricity=0.3, oblateness=False)
    seconds = np.linspace(0.0, period_s(altitude_km), 100)
    earth_km = 356_400.0 * np.array([0.8, 0.6, 0.0])

    def motion(_: float, state: FloatArray) -> FloatArray:
        away = earth_km - state[:3]
        tide = EARTH_GM_KM3_PER_S2 * (away / np.linalg.norm(away) ** 3 - earth_km / np.linalg.norm(earth_km) ** 3)
        return np.concatenate([state[3:], acceleration(state[:3], 0.0) + tide])

    states = solve_ivp(
        motion, (0.0, seconds[-1]), first_state(settings), method="DOP853", rtol=1e-12, t_eval=seconds
    ).y.T
    found = steps_between(seconds, states[:, :3], states[:, 3:])
    assert not found.broken.any()
    # It would be told without the allowance: this tests the allowance, not the slack.
    assert found.motion_km_per_s.max() > 1e-3


@pytest.mark.parametrize("node", [0, 1, 20, 59])
@pytest.mark.parametrize(("altitude_km", "eccentricity"), [(100.0, 0.0), (500.0, 0.15)])
def test_a_kilometre_or_five_metres_a_second_break_the_steps_on_both_sides(
    node: int, altitude_km: float, eccentricity: float
) -> None:
    seconds = np.arange(60) * 120.0
    found = track(orbit(altitude_km=altitude_km, eccentricity=eccentricity, oblateness=False), seconds)
    for direction in np.random.default_rng(3).normal(size=(20, 3)):
        for place_km, motion_km_per_s in ((1.0, 0.0), (0.0, 5e-3)):
            place, motion = found.position_km.copy(), found.velocity_km_per_s.copy()
            place[node] += place_km * direction / np.linalg.norm(direction)
            motion[node] += motion_km_per_s * direction / np.linalg.norm(direction)
            broken = np.flatnonzero(steps_between(seconds, place, motion).broken)
            assert broken.tolist() == [step for step in (node - 1, node) if 0 <= step < 59]
