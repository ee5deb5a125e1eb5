"""How the Moon is turned, against the librations of DE421 as distributed in a binary orientation kernel."""

from __future__ import annotations

from pathlib import Path

import lunarsky
import numpy as np
import pytest
import skyfield_data
from astropy.time import Time
from jplephem.pck import PCK
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from sims.constants import MOON_ROTATION_DEG_PER_DAY
from sims.ephemeris import earth_sun_from_moon_km
from sims.moon_frame import lunar_equator_axes, moon_fixed_axes, moon_pole_deg, selenographic

FloatArray = NDArray[np.float64]
ARCSEC = np.pi / 180.0 / 3600.0
KERNEL = Path(lunarsky.__file__).parent / "data" / "pck" / "moon_pa_de421_1900-2050.bpc"
DE421_KERNEL = Path(skyfield_data.__file__).parent / "data" / "de421.bsp"
EPOCH = Time(["2027-06-01T00:00:00"], scale="tdb")
FOUR_YEARS = Time(2_461_406.5 + np.linspace(0.0, 1461.0, 3000), format="jd", scale="tdb")  # from 2027-01-01
LONG = Time(2_442_048.5 + np.linspace(0.0, 28_120.0, 20_000), format="jd", scale="tdb")  # 1974 to 2050
# 2027-06-01T00 TDB, computed from DE421 on mean-Earth axes: longitude and latitude of the point below the Earth, and
# right ascension and declination of the Moon's north pole.
SUB_EARTH_DEG = (-6.922729, -6.046151)
POLE_DEG = (272.85138, 67.63809)


def unit(longitude_deg: float, latitude_deg: float) -> FloatArray:
    longitude, latitude = np.deg2rad(longitude_deg), np.deg2rad(latitude_deg)
    return np.array([np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude), np.sin(latitude)])


def turn(axis: str, angle_rad: FloatArray | float) -> FloatArray:
    """Turn the frame about one of its axes: ndarray[time, axis, axis]."""
    return np.asarray(Rotation.from_euler(axis, -np.reshape(angle_rad, (-1, 1))).as_matrix())


def de421_axes(times: Time) -> FloatArray:
    """Mean-Earth axes of DE421 in rows, ICRS."""
    kernel = PCK.open(str(KERNEL))
    phi, theta, psi = kernel.segments[0].compute(times.tdb.jd1, times.tdb.jd2, derivative=False)
    kernel.close()
    # From principal to mean-Earth axes: Williams, Boggs and Folkner 2008, JPL IOM 335-JW,DB,WF-20080314-001.
    to_mean_earth = turn("x", -0.30 * ARCSEC) @ turn("y", -78.56 * ARCSEC) @ turn("z", -67.92 * ARCSEC)
    return np.asarray(to_mean_earth @ turn("z", psi) @ turn("x", theta) @ turn("z", phi))


def apart_arcsec(ours: FloatArray, theirs: FloatArray) -> FloatArray:
    """Rotation that takes one set of axes to the other."""
    return np.asarray(Rotation.from_matrix(ours @ np.swapaxes(theirs, 1, 2)).magnitude() / ARCSEC)


def test_axes_of_the_independent_kernel_have_the_tabulated_sub_earth_point_and_pole() -> None:
    axes = de421_axes(EPOCH)
    earth_km = earth_sun_from_moon_km(EPOCH, DE421_KERNEL)[:, 0]
    latitude, longitude = selenographic(earth_km, axes)
    # Both from DE421: equal to the digits of the table. This holds the direction of the turn to mean-Earth axes.
    np.testing.assert_allclose((longitude[0], latitude[0]), SUB_EARTH_DEG, atol=1e-6)
    # The latitude is the Earth's angle from the pole's equator, whatever the meridian.
    height = float(earth_km[0] @ unit(*POLE_DEG) / np.linalg.norm(earth_km))
    assert np.degrees(np.arcsin(height)) == pytest.approx(SUB_EARTH_DEG[1], abs=1e-5)  # digits of the pole
    np.testing.assert_allclose(axes[0, 2], unit(*POLE_DEG), atol=1e-7)


def test_axes_follow_de421() -> None:
    # Measured: 15.5 arcsec from 2027 to 2030 and 18.4 from 1974 to 2050; the series leaves out small librations.
    assert apart_arcsec(moon_fixed_axes(FOUR_YEARS), de421_axes(FOUR_YEARS)).max() < 16.0
    assert apart_arcsec(moon_fixed_axes(LONG), de421_axes(LONG)).max() < 18.5


def test_sub_earth_point_and_pole_have_their_tabulated_places() -> None:
    latitude, longitude = selenographic(earth_sun_from_moon_km(EPOCH, None)[:, 0], moon_fixed_axes(EPOCH))
    # 20 arcsec: the frame's own 16 and what the built-in ephemeris moves the Earth.
    assert longitude[0] == pytest.approx(SUB_EARTH_DEG[0], abs=20.0 / 3600.0)
    assert latitude[0] == pytest.approx(SUB_EARTH_DEG[1], abs=20.0 / 3600.0)
    right_ascension_deg, declination_deg = moon_pole_deg(EPOCH)
    pole = unit(float(right_ascension_deg[0]), float(declination_deg[0]))
    assert np.arccos(min(pole @ unit(*POLE_DEG), 1.0)) < 20.0 * ARCSEC


def test_every_term_of_the_series_stands_in_the_librations_of_de421() -> None:
    times = Time(2_415_100.0 + np.linspace(0.0, 54_900.0, 40_000), format="jd", scale="tdb")  # all the kernel has
    days = times.jd - 2_451_545.0
    # Arguments of the series, Archinal et al. 2018 (from memory), and its smallest term: 0.0008 deg.
    angle_deg = [
        *(125.045, 250.089, 260.008, 176.625, 357.529, 311.589, 134.963, 276.617, 34.226, 15.134, 119.743),
        *(239.961, 25.053),
    ]
    rate_deg = [
        *(-0.0529921, -0.1059842, 13.0120009, 13.3407154, 0.9856003, 26.4057084, 13.0649930, 0.3287146, 1.7484877),
        *(-0.1589763, 0.0036096, 0.1643573, 12.9590088),
    ]
    arguments = np.deg2rad(np.array(angle_deg) + days[:, None] * np.array(rate_deg))

    def angles_deg(axes: FloatArray) -> FloatArray:
        """Right ascension and declination of the pole, and the meridian's angle from the node."""
        ra, dec = np.arctan2(axes[:, 2, 1], axes[:, 2, 0]), np.arcsin(axes[:, 2, 2])
        node = np.stack([-np.sin(ra), np.cos(ra), np.zeros_like(ra)], axis=-1)
        meridian = np.arctan2(-np.einsum("ta,ta->t", node, axes[:, 1]), np.einsum("ta,ta->t", node, axes[:, 0]))
        return np.degrees(np.stack([ra, dec, meridian]))

    left = (angles_deg(moon_fixed_axes(times)) - angles_deg(de421_axes(times)) + 180.0) % 360.0 - 180.0
    trend = np.stack([np.ones_like(days), days / 55_000.0], axis=-1)
    for index, function in enumerate((np.sin, np.cos, np.sin)):
        design = np.hstack([function(arguments), trend])
        coefficient_deg = np.linalg.lstsq(design, left[index], rcond=None)[0][:13]
        # What is left of any term but the largest stays below the smallest: none is lost, none mistyped.
        # The first, 3.9 deg in right ascension, is met to a part in 3000.
        assert np.abs(coefficient_deg[1:]).max() < 0.0006
        assert abs(coefficient_deg[0]) < 0.0012


def test_axes_are_right_handed_turn_at_the_mean_rate_and_share_the_pole() -> None:
    axes = moon_fixed_axes(LONG)
    np.testing.assert_allclose(
        axes @ np.swapaxes(axes, 1, 2), np.broadcast_to(np.eye(3), axes.shape), atol=1e-15
    )  # rounding
    np.testing.assert_allclose(np.linalg.det(axes), 1.0, atol=1e-14)  # rounding
    pole = lunar_equator_axes(EPOCH[0])[2]
    np.testing.assert_allclose(moon_fixed_axes(EPOCH)[0, 2], pole, atol=1e-15)  # rounding
    turned = np.unwrap(np.arctan2(axes[:, 0, 1], axes[:, 0, 0]))
    # Librations of a few degrees over 76 years: 3e-4 deg a day.
    assert np.degrees(turned[-1] - turned[0]) / 28_120.0 == pytest.approx(MOON_ROTATION_DEG_PER_DAY, abs=3e-4)


def test_the_moon_keeps_one_face_to_the_earth() -> None:
    times = LONG[::5]
    latitude, longitude = selenographic(earth_sun_from_moon_km(times, None)[:, 0], moon_fixed_axes(times))
    # Greatest librations in longitude and latitude: 8.2 and 6.9 deg (common practice); the mean is zero by the axes'
    # definition, to what 76 years leave of periods of up to 18.6 years.
    assert 7.5 < np.abs(longitude).max() < 8.3
    assert 6.5 < np.abs(latitude).max() < 7.0
    assert abs(longitude.mean()) < 0.05
    assert abs(latitude.mean()) < 0.05


def test_spline_of_the_slow_angles_costs_nothing() -> None:
    times = Time(EPOCH.jd1[0], EPOCH.jd2[0] + np.arange(0.0, 60.0, 0.013), format="jd", scale="tdb")
    # Fewer instants than nodes are not interpolated.
    exact = np.concatenate([moon_fixed_axes(times[at : at + 8]) for at in range(0, len(times) - 8, 8)])
    assert apart_arcsec(moon_fixed_axes(times)[: len(exact)], exact).max() < 1e-3  # the figure of the docstring


def test_selenographic_angles_of_known_directions() -> None:
    axes = np.broadcast_to(moon_fixed_axes(EPOCH)[0], (5, 3, 3))
    x, y, z = axes[0]
    place = np.stack([x * 5.0, y, -x + 1e-9 * y, z * 1737.4 + 1e-3 * x, -y - z])
    latitude, longitude = selenographic(place, axes)
    np.testing.assert_allclose(latitude, [0.0, 0.0, 0.0, 90.0, -45.0], atol=1e-4)  # the pole is 1 m off: 3e-5 deg
    np.testing.assert_allclose(longitude, [0.0, 90.0, 180.0, 0.0, -90.0], atol=1e-6)  # 1e-9 rad off at 180 deg


def test_selenographic_angles_lead_back_to_the_place() -> None:
    generator = np.random.default_rng(8)
    place = generator.normal(size=(500, 3))
    times = Time(EPOCH.jd1[0], np.sort(generator.uniform(0.0, 365.0, 500)), format="jd", scale="tt")
    axes = moon_fixed_axes(times)
    latitude, longitude = np.deg2rad(selenographic(place, axes))
    along = np.stack([np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude), np.sin(latitude)], -1)
    back = np.einsum("tij,ti->tj", axes, along) * np.linalg.norm(place, axis=1)[:, None]
    np.testing.assert_allclose(back, place, atol=1e-14)  # rounding


def test_a_month_of_minutes_calls_the_series_at_its_nodes_alone(monkeypatch: pytest.MonkeyPatch) -> None:
    asked: list[int] = []

    def counted(times: Time) -> FloatArray:
        asked.append(times.size)
        return np.zeros((times.size, 3))

    monkeypatch.setattr("sims.moon_frame._slow_angles_deg", counted)
    moon_fixed_axes(Time(EPOCH.tt.jd1[0], EPOCH.tt.jd2[0] + np.arange(43_200) / 1440.0, format="jd", scale="tt"))
    # Four nodes a day and one at the end: the cost of a month does not lie in its 43 200 samples.
    assert asked == [30 * 4 + 1]
