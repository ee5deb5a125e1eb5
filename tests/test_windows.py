"""Windows of time: edges between samples against closed forms of eclipses, sums and overlaps against counting."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from numpy.typing import NDArray

from sims.errors import InputError
from sims.orbit import period_s
from sims.visibility import eclipse
from sims.windows import Windows, depth_windows, windows

Array = NDArray[np.float64]
MOON_KM, ORBIT_KM = 1737.4, 1837.4
EARTH_KM, EARTH_AWAY_KM = 6378.137, 384_400.0
SUN_KM, SUN_AWAY_KM = 695_700.0, 149_597_870.7
START = np.datetime64("2027-06-01T00:00:00", "ns")
PERIOD_S = period_s(100.0)


def stamps(seconds: Array) -> NDArray[np.datetime64]:
    return np.asarray(START + np.round(np.asarray(seconds) * 1e9).astype("timedelta64[ns]"))


def depths(beta_deg: float, body_km: float, away_km: float, step_s: float, side: int) -> tuple[Array, Array]:
    """Seconds, and the depth of the disk's far (1) or near (-1) edge, along six circular orbits of 100 km."""
    seconds = np.arange(round(6.0 * PERIOD_S / step_s)) * step_s
    angle, beta = 2.0 * np.pi * seconds / PERIOD_S + 0.123, np.deg2rad(beta_deg)
    place = ORBIT_KM * np.stack([np.cos(angle), np.sin(angle), np.zeros_like(angle)], axis=-1)
    body = np.broadcast_to(away_km * np.array([np.cos(beta), 0.0, np.sin(beta)]), place.shape)
    found = eclipse(place, body, body_km, place / ORBIT_KM, np.arcsin(MOON_KM / ORBIT_KM))
    return seconds, found.depth_rad - side * found.radius_rad


def closed_form_s(beta_deg: float, body_km: float, away_km: float, side: int) -> float:
    """Duration of the eclipse of a sphere at a distance.

    For a point at infinity P/pi acos(sqrt(h^2 + 2 R h) / ((R + h) cos beta)), the cylinder of shadow; the tangents
    of both spheres widen its half-angle by asin((R - side a) / D).
    """
    half = np.arcsin(MOON_KM / ORBIT_KM) + np.arcsin((MOON_KM - side * body_km) / away_km)
    ratio = np.cos(half) / np.cos(np.deg2rad(beta_deg))
    return float(PERIOD_S / np.pi * np.arccos(ratio)) if ratio < 1.0 else 0.0


def tolerance_s(step_s: float, duration_s: float) -> float:
    """What a cubic through samples may miss of a duration, s.

    The error of the depth goes as the fourth power of the step. The depth's slope at the edge goes as the duration
    where the body grazes the limb, so that the error of the duration goes as its inverse: 0.1 s^2 over it at one minute
    and 2.2 s^2 over it at two are the worst seen, half of what is allowed here.
    """
    return 0.2 * (step_s / 60.0) ** 4 / duration_s


# --- eclipses -------------------------------------------------------------------------------------------------------


def test_longest_shadow_of_a_point_sun() -> None:
    seconds, depth = depths(0.0, 0.0, 1e14, 60.0, 1)
    found = depth_windows(stamps(seconds), depth)
    height_km = ORBIT_KM - MOON_KM
    cylinder_s = PERIOD_S / np.pi * np.arccos(np.sqrt(height_km**2 + 2.0 * MOON_KM * height_km) / ORBIT_KM)
    assert cylinder_s == pytest.approx(2788.1, abs=0.05)  # computed from geometry; digits given
    np.testing.assert_allclose(found.duration_s[found.whole], cylinder_s, atol=1e-6)  # cubic, see below


@pytest.mark.parametrize("step_s", [60.0, 120.0])
@pytest.mark.parametrize(("body_km", "away_km"), [(SUN_KM, SUN_AWAY_KM), (EARTH_KM, EARTH_AWAY_KM)])
@pytest.mark.parametrize("side", [1, -1])
def test_durations_of_eclipses_have_their_closed_form_at_every_beta(
    step_s: float, body_km: float, away_km: float, side: int
) -> None:
    for beta_deg in (0.0, 10.0, -30.0, 50.0, 60.0, 65.0, 69.0, 70.0, 70.3, 70.7, 71.0, 71.2, 72.0, 73.0, 80.0, 90.0):
        expected_s = closed_form_s(beta_deg, body_km, away_km, side)
        seconds, depth = depths(beta_deg, body_km, away_km, step_s, side)
        found = depth_windows(stamps(seconds), depth)
        if expected_s == 0.0:
            assert len(found.start) == 0
            continue
        whole = found.duration_s[found.whole]
        assert len(whole) >= 5
        np.testing.assert_allclose(whole, expected_s, atol=tolerance_s(step_s, expected_s))


def test_straight_lines_between_samples_would_miss_by_seconds() -> None:
    # Why there is a cubic: the same samples, the same eclipse, 150 s long.
    seconds, depth = depths(70.7, SUN_KM, SUN_AWAY_KM, 60.0, 1)
    below = depth > 0.0
    at = np.flatnonzero(below[1:] != below[:-1])
    edges = seconds[at] + 60.0 * depth[at] / (depth[at] - depth[at + 1])
    lines_s = np.diff(edges)[::2] if not below[0] else np.diff(edges)[1::2]
    assert np.abs(lines_s - closed_form_s(70.7, SUN_KM, SUN_AWAY_KM, 1)).max() > 5.0


def test_penumbra_lasts_as_long_as_the_tangents_are_apart() -> None:
    seconds, umbra = depths(0.0, SUN_KM, SUN_AWAY_KM, 60.0, 1)
    _, penumbra = depths(0.0, SUN_KM, SUN_AWAY_KM, 60.0, -1)
    inner, outer = depth_windows(stamps(seconds), umbra), depth_windows(stamps(seconds), penumbra)
    apart = np.arcsin((MOON_KM + SUN_KM) / SUN_AWAY_KM) - np.arcsin((MOON_KM - SUN_KM) / SUN_AWAY_KM)
    expected_s = PERIOD_S * apart / (2.0 * np.pi)
    assert 10.0 < expected_s < 11.0
    fading_s = (inner.start - outer.start)[1:-1] / np.timedelta64(1, "ns") / 1e9
    np.testing.assert_allclose(fading_s, expected_s, atol=1e-6)  # as above: a straight depth leaves rounding


@pytest.mark.parametrize("step_s", [60.0, 120.0])
def test_an_eclipse_shorter_than_the_step_is_found(step_s: float) -> None:
    # Grazing: 40 s, between samples that are all clear for some of the orbits.
    beta_deg = 70.741
    expected_s = closed_form_s(beta_deg, SUN_KM, SUN_AWAY_KM, 1)
    assert 20.0 < expected_s < 50.0
    seconds, depth = depths(beta_deg, SUN_KM, SUN_AWAY_KM, step_s, 1)
    found = depth_windows(stamps(seconds), depth)
    hit = sum(((seconds > low) & (seconds < high)).any() for low, high in _bounds(found))
    assert len(found.start) == 6
    assert hit < 6
    np.testing.assert_allclose(found.duration_s, expected_s, atol=tolerance_s(step_s, expected_s))


def _bounds(found: Windows) -> list[tuple[float, float]]:
    as_seconds = [(edges - START) / np.timedelta64(1, "ns") / 1e9 for edges in (found.start, found.stop)]
    return [(float(low), float(high)) for low, high in zip(*as_seconds, strict=True)]


def test_a_gap_shorter_than_the_step_is_found_too() -> None:
    seconds = np.arange(0.0, 6001.0, 60.0)
    found = depth_windows(stamps(seconds), (seconds - 3030.0) ** 2 - 100.0)
    # A parabola is its own cubic: clear from 3020 to 3040 s; stamps are whole nanoseconds.
    np.testing.assert_allclose(np.array(_bounds(found)), [[0.0, 3020.0], [3040.0, 6000.0]], atol=1e-8)


def test_edges_of_a_sine_are_its_roots() -> None:
    seconds = np.arange(0.0, 86_400.0, 60.0)
    found = depth_windows(stamps(seconds), np.sin(2.0 * np.pi * (seconds - 1000.0) / 7000.0))
    starts = np.array(_bounds(found))[:, 0]
    # The curvature of a sine vanishes at its roots, and with it the error of the cubic: 1e-6 s are left.
    np.testing.assert_allclose(starts, 1000.0 + 7000.0 * np.arange(len(starts)), atol=1e-5)
    assert len(starts) == 13


# --- windows of flags -----------------------------------------------------------------------------------------------


def test_flags_give_edges_halfway() -> None:
    flag = np.array([True, True, False, False, True, False, True])
    found = windows(stamps(np.arange(7) * 10.0), flag)
    assert _bounds(found) == [(0.0, 15.0), (35.0, 45.0), (55.0, 60.0)]
    assert found.cut_at_start.tolist() == [True, False, False]
    assert found.cut_at_end.tolist() == [False, False, True]
    assert found.whole.tolist() == [False, True, False]
    assert found.total_s == 30.0


@pytest.mark.parametrize(("always", "expected"), [(True, [(0.0, 60.0)]), (False, [])])
def test_always_and_never(always: bool, expected: list[tuple[float, float]]) -> None:
    seconds = np.arange(7) * 10.0
    for found in (
        windows(stamps(seconds), np.full(7, always)),
        depth_windows(stamps(seconds), np.full(7, 1.0 if always else -1.0)),
    ):
        assert _bounds(found) == expected
        assert not found.whole.any()
        assert found.share_s(stamps(np.array([0.0, 30.0, 60.0]))).tolist() == ([30.0, 30.0] if always else [0.0, 0.0])


# --- sums and overlaps ----------------------------------------------------------------------------------------------


def random_windows(seed: int, count: int) -> Windows:
    edges = np.sort(np.random.default_rng(seed).choice(10_000, 2 * count, replace=False)).astype(float)
    return Windows(stamps(edges[0::2]), stamps(edges[1::2]), START, stamps(np.array([10_000.0]))[0])


def by_second(found: Windows) -> NDArray[np.bool_]:
    """Whether each second from 0 to 10 000 lies within a window, by looking at its middle."""
    middle = np.arange(10_000) + 0.5
    inside = np.zeros(10_000, dtype=bool)
    for low, high in _bounds(found):
        inside |= (middle > low) & (middle < high)
    return inside


def test_time_between_edges_is_what_counting_gives() -> None:
    found = random_windows(1, 40)
    edges = np.array([0, 17, 17, 500, 3333, 9999, 10_000])
    counted = [by_second(found)[low:high].sum() for low, high in pairwise(edges)]
    np.testing.assert_allclose(found.share_s(stamps(edges.astype(float))), counted, atol=1e-9)  # rounding
    assert found.share_s(stamps(np.array([0.0, 1e4]))).sum() == pytest.approx(found.total_s, abs=1e-9)


def test_overlap_is_what_counting_gives() -> None:
    first, second = random_windows(2, 60), random_windows(3, 45)
    both = first.overlap(second)
    np.testing.assert_array_equal(by_second(both), by_second(first) & by_second(second))
    assert np.all(both.start[1:] >= both.stop[:-1])
    assert _bounds(second.overlap(first)) == _bounds(both)
    assert _bounds(first.overlap(first)) == _bounds(first)


def test_overlap_with_nothing_is_nothing() -> None:
    first = random_windows(4, 5)
    nothing = Windows(first.start[:0], first.stop[:0], first.first, first.last)
    assert len(first.overlap(nothing).start) == 0
    assert len(nothing.overlap(nothing).start) == 0


def test_spans_must_agree() -> None:
    first = random_windows(5, 5)
    other = Windows(first.start, first.stop, first.first, first.last + np.timedelta64(1, "s"))
    with pytest.raises(InputError, match="spans differ"):
        first.overlap(other)


@pytest.mark.parametrize(
    ("seconds", "depth", "words"),
    [
        ([0.0], [1.0], "at least two"),
        ([0.0, 1.0, 2.0], [1.0, 2.0], "3 and 2 samples"),
        ([0.0, 2.0, 1.0], [1.0, 2.0, 3.0], "should rise"),
        ([0.0, 1.0, 1.0], [1.0, 2.0, 3.0], "should rise"),
        ([0.0, 1.0, 2.0], [1.0, np.nan, 3.0], "1 values are not finite"),
    ],
)
def test_what_is_no_series_is_refused(seconds: list[float], depth: list[float], words: str) -> None:
    with pytest.raises(InputError, match=words):
        depth_windows(stamps(np.array(seconds)), np.array(depth))
