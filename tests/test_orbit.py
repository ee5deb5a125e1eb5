"""Places round the Moon: pole, Earth and Sun against DE421, the circular orbit against Kepler and geometry."""

from __future__ import annotations

import de421
import numpy as np
import pytest
from astropy.time import Time
from jplephem import Ephemeris
from numpy.typing import NDArray

from sims.config import LunarOrbit, VerticalBoresight
from sims.constants import MOON_MEAN_RADIUS_KM
from sims.orbit import (
    NODE_STEP_S,
    circular_orbit,
    circular_period_s,
    earth_sun_from_moon_km,
    elapsed_s,
    lunar_equator_axes,
    moon_pole_deg,
    smooth_in_time,
)

ARCSEC = np.pi / 180.0 / 3600.0
FOUR_YEARS = Time(2_461_406.5 + np.linspace(0.0, 1461.0, 1500), format="jd", scale="tdb")  # from 2027-01-01
EPOCH = Time(["2027-06-01T00:00:00"], scale="tdb")
# 2027-06-01T00 TDB, computed from DE421: the Moon's north pole on mean-Earth axes (ICRS), and the places of the Sun and
# Moon seen from the Earth's centre (GCRS, with light time and aberration).
POLE_DEG = (272.85138, 67.63809)
SUN_DEG = (68.28115976, 21.93496165)
MOON_DEG = (16.45002900, 12.03416560)
SPEED_OF_LIGHT_KM_PER_S = 299_792.458


def unit(longitude_deg: float, latitude_deg: float) -> NDArray[np.float64]:
    longitude, latitude = np.deg2rad(longitude_deg), np.deg2rad(latitude_deg)
    return np.array([np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude), np.sin(latitude)]).T


def separation_arcsec(a: NDArray[np.float64], b: NDArray[np.float64]) -> NDArray[np.float64]:
    a = a / np.linalg.norm(a, axis=-1, keepdims=True)
    b = b / np.linalg.norm(b, axis=-1, keepdims=True)
    return np.asarray(2.0 * np.arcsin(np.linalg.norm(a - b, axis=-1) / 2.0) / ARCSEC)


def de421_earth_sun_from_moon_km(times: Time) -> NDArray[np.float64]:
    ephemeris = Ephemeris(de421)
    jd = times.tdb.jd
    moon_from_earth = ephemeris.position("moon", jd).T
    moon = ephemeris.position("earthmoon", jd).T + moon_from_earth * ephemeris.moon_share
    return np.stack([-moon_from_earth, ephemeris.position("sun", jd).T - moon], axis=1)


def turn(axis: int, angle_rad: float) -> NDArray[np.float64]:
    """Turn the frame about one of its axes."""
    first, second = [index for index in range(3) if index != axis]
    matrix = np.eye(3)
    matrix[first, first] = matrix[second, second] = np.cos(angle_rad)
    sign = -1.0 if axis == 1 else 1.0
    matrix[first, second], matrix[second, first] = sign * np.sin(angle_rad), -sign * np.sin(angle_rad)
    return matrix


def orbit(**changes: float) -> LunarOrbit:
    elements = {"altitude_km": 100.0, "inclination_deg": 60.0, "node_deg": 40.0, "phase_deg": 0.0} | changes
    return LunarOrbit(kind="lunar-orbit", boresight=VerticalBoresight(kind="vertical"), **elements)


def test_earth_and_sun_seen_from_the_moon_agree_with_de421() -> None:
    ours, theirs = earth_sun_from_moon_km(FOUR_YEARS), de421_earth_sun_from_moon_km(FOUR_YEARS)
    apart = separation_arcsec(ours, theirs)
    # Accuracy of the built-in series: the Moon's was seen to reach 9.6 arcsec (16.8 km) in 2027-2030, the Sun's 0.034.
    assert apart[:, 0].max() < 12.0
    assert apart[:, 1].max() < 0.1
    assert np.linalg.norm(ours[:, 0] - theirs[:, 0], axis=-1).max() < 20.0


def test_sun_and_moon_seen_from_the_earth_have_their_tabulated_places() -> None:
    for body, tabulated_deg, tolerance_arcsec in ((1, SUN_DEG, 0.1), (0, MOON_DEG, 12.0)):
        # The relative place one light time earlier holds light time and aberration together, to (v/c)^2 = 0.002 arcsec.
        def from_earth(times: Time, body: int = body) -> NDArray[np.float64]:
            places = earth_sun_from_moon_km(times)
            return np.asarray(places[:, body] * body - places[:, 0])

        light_time_s = np.linalg.norm(from_earth(EPOCH), axis=-1) / SPEED_OF_LIGHT_KM_PER_S
        earlier = Time(EPOCH.jd1, EPOCH.jd2 - light_time_s / 86_400.0, format="jd", scale="tdb")
        assert separation_arcsec(from_earth(earlier), unit(*tabulated_deg))[0] < tolerance_arcsec


def test_pole_of_the_moon_has_its_tabulated_place() -> None:
    right_ascension_deg, declination_deg = moon_pole_deg(EPOCH)
    ours = unit(float(right_ascension_deg[0]), float(declination_deg[0]))
    # The series leaves out small librations: 15 arcsec from DE421 at most.
    assert separation_arcsec(ours, unit(*POLE_DEG)) < 20.0


def test_pole_of_the_moon_follows_the_librations_of_de421() -> None:
    right_ascension_deg, declination_deg = moon_pole_deg(FOUR_YEARS)
    ours = np.array([unit(ra, dec) for ra, dec in zip(right_ascension_deg, declination_deg, strict=True)])
    # From principal to mean-Earth axes: Williams, Boggs and Folkner 2008, JPL IOM 335-JW,DB,WF-20080314-001.
    to_mean_earth = turn(0, -0.30 * ARCSEC) @ turn(1, -78.56 * ARCSEC) @ turn(2, -67.92 * ARCSEC)
    librations = Ephemeris(de421).position("librations", FOUR_YEARS.jd).T
    theirs = np.array(
        [(to_mean_earth @ turn(2, psi) @ turn(0, theta) @ turn(2, phi))[2] for phi, theta, psi in librations]
    )
    # As above; any term of 0.007 deg or more in right ascension, 0.003 deg in declination, would show if lost.
    assert separation_arcsec(ours, theirs).max() < 20.0


def test_period_at_100_km_follows_kepler() -> None:
    # 7067.460 s: Kepler's third law with GM of DE421 and the radius of the NASA fact sheet, given to the millisecond.
    assert circular_period_s(100.0) == pytest.approx(7067.460, abs=5e-4)


def test_interpolation_error_is_far_below_an_arcsecond_and_of_fourth_order() -> None:
    instants = np.sort(np.random.default_rng(5).uniform(0.0, 120 * 86_400.0, 4000))
    times = Time(EPOCH.jd1[0], EPOCH.jd2[0] + instants / 86_400.0, format="jd", scale="tdb")
    exact = earth_sun_from_moon_km(times)
    coarse, fine = (
        separation_arcsec(smooth_in_time(earth_sun_from_moon_km, times, step), exact).max(axis=0)
        for step in (NODE_STEP_S, NODE_STEP_S / 2.0)
    )
    assert coarse.max() < 0.05  # the figure promised in the docstring
    # A cubic spline gains 16 for a halved step; the shortest periods of the Moon's motion hold it a little below.
    assert coarse[0] / fine[0] > 12.0


def test_few_instants_are_not_interpolated() -> None:
    times = Time(EPOCH.jd1[0], np.array([0.0, 3.0, 90.0]), format="jd", scale="tdb")
    np.testing.assert_array_equal(smooth_in_time(earth_sun_from_moon_km, times), earth_sun_from_moon_km(times))


@pytest.mark.parametrize("inclination_deg", [0.0, 35.0, 90.0, 150.0])
def test_orbit_is_a_circle_in_a_fixed_plane_of_the_right_inclination(inclination_deg: float) -> None:
    times = Time(EPOCH.jd1[0], EPOCH.jd2[0] + np.linspace(0.0, 3.0, 997), format="jd", scale="tdb")
    track = circular_orbit(orbit(inclination_deg=inclination_deg), times)
    radius = np.linalg.norm(track.position_km, axis=-1)
    normal = np.cross(track.position_km, track.forward) / radius[:, None]
    np.testing.assert_allclose(radius, MOON_MEAN_RADIUS_KM + 100.0, rtol=1e-14)  # rounding
    np.testing.assert_allclose(normal, np.broadcast_to(normal[0], normal.shape), atol=1e-14)  # rounding
    # Against the pole of DE421: 20 arcsec, as above.
    assert np.rad2deg(np.arccos(normal[0] @ unit(*POLE_DEG))) == pytest.approx(inclination_deg, abs=20.0 / 3600.0)


def test_orbit_moves_forward_at_the_speed_of_a_circular_orbit() -> None:
    times = Time(EPOCH.jd1[0], EPOCH.jd2[0] + np.arange(3) / 86_400.0, format="jd", scale="tdb")
    track = circular_orbit(orbit(), times)
    velocity = (track.position_km[2] - track.position_km[0]) / 2.0
    # sqrt(GM/r) with GM 4902.800 km^3/s^2 (DE421); the chord over 2 s falls short by (n dt)^2/6 = 1.3e-7.
    np.testing.assert_allclose(velocity, np.sqrt(4902.800 / 1837.4) * track.forward[1], rtol=0, atol=1e-6)


def test_node_and_phase_are_counted_from_where_the_iau_puts_them() -> None:
    at_node = circular_orbit(orbit(node_deg=0.0), EPOCH)
    # The node Q lies at right ascension of the pole + 90 deg, declination 0. Along the equator the pole's 20 arcsec in
    # right ascension count in full once divided by cos(67.6 deg): 53 arcsec.
    assert separation_arcsec(at_node.position_km, unit(POLE_DEG[0] + 90.0, 0.0))[0] < 53.0
    pole = lunar_equator_axes(EPOCH[0])[2]
    assert at_node.position_km[0] @ pole == pytest.approx(0.0, abs=1e-9)  # rounding, km
    assert at_node.forward[0] @ pole == pytest.approx(np.sin(np.deg2rad(60.0)), abs=1e-12)  # rounding: it ascends
    crest = circular_orbit(orbit(phase_deg=90.0), EPOCH)
    assert crest.position_km[0] @ pole / 1837.4 == pytest.approx(np.sin(np.deg2rad(60.0)), abs=1e-12)  # rounding
    # A quarter turn of the node, seen from the north, carries the place eastward along the equator.
    east = circular_orbit(orbit(node_deg=90.0), EPOCH)
    np.testing.assert_allclose(east.position_km[0], np.cross(pole, at_node.position_km[0]), atol=1e-9)  # rounding, km


def test_phase_stays_within_one_turn_and_returns_after_a_period() -> None:
    turns = np.array([0.0, 0.25, 1.0, 10.5])
    times = Time(EPOCH.tt.jd1[0], turns * circular_period_s(100.0) / 86_400.0, format="jd", scale="tt")
    for phase_deg in (0.0, -1e-15, -90.0, 360.0):
        phase = circular_orbit(orbit(phase_deg=phase_deg), times).phase
        assert ((phase >= 0.0) & (phase < 1.0)).all()
        # Instants are held to 1e-16 day, 1e-11 s: 1e-15 of a turn; some rounding on top of it.
        np.testing.assert_allclose(np.abs((phase - phase_deg / 360.0 - turns + 0.5) % 1.0 - 0.5), 0.0, atol=1e-13)


def test_elapsed_time_runs_in_si_seconds_across_a_leap_second() -> None:
    # A leap second was inserted at the end of 2016-12-31 (IERS Bulletin C 52).
    times = Time(["2016-12-31T23:59:59", "2017-01-01T00:00:00"], scale="utc")
    np.testing.assert_allclose(elapsed_s(times), [0.0, 2.0], atol=1e-9)  # rounding of two-part dates
