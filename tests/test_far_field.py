"""What every reader hands on: one order, one seam, one value at a pole, and every fault told by its cell."""

from __future__ import annotations

import numpy as np
import pytest
from table_cases import beam_of, dipole, few_sources, random_directions, unit_vectors

from sims.errors import InputError
from sims.far_field import FarField, far_field

FREQUENCY = np.array([50.0, 60.0, 75.0])
THETA, PHI = np.arange(0.0, 181.0, 6.0), np.arange(0.0, 360.0, 6.0)
PATTERN = few_sources(np.random.default_rng(11))


def power_on(theta_deg: np.ndarray = THETA, phi_deg: np.ndarray = PHI, frequency: np.ndarray = FREQUENCY) -> np.ndarray:
    values = PATTERN(frequency, unit_vectors(theta_deg, phi_deg))
    return np.moveaxis(values.reshape(len(theta_deg), len(phi_deg), -1), -1, 0).copy()


def fields_on(phi_deg: np.ndarray = PHI) -> tuple[np.ndarray, np.ndarray]:
    """A dipole along x: sqrt(power) has the parts of x on e_theta and e_phi (see `sims.beam_grid`)."""
    theta, phi = np.meshgrid(np.radians(THETA), np.radians(phi_deg), indexing="ij")
    one = (np.cos(theta) * np.cos(phi))[None] * np.ones((3, 1, 1))
    return one.astype(complex), (-np.sin(phi))[None] * np.ones((3, 1, 1)).astype(complex)


def same(one: FarField, two: FarField) -> None:
    for name in ("frequency_mhz", "theta_deg", "phi_deg", "power"):
        assert getattr(one, name) == pytest.approx(getattr(two, name), rel=1e-12, abs=1e-12)


def problems_of(*arrays: np.ndarray) -> str:
    with pytest.raises(InputError) as caught:
        far_field(*arrays, "beam.txt")
    assert all("beam.txt" in line for line in caught.value.problems)
    return "\n".join(caught.value.problems)


def test_a_sound_table_is_left_as_it_is() -> None:
    table = far_field(FREQUENCY, THETA, PHI, power_on(), "beam.txt")
    assert table.notes in ((), ("power at the poles averaged over phi",))
    assert table.power == pytest.approx(power_on(), rel=1e-12)
    assert not table.upper_half
    x, weight = np.polynomial.legendre.leggauss(80)
    turn = 2 * np.pi * np.arange(160) / 160
    rho = np.sqrt(1 - x**2)
    towards = np.stack([np.outer(rho, np.cos(turn)), np.outer(rho, np.sin(turn)), np.repeat(x[:, None], 160, 1)], -1)
    mean = weight @ PATTERN(FREQUENCY, towards.reshape(-1, 3)).reshape(80, 160, -1).mean(axis=1) / 2
    # A spline of 6-deg steps through a pattern of a few lobes.
    assert table.radiated_fraction == pytest.approx(mean, rel=1e-3)


def test_any_order_of_the_axes_is_the_same_table() -> None:
    rng = np.random.default_rng(2)
    i, j, k = rng.permutation(3), rng.permutation(len(THETA)), rng.permutation(len(PHI))
    mixed = far_field(FREQUENCY[i], THETA[j], PHI[k], power_on()[i][:, j][:, :, k], "beam.txt")
    same(mixed, far_field(FREQUENCY, THETA, PHI, power_on(), "beam.txt"))
    assert {"frequency put into rising order", "theta put into rising order", "phi put into rising order"} <= set(
        mixed.notes
    )


@pytest.mark.parametrize("phi", [np.arange(0.0, 361.0, 6.0), np.arange(-180.0, 181.0, 6.0), np.arange(6.0, 367.0, 6.0)])
def test_both_ends_of_the_turn_are_one(phi: np.ndarray) -> None:
    table = far_field(FREQUENCY, THETA, phi, power_on(phi_deg=phi), "beam.txt")
    same(table, far_field(FREQUENCY, THETA, PHI, power_on(), "beam.txt"))
    assert any("given twice, taken once" in note for note in table.notes)


def test_fields_go_with_their_power_through_order_and_seam() -> None:
    phi = np.arange(-180.0, 181.0, 6.0)[::-1].copy()
    one, two = fields_on(phi)
    table = far_field(FREQUENCY[::-1].copy(), THETA, phi, np.abs(one) ** 2 + np.abs(two) ** 2, "b", fields=(one, two))
    assert table.e_theta is not None
    assert table.e_phi is not None
    expected = fields_on(table.phi_deg)
    assert table.e_theta == pytest.approx(expected[0], abs=1e-12)
    assert table.e_phi == pytest.approx(expected[1], abs=1e-12)
    assert np.abs(table.e_theta) ** 2 + np.abs(table.e_phi) ** 2 == pytest.approx(table.power, abs=1e-12)
    # The wire of `sims.beam`, along x: power 1 - x^2, directivity 3/2 of that.
    towards = random_directions(np.random.default_rng(1), 50)
    short = dipole(length_m=1e-3).directivity(FREQUENCY, towards)
    assert beam_of(table).directivity(FREQUENCY, towards) == pytest.approx(short, abs=1e-4)


def test_poles_are_averaged_and_angles_a_trifle_off_are_put_right() -> None:
    theta = THETA + 2e-5 * np.random.default_rng(4).uniform(-1, 1, len(THETA))
    power = power_on()
    power[:, 0] *= 1.0 + 1e-4 * np.cos(np.radians(PHI))
    table = far_field(FREQUENCY, theta, PHI, power, "beam.txt")
    assert table.theta_deg[[0, -1]].tolist() == [0.0, 180.0]
    assert np.ptp(table.power[:, 0], axis=1).max() == 0.0
    assert table.power[:, 0, 0] == pytest.approx(power_on()[:, 0, 0], rel=1e-12)


def test_a_table_to_the_horizon_is_an_upper_half() -> None:
    theta = np.append(np.arange(0.0, 90.0, 6.0), 90.00005)
    table = far_field(FREQUENCY, theta, PHI, np.ones((3, len(theta), len(PHI))), "beam.txt")
    assert table.upper_half
    assert table.theta_deg[-1] == 90.0
    # Half the sphere.
    assert table.radiated_fraction == pytest.approx(0.5, rel=1e-12)


def test_what_is_given_is_not_changed() -> None:
    power, phi = power_on(phi_deg=np.arange(0.0, 361.0, 6.0)), np.arange(0.0, 361.0, 6.0)
    power[:, 0] *= 1.0 + 1e-4 * np.cos(np.radians(phi))
    before = power.copy()
    far_field(FREQUENCY, THETA, phi, power, "beam.txt")
    assert np.array_equal(power, before)


def test_cells_that_are_wrong_are_named() -> None:
    power = power_on()
    power[1, 5, 7], power[2, 30, 0], power[0, 2, 3] = np.nan, np.inf, -0.25
    told = problems_of(FREQUENCY, THETA, PHI, power)
    assert "not finite in 2 of 5580 cells: 60 MHz, theta 30, phi 42: nan; 75 MHz, theta 180, phi 0: inf" in told
    assert "negative in 1 of 5580 cells: 50 MHz, theta 12, phi 18: -0.25" in told


def test_everything_wrong_is_told_at_once() -> None:
    frequency, theta, power = np.array([50.0, 50.0, -1.0]), THETA.copy(), power_on()
    theta[3], theta[10], power[0, 0, 0] = theta[2], 190.0, np.nan
    told = problems_of(frequency, theta, PHI, power)
    for part in ("finite and positive, got [-1.0]", "given twice: 50 MHz", "theta 12 deg is given twice",
                 "theta must lie within 0 to 180 deg, got 190", "not finite"):  # fmt: skip
        assert part in told


def test_ends_of_the_turn_and_poles_that_disagree() -> None:
    phi = np.arange(0.0, 361.0, 6.0)
    power = power_on(phi_deg=phi)
    power[1, 8, -1] += 0.01 * power.max()
    power[2, -1, 20] += 0.01 * power.max()
    told = problems_of(FREQUENCY, THETA, phi, power)
    assert "phi 0 deg is given twice, as at the two ends of a turn, and the power differs by" in told
    assert "at theta 180 deg, one direction, the power differs over phi by" in told


@pytest.mark.parametrize(
    ("theta", "phi", "told"),
    [
        (THETA[:20], PHI, "a gap of 132 deg in theta"),
        (THETA[THETA > 25.0], PHI, "a gap of 60 deg in theta"),
        (THETA, PHI[:40], "a gap of 126 deg in phi"),
        (THETA[::15], PHI, "at least 5"),
        (THETA, PHI[::10], "at least"),
    ],
)
def test_what_does_not_cover_the_sphere(theta: np.ndarray, phi: np.ndarray, told: str) -> None:
    assert told in problems_of(FREQUENCY, theta, phi, power_on(theta, phi))


def test_a_dark_frequency_is_named() -> None:
    power = power_on()
    power[1] = 0.0
    assert "the power at 60 MHz is zero everywhere" in problems_of(FREQUENCY, THETA, PHI, power)


@pytest.mark.parametrize("frequency", [np.array([50.0, np.nan, 60.0]), np.array([50.0, 60.0, np.inf])])
def test_frequencies_that_are_none(frequency: np.ndarray) -> None:
    told = problems_of(frequency, THETA, PHI, power_on())
    assert f"frequencies must be finite and positive, got [{frequency[~np.isfinite(frequency)][0]}]" in told


def test_phis_of_more_than_a_turn() -> None:
    """Degrees taken for radians would else be a beam, of directions in disorder."""
    told = problems_of(FREQUENCY, THETA, np.degrees(PHI), power_on())
    assert "phi must stay within one turn, got 0 to 20282.706 deg: is its unit right?" in told


def test_a_gap_in_frequency_is_told() -> None:
    frequency = np.array([50.0, 52.0, 54.0, 62.0, 64.0])
    table = far_field(frequency, THETA, PHI, power_on(frequency=frequency), "beam.txt")
    assert "a gap in frequency: none between 54 and 62 MHz, joined by the spline" in table.notes


def test_angles_that_are_none() -> None:
    theta, phi = THETA.copy(), PHI.copy()
    theta[4] = np.nan
    assert "theta must lie within 0 to 180 deg, got nan" in problems_of(FREQUENCY, theta, PHI, power_on())
    phi[4] = np.nan
    assert "phi must be finite" in problems_of(FREQUENCY, THETA, phi, power_on())


def test_shapes_that_do_not_fit() -> None:
    assert "power of shape" in problems_of(FREQUENCY, THETA, PHI[:-1], power_on())
