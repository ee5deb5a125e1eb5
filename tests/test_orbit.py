"""Orbits by their elements: against Kepler's laws and integrated motion, counted from where the IAU says."""

from __future__ import annotations

from datetime import UTC, datetime

import numpy as np
import pytest
from astropy.time import Time
from numpy.typing import NDArray
from orbit_cases import EQUATOR, START, first_state, integrated, orbit, track

from sims.constants import MOON_GM_KM3_PER_S2, MOON_MEAN_RADIUS_KM
from sims.orbit import argument_of_latitude, eccentric_anomaly_rad, lunar_orbit, period_s, whole_turn

FloatArray = NDArray[np.float64]
# 2027-06-01T00 TDB: the Moon's north pole on mean-Earth axes (ICRS), computed from DE421.
POLE_DEG = (272.85138, 67.63809)
ARCSEC = np.pi / 180.0 / 3600.0


def unit(longitude_deg: float, latitude_deg: float) -> FloatArray:
    longitude, latitude = np.deg2rad(longitude_deg), np.deg2rad(latitude_deg)
    return np.array([np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude), np.sin(latitude)])


# --- Kepler ---------------------------------------------------------------------------------------------------------


def test_period_at_100_km_follows_kepler() -> None:
    # 7067.460 s: Kepler's third law with GM of DE421 and the radius of the NASA fact sheet, given to the millisecond.
    assert period_s(100.0) == pytest.approx(7067.460, abs=5e-4)


@pytest.mark.parametrize("eccentricity", [0.0, 1e-8, 0.1, 0.5, 0.9, 0.99, 0.999])
def test_keplers_equation_is_solved_to_rounding(eccentricity: float) -> None:
    small = np.geomspace(1e-12, 1.0, 300)
    wanted = np.concatenate([-small, [0.0], small, np.linspace(-np.pi, np.pi, 3001)[1:-1], [np.pi]])
    # M from E is a closed form, evaluated where E - sin E does not cancel.
    exact = np.where(np.abs(wanted) < 1e-3, wanted**3 / 6.0 - wanted**5 / 120.0, wanted - np.sin(wanted))
    mean = (1.0 - eccentricity) * wanted + eccentricity * exact
    found = eccentric_anomaly_rad(mean, eccentricity)
    # Rounding of M within its turn, and what it is worth in E; at half a turn either sign will do.
    worth = 1e-15 / (1.0 - eccentricity * np.cos(wanted))
    assert (np.abs(np.abs(found - wanted) - 2.0 * np.pi * (np.abs(found - wanted) > 6.0)) <= worth).all()
    assert (np.abs(found) <= np.pi).all()
    # Whole turns are taken off first, at the rounding of the large angle.
    turned = eccentric_anomaly_rad(mean[:-1] + 200.0 * np.pi, eccentricity)
    assert (np.abs(turned - found[:-1]) <= 2e-13 / (1.0 - eccentricity * np.cos(wanted[:-1]))).all()


ELLIPSES = [(100.0, 0.0), (300.0, 0.1), (2000.0, 0.5), (20_000.0, 0.9)]


@pytest.mark.parametrize(("altitude_km", "eccentricity"), ELLIPSES)
def test_energy_momentum_and_pericentre_of_the_point_mass_orbit_stay(altitude_km: float, eccentricity: float) -> None:
    settings = orbit(
        altitude_km=altitude_km, eccentricity=eccentricity, pericentre_deg=70.0, phase_deg=15.0, oblateness=False
    )
    found = track(settings, np.linspace(0.0, 10.0 * period_s(altitude_km), 5000))
    axis_km = MOON_MEAN_RADIUS_KM + altitude_km
    place, motion = found.position_km, found.velocity_km_per_s
    distance = np.linalg.norm(place, axis=1)
    momentum = np.cross(place, motion)
    # Rounding, magnified by 1/(1 - e) at the pericentre.
    energy = (motion**2).sum(axis=1) / 2.0 - MOON_GM_KM3_PER_S2 / distance
    np.testing.assert_allclose(energy, -MOON_GM_KM3_PER_S2 / (2.0 * axis_km), rtol=1e-12)
    # Wanted: momentum sqrt(GM a (1 - e^2)) at the inclination from the pole, and e towards the pericentre.
    size = np.sqrt(MOON_GM_KM3_PER_S2 * axis_km * (1.0 - eccentricity**2))
    np.testing.assert_allclose(momentum, np.broadcast_to(momentum[0], momentum.shape), atol=1e-12 * size)
    assert np.linalg.norm(momentum[0]) == pytest.approx(size, rel=1e-13)
    laplace = np.cross(motion, momentum) / MOON_GM_KM3_PER_S2 - place / distance[:, None]
    node, pole = EQUATOR.T @ np.array([np.cos(np.deg2rad(40.0)), np.sin(np.deg2rad(40.0)), 0.0]), EQUATOR[2]
    crest = np.cross(momentum[0] / size, node)
    towards = np.cos(np.deg2rad(70.0)) * node + np.sin(np.deg2rad(70.0)) * crest
    np.testing.assert_allclose(laplace, np.broadcast_to(eccentricity * towards, laplace.shape), atol=1e-12)
    assert momentum[0] @ pole / size == pytest.approx(np.cos(np.deg2rad(60.0)), abs=1e-13)
    # The samples come within 1e-5 of the axis of either end.
    assert distance.min() == pytest.approx(axis_km * (1.0 - eccentricity), rel=1e-4 / (1.0 - eccentricity))
    assert distance.max() == pytest.approx(axis_km * (1.0 + eccentricity), rel=1e-4)


@pytest.mark.parametrize(("altitude_km", "eccentricity"), ELLIPSES)
def test_point_mass_orbit_agrees_with_integrated_motion(altitude_km: float, eccentricity: float) -> None:
    settings = orbit(
        altitude_km=altitude_km, eccentricity=eccentricity, pericentre_deg=70.0, phase_deg=100.0, oblateness=False
    )
    seconds = np.linspace(0.0, 3.0 * period_s(altitude_km), 200)
    states = integrated(first_state(settings), seconds, 0.0)
    found = track(settings, seconds)
    # What the integrator leaves between its steps: measured 2e-6 km at e = 0.9, 6e-10 km on the circle.
    np.testing.assert_allclose(found.position_km @ EQUATOR.T, states[:, :3], atol=1e-5)
    np.testing.assert_allclose(found.velocity_km_per_s @ EQUATOR.T, states[:, 3:], atol=1e-8)


@pytest.mark.parametrize("inclination_deg", [0.0, 35.0, 90.0, 150.0])
def test_circular_orbit_lies_in_a_fixed_plane_of_the_right_inclination(inclination_deg: float) -> None:
    found = track(orbit(inclination_deg=inclination_deg, oblateness=False), np.linspace(0.0, 3.0 * 86_400.0, 997))
    radius = np.linalg.norm(found.position_km, axis=-1)
    speed = np.linalg.norm(found.velocity_km_per_s, axis=-1)
    normal = np.cross(found.position_km, found.velocity_km_per_s) / (radius * speed)[:, None]
    np.testing.assert_allclose(radius, MOON_MEAN_RADIUS_KM + 100.0, rtol=1e-14)  # rounding
    # sqrt(GM/r) with GM 4902.800 km^3/s^2 (DE421).
    np.testing.assert_allclose(speed, np.sqrt(4902.800 / 1837.4), rtol=1e-14)  # rounding
    np.testing.assert_allclose(normal, np.broadcast_to(normal[0], normal.shape), atol=1e-14)  # rounding
    # Against the pole of DE421: within 20 arcsec, as the tests of the Moon's axes show.
    assert np.rad2deg(np.arccos(normal[0] @ unit(*POLE_DEG))) == pytest.approx(inclination_deg, abs=20.0 / 3600.0)


# --- where elements are counted from ---------------------------------------------------------------------------------


def test_node_and_phase_are_counted_from_where_the_iau_puts_them() -> None:
    place = track(orbit(node_deg=0.0), [0.0]).position_km[0]
    # The node Q lies at right ascension of the pole + 90 deg, declination 0. Along the equator the pole's 20 arcsec in
    # right ascension count in full once divided by cos(67.6 deg): 53 arcsec.
    assert np.arccos(place @ unit(POLE_DEG[0] + 90.0, 0.0) / np.linalg.norm(place)) < 53.0 * ARCSEC
    pole = EQUATOR[2]
    motion = track(orbit(node_deg=0.0), [0.0]).velocity_km_per_s[0]
    assert place @ pole == pytest.approx(0.0, abs=1e-9)  # rounding, km
    assert motion @ pole / np.linalg.norm(motion) == pytest.approx(np.sin(np.deg2rad(60.0)), abs=1e-12)  # it ascends
    crest = track(orbit(phase_deg=90.0), [0.0]).position_km[0]
    assert crest @ pole / 1837.4 == pytest.approx(np.sin(np.deg2rad(60.0)), abs=1e-12)  # rounding
    # A quarter turn of the node, seen from the north, carries the place eastward along the equator.
    east = track(orbit(node_deg=90.0), [0.0]).position_km[0]
    np.testing.assert_allclose(east, np.cross(pole, place), atol=1e-9)  # rounding, km


def test_phase_is_the_mean_argument_of_latitude_so_that_pericentre_does_not_move_a_circular_orbit() -> None:
    seconds = np.linspace(0.0, 1e5, 300)
    plain = track(orbit(phase_deg=33.0, oblateness=False), seconds)
    turned = track(orbit(phase_deg=33.0, pericentre_deg=-120.0, oblateness=False), seconds)
    np.testing.assert_allclose(turned.position_km, plain.position_km, atol=1e-9)  # rounding, km
    # At phase = pericentre an ellipse is at its lowest, half a turn on at its highest.
    for phase_deg, distance_km in ((50.0, 2037.4 * 0.9), (230.0, 2037.4 * 1.1)):
        settings = orbit(altitude_km=300.0, eccentricity=0.1, pericentre_deg=50.0, phase_deg=phase_deg)
        found = track(settings, [0.0])
        assert np.linalg.norm(found.position_km[0]) == pytest.approx(distance_km, rel=1e-14)
        assert found.phase[0] == pytest.approx(phase_deg / 360.0, abs=1e-14)


@pytest.mark.parametrize("inclination_deg", [0.001, 40.0, 90.0, 179.9])
def test_phase_is_the_true_argument_of_latitude(inclination_deg: float) -> None:
    settings = orbit(
        altitude_km=800.0, eccentricity=0.3, inclination_deg=inclination_deg, pericentre_deg=200.0, phase_deg=-75.0
    )
    found = track(settings, np.linspace(0.0, 5e5, 2000))
    own = argument_of_latitude(found.position_km, found.velocity_km_per_s, EQUATOR)
    # Rounding of the node of an orbit 1e-5 rad from the equator.
    np.testing.assert_allclose(np.abs((own - found.phase + 0.5) % 1.0 - 0.5), 0.0, atol=1e-10)
    height = np.einsum("ta,a->t", found.position_km, EQUATOR[2]) / np.linalg.norm(found.position_km, axis=1)
    expected = np.sin(np.deg2rad(inclination_deg)) * np.sin(2.0 * np.pi * found.phase)
    np.testing.assert_allclose(height, expected, atol=1e-13)  # rounding


def test_argument_of_latitude_of_an_equatorial_orbit_counts_from_the_first_axis() -> None:
    for inclination_deg, sense in ((0.0, 1.0), (180.0, -1.0)):
        found = track(orbit(inclination_deg=inclination_deg, node_deg=0.0, oblateness=False), np.arange(0.0, 9e3, 60.0))
        east = np.arctan2(found.position_km @ EQUATOR[1], found.position_km @ EQUATOR[0])
        own = argument_of_latitude(found.position_km, found.velocity_km_per_s, EQUATOR)
        np.testing.assert_allclose(np.abs((own - sense * east / (2 * np.pi) + 0.5) % 1.0 - 0.5), 0.0, atol=1e-12)


def test_phase_stays_within_one_turn_and_returns_after_a_period() -> None:
    turns = np.array([0.0, 0.25, 1.0, 10.5])
    for phase_deg in (0.0, -1e-15, -90.0, 360.0):
        phase = track(orbit(phase_deg=phase_deg, oblateness=False), turns * period_s(100.0)).phase
        assert ((phase >= 0.0) & (phase < 1.0)).all()
        # Instants are held to 1e-16 day, 1e-11 s: 1e-15 of a turn; some rounding on top of it.
        np.testing.assert_allclose(np.abs((phase - phase_deg / 360.0 - turns + 0.5) % 1.0 - 0.5), 0.0, atol=1e-13)
    assert whole_turn(np.array([-1e-17, -0.25, 3.0])).tolist() == [0.0, 0.75, 0.0]


def test_epoch_is_where_the_elements_hold() -> None:
    epoch = datetime(2016, 12, 31, 23, 59, 0, tzinfo=UTC)
    settings = orbit(altitude_km=300.0, eccentricity=0.1, epoch=epoch)
    # Over the end of 2016 a leap second was inserted (IERS Bulletin C 52): 61 s from minute to minute.
    times = Time(["2016-12-31T23:59:00", "2017-01-01T00:00:00"], scale="utc")
    dated = lunar_orbit(settings, times, START)
    plain = settings.model_copy(update={"epoch": None})
    tt = times.tt
    later = Time(tt.jd1[0], tt.jd2[0] + np.array([0.0, 61.0]) / 86_400.0, format="jd", scale="tt")
    # Two-part dates are held to 1e-11 s.
    np.testing.assert_allclose(dated.position_km, lunar_orbit(plain, later, tt[0]).position_km, atol=1e-9)
    # The start plays no part, and before the epoch the orbit runs just as well.
    turn_before = Time(tt.jd1[:1], tt.jd2[:1] - period_s(300.0) / 86_400.0, format="jd", scale="tt")
    earlier = lunar_orbit(settings, turn_before, times[1])
    back = lunar_orbit(settings.model_copy(update={"oblateness": False}), turn_before, times[1])
    np.testing.assert_allclose(back.position_km, dated.position_km[:1], atol=1e-6)  # 1e-9 s of the dates
    assert 0.1 < np.linalg.norm(earlier.position_km - dated.position_km[:1]) < 10.0  # 2e-4 of a turn of drift
