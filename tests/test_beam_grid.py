"""Tabulated beams over the sphere: closed forms, orders of convergence, invariances and an independent spline."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numba import njit
from scipy.interpolate import RectBivariateSpline
from table_cases import (
    Pattern,
    beam_of,
    dipole,
    even_table,
    few_sources,
    gaussian,
    random_directions,
    table_from,
    tabulated,
    unit_vectors,
)

from sims.beam import mounting_matrix
from sims.beam_spline import add_grid, angular_spline
from sims.errors import InputError

FREQUENCY = np.array([60.0, 110.0])
OVER_PLANE = dipole(length_m=2.0, height_m=1.0)
VERTICAL = dipole(length_m=1.0, height_m=0.6, wire="vertical")
FREE = dipole(length_m=2.0)
TILTED = mounting_matrix(tilt_deg=33.0, tilt_azimuth_deg=20.0, turn_deg=11.0)


def tilted(frequency_mhz: np.ndarray, direction: np.ndarray) -> np.ndarray:
    return FREE.directivity(frequency_mhz, direction @ TILTED)


def broad(frequency_mhz: np.ndarray, direction: np.ndarray) -> np.ndarray:
    return gaussian(60.0).relative_power(frequency_mhz, direction)


def error_of(pattern: Pattern, steps: int, upper_half: bool) -> float:
    direction = random_directions(np.random.default_rng(2), 20_000)
    if upper_half:
        direction = direction[direction[:, 2] > 0.0]
    beam = beam_of(even_table(pattern, FREQUENCY, steps, upper_half=upper_half))
    got, expected = beam.relative_power(FREQUENCY, direction), pattern(FREQUENCY, direction)
    return float(np.sqrt(np.mean((got - expected) ** 2) / np.mean(expected**2)))


@pytest.mark.parametrize(
    ("pattern", "upper_half"),
    [(OVER_PLANE.directivity, True), (VERTICAL.directivity, True), (tilted, False), (broad, False)],
)
def test_error_falls_with_the_fourth_power_of_the_step(pattern: Pattern, upper_half: bool) -> None:
    errors = np.array([error_of(pattern, steps, upper_half) for steps in (60, 120, 240)])
    orders = np.log2(errors[:-1] / errors[1:])
    # Cubic splines are of order 4 (de Boor 1978). The end of an upper half costs or lends half an order before the
    # steps are small, and the Gaussian has a cone of 1e-5 at its back.
    assert np.all(orders > 3.5)
    assert np.all(orders < 5.1)
    assert errors[-1] < 1e-6


@pytest.mark.parametrize("beam", [OVER_PLANE, VERTICAL])
def test_directivity_of_a_tabulated_closed_form(beam: object) -> None:
    direction = random_directions(np.random.default_rng(3), 2000)
    table = even_table(lambda f, n: 7.0 * beam.relative_power(f, n), FREQUENCY, 180, upper_half=True)  # type: ignore[attr-defined]
    got, expected = beam_of(table).directivity(FREQUENCY, direction), beam.directivity(FREQUENCY, direction)  # type: ignore[attr-defined]
    # One degree leaves 1e-6 of the peak (the order test above).
    assert got == pytest.approx(expected, abs=3e-6 * expected.max())
    assert np.all(got[direction[:, 2] < 0.0] == 0.0)


def grids() -> list[tuple[str, np.ndarray, np.ndarray]]:
    rng = np.random.default_rng(8)
    gauss = np.degrees(np.arccos(np.polynomial.legendre.leggauss(24)[0][::-1]))
    uneven = np.sort(np.append(np.arange(0, 181, 9.0), [4.0, 100.0]))
    return [
        ("from pole to pole", np.linspace(0, 180, 37), np.arange(0, 360, 5.0)),
        ("beside the poles", np.arange(2.5, 180, 5.0), np.arange(2.5, 360, 5.0)),
        ("one pole", np.arange(0, 180, 8.0), np.arange(3.0, 360, 8.0)),
        ("odd number of phis", np.linspace(0, 180, 31), np.arange(73) * 360 / 73),
        ("Gauss-Legendre", gauss, np.arange(0, 360, 6.0)),
        ("uneven", uneven, np.sort(np.arange(0, 360, 7.5) + rng.uniform(-2, 2, 48)) % 361),
        ("almost on the poles", np.concatenate([[1e-5], np.arange(5, 180, 5.0), [180 - 1e-5]]), np.arange(0, 360, 5.0)),
    ]


@pytest.mark.parametrize(("name", "theta_deg", "phi_deg"), grids())
def test_isotropic_pattern_is_exact_on_any_grid(name: str, theta_deg: np.ndarray, phi_deg: np.ndarray) -> None:
    table = table_from(
        np.full((2, len(theta_deg), len(phi_deg)), 3.7), FREQUENCY, theta_deg, np.unique(phi_deg), upper_half=False
    )
    direction = np.concatenate([random_directions(np.random.default_rng(1), 3000), np.eye(3), -np.eye(3)])
    # A spline reproduces a constant; only rounding is left.
    assert np.abs(beam_of(table).directivity(FREQUENCY, direction) - 1.0).max() < 1e-12


def test_upper_half_of_an_isotropic_pattern_is_two_above_and_nothing_below() -> None:
    theta = np.linspace(0, 90, 19)
    beam = beam_of(table_from(np.ones((2, 19, 72)), FREQUENCY, theta, np.arange(0, 360, 5.0), upper_half=True))
    got = beam.directivity(FREQUENCY, np.array([[0.0, 0.0, 1.0], [1.0, 0.0, 0.0], [0.6, 0.0, -0.8]]))
    assert np.abs(got - np.array([[2.0, 2.0], [2.0, 2.0], [0.0, 0.0]])).max() < 1e-12


@pytest.mark.parametrize(("name", "theta_deg", "phi_deg"), grids())
def test_every_grid_gives_the_same_beam_within_its_error(name: str, theta_deg: np.ndarray, phi_deg: np.ndarray) -> None:
    beam = beam_of(tabulated(tilted, FREQUENCY, theta_deg, np.unique(phi_deg)))
    direction = random_directions(np.random.default_rng(4), 5000)
    expected = tilted(FREQUENCY, direction)
    missed = np.sqrt(np.mean((beam.directivity(FREQUENCY, direction) - expected) ** 2, axis=0))
    estimate = beam.error_estimate(FREQUENCY)
    assert np.all(missed / np.sqrt(np.mean(expected**2, axis=0)) < estimate.rms)
    # Steps of 5 to 9 degrees of a dipole just over a half wave: a thousandth at worst.
    assert np.all(estimate.rms < 2e-3)


def test_error_estimate_holds_the_real_error_in_95_of_100_random_patterns() -> None:
    rng = np.random.default_rng(12)
    frequency = np.array([100.0])
    inside_rms, inside_largest, ratio = [], [], []
    for _ in range(100):
        pattern, upper_half = few_sources(rng), bool(rng.random() < 0.5)
        count = int(rng.integers(20, 61))
        theta = np.linspace(0, 90, count // 2 + 1) if upper_half else np.linspace(0, 180, count + 1)
        phis = int(rng.integers(1.5 * count, 2 * count + 1))
        phi = np.arange(phis) * 360 / phis + rng.uniform(0, 360 / phis)
        beam = beam_of(tabulated(pattern, frequency, theta, phi, upper_half=upper_half))
        direction = random_directions(rng, 6000)
        direction = direction[direction[:, 2] > 0.0] if upper_half else direction
        expected = pattern(frequency, direction)
        missed = np.abs(beam.relative_power(frequency, direction) - expected)
        rms, largest = np.sqrt(np.mean(missed**2) / np.mean(expected**2)), missed.max() / expected.max()
        estimate = beam.error_estimate(frequency)
        inside_rms.append(rms <= estimate.rms[0])
        inside_largest.append(largest <= estimate.largest[0])
        ratio.append(estimate.rms[0] / rms)
    assert np.mean(inside_rms) >= 0.95
    assert np.mean(inside_largest) >= 0.95
    # And it is not honest by being useless: the safe side costs a factor of two to three.
    assert np.median(ratio) < 4.0


def test_turning_the_pattern_or_the_table_is_the_same_within_the_error() -> None:
    direction = random_directions(np.random.default_rng(6), 20_000)
    turned, straight = beam_of(even_table(tilted, FREQUENCY, 60)), beam_of(even_table(FREE.directivity, FREQUENCY, 60))
    one, other = turned.directivity(FREQUENCY, direction), straight.directivity(FREQUENCY, direction @ TILTED)
    allowed = turned.error_estimate(FREQUENCY), straight.error_estimate(FREQUENCY)
    rms = np.sqrt(np.mean((one - other) ** 2, axis=0) / np.mean(other**2, axis=0))
    assert np.all(rms < allowed[0].rms + allowed[1].rms)
    assert np.all(np.abs(one - other).max(axis=0) / other.max(axis=0) < allowed[0].largest + allowed[1].largest)


def rough_table(rng: np.random.Generator) -> object:
    """Noise from cell to cell, but single-valued at the poles: what is smooth then is the spline's doing."""
    power = 1.0 + rng.uniform(size=(1, 31, 60))
    power[:, [0, -1]] = 1.5
    return table_from(power, np.array([80.0]), np.linspace(0, 180, 31), np.arange(0, 360, 6.0), upper_half=False)


@pytest.mark.parametrize("across", ["north pole", "south pole", "seam", "half turn"])
def test_slope_and_curvature_go_on_over_poles_and_seam(across: str) -> None:
    beam = beam_of(rough_table(np.random.default_rng(9)))  # type: ignore[arg-type]
    along = np.array([-3.0, -2.0, -1.0, 1.0, 2.0, 3.0])
    jumps = []
    for step in (1e-3, 1e-4):
        angle = along * step
        if across.endswith("pole"):
            up = 1.0 if across == "north pole" else -1.0
            turn = np.array([np.cos(0.4), np.sin(0.4)])  # a meridian between two of the table
            direction = np.column_stack([np.sin(angle)[:, None] * turn, up * np.cos(angle)])
        else:
            phi = angle + (0.0 if across == "seam" else np.pi)
            direction = np.stack([np.cos(phi), np.sin(phi), np.full(6, 0.3)], axis=1) / np.sqrt(1.09)
        value = beam.directivity(np.array([80.0]), direction)[:, 0]
        slopes = (value[2] - value[1]) / step, (value[4] - value[3]) / step
        curvatures = (value[0] - 2 * value[1] + value[2]) / step**2, (value[3] - 2 * value[4] + value[5]) / step**2
        jumps.append((abs(slopes[1] - slopes[0]), abs(curvatures[1] - curvatures[0])))
    # One-sided differences of a function with two continuous derivatives close in with the step.
    assert jumps[1][0] < 0.2 * jumps[0][0]
    assert jumps[1][1] < 0.2 * jumps[0][1]


def test_kernel_equals_an_independent_spline_on_a_table_run_on_by_hand() -> None:
    rng = np.random.default_rng(10)
    power = rng.uniform(size=(31, 60))
    power[0], power[-1] = 0.3, 0.7
    theta, phi, pad = np.linspace(0, 180, 31), np.arange(0, 360, 6.0), 24
    over = np.roll(power, 30, axis=1)
    long = np.concatenate([over[pad:0:-1], power, over[-2 : -pad - 2 : -1]])
    long = np.concatenate([long[:, -pad:], long, long[:, :pad]], axis=1)
    steps = np.arange(-pad, 31 + pad) * 6.0, np.arange(-pad, 60 + pad) * 6.0
    spline = RectBivariateSpline(*steps, long, s=0)
    beam = beam_of(table_from(power[None], np.array([80.0]), theta, phi, upper_half=False))
    at_theta, at_phi = rng.uniform(0, 180, 4000), rng.uniform(0, 360, 4000)
    theta_rad, phi_rad = np.radians(at_theta), np.radians(at_phi)
    direction = np.stack(
        [np.sin(theta_rad) * np.cos(phi_rad), np.sin(theta_rad) * np.sin(phi_rad), np.cos(theta_rad)], axis=1
    )
    # What happens beyond the padding reaches inwards by a factor 0.268 a cell: 24 cells leave 2e-14.
    got = beam.relative_power(np.array([80.0]), direction)[:, 0]
    assert got == pytest.approx(spline.ev(at_theta, at_phi), abs=1e-11)


@pytest.mark.parametrize(("name", "theta_deg", "phi_deg"), grids()[:3])
def test_directivity_integrates_to_four_pi(name: str, theta_deg: np.ndarray, phi_deg: np.ndarray) -> None:
    beam = beam_of(tabulated(few_sources(np.random.default_rng(5)), FREQUENCY, theta_deg, phi_deg))
    z, weight = np.polynomial.legendre.leggauss(400)
    direction = unit_vectors(np.degrees(np.arccos(z)), np.arange(720) * 0.5)
    mean = weight @ beam.directivity(FREQUENCY, direction).reshape(400, 720, 2).mean(axis=1) / 2.0
    # Gauss's rule over a spline whose third derivative jumps: 1e-7 for 400 points over 36 steps.
    assert mean == pytest.approx(1.0, abs=1e-7)


@njit
def sum_up(coefficients, layout, direction, weight, brightness_k, sums):  # type: ignore[no-untyped-def]
    gain = np.empty(sums.shape[1])
    for p in range(len(direction)):
        x, y, z = direction[p]
        add_grid(coefficients, layout, x, y, z, 0.5, weight[p], brightness_k[p], gain, sums)


@pytest.mark.parametrize("upper_half", [True, False])
def test_kernel_adds_what_the_beam_says(upper_half: bool) -> None:
    rng = np.random.default_rng(11)
    frequency = np.linspace(50.0, 110.0, 7)
    beam = beam_of(even_table(OVER_PLANE.directivity if upper_half else tilted, frequency, 36, upper_half=upper_half))
    direction = np.concatenate([random_directions(rng, 500), [[0.0, 0.0, 1.0], [0.0, 0.0, -1.0], [-1.0, -0.0, 0.0]]])
    weight, brightness_k = rng.uniform(size=503), rng.uniform(100, 1000, (503, 7))
    sums = np.zeros((3, 7))
    sum_up(beam.node_table(frequency), beam.layout, direction, weight, brightness_k, sums)
    gain = beam.directivity(frequency, direction)
    expected = [0.5 * gain.sum(axis=0), weight @ gain, weight @ (gain * brightness_k)]
    assert sums == pytest.approx(np.array(expected), rel=1e-12)


def test_lost_power_is_efficiency_and_not_divided_away() -> None:
    table = even_table(FREE.directivity, np.linspace(50.0, 110.0, 7), 36)
    fraction = np.linspace(0.5, 0.8, 7)
    gain = table.power * fraction[:, None, None]
    beam = beam_of(replace(table, power=gain, radiated_fraction=fraction))
    # A straight line comes back through a spline exactly.
    assert beam.efficiency_at(np.array([55.0, 80.0])) == pytest.approx([0.525, 0.65], rel=1e-12)
    direction = np.array([[0.0, 0.0, 1.0]])
    # At three tabulated frequencies; 5 degrees leave 1e-5 of a dipole.
    at = np.array([50.0, 80.0, 110.0])
    assert beam.directivity(at, direction) == pytest.approx(FREE.directivity(at, direction), rel=2e-5)


@pytest.mark.parametrize(
    ("theta_deg", "phi_deg", "upper_half", "words"),
    [
        (np.linspace(0, 180, 4), np.arange(0, 360, 5.0), False, ["4 thetas", "at least 5"]),
        (np.linspace(0, 120, 25), np.arange(0, 360, 5.0), False, ["gap of 120 deg in theta"]),
        (np.linspace(0, 180, 37), np.arange(0, 181, 5.0), False, ["gap of 180 deg in phi"]),
        (np.linspace(0, 85, 18), np.arange(0, 360, 5.0), True, ["must end at theta 90 deg", "ends at 85"]),
        (np.linspace(180, 0, 37), np.arange(0, 365, 5.0), False, ["theta must rise", "phi must rise"]),
    ],
)
def test_grids_that_cannot_be_interpolated_are_refused(
    theta_deg: np.ndarray, phi_deg: np.ndarray, upper_half: bool, words: list[str]
) -> None:
    with pytest.raises(InputError) as caught:
        angular_spline(theta_deg, phi_deg, upper_half=upper_half)
    assert all(word in str(caught.value) for word in ["beam.files", *words])


def test_a_frequency_without_power_is_refused_by_name() -> None:
    table = even_table(FREE.directivity, FREQUENCY, 36)
    table.power[1] = 0.0
    with pytest.raises(InputError, match="110 MHz sums to 0"):
        beam_of(table)
