"""A lander on the Moon: its place, vertical and motion, and where it sees the Earth."""

from __future__ import annotations

import de421
import numpy as np
import pytest
from astropy.time import Time
from jplephem import Ephemeris
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from sims.config import LunarSurface, VerticalBoresight
from sims.constants import MOON_MEAN_RADIUS_KM
from sims.ephemeris import earth_sun_from_moon_km
from sims.errors import InputError
from sims.lander import LanderTrack, lander_track

FloatArray = NDArray[np.float64]
DAYS = np.linspace(0.0, 27.0, 28)
TIMES = Time(2_461_557.5, DAYS, format="jd", scale="tt")
ARCSEC = np.deg2rad(1.0 / 3600.0)
RATE_RAD_PER_DAY = 2.0 * np.pi / 27.321661  # sidereal month, NASA Moon fact sheet: 27.3217 d


def steady_axes(days: FloatArray) -> FloatArray:
    """Axes that turn evenly about a pole 23 deg from that of ICRS."""
    tilt = Rotation.from_euler("zx", [1.2, 0.4])
    spin = Rotation.from_euler("z", RATE_RAD_PER_DAY * days[:, None])
    return np.asarray(np.swapaxes((tilt * spin).as_matrix(), 1, 2))


def turn(axis: int, angle_rad: float) -> FloatArray:
    """Matrix to axes turned about one of them."""
    c, s = np.cos(angle_rad), np.sin(angle_rad)
    return np.roll(np.array([[1.0, 0, 0], [0, c, s], [0, -s, c]]), axis, axis=(0, 1))


def de421_axes(times: Time) -> FloatArray:
    """Mean-Earth axes of the Moon from the librations of DE421, TDB."""
    # From principal to mean-Earth axes: Williams, Boggs and Folkner 2008, JPL IOM 335-JW,DB,WF-20080314-001.
    to_mean_earth = turn(0, -0.30 * ARCSEC) @ turn(1, -78.56 * ARCSEC) @ turn(2, -67.92 * ARCSEC)
    librations = Ephemeris(de421).position("librations", times.tdb.jd).T
    return np.array([to_mean_earth @ turn(2, psi) @ turn(0, theta) @ turn(2, phi) for phi, theta, psi in librations])


def at(latitude_deg: float, longitude_deg: float, height_m: float = 0.0) -> LunarSurface:
    return LunarSurface(
        kind="lunar-surface",
        latitude_deg=latitude_deg,
        longitude_deg=longitude_deg,
        height_m=height_m,
        boresight=VerticalBoresight(kind="vertical"),
    )


def track(site: LunarSurface) -> LanderTrack:
    return lander_track(site, TIMES, steady_axes(DAYS))


def dot(a: FloatArray, b: FloatArray) -> FloatArray:
    return np.asarray(np.einsum("ta,ta->t", a, b))


def test_places_that_need_no_formula() -> None:
    axes = steady_axes(DAYS)
    for place, axis in (((0, 0), axes[:, 0]), ((0, 90), axes[:, 1]), ((90, 0), axes[:, 2]), ((0, -90), -axes[:, 1])):
        np.testing.assert_allclose(track(at(*place)).zenith, axis, atol=1e-15)  # rounding
    # On the equator north is the pole; at longitude 0 of the north pole it points to longitude 180.
    np.testing.assert_allclose(track(at(0, 33)).north, axes[:, 2], atol=1e-15)
    np.testing.assert_allclose(track(at(90, 0)).north, -axes[:, 0], atol=1e-15)


@pytest.mark.parametrize("place", [(-84.8, 29.1, -2300.0), (26.1, 3.6, 0.0), (0.0, 180.0, 5000.0)])
def test_vertical_north_and_east_hold_together(place: tuple[float, float, float]) -> None:
    found = track(at(*place))
    np.testing.assert_allclose(
        np.linalg.norm(found.position_km, axis=1), MOON_MEAN_RADIUS_KM + place[2] / 1e3, rtol=1e-14
    )
    np.testing.assert_allclose(dot(found.zenith, found.north), 0.0, atol=1e-15)  # rounding
    np.testing.assert_allclose(np.linalg.norm(found.north, axis=1), 1.0, rtol=1e-14)
    # A step of latitude goes north, of longitude east, by the step.
    step_deg = 1e-4
    up = track(at(place[0] + step_deg, *place[1:])).position_km - found.position_km
    across = track(at(place[0], place[1] + step_deg, place[2])).position_km - found.position_km
    radius_km = MOON_MEAN_RADIUS_KM + place[2] / 1e3
    np.testing.assert_allclose(dot(up, found.north), radius_km * np.deg2rad(step_deg), rtol=1e-8)
    east = np.cross(found.north, found.zenith)
    expected = radius_km * np.deg2rad(step_deg) * np.cos(np.deg2rad(place[0]))
    np.testing.assert_allclose(dot(across, east), expected, rtol=1e-8)


def test_velocity_is_the_motion_of_the_place() -> None:
    site, step_days = at(-26.0, 40.0), 1e-3
    ahead, behind = (lander_track(site, TIMES, steady_axes(DAYS + side * step_days)) for side in (1, -1))
    moved = (ahead.position_km - behind.position_km) / (2.0 * step_days * 86_400.0)
    found = track(site).velocity_km_per_s
    # The rate in use and the fact sheet's agree to its digits, 4e-7; the difference of steps leaves 1e-8.
    np.testing.assert_allclose(found, moved, atol=1e-6 * np.abs(moved).max())
    # On the equator 2 pi R over 27.3217 days: 4.62 m/s, eastward.
    equator = track(at(0.0, 0.0))
    eastward = dot(equator.velocity_km_per_s, np.cross(equator.north, equator.zenith))
    np.testing.assert_allclose(eastward, 2 * np.pi * 1737.4 / (27.3217 * 86_400.0), rtol=2e-6)  # digits of the month
    np.testing.assert_allclose(track(at(90.0, 0.0)).velocity_km_per_s, 0.0, atol=1e-17)  # rounding


def test_axes_for_other_instants_are_refused() -> None:
    with pytest.raises(InputError, match=r"axes: of shape \(3, 3, 3\) for 28 instants"):
        lander_track(at(0.0, 0.0), TIMES, steady_axes(DAYS[:3]))


def test_lander_below_the_earth_sees_it_overhead() -> None:
    # 2027-06-01T00 TDB: sub-Earth point at longitude -6.922729, latitude -6.046151 deg, computed with DE421.
    when = Time([2_461_557.5], format="jd", scale="tdb")
    found = lander_track(at(-6.046151, -6.922729), when, de421_axes(when))
    to_earth = earth_sun_from_moon_km(when, None)[:, 0] - found.position_km
    apart = np.linalg.norm(to_earth / np.linalg.norm(to_earth, axis=1, keepdims=True) - found.zenith)
    # The built-in Moon is within 12 arcsec of DE421's.
    assert apart < 12.0 * ARCSEC
    # Seen from the middle of the near side it stays within the librations, 7.9 deg in longitude and 6.9 in latitude,
    # of the zenith; parallax is nil there but for the Moon's own radius, 1 in 200.
    month = Time(2_461_557.5 + DAYS, format="jd", scale="tdb")
    near, far = (lander_track(at(0.0, longitude_deg), month, de421_axes(month)) for longitude_deg in (0.0, 180.0))
    for place, least in ((near, np.cos(np.deg2rad(11.0))), (far, -1.0)):
        to_earth = earth_sun_from_moon_km(month, None)[:, 0] - place.position_km
        height = dot(to_earth, place.zenith) / np.linalg.norm(to_earth, axis=1)
        assert height.min() >= least
    assert height.max() < -np.cos(np.deg2rad(11.0))  # on the far side it never rises


def test_velocity_is_that_of_the_librating_moon() -> None:
    site, step_days = at(-26.0, 40.0), 0.02
    month = Time(2_461_557.5 + DAYS, format="jd", scale="tdb")
    ahead, behind = (
        lander_track(site, later, de421_axes(later)).position_km
        for later in (Time(month.jd1, month.jd2 + side * step_days, format="jd", scale="tdb") for side in (1, -1))
    )
    moved = (ahead - behind) / (2.0 * step_days * 86_400.0)
    found = lander_track(site, month, de421_axes(month)).velocity_km_per_s
    # The pole nods by 0.028 deg, 4.9e-4, within a month (Archinal et al. 2018, terms in E3); half an hour leaves 4e-6.
    assert np.abs(found - moved).max() < 6e-4 * np.abs(moved).max()
