"""What the kinds of vantage hand on: landers, horizons, orbit files, kernels and attitudes, in the whole geometry."""

from __future__ import annotations

from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pytest
import skyfield_data
from orbit_message_cases import HEADER, NODES, ORBIT, segment
from vantage_cases import (
    MOON_RADIUS_KM,
    START,
    UP,
    Vector,
    antenna_axes,
    de421_earth_sun_from_moon_km,
    earth_and_sun_at,
    lander,
    observation,
    orbit,
    orbit_about,
    site,
    unit,
)

from sims.config import GroundSite, LunarOrbit, LunarSurface
from sims.config_vantage import (
    AntiSunBoresight,
    HorizontalBoresight,
    LunarOrbitFile,
    ScheduledBoresight,
    SpinBoresight,
    Target,
    Vantage,
    VelocityBoresight,
)
from sims.vantage import full_geometry

ARCSEC = np.pi / 180.0 / 3600.0
DE421_KERNEL = Path(skyfield_data.__file__).parent / "data" / "de421.bsp"
# 2027-06-01T00 TDB, computed from DE421 on mean-Earth axes: longitude and latitude of the point below the Earth.
SUB_EARTH_DEG = (-6.922729, -6.046151)
# That instant in UTC: TDB - UTC is 69.184 s with the 37 leap seconds of IERS Bulletin C, but for some 1e-3 s.
EPOCH = datetime(2027, 5, 31, 23, 58, 50, 816_000, tzinfo=UTC)
EAST = "azimuth_deg,elevation_deg\n0,25\n179.99,25\n180,0\n359.99,0\n"
WEST = "azimuth_deg,elevation_deg\n0,0\n179.99,0\n180,25\n359.99,25\n"


def fixed_in_the_moon(longitude_deg: float, latitude_deg: float) -> tuple[Vector, Vector, Vector]:
    """Up, east and north of a place, on axes fixed in the Moon."""
    longitude, latitude = np.deg2rad(longitude_deg), np.deg2rad(latitude_deg)
    parallel = np.array([np.cos(longitude), np.sin(longitude), 0.0])
    pole = np.array([0.0, 0.0, 1.0])
    up = np.cos(latitude) * parallel + np.sin(latitude) * pole
    return up, np.cross(pole, parallel), np.cos(latitude) * pole - np.sin(latitude) * parallel


# --- the Moon's surface ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("place_deg", [(-6.92, -6.05), (60.0, 30.0), (-75.0, 10.0), (0.0, 84.0), (20.0, -88.0)])
def test_lander_sees_the_earth_at_the_height_and_azimuth_that_its_place_gives(place_deg: tuple[float, float]) -> None:
    longitude_deg, latitude_deg = place_deg
    geometry = full_geometry(lander(longitude_deg=longitude_deg, latitude_deg=latitude_deg), observation(start=EPOCH))
    up, east, north = fixed_in_the_moon(longitude_deg, latitude_deg)
    distance_km = np.linalg.norm(earth_and_sun_at(EPOCH)[0])
    towards = unit(distance_km * fixed_in_the_moon(*SUB_EARTH_DEG)[0] - MOON_RADIUS_KM * up)
    # 20 arcsec: the frame's own 16 and what the built-in ephemeris moves the Earth.
    assert -geometry["earth_depth_rad"].values[0] == pytest.approx(np.arcsin(towards @ up), abs=20.0 * ARCSEC)
    seen, ahead, zenith = (geometry[name].values[0] for name in ("earth_direction", "forward", "nadir"))
    right = np.cross(zenith, ahead)  # zenith is nadir here: azimuth runs clockwise as seen from above
    np.testing.assert_allclose((seen @ ahead, seen @ right), (towards @ north, towards @ east), atol=20.0 * ARCSEC)


def test_lander_on_the_far_side_never_sees_the_earth() -> None:
    # Librations carry the limb up to 8 deg in longitude (common practice): 12 deg behind it nothing rises in a month.
    geometry = full_geometry(lander(longitude_deg=102.0, latitude_deg=0.0), observation(step_s=3600.0, count=700))
    assert geometry["earth_hidden"].all()
    np.testing.assert_allclose(geometry["limb_angle_rad"].values, np.pi / 2.0, atol=1e-15)


# --- horizons -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("vantage", "step_s"), [(site(), 600.0), (lander(), 6.0 * 3600.0)])
def test_a_ridge_in_the_east_delays_the_sunrise_and_leaves_the_sunset(
    vantage: GroundSite | LunarSurface, step_s: float, tmp_path: Path
) -> None:
    span = observation(step_s=step_s, count=240)
    # Both bodies turn eastward: the Sun is in the east as long as it rises.
    for table, behind_as_it_rises in ((EAST, True), (WEST, False)):
        path = tmp_path / "ridge.csv"
        path.write_text(table)
        geometry = full_geometry(vantage.model_copy(update={"horizon_file": path}), span)
        height_deg = np.degrees(geometry["sun_elevation_rad"].values)
        rises, low = np.gradient(height_deg) > 0.0, (height_deg > 1.0) & (height_deg < 24.0)
        assert min((low & rises).sum(), (low & ~rises).sum()) >= 3
        np.testing.assert_array_equal(geometry["sun_hidden"].values[low], (rises == behind_as_it_rises)[low])
        # Level ground stays the limb of the engine; the ridge is told by the depth.
        expected = np.where(rises == behind_as_it_rises, 25.0, 0.0) - height_deg
        np.testing.assert_allclose(np.degrees(geometry["sun_depth_rad"].values)[low], expected[low], atol=1e-9)
        np.testing.assert_allclose(geometry["limb_angle_rad"].values, np.pi / 2.0, atol=1e-15)


@pytest.mark.parametrize(("longitude_deg", "ridge", "free"), [(80.0, WEST, EAST), (-80.0, EAST, WEST)])
def test_a_ridge_hides_the_earth_from_a_lander_near_the_limb(
    longitude_deg: float, ridge: str, free: str, tmp_path: Path
) -> None:
    # From 80 deg east the Earth stands 10 deg high in the west, give or take its librations of 8 deg.
    span = observation(step_s=3600.0 * 12.0, count=56)
    for table, hidden in ((ridge, True), (free, False)):
        (tmp_path / "ridge.csv").write_text(table)
        place = lander(longitude_deg=longitude_deg, latitude_deg=0.0)
        geometry = full_geometry(place.model_copy(update={"horizon_file": tmp_path / "ridge.csv"}), span)
        assert (geometry["earth_hidden"].values == hidden).all()


def test_mountains_hide_the_sun_that_a_level_horizon_shows(tmp_path: Path) -> None:
    (tmp_path / "ridge.csv").write_text("azimuth_deg,elevation_deg\n0,25\n120,25\n240,25\n")
    span = observation(step_s=600.0, count=144)
    level, ridge = (
        full_geometry(vantage, span)
        for vantage in (site(), site().model_copy(update={"horizon_file": tmp_path / "ridge.csv"}))
    )
    elevation_deg = np.degrees(level["sun_elevation_rad"].values)
    between = (elevation_deg > 1.0) & (elevation_deg < 24.0)
    assert between.any()
    assert ridge["sun_hidden"].values[between].all()
    assert not level["sun_hidden"].values[between].any()


# --- the point below ------------------------------------------------------------------------------------------------


def test_the_point_below_an_orbiter_between_moon_and_earth_is_the_sub_earth_point() -> None:
    earth, sun_km = unit(earth_and_sun_at(EPOCH)[0]), earth_and_sun_at(EPOCH)[1]
    vantage = orbit_about(unit(np.cross(earth, [0.0, 0.6, 0.8])), towards=earth)
    geometry = full_geometry(vantage, observation(start=EPOCH, count=9))
    # 20 arcsec: the frame's own 16, and the equator of 69 s later to which `orbit_about` counts.
    assert geometry["sublongitude_deg"].values[0] == pytest.approx(SUB_EARTH_DEG[0], abs=20.0 / 3600.0)
    assert geometry["sublatitude_deg"].values[0] == pytest.approx(SUB_EARTH_DEG[1], abs=20.0 / 3600.0)
    height = earth @ unit(sun_km - MOON_RADIUS_KM * earth)
    assert geometry["sun_elevation_rad"].values[0] == pytest.approx(
        np.arcsin(height), abs=1e-6
    )  # 0.1 arcsec of the Sun


@pytest.mark.parametrize("vantage", [orbit(), lander()])
def test_solar_time_is_the_suns_hour_angle(vantage: LunarOrbit | LunarSurface) -> None:
    geometry = full_geometry(vantage, observation(step_s=10_000.0, count=500))
    latitude = np.deg2rad(geometry["sublatitude_deg"].values)
    hour_angle = np.deg2rad(15.0 * (geometry["local_solar_time_hours"].values - 12.0))
    sun = unit(de421_earth_sun_from_moon_km(geometry["time"].values)[:, 1])
    declination = np.arcsin(np.einsum("ta,ta->t", sun, geometry["pole"].values))
    # Spherical astronomy; the Sun's parallax on the Moon, R over its distance, is 1.2e-5.
    height = np.sin(latitude) * np.sin(declination) + np.cos(latitude) * np.cos(declination) * np.cos(hour_angle)
    np.testing.assert_allclose(np.sin(geometry["sun_elevation_rad"].values), height, atol=1.5e-5)
    if isinstance(vantage, LunarSurface):
        rising = np.gradient(geometry["sun_elevation_rad"].values) > 0.0
        clear = np.abs(np.sin(hour_angle)) > 0.1  # away from noon and midnight
        np.testing.assert_array_equal(rising[clear], np.sin(hour_angle[clear]) < 0.0)


# --- files ----------------------------------------------------------------------------------------------------------


def test_an_orbit_file_gives_the_geometry_of_its_elements(tmp_path: Path) -> None:
    path = tmp_path / "orbit.oem"
    path.write_text(HEADER + segment(NODES))
    span = observation(step_s=60.0, count=350)
    filed = full_geometry(LunarOrbitFile(kind="lunar-orbit-file", file=path, boresight=UP), span)
    computed = full_geometry(ORBIT, span)
    assert set(filed.data_vars) == set(computed.data_vars)
    for name in computed.data_vars:
        # States between those of the file are right to 1e-6 km and 1e-8 km/s, as its own tests measure.
        np.testing.assert_allclose(filed[name].values, computed[name].values, atol=1e-6, err_msg=str(name))


@pytest.mark.parametrize("vantage", [orbit(), lander(), site()])
def test_bodies_stand_where_the_kernel_of_the_observation_puts_them(
    vantage: LunarOrbit | LunarSurface | GroundSite,
) -> None:
    span = {"step_s": 86_400.0, "count": 6}  # few samples are not interpolated
    geometry = full_geometry(vantage, observation(**span, ephemeris=DE421_KERNEL))
    assert geometry.attrs["ephemeris"] == "de421.bsp"
    earth, sun = np.moveaxis(de421_earth_sun_from_moon_km(geometry["time"].values), 1, 0)
    centre = earth if isinstance(vantage, GroundSite) else np.zeros_like(earth)
    place = centre + geometry["position_km"].values
    for name, body in (("earth", earth), ("sun", sun), ("moon", np.zeros_like(earth))):
        # Dates in one number are good to 4e-5 s, in which the Moon moves 1e-10 of its distance.
        np.testing.assert_allclose(geometry[f"{name}_direction"].values, unit(body - place), atol=1e-9)
    built_in = full_geometry(vantage, observation(**span))
    assert built_in.attrs["ephemeris"].startswith("built-in")
    far = "moon_direction" if isinstance(vantage, GroundSite) else "earth_direction"
    apart = np.linalg.norm(built_in[far].values - geometry[far].values, axis=1)
    assert ARCSEC < apart.max() < 12.0 * ARCSEC  # they differ, by what the built-in one is good for


# --- attitudes ------------------------------------------------------------------------------------------------------


def test_velocity_boresight_looks_along_the_path_with_x_in_the_orbits_plane() -> None:
    ahead = VelocityBoresight(kind="velocity")
    geometry = full_geometry(orbit(ahead, altitude_km=1500.0, eccentricity=0.4), observation(step_s=1.0, count=3000))
    x, _, z = np.moveaxis(antenna_axes(geometry), 1, 0)
    place = geometry["position_km"].values
    # The chord over 2 s turns by the third order in n dt: 1e-7.
    np.testing.assert_allclose(z[1:-1], unit(place[2:] - place[:-2]), atol=1e-6)
    normal = unit(np.cross(place, z))
    np.testing.assert_allclose(np.einsum("ta,ta->t", x, normal), 0.0, atol=1e-14)  # rounding
    assert (np.einsum("ta,ta->t", x, place) > 0.0).all()


@pytest.mark.parametrize("place", [orbit, lander, site])
def test_anti_sun_boresight_has_the_sun_behind_it_anywhere(place: Callable[..., Vantage]) -> None:
    geometry = full_geometry(place(AntiSunBoresight(kind="anti-sun")), observation(step_s=3600.0, count=99))
    np.testing.assert_allclose(antenna_axes(geometry)[:, 2], -geometry["sun_direction"].values, atol=1e-14)  # rounding


@pytest.mark.parametrize("place", [lander, site])
def test_on_a_body_that_turns_eastward_is_where_the_ground_goes(
    place: Callable[..., LunarSurface | GroundSite],
) -> None:
    east = HorizontalBoresight(kind="horizontal", azimuth_deg=90.0)
    geometry = full_geometry(place(east), observation(step_s=60.0, count=99))
    x, _, z = np.moveaxis(antenna_axes(geometry), 1, 0)
    np.testing.assert_allclose(x, -geometry["nadir"].values, atol=1e-14)  # rounding
    np.testing.assert_allclose(z, unit(geometry["velocity_km_per_s"].values), atol=1e-12)  # rounding
    pole = geometry["pole"].values
    np.testing.assert_allclose(np.einsum("ta,ta->t", pole, z), 0.0, atol=1e-14)
    # The pole stands over the northern horizon as high as the latitude; azimuth counts from there.
    latitude = np.deg2rad(place().latitude_deg)
    np.testing.assert_allclose(np.einsum("ta,ta->t", pole, x), np.sin(latitude), atol=1e-12)
    np.testing.assert_allclose(np.einsum("ta,ta->t", pole, geometry["forward"]), np.cos(latitude), atol=1e-12)


def test_schedule_and_spin_keep_the_time_of_the_samples() -> None:
    targets = (
        Target(start=START, direction_deg=(10.0, 20.0)),
        Target(start=datetime(2027, 6, 1, 0, 5, tzinfo=UTC), direction_deg=(80.0, -40.0)),
    )
    span = observation(step_s=10.0, count=60)
    scheduled = full_geometry(orbit(ScheduledBoresight(kind="schedule", targets=targets)), span)
    assert scheduled["pointing"].values.tolist() == [0] * 30 + [1] * 30
    turning = SpinBoresight(kind="spin", axis_deg=(40.0, 10.0), angle_deg=90.0, period_s=400.0)
    z = antenna_axes(full_geometry(orbit(turning), span))[:, 2]
    np.testing.assert_allclose(np.einsum("ta,a->t", z, z[0]), np.cos(2.0 * np.pi * np.arange(60) / 40.0), atol=1e-13)
