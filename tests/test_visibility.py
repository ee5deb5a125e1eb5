"""What hides what: disks behind the limb against tangents, sampling and closed forms; the Sun's height and beta."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from numpy.typing import NDArray

from sims.errors import InputError
from sims.visibility import (
    LIT,
    PENUMBRA,
    UMBRA,
    Eclipse,
    angle_between_rad,
    beta_angle_rad,
    cap_overlap_sr,
    eclipse,
    elevation_rad,
    local_solar_time_hours,
    terminator_crossing,
)

Array = NDArray[np.float64]
MOON_KM = 1737.4
EARTH_KM, EARTH_AWAY_KM = 6378.137, 384_400.0
SUN_KM, SUN_AWAY_KM = 695_700.0, 149_597_870.7
BODIES = [(EARTH_KM, EARTH_AWAY_KM), (SUN_KM, SUN_AWAY_KM)]


def around(angle_rad: Array, radius_km: float) -> Array:
    """Places in a plane, at an angle from the direction away from the body on the x axis."""
    return radius_km * np.stack([-np.cos(angle_rad), np.sin(angle_rad), np.zeros_like(angle_rad)], axis=-1)


def eclipse_at(angle_rad: Array, radius_km: float, body_radius_km: float, away_km: float) -> Eclipse:
    place = around(angle_rad, radius_km)
    body = np.broadcast_to([away_km, 0.0, 0.0], place.shape)
    return eclipse(place, body, body_radius_km, place / radius_km, np.arcsin(MOON_KM / radius_km))


def shadow_edge_rad(radius_km: float, body_radius_km: float, away_km: float, side: int) -> float:
    """Angle from the shadow's axis where the tangent of Moon and body passes: side 1 umbra, -1 penumbra, 0 centre.

    A line that touches both spheres has a normal n with n.x = R on the Moon and n.x = R - (R - side a) at the
    body; the angles at the Moon's centre between the body, the point of touch and the place add up.
    """
    return float(np.arcsin(MOON_KM / radius_km) + np.arcsin((MOON_KM - side * body_radius_km) / away_km))


# --- depth and state ------------------------------------------------------------------------------------------------


def test_a_body_straight_below_is_as_deep_as_the_moon_is_wide() -> None:
    found = eclipse_at(np.zeros(1), 1837.4, SUN_KM, SUN_AWAY_KM)
    # asin(1737.4 / 1837.4) = 71.00998 deg (geometry); digits given.
    assert np.rad2deg(found.depth_rad[0]) == pytest.approx(71.00998, abs=5e-6)
    assert found.state[0] == UMBRA
    assert found.hidden[0]
    assert found.visible_fraction[0] == 0.0


def test_angular_radius_of_the_moon_itself() -> None:
    place = np.array([[0.0, 1837.4, 0.0]])
    moon = eclipse(place, np.zeros((1, 3)), MOON_KM, place / 1837.4, 0.5)
    assert np.rad2deg(moon.radius_rad[0]) == pytest.approx(71.00998, abs=5e-6)  # digits given


@pytest.mark.parametrize(("body_km", "away_km"), BODIES)
@pytest.mark.parametrize("altitude_km", [15.0, 100.0, 5000.0, 60_000.0])
def test_depth_vanishes_on_the_tangents_of_both_spheres(body_km: float, away_km: float, altitude_km: float) -> None:
    radius_km = MOON_KM + altitude_km
    for side in (-1, 0, 1):
        edge = shadow_edge_rad(radius_km, body_km, away_km, side)
        found = eclipse_at(np.array([edge]), radius_km, body_km, away_km)
        # Rounding of angles of order one.
        assert found.depth_rad[0] - side * found.radius_rad[0] == pytest.approx(0.0, abs=2e-15)


@pytest.mark.parametrize(("body_km", "away_km"), BODIES)
def test_state_follows_the_tangents(body_km: float, away_km: float) -> None:
    umbra, penumbra = (shadow_edge_rad(1837.4, body_km, away_km, side) for side in (1, -1))
    step = 1e-9
    angles = np.array([0.0, umbra - step, umbra + step, penumbra - step, penumbra + step, np.pi])
    found = eclipse_at(angles, 1837.4, body_km, away_km)
    assert found.state.tolist() == [UMBRA, UMBRA, PENUMBRA, PENUMBRA, LIT, LIT]
    partial = found.visible_fraction[2:4]
    assert np.all((partial > 0.0) & (partial < 1.0))
    assert found.visible_fraction[[0, 1]].tolist() == [0.0, 0.0]
    assert found.visible_fraction[[4, 5]].tolist() == [1.0, 1.0]


@pytest.mark.parametrize("beta_deg", [0.0, 30.0, 60.0, 69.0])
def test_share_of_a_circular_orbit_without_the_earth_has_its_closed_form(beta_deg: float) -> None:
    count = 200_000
    angle = (np.arange(count) + 0.5) * (2.0 * np.pi / count)
    beta = np.deg2rad(beta_deg)
    place = around(angle, 1837.4)
    body = np.broadcast_to(EARTH_AWAY_KM * np.array([np.cos(beta), 0.0, np.sin(beta)]), place.shape)
    found = eclipse(place, body, EARTH_KM, place / 1837.4, np.arcsin(MOON_KM / 1837.4))
    for hidden, side in ((found.depth_rad > 0.0, 0), (found.hidden, 1), (found.state != LIT, -1)):
        edge = shadow_edge_rad(1837.4, EARTH_KM, EARTH_AWAY_KM, side)
        share = np.arccos(np.cos(edge) / np.cos(beta)) / np.pi
        # Each of two edges is off by up to half a sample.
        assert hidden.mean() == pytest.approx(share, abs=1.0 / count)


# --- share of the disk in sight -------------------------------------------------------------------------------------


def disk_samples(centre_rad: float, radius_rad: float, count: int) -> Array:
    """Evenly spread directions within a cap whose centre lies at an angle from z (golden spiral)."""
    number = np.arange(count) + 0.5
    height = 1.0 - number / count * 2.0 * np.sin(0.5 * radius_rad) ** 2
    across = np.sqrt(1.0 - height**2)
    turn = np.pi * (1.0 + np.sqrt(5.0)) * number
    local = np.stack([across * np.cos(turn), across * np.sin(turn), height], axis=-1)
    cosine, sine = np.cos(centre_rad), np.sin(centre_rad)
    return np.asarray(local @ np.array([[cosine, 0.0, -sine], [0.0, 1.0, 0.0], [sine, 0.0, cosine]]))


@pytest.mark.parametrize("limb_deg", [2.0, 30.0, 71.0, 90.0, 100.0])
@pytest.mark.parametrize("radius_deg", [0.266, 0.95, 5.0])
@pytest.mark.parametrize("place", [-0.9, -0.4, 0.0, 0.5, 0.95])
def test_visible_share_is_that_of_directions_spread_over_the_disk(
    limb_deg: float, radius_deg: float, place: float
) -> None:
    limb, radius = np.deg2rad(limb_deg), np.deg2rad(radius_deg)
    separation = limb + place * radius
    count = 100_000
    seen = angle_between_rad(np.array([0.0, 0.0, 1.0]), disk_samples(separation, radius, count)) > limb
    nadir = np.array([[0.0, 0.0, 1.0]])
    body = np.array([[np.sin(separation), 0.0, np.cos(separation)]])
    found = eclipse(np.zeros((1, 3)), body, float(np.sin(radius)), -nadir, limb)
    # A limb 5 deg across hidden whole by one of 2 deg cannot be; the spiral misses an edge by about a cell, 1 of 316
    # across, along a few hundred cells, evenly to both sides: some 10 of 100 000 are left.
    assert found.visible_fraction[0] == pytest.approx(float(seen.mean()), abs=2e-4)


def test_a_straight_limb_through_the_centre_hides_half() -> None:
    for radius in (1e-4, 0.0047, 0.1, 1.0):
        found = eclipse(
            np.zeros((1, 3)), np.array([[1.0, 0.0, 0.0]]), float(np.sin(radius)), np.array([[0.0, 0.0, 1.0]]), np.pi / 2
        )
        # Rounding of 1e-16 rad in the limb's place is 2e-12 of the smallest disk; the area's own rounding 1e-11.
        assert found.visible_fraction[0] == pytest.approx(0.5, abs=2e-11)


def test_small_disks_overlap_as_in_the_plane() -> None:
    a, b = 2e-3, 3e-3
    c = np.linspace(1.05e-3, 4.95e-3, 50)
    # Lens of two plane circles (elementary geometry).
    first = np.arccos((c**2 + a**2 - b**2) / (2 * c * a))
    second = np.arccos((c**2 + b**2 - a**2) / (2 * c * b))
    corner = 0.5 * np.sqrt((-c + a + b) * (c + a - b) * (c - a + b) * (c + a + b))
    lens = a**2 * first + b**2 * second - corner
    # The sphere's curvature changes areas by the radius squared, 1e-5 of the disk.
    np.testing.assert_allclose(cap_overlap_sr(c, np.array(a), np.array(b)), lens, atol=1e-5 * np.pi * a**2)


@pytest.mark.parametrize(("a", "b"), [(0.02, 0.5), (0.3, 1.2), (0.4, 0.4), (0.1, 1.8)])
def test_overlap_summed_over_all_places_is_the_product_of_the_areas(a: float, b: float) -> None:
    # Integral geometry: a cap moved over the whole sphere covers each point of another for its own area.
    nodes, weights = np.polynomial.legendre.leggauss(400)
    edges = sorted({0.0, abs(a - b), a + b, np.pi})
    total = 0.0
    for low, high in pairwise(edges):
        c = 0.5 * (high - low) * nodes + 0.5 * (high + low)
        overlap = cap_overlap_sr(c, np.full_like(c, a), np.full_like(c, b))
        total += 0.5 * (high - low) * float(np.sum(weights * overlap * 2.0 * np.pi * np.sin(c)))
    areas = (2.0 * np.pi) ** 2 * (1.0 - np.cos(a)) * (1.0 - np.cos(b))
    # Where the caps touch the overlap goes as the power 3/2, which leaves Gauss's rule of 400 points 1e-8.
    assert total == pytest.approx(areas, rel=1e-7)


def test_the_share_is_smooth_and_falls_as_the_body_sinks() -> None:
    edge = shadow_edge_rad(1837.4, SUN_KM, SUN_AWAY_KM, 0)
    angle = edge + np.linspace(0.006, -0.006, 6001)
    found = eclipse_at(angle, 1837.4, SUN_KM, SUN_AWAY_KM)
    falls = -np.diff(found.visible_fraction)
    assert falls.min() >= -1e-12
    # The fastest fall is one diameter's chord: step x 2 radius / (pi radius^2).
    assert falls.max() == pytest.approx(2e-6 * 2.0 / (np.pi * found.radius_rad[0]), rel=2e-3)


def test_a_body_wider_than_what_hides_it_keeps_a_ring() -> None:
    nadir = np.array([[0.0, 0.0, 1.0]])
    found = eclipse(np.zeros((1, 3)), nadir, float(np.sin(0.02)), -nadir, 0.015)
    assert found.state[0] == PENUMBRA
    ring = 1.0 - (1.0 - np.cos(0.015)) / (1.0 - np.cos(0.02))
    assert found.visible_fraction[0] == pytest.approx(ring, abs=1e-11)  # rounding of 1 - cos


def test_a_point_is_seen_or_not() -> None:
    angles = shadow_edge_rad(1837.4, 0.0, SUN_AWAY_KM, 0) + np.array([-1e-9, 1e-9])
    found = eclipse_at(angles, 1837.4, 0.0, SUN_AWAY_KM)
    assert found.visible_fraction.tolist() == [0.0, 1.0]


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"position_km": np.full((2, 3), np.nan)}, "not all numbers are finite"),
        ({"limb_angle_rad": np.array([1.0, 4.0])}, "limb_angle_rad: should lie within 0 to pi"),
        ({"body_radius_km": -1.0}, "body_radius_km: should not be negative"),
        ({"body_radius_km": 2e6}, "from the centre of a body of radius"),
    ],
)
def test_what_cannot_be_is_refused(change: dict[str, object], words: str) -> None:
    place = around(np.array([0.1, 0.2]), 1837.4)
    sound: dict[str, object] = {
        "position_km": place,
        "body_km": np.broadcast_to([1e6, 0.0, 0.0], (2, 3)),
        "body_radius_km": 10.0,
        "zenith": place / 1837.4,
        "limb_angle_rad": 1.2,
    }
    eclipse(**sound)  # type: ignore[arg-type]
    with pytest.raises(InputError, match=words):
        eclipse(**(sound | change))  # type: ignore[arg-type]


# --- the Sun over the ground and the orbit --------------------------------------------------------------------------


def test_elevation_from_zenith_to_nadir() -> None:
    place = np.array([[0.0, 0.0, MOON_KM]])
    up = np.array([[0.0, 0.0, 1.0]])
    for body, expected_deg in (([0, 0, 9e3], 90.0), ([5e3, 0, MOON_KM], 0.0), ([0, 0, -9e3], -90.0)):
        found = np.rad2deg(elevation_rad(place, up, np.array([body], dtype=float)))
        assert found[0] == pytest.approx(expected_deg, abs=1e-12)  # rounding


def test_beta_is_the_height_of_the_sun_over_the_orbit() -> None:
    position, velocity = np.array([[2000.0, 0.0, 0.0]]), np.array([[0.2, 1.5, 0.0]])
    for beta_deg in (-90.0, -30.0, 0.0, 45.0, 90.0):
        beta = np.deg2rad(beta_deg)
        sun = SUN_AWAY_KM * np.array([[0.6 * np.cos(beta), 0.8 * np.cos(beta), np.sin(beta)]])
        assert np.rad2deg(beta_angle_rad(position, velocity, sun)[0]) == pytest.approx(beta_deg, abs=1e-12)  # rounding
        assert np.rad2deg(beta_angle_rad(position, -velocity, sun)[0]) == pytest.approx(-beta_deg, abs=1e-12)


def test_local_solar_time_runs_eastward_from_noon_below_the_sun() -> None:
    sun_deg = np.array([10.0, 10.0, 10.0, 10.0, -170.0, 350.0])
    place_deg = np.array([10.0, 190.0, 100.0, -80.0, 175.0, -10.0])
    expected = [12.0, 0.0, 18.0, 6.0, 11.0, 12.0]
    np.testing.assert_allclose(local_solar_time_hours(place_deg, sun_deg), expected, atol=1e-12)  # rounding
    just_before_midnight = local_solar_time_hours(np.nextafter(180.0, 0.0), 360.0)
    assert 0.0 <= just_before_midnight < 24.0


def test_the_terminator_is_crossed_into_day_and_into_night() -> None:
    count = 360
    angle = np.deg2rad(np.arange(count) + 0.5)
    place = around(angle, MOON_KM)
    sun = np.broadcast_to([SUN_AWAY_KM, 0.0, 0.0], place.shape)
    flags = terminator_crossing(elevation_rad(place, place / MOON_KM, sun))
    # The day begins a quarter of a turn from the Sun, less its parallax of 0.0007 deg.
    assert np.flatnonzero(flags == 1).tolist() == [90]
    assert np.flatnonzero(flags == -1).tolist() == [270]
    assert flags[0] == 0
