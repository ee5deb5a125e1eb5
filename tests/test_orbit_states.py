"""States from an orbit file: they come back as written, between them at the order of the method, and nowhere else."""

from __future__ import annotations

import tracemalloc
from pathlib import Path

import numpy as np
import pytest
from orbit_message_cases import (
    BETWEEN,
    CIRCLE,
    HEADER,
    NODES,
    ORBIT,
    instants,
    message,
    miss_km,
    segment,
    truth,
    written_times,
)
from scipy.interpolate import KroghInterpolator
from scipy.spatial.transform import Rotation

from sims.errors import InputError
from sims.orbit import OrbitTrack, period_s
from sims.orbit_states import orbit_from_message


def test_message_comes_back_to_its_own_states_and_to_those_between(tmp_path: Path) -> None:
    read = message(tmp_path, HEADER + segment(NODES))
    assert (read.object_name, len(read.segments), len(read.segments[0].times)) == ("INVENTED ORBITER", 1, len(NODES))
    at_nodes, exact = orbit_from_message(read, instants(NODES)), truth(NODES)
    # Twelve decimals are written; times to the microsecond, exact on whole seconds.
    assert miss_km(at_nodes, exact) < 1e-8
    np.testing.assert_allclose(at_nodes.velocity_km_per_s, exact.velocity_km_per_s, atol=1e-11)
    between, exact = orbit_from_message(read, instants(BETWEEN)), truth(BETWEEN)
    # Hermite of degree 7 at steps of 0.09 rad: r h^8 (9/16)^2/8! is 1e-10 km at e = 0; one-sided windows at the ends
    # and e = 0.15 make 1e-7 km (measured).
    assert miss_km(between, exact) < 1e-6
    np.testing.assert_allclose(between.velocity_km_per_s, exact.velocity_km_per_s, atol=1e-8)
    # The phase is that of the elements: the equator of the first instant is the same.
    np.testing.assert_allclose(np.abs((between.phase - exact.phase + 0.5) % 1.0 - 0.5), 0.0, atol=1e-9)


@pytest.mark.parametrize(
    ("method", "degree", "step_s"),
    [("LINEAR", 1, 50.0), ("LAGRANGE", 3, 120.0), ("LAGRANGE", 4, 120.0), ("LAGRANGE", 7, 200.0),
     ("LAGRANGE", 8, 150.0), ("HERMITE", 3, 240.0), ("HERMITE", 5, 300.0), ("HERMITE", 7, 300.0)],
)  # fmt: skip
def test_interpolation_converges_at_its_order(tmp_path: Path, method: str, degree: int, step_s: float) -> None:
    inner = np.linspace(3.0, 9.0, 900) * 3600.0  # windows are centred here
    worst = []
    for step in (step_s, step_s / 2.0):
        lines = (f"INTERPOLATION = {method}", f"INTERPOLATION_DEGREE = {degree}")
        read = message(tmp_path, HEADER + segment(np.arange(0.0, 12.0 * 3600.0 + 1.0, step), lines=lines))
        worst.append(miss_km(orbit_from_message(read, instants(inner)), truth(inner)))
    # Halving the step divides by 2^(n+1); the next terms of the series leave a tenth of a power or so at these steps.
    assert np.log2(worst[0] / worst[1]) == pytest.approx(degree + 1, abs=0.15)


@pytest.mark.parametrize(("method", "degree"), [("LAGRANGE", 2), ("LAGRANGE", 4), ("LAGRANGE", 5), ("HERMITE", 5)])
def test_polynomial_goes_through_the_nearest_nodes(tmp_path: Path, method: str, degree: int) -> None:
    lines = (f"INTERPOLATION = {method}", f"INTERPOLATION_DEGREE = {degree}")
    read = message(tmp_path, HEADER + segment(NODES, lines=lines))
    at_s = np.array([7.0, 1234.0, 1262.0, 9001.0, 9059.0, 21_500.0])
    found = orbit_from_message(read, instants(at_s))
    twice = method == "HERMITE"
    for index, seconds in enumerate(at_s):
        nearest = np.sort(np.argsort(np.abs(NODES - seconds))[: (degree + 1) // (1 + twice)])
        states = read.segments[0].position_km[nearest], read.segments[0].velocity_km_per_s[nearest]
        # scipy takes the derivative where a node is repeated.
        place = KroghInterpolator(
            np.repeat(NODES[nearest], 1 + twice), np.stack(states, 1).reshape(-1, 3) if twice else states[0]
        )
        np.testing.assert_allclose(found.position_km[index], place(seconds), atol=1e-8)  # rounding of both, km
        motion = place.derivative(seconds) if twice else KroghInterpolator(NODES[nearest], states[1])(seconds)
        np.testing.assert_allclose(found.velocity_km_per_s[index], motion, atol=1e-10)


def test_where_no_interpolation_is_named_it_is_hermite_of_degree_7(tmp_path: Path) -> None:
    nodes = np.arange(0.0, 8.0 * 3600.0, 600.0)
    named, silent = (
        orbit_from_message(message(tmp_path, HEADER + segment(nodes, lines=lines)), instants(BETWEEN))
        for lines in (("INTERPOLATION = HERMITE", "INTERPOLATION_DEGREE = 7"), ())
    )
    np.testing.assert_array_equal(named.position_km, silent.position_km)


@pytest.mark.parametrize("frame", ["EME2000", "J2000"])
def test_eme2000_is_turned_by_the_frame_bias(tmp_path: Path, frame: str) -> None:
    # IERS Conventions 2010, 5.4.4: B = R1(-eta0) R2(xi0) R3(dalpha0), GCRS to mean J2000; here as rotations of vectors.
    xi, eta, alpha = np.array([-16.6170, -6.8192, -14.6]) * 1e-3 / 3600.0 * np.pi / 180.0
    bias = Rotation.from_euler("x", eta) * Rotation.from_euler("y", -xi) * Rotation.from_euler("z", -alpha)
    assert bias.magnitude() / np.pi * 180.0 * 3.6e6 == pytest.approx(23.1, abs=0.1)
    read = message(tmp_path, HEADER + segment(NODES, frame=frame, turned=bias.as_matrix()))
    found = orbit_from_message(read, instants(NODES))
    assert miss_km(found, truth(NODES)) < 2e-9 * 2600.0  # digits of the angles
    # Unturned the motion would be 2e-7 km/s off.
    np.testing.assert_allclose(found.velocity_km_per_s, truth(NODES).velocity_km_per_s, atol=2e-9 * 2.0)
    plain = message(tmp_path, HEADER + segment(NODES, frame="GCRF", turned=bias.as_matrix()))
    assert miss_km(orbit_from_message(plain, instants(NODES)), truth(NODES)) > 1e-4  # 23 mas of 2500 km are 2.8e-4 km


def test_segments_that_share_an_instant_follow_one_another(tmp_path: Path) -> None:
    # The second continues a different orbit, so that a polynomial across the seam would show.
    first, second = NODES[NODES <= 7200.0], NODES[NODES >= 7200.0]
    read = message(tmp_path, HEADER + segment(first) + segment(second, CIRCLE))
    seconds = np.array([3600.0, 7199.0, 7200.0, 7201.0, 9000.0])
    found = orbit_from_message(read, instants(seconds))
    assert (
        miss_km(OrbitTrack(found.position_km[:3], found.velocity_km_per_s[:3], found.phase[:3]), truth(seconds[:3]))
        < 1e-5
    )
    late = OrbitTrack(found.position_km[3:], found.velocity_km_per_s[3:], found.phase[3:])
    assert miss_km(late, truth(seconds[3:], CIRCLE)) < 1e-5


def test_part_to_be_used_bounds_the_samples_but_not_the_nodes(tmp_path: Path) -> None:
    stamps = written_times(np.array([1200.0, 20_400.0]), "UTC")
    lines = (f"USEABLE_START_TIME = {stamps[0]}", f"USEABLE_STOP_TIME = {stamps[1]}")
    read = message(tmp_path, HEADER + segment(NODES, lines=lines))
    inside = np.linspace(1200.0, 20_400.0, 777)
    whole = orbit_from_message(message(tmp_path, HEADER + segment(NODES)), instants(inside))
    np.testing.assert_array_equal(orbit_from_message(read, instants(inside)).position_km, whole.position_km)
    with pytest.raises(InputError, match="1 samples from 2027-06-01T00:19:59"):
        orbit_from_message(read, instants([1199.0, 1300.0]))


# --- where it does not reach ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("seconds", "count", "first"),
    [
        ([-1.0, 100.0], 1, "2027-05-31T23:59:59"),
        ([100.0, 8000.0, 9000.0], 2, "2027-06-01T02:13:20"),
        ([3e5], 1, "2027-06-04"),
    ],
)  # fmt: skip
def test_samples_before_after_and_in_a_gap_between_segments_are_refused(
    tmp_path: Path, seconds: list[float], count: int, first: str
) -> None:
    text = HEADER + segment(NODES[NODES <= 7200.0]) + segment(NODES[NODES >= 10_800.0])
    read = message(tmp_path, text)
    with pytest.raises(InputError) as refused:
        orbit_from_message(read, instants(seconds))
    lines = [number for number, line in enumerate(text.splitlines(), start=1) if line == "META_START"]
    (problem,) = refused.value.problems
    assert problem.startswith(f"vantage.file: {tmp_path / 'orbit.oem'}: {count} samples from {first}")
    for part in (f"2027-06-01T02:00:00.000 (line {lines[0]})", "2027-06-01T03:00:00.000 to", f"(line {lines[1]})"):
        assert part in problem


def test_states_missing_inside_a_segment_are_refused_where_samples_need_them(tmp_path: Path) -> None:
    lost = (NODES > 3600.0) & (NODES < 8400.0)
    text = HEADER + segment(NODES[~lost])
    read = message(tmp_path, text)
    line = next(
        number for number, row in enumerate(text.splitlines(), start=1) if row.startswith("2027-06-01T02:20:00")
    )
    with pytest.raises(InputError) as refused:
        orbit_from_message(read, instants([100.0, 5500.0, 5600.0, 18_000.0]))
    (problem,) = refused.value.problems
    assert f"line {line}: 4800.0 s after the state of line {line - 1}" in problem
    away = np.array([100.0, 18_000.0])
    assert miss_km(orbit_from_message(read, instants(away)), truth(away)) < 1e-6


@pytest.mark.parametrize(
    ("method", "degree", "constant"), [("LINEAR", 1, 8.0), ("HERMITE", 3, 384.0), ("LAGRANGE", 3, 384.0 / 9.0)]
)
def test_a_step_is_refused_when_it_makes_an_error_above_a_kilometre(
    tmp_path: Path, method: str, degree: int, constant: float
) -> None:
    # On a circle the remainder has a closed form: r (n h)^2/8, r (n h)^4/384, 9 r (n h)^4/384 in the middle of a step.
    limit_s = (constant / 1837.4) ** (1.0 / (degree + 1)) * period_s(100.0) / (2.0 * np.pi)
    inner = np.linspace(2.0, 4.0, 997) * 3600.0
    lines = (f"INTERPOLATION = {method}", f"INTERPOLATION_DEGREE = {degree}")
    coarse, fine = (
        message(tmp_path, HEADER + segment(np.arange(0.0, 6.0 * 3600.0, limit_s * factor), CIRCLE, lines=lines))
        for factor in (1.01, 0.98)
    )
    # The chord falls short of the arc by the fourth order in n h = 0.5: some hundredths.
    assert 0.85 < miss_km(orbit_from_message(fine, instants(inner)), truth(inner, CIRCLE)) < 1.0
    with pytest.raises(InputError, match=f"{method} of degree {degree} errs by some 1"):
        orbit_from_message(coarse, instants(inner))


@pytest.mark.parametrize(("eccentricity", "altitude_km"), [(0.15, 500.0), (0.4, 1400.0), (0.7, 5000.0)])
@pytest.mark.parametrize(
    ("method", "degree", "steps"), [("HERMITE", 3, 16), ("HERMITE", 7, 10), ("LAGRANGE", 3, 25), ("LAGRANGE", 8, 12)]
)
def test_samples_of_an_ellipse_that_are_not_refused_are_right_to_three_kilometres(
    tmp_path: Path, method: str, degree: int, steps: int, eccentricity: float, altitude_km: float
) -> None:
    ellipse = ORBIT.model_copy(update={"eccentricity": eccentricity, "altitude_km": altitude_km})
    nodes = np.arange(3 * steps + 1) * period_s(altitude_km) / steps
    lines = (f"INTERPOLATION = {method}", f"INTERPOLATION_DEGREE = {degree}")
    read = message(tmp_path, HEADER + segment(nodes, ellipse, lines=lines))
    accepted, refused = 0, 0
    for seconds in (nodes[:-1, None] + np.diff(nodes)[:, None] * np.linspace(0.05, 0.95, 7)).reshape(-1, 7):
        try:
            found = orbit_from_message(read, instants(seconds))
        except InputError:
            refused += 1
            continue
        accepted += 1
        # 1 km by the estimate, which a single derivative taken beside the window leaves good to a factor of three.
        assert miss_km(found, truth(seconds, ellipse)) < 3.0
    assert accepted > 0
    assert refused > 0 or eccentricity < 0.4


def test_memory_stays_in_proportion_to_the_samples(tmp_path: Path) -> None:
    read = message(tmp_path, HEADER + segment(np.arange(0.0, 86_400.0, 60.0)))
    peaks = []
    for count in (200_000, 300_000):  # several chunks
        seconds = np.linspace(0.0, 86_340.0, count)
        times = instants(seconds)
        tracemalloc.start()
        found = orbit_from_message(read, times)
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
        assert miss_km(found, truth(seconds)) < 1e-6
    # Measured 137 bytes a sample, of which 56 are the track; the polynomials of all samples at once would take 860.
    assert (peaks[1] - peaks[0]) / 100_000 < 400.0
