"""A ground site among the stars, against astropy's own chain of frames (with and without aberration)."""

from __future__ import annotations

import logging
import socket
import subprocess
import sys
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import astropy.units as u
import erfa
import numpy as np
import pytest
from astropy.coordinates import ICRS, AltAz, EarthLocation, SkyCoord, get_body_barycentric_posvel
from astropy.time import Time
from astropy.utils import iers
from numpy.typing import NDArray

from sims.config import GroundSite, VerticalBoresight
from sims.site import SiteTrack, site_track, ut1_minus_utc_s

ARCSEC = np.pi / 180.0 / 3600.0
PLACES = [(-26.7, 116.6, 380.0), (37.2, -118.3, 1222.0), (0.0, 0.0, 0.0), (79.5, -90.8, 250.0)]
MEASURED = Time(
    ["2003-02-11T05:00:00", "2016-12-31T23:59:30", "2021-07-04T17:45:10", "2025-10-01T00:00:00"], scale="utc"
)


@contextmanager
def offline_astropy() -> Iterator[None]:
    with (
        warnings.catch_warnings(),
        iers.conf.set_temp("auto_download", False),
        iers.conf.set_temp("auto_max_age", None),
        iers.conf.set_temp("iers_degraded_accuracy", "warn"),
    ):
        warnings.simplefilter("ignore")
        yield


def later_years() -> Time:
    with offline_astropy():
        return Time(["2028-01-01T00:00:00", "2031-06-15T12:34:56", "2045-11-30T18:00:00"], scale="utc")


def track(place: tuple[float, float, float], times: Time) -> SiteTrack:
    latitude_deg, longitude_deg, height_m = place
    site = GroundSite(
        kind="ground",
        latitude_deg=latitude_deg,
        longitude_deg=longitude_deg,
        height_m=height_m,
        horizon_deg=0.0,
        boresight=VerticalBoresight(kind="vertical"),
    )
    return site_track(site, times)


def location(place: tuple[float, float, float]) -> EarthLocation:
    return EarthLocation.from_geodetic(lat=place[0] * u.deg, lon=place[1] * u.deg, height=place[2] * u.m)


def direction(
    place: tuple[float, float, float], times: Time, altitude_deg: float, azimuth_deg: float
) -> NDArray[np.float64]:
    """Geometric ICRS direction of a point of the local sky, from astropy: its star's place with aberration put back."""
    frame = AltAz(obstime=times, location=location(place))
    local = SkyCoord(np.full(times.shape, azimuth_deg) * u.deg, np.full(times.shape, altitude_deg) * u.deg, frame=frame)
    star = local.transform_to(ICRS()).cartesian.xyz.value.T
    velocity = get_body_barycentric_posvel("earth", times, ephemeris="builtin")[1].xyz.to_value(u.m / u.s).T
    seen = star + velocity / 299_792_458.0
    return np.asarray(seen / np.linalg.norm(seen, axis=-1, keepdims=True))


def apart_arcsec(a: NDArray[np.float64], b: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.asarray(2.0 * np.arcsin(np.linalg.norm(a - b, axis=-1) / 2.0) / ARCSEC)


@pytest.mark.parametrize("place", PLACES)
def test_zenith_and_north_agree_with_the_horizontal_frame_of_astropy(place: tuple[float, float, float]) -> None:
    ours = track(place, MEASURED)
    with offline_astropy():
        zenith, north = direction(place, MEASURED, 90.0, 0.0), direction(place, MEASURED, 0.0, 0.0)
    # What is left out here and not there: polar motion (0.6 arcsec) and diurnal aberration (0.32 arcsec).
    assert apart_arcsec(ours.zenith, zenith).max() < 1.0
    # In azimuth polar motion grows with tan(latitude), 5.4 at the northernmost place.
    assert apart_arcsec(ours.north, north).max() < 1.0 + 0.6 * abs(np.tan(np.deg2rad(place[0])))


@pytest.mark.parametrize("place", PLACES)
def test_place_agrees_with_the_terrestrial_frame_of_astropy(place: tuple[float, float, float]) -> None:
    with offline_astropy():
        theirs = location(place).get_gcrs_posvel(MEASURED)[0].xyz.to_value(u.km).T
    # Polar motion of 0.6 arcsec is 19 m on the ground.
    assert np.linalg.norm(track(place, MEASURED).position_km - theirs, axis=-1).max() < 0.025


@pytest.mark.parametrize("place", PLACES)
def test_sidereal_time_agrees_with_astropy(place: tuple[float, float, float]) -> None:
    with offline_astropy():
        theirs = MEASURED.sidereal_time("apparent", longitude=place[1] * u.deg).hour
    difference_s = ((track(place, MEASURED).sidereal_time_hours - theirs + 12.0) % 24.0 - 12.0) * 3600.0
    # Same models; the two tables of UT1 differ by their rounding, some 1e-5 s.
    assert np.abs(difference_s).max() < 1e-3


def test_vertical_north_and_meridian_hold_together() -> None:
    ours = track(PLACES[0], MEASURED)
    np.testing.assert_allclose(np.einsum("ta,ta->t", ours.zenith, ours.north), 0.0, atol=1e-12)  # rounding
    np.testing.assert_allclose(np.linalg.norm(ours.zenith, axis=-1), 1.0, atol=1e-12)  # rounding
    # On the true equator of date the zenith's right ascension is the apparent sidereal time (definition).
    tt = MEASURED.tt
    of_date = np.einsum("tij,tj->ti", erfa.pnm06a(tt.jd1, tt.jd2), ours.zenith)
    right_ascension_hours = np.arctan2(of_date[:, 1], of_date[:, 0]) * 12.0 / np.pi
    apart_hours = (right_ascension_hours - ours.sidereal_time_hours + 12.0) % 24.0 - 12.0
    np.testing.assert_allclose(apart_hours * 3600.0, 0.0, atol=1e-6)  # same series twice: rounding


def test_site_moves_eastward_as_its_place_changes() -> None:
    middle = MEASURED[1].tt
    times = Time(middle.jd1, middle.jd2 + np.array([-1.0, 0.0, 1.0]) / 86_400.0, format="jd", scale="tt")
    for place in PLACES:
        ours = track(place, times)
        rate = (ours.position_km[2] - ours.position_km[0]) / 2.0
        # The chord over 2 s falls short by 1e-9; precession carries the site by 1e-7 of the rotation.
        np.testing.assert_allclose(ours.velocity_km_per_s[1], rate, atol=1e-7)
        # The vertical stands at the geodetic latitude over the equator (definition).
        height = np.einsum("ta,ta->t", ours.pole, ours.zenith)
        np.testing.assert_allclose(np.degrees(np.arcsin(height)), place[0], atol=1e-12)


def test_later_years_need_no_network_and_say_what_was_assumed(
    monkeypatch: pytest.MonkeyPatch, caplog: pytest.LogCaptureFixture
) -> None:
    def refuse(*_: object, **__: object) -> None:
        raise AssertionError("the network was asked")

    monkeypatch.setattr(socket.socket, "connect", refuse)
    monkeypatch.setattr(socket, "getaddrinfo", refuse)
    with warnings.catch_warnings(), caplog.at_level(logging.WARNING, logger="sims.site"):
        warnings.simplefilter("error")
        later = Time([2_466_000.5, 2_470_000.5, 2_480_000.5], format="jd", scale="tt")  # 2039 to 2077
        statement = track(PLACES[0], later).ut1_statement
    assert "3 of 3 instants lie outside it" in statement
    assert "up to 1.8 s" in caplog.text


def test_beyond_the_table_its_last_value_is_held() -> None:
    table = iers.IERS_A.open(iers.IERS_A_FILE)
    last = np.flatnonzero(np.isfinite(np.asarray(table["UT1_UTC"].to_value("s"), dtype=float)))[-1]
    held_s, _ = ut1_minus_utc_s(later_years()[-1:])
    assert held_s[0] == float(table["UT1_UTC"][last].to_value("s"))
    assert abs(held_s[0]) < 0.9  # by the definition of UTC


def test_later_years_agree_with_astropy_under_the_same_assumption() -> None:
    with offline_astropy():
        later = later_years()
        difference_s, _ = ut1_minus_utc_s(later)
        pinned = later.copy()
        pinned.delta_ut1_utc = difference_s
        zenith = direction(PLACES[1], pinned, 90.0, 0.0)
        ours = track(PLACES[1], later)
    # As for measured dates: polar motion and diurnal aberration.
    assert apart_arcsec(ours.zenith, zenith).max() < 1.0


def test_pole_of_the_earth_between_nodes_is_as_good_as_at_them() -> None:
    # 2000 instants over 25 days are interpolated; a handful of them alone are not.
    instants = Time(2_461_557.5, np.linspace(0.0, 25.0, 2000), format="jd", scale="tt")
    sample = slice(3, None, 401)
    # The fastest nutations (5 days, below a milliarcsecond; 13.7 days, 0.2 arcsec) leave nothing near 1e-4 arcsec.
    assert (
        apart_arcsec(track(PLACES[0], instants).zenith[sample], track(PLACES[0], instants[sample]).zenith).max() < 1e-4
    )


def test_an_outdated_table_of_leap_seconds_is_not_fetched_anew() -> None:
    # In a process of its own, since astropy looks only at the first use of UTC; it is made to think the year is 2050.
    script = """
import socket
from datetime import UTC, datetime
from astropy.time import Time
from astropy.utils import iers
asked = []
def refuse(*arguments, **_):
    asked.append(arguments)
    raise OSError("refused")
socket.socket.connect = socket.getaddrinfo = refuse
iers.LeapSeconds._today = classmethod(lambda _: Time(2469807.5, format="jd", scale="tai"))
from sims.vantage import survey_geometry
from sims.config import GroundSite, Observation, VerticalBoresight
up = VerticalBoresight(kind="vertical")
site = GroundSite(kind="ground", latitude_deg=0.0, longitude_deg=0.0, height_m=0.0, boresight=up)
when = Observation(
    start=datetime(2049, 1, 1, tzinfo=UTC), step_s=60.0, count=9, integration_hours=1.0, duty_cycle=1.0
)
survey_geometry(site, when)
print("asked", len(asked))
"""
    root = Path(__file__).resolve().parents[1]
    done = subprocess.run([sys.executable, "-c", script], cwd=root, capture_output=True, text=True, check=False)
    assert done.stdout.strip() == "asked 0", done.stderr
