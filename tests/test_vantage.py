"""The geometry of the samples: limb, eclipses and attitude, against closed forms and DE421."""

from __future__ import annotations

from datetime import timedelta

import astropy.units as u
import numpy as np
import pytest
from astropy.coordinates import AltAz, EarthLocation, SkyCoord, get_body
from astropy.time import Time
from astropy.utils import iers
from scipy.spatial.transform import Rotation
from vantage_cases import (
    LIMB_DEG,
    MOON_RADIUS_KM,
    START,
    TWO_FIELDS,
    antenna_axes,
    de421_earth_sun_from_moon_km,
    earth_and_sun_at,
    observation,
    orbit,
    orbit_about,
    site,
    unit,
)

from sims.attitude import fixed_attitudes
from sims.config import FixedBoresight, GroundSite, LunarOrbit, VerticalBoresight
from sims.constants import EARTH_EQUATORIAL_RADIUS_KM, SUN_RADIUS_KM
from sims.moon_frame import lunar_equator_axes
from sims.orbit import period_s
from sims.vantage import full_geometry, survey_geometry

# --- the Moon below -------------------------------------------------------------------------------------------------


def test_limb_from_100_km_has_its_closed_form() -> None:
    geometry = survey_geometry(orbit(), observation())
    np.testing.assert_allclose(np.rad2deg(geometry["limb_angle_rad"]), LIMB_DEG, atol=5e-6)  # digits given
    np.testing.assert_allclose(
        geometry["nadir"].values, -geometry["position_km"].values / 1837.4, atol=1e-14
    )  # rounding


@pytest.mark.parametrize("beta_deg", [0.0, 30.0, 60.0, 70.0])
def test_share_of_the_orbit_behind_the_moon_has_its_closed_form(beta_deg: float) -> None:
    # Around the middle of the orbit, so that what the Earth's own motion does to beta cancels to first order.
    turn_s = period_s(100.0)
    earth_km = earth_and_sun_at(START + timedelta(seconds=turn_s / 2.0))[0]
    earth, beta = unit(earth_km), np.deg2rad(beta_deg)
    across = unit(np.cross(earth, [0.0, 0.0, 1.0]))
    normal = np.sin(beta) * earth + np.cos(beta) * across
    vantage = orbit_about(normal, towards=unit(earth - (earth @ normal) * normal))
    count = 7067
    geometry = survey_geometry(vantage, observation(step_s=turn_s / count, count=count))
    # Within asin(R/r) of the far side a point at infinity is hidden; the umbra of a body of radius a at a distance d
    # is wider by asin((R - a)/d).
    spread = (MOON_RADIUS_KM - EARTH_EQUATORIAL_RADIUS_KM) / np.linalg.norm(earth_km)
    shadow_rad = np.deg2rad(LIMB_DEG) + np.arcsin(spread)
    share = np.arccos(min(np.cos(shadow_rad) / np.cos(beta), 1.0)) / np.pi
    # The Earth moves along it by up to 0.3 % of the spacecraft's rate (7067 s against 27.3 days), 0.0012 of 0.396,
    # and sampling by 1/7067.
    assert float(geometry["earth_hidden"].mean()) == pytest.approx(share, abs=0.0014)


def test_in_the_plane_of_a_distant_body_the_hidden_share_is_the_limb_angle_over_pi() -> None:
    sun_km = earth_and_sun_at(START)[1]
    sun = unit(sun_km)
    pole = lunar_equator_axes(Time(START))[2]
    vantage = orbit_about(unit(np.cross(sun, pole)), towards=sun)
    geometry = survey_geometry(vantage, observation(step_s=1.0, count=7067))
    # 71.00998/180 for a point at infinity; the Sun's motion changes it by 1e-5, sampling by 1/7067.
    assert float((geometry["sun_depth_rad"] > 0.0).mean()) == pytest.approx(LIMB_DEG / 180.0, abs=2e-4)
    spread_deg = np.degrees(np.arcsin((MOON_RADIUS_KM - SUN_RADIUS_KM) / np.linalg.norm(sun_km)))
    assert float(geometry["sun_hidden"].mean()) == pytest.approx((LIMB_DEG + spread_deg) / 180.0, abs=2e-4)


def test_longest_shadow_at_100_km_is_2788_seconds() -> None:
    sun = unit(earth_and_sun_at(START)[1])
    pole = lunar_equator_axes(Time(START))[2]
    # An orbit over the poles: the Sun then moves across its plane, which leaves the length of the shadow alone.
    vantage = orbit_about(unit(np.cross(sun, pole)), towards=sun)
    hidden = survey_geometry(vantage, observation(step_s=0.5, count=14_134))["sun_depth_rad"].values > 0.0
    edges = np.flatnonzero(np.diff(hidden.astype(int)))
    assert edges.size == 2
    # Point Sun at infinity: 2 asin(R/r) of a turn in 7067.460 s; each edge is seen to one step.
    assert (edges[1] - edges[0]) * 0.5 == pytest.approx(2788.1, abs=1.0)


def test_what_is_hidden_agrees_with_the_line_of_sight_by_de421() -> None:
    geometry = survey_geometry(orbit(), observation(step_s=97.0, count=20_000))
    place = geometry["position_km"].values
    bodies = de421_earth_sun_from_moon_km(geometry["time"].values)
    for index, name in enumerate(("earth_depth_rad", "sun_depth_rad")):
        # The line of sight meets the sphere when its nearest point to the centre lies ahead and inside the radius.
        sight = bodies[:, index] - place
        ahead = np.einsum("ta,ta->t", -place, unit(sight))
        nearest_km = np.sqrt(np.maximum(np.einsum("ta,ta->t", place, place) - ahead**2, 0.0))
        blocked = (ahead > 0.0) & (nearest_km < MOON_RADIUS_KM)
        # The two ephemerides differ by 12 arcsec at most, 35 m at the limb 600 km away: set aside the samples so close.
        clear = np.abs(nearest_km - MOON_RADIUS_KM) > 0.05
        assert clear.mean() > 0.99
        np.testing.assert_array_equal(geometry[name].values[clear] > 0.0, blocked[clear])
        assert 0.2 < blocked.mean() < 0.5  # both answers are tested


def test_eccentric_orbit_sees_a_moon_that_grows_and_shrinks() -> None:
    vantage = orbit(altitude_km=1500.0, eccentricity=0.4)
    geometry = full_geometry(vantage, observation(step_s=60.0, count=600))
    distance_km = np.linalg.norm(geometry["position_km"].values, axis=1)
    np.testing.assert_allclose(np.sin(geometry["limb_angle_rad"]), MOON_RADIUS_KM / distance_km, rtol=1e-12)
    assert distance_km.min() == pytest.approx(0.6 * (MOON_RADIUS_KM + 1500.0), rel=1e-3)
    assert distance_km.max() == pytest.approx(1.4 * (MOON_RADIUS_KM + 1500.0), rel=1e-3)
    # Azimuth counts from the motion along the ground, not from the velocity, which climbs and falls.
    np.testing.assert_allclose(np.einsum("ta,ta->t", geometry["forward"], geometry["nadir"]), 0.0, atol=1e-14)


# --- the ground below -----------------------------------------------------------------------------------------------


def test_sun_sets_on_the_ground_when_astropy_says_so() -> None:
    for horizon_deg in (0.0, 10.0):
        geometry = survey_geometry(site(horizon_deg=horizon_deg), observation(step_s=600.0, count=300))
        with (
            iers.conf.set_temp("auto_download", False),
            iers.conf.set_temp("auto_max_age", None),
            iers.conf.set_temp("iers_degraded_accuracy", "warn"),
        ):
            times = Time(geometry["time"].values, scale="utc")
            place = EarthLocation.from_geodetic(lat=-26.7 * u.deg, lon=116.6 * u.deg, height=380.0 * u.m)
            frame = AltAz(obstime=times, location=place, pressure=0.0 * u.hPa)
            altitude_deg = get_body("sun", times, place, ephemeris="builtin").transform_to(frame).alt.deg
        # Aberration (21 arcsec) and UT1 beyond the measured part of the tables (1.8 s, 27 arcsec).
        clear = np.abs(altitude_deg - horizon_deg) > 48.0 / 3600.0
        assert clear.mean() > 0.95
        np.testing.assert_array_equal(geometry["sun_depth_rad"].values[clear] > 0, altitude_deg[clear] < horizon_deg)
        assert (geometry["sun_depth_rad"].values[geometry["sun_hidden"].values] > 0.0).all()
        assert 0.4 < geometry["sun_hidden"].values.mean() < 0.8  # both answers are tested
        assert not geometry["earth_hidden"].any()
        assert "does not apply" in geometry["earth_hidden"].attrs["long_name"]


def test_a_raised_horizon_hides_more_than_the_lower_half() -> None:
    # From straight down a horizon raised by 10 deg is reached after 90 + 10 deg.
    geometry = survey_geometry(site(horizon_deg=10.0), observation())
    np.testing.assert_allclose(np.rad2deg(geometry["limb_angle_rad"]), 100.0, rtol=1e-14)  # rounding


def test_ground_site_turns_once_in_a_sidereal_day() -> None:
    # 86164.0905 s, mean sidereal day (Explanatory Supplement to the Astronomical Almanac).
    geometry = survey_geometry(site(), observation(step_s=86_164.0905 / 4.0, count=5))
    sidereal_hours = geometry["sidereal_time_hours"].values
    # Nutation and the table's UT1 move by milliseconds in a day.
    np.testing.assert_allclose((np.diff(sidereal_hours) + 24.0) % 24.0, 6.0, atol=0.02 / 3600.0)
    # Precession, 50 arcsec a year, and nutation: a fraction of an arcsecond in a day.
    np.testing.assert_allclose(geometry["nadir"].values[0], geometry["nadir"].values[-1], atol=5e-6)


# --- attitude -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("vantage", [orbit(TWO_FIELDS), site(TWO_FIELDS)])
def test_fixed_boresight_holds_its_directions_and_roll(vantage: LunarOrbit | GroundSite) -> None:
    geometry = survey_geometry(vantage, observation(count=101))
    x, y, z = np.moveaxis(antenna_axes(geometry), 1, 0)
    for index, (ra_deg, dec_deg) in enumerate(TWO_FIELDS.directions_deg):
        field = geometry["pointing"].values == index
        centre = SkyCoord(ra_deg * u.deg, dec_deg * u.deg)
        np.testing.assert_allclose(z[field] - centre.cartesian.xyz.value, 0.0, atol=1e-14)  # rounding
        # A point a little way along x is seen from the centre at the roll angle, north through east (astropy).
        nearby = SkyCoord(*(z[field] + 1e-4 * x[field]).T, representation_type="cartesian")
        np.testing.assert_allclose(centre.position_angle(nearby).deg, 25.0, atol=1e-6)  # rounding over 1e-4
    np.testing.assert_allclose(np.cross(x, y), z, atol=1e-14)  # right-handed


def test_fixed_boresight_at_the_pole_is_still_defined() -> None:
    (attitude,) = fixed_attitudes(
        FixedBoresight(kind="fixed", directions_deg=((30.0, 90.0),), roll_deg=0.0, dwell_s=600.0)
    )
    matrix = Rotation.from_quat(attitude).as_matrix()
    np.testing.assert_allclose(matrix[:, 2], [0.0, 0.0, 1.0], atol=1e-15)  # rounding
    # The limit of north along the meridian of 30 deg: away from it.
    np.testing.assert_allclose(matrix[:, 0], [-np.cos(np.pi / 6), -np.sin(np.pi / 6), 0.0], atol=1e-15)


def test_vertical_boresight_in_orbit_is_opposite_nadir_and_counts_azimuth_from_the_motion() -> None:
    for azimuth_deg in (0.0, 90.0, -40.0):
        upward = VerticalBoresight(kind="vertical", azimuth_deg=azimuth_deg)
        geometry = survey_geometry(orbit(upward), observation(step_s=1.0, count=3000))
        x, _, z = np.moveaxis(antenna_axes(geometry), 1, 0)
        np.testing.assert_allclose(z, -geometry["nadir"].values, atol=1e-14)  # rounding
        place = geometry["position_km"].values
        motion = unit(place[2:] - place[:-2])
        right = np.cross(motion, z[1:-1])  # seen from above, clockwise from the motion
        along, across = (np.einsum("ta,ta->t", x[1:-1], axis) for axis in (motion, right))
        np.testing.assert_allclose(along, np.cos(np.deg2rad(azimuth_deg)), atol=1e-12)  # symmetric difference: rounding
        np.testing.assert_allclose(across, np.sin(np.deg2rad(azimuth_deg)), atol=1e-12)


def test_vertical_boresight_on_the_ground_counts_azimuth_from_north_through_east() -> None:
    upward = VerticalBoresight(kind="vertical", azimuth_deg=90.0)
    geometry = survey_geometry(site(upward), observation(count=50))
    x, _, z = np.moveaxis(antenna_axes(geometry), 1, 0)
    np.testing.assert_allclose(z, -geometry["nadir"].values, atol=1e-14)  # rounding
    # The rotation of the Earth carries a site due east.
    place = geometry["position_km"].values
    np.testing.assert_allclose(x[1:-1], unit(place[2:] - place[:-2]), atol=1e-6)  # precession: 1e-7 of the rotation
