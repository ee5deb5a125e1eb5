"""The rule that joins maps over frequency: what it is exact for, how smooth it is, how it converges."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from sims.sky_join import joining_weights

MAPS_MHZ = np.array([408.0, 45.0, 150.0, 90.0, 60.0])  # in no order, as a configuration may have them
AT_MHZ = np.geomspace(35.0, 500.0, 60)
RULES = [("spline", None), ("polynomial", 1), ("polynomial", 2), ("polynomial", 4)]


def x_of(frequency_mhz: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.log(frequency_mhz / 100.0)


def test_power_laws_come_back_whatever_the_rule() -> None:
    for join, order in RULES:
        found = joining_weights(MAPS_MHZ, AT_MHZ, join, order) @ (7.0 - 2.5 * x_of(MAPS_MHZ))
        assert found == pytest.approx(7.0 - 2.5 * x_of(AT_MHZ), abs=1e-12)  # rounding of numbers below 15


@pytest.mark.parametrize(("join", "order"), [("spline", None), ("polynomial", 2), ("polynomial", 3)])
def test_curved_power_laws_come_back_from_order_two(join: str, order: int | None) -> None:
    found = joining_weights(MAPS_MHZ, AT_MHZ, join, order) @ (7.0 - 2.5 * x_of(MAPS_MHZ) - 0.1 * x_of(MAPS_MHZ) ** 2)
    assert found == pytest.approx(7.0 - 2.5 * x_of(AT_MHZ) - 0.1 * x_of(AT_MHZ) ** 2, abs=1e-11)


def test_a_cubic_comes_back_between_the_maps_from_the_spline() -> None:
    inside = (AT_MHZ >= 45.0) & (AT_MHZ <= 408.0)
    found = joining_weights(MAPS_MHZ, AT_MHZ, "spline", None) @ x_of(MAPS_MHZ) ** 3
    assert found[inside] == pytest.approx(x_of(AT_MHZ[inside]) ** 3, abs=1e-12)
    # Beyond the outermost maps the third derivative is dropped: (x - x_end)^3 is missing, exactly.
    missing = np.clip(x_of(AT_MHZ) - x_of(np.array(408.0)), 0, None) ** 3
    missing += np.clip(x_of(AT_MHZ) - x_of(np.array(45.0)), None, 0) ** 3
    assert found == pytest.approx(x_of(AT_MHZ) ** 3 - missing, abs=1e-12)


@pytest.mark.parametrize(("join", "order"), RULES)
def test_derivatives_are_those_of_the_join(join: str, order: int | None) -> None:
    step = 1e-4
    for which, tolerance in ((1, 1e-6), (2, 1e-6)):
        below, above = (
            joining_weights(MAPS_MHZ, AT_MHZ * np.exp(sign * step), join, order, which - 1) for sign in (-1.0, 1.0)
        )
        found = joining_weights(MAPS_MHZ, AT_MHZ, join, order, which)
        # Central differences err by step^2 times a third derivative of order 1 to 100.
        assert found == pytest.approx((above - below) / (2.0 * step), abs=tolerance)


def test_spline_has_no_jump_of_the_second_derivative_at_any_map() -> None:
    near = 1e-9
    for which in (0, 1, 2):
        below = joining_weights(MAPS_MHZ, MAPS_MHZ * (1.0 - near), "spline", None, which)
        above = joining_weights(MAPS_MHZ, MAPS_MHZ * (1.0 + near), "spline", None, which)
        # Slopes of the third derivative are below 1e3 here: across 2e-9 nothing moves by more than 1e-5.
        assert np.abs(above - below).max() < 1e-5
    # The third derivative of the spline does jump at its inner knots, so that the test can tell.
    step = 1e-3
    jump = joining_weights(MAPS_MHZ, MAPS_MHZ * np.exp(step), "spline", None, 2)
    jump += joining_weights(MAPS_MHZ, MAPS_MHZ * np.exp(-step), "spline", None, 2)
    jump -= 2.0 * joining_weights(MAPS_MHZ, MAPS_MHZ, "spline", None, 2)
    assert np.abs(jump).max() / step > 1.0


@pytest.mark.parametrize(("join", "order"), [("spline", None), ("polynomial", 4)])
def test_join_passes_through_every_map(join: str, order: int | None) -> None:
    assert joining_weights(MAPS_MHZ, MAPS_MHZ, join, order) == pytest.approx(np.eye(5), abs=1e-12)


@pytest.mark.parametrize(("join", "order"), RULES)
def test_a_common_factor_passes(join: str, order: int | None) -> None:
    assert joining_weights(MAPS_MHZ, AT_MHZ, join, order).sum(axis=1) == pytest.approx(1.0, abs=1e-11)
    for which in (1, 2):
        assert joining_weights(MAPS_MHZ, AT_MHZ, join, order, which).sum(axis=1) == pytest.approx(0.0, abs=1e-9)


def test_least_squares_is_that_of_numpy() -> None:
    values = np.random.default_rng(3).normal(size=5)
    expected = np.polynomial.Polynomial.fit(x_of(MAPS_MHZ), values, 2)(x_of(AT_MHZ))
    assert joining_weights(MAPS_MHZ, AT_MHZ, "polynomial", 2) @ values == pytest.approx(expected, abs=1e-12)


@pytest.mark.parametrize(("maps", "order"), [((50.0, 400.0), 1), ((50.0, 120.0, 400.0), 2)])
def test_few_maps_make_a_line_and_a_parabola(maps: tuple[float, ...], order: int) -> None:
    few = np.array(maps)
    spline = joining_weights(few, AT_MHZ, "spline", None)
    assert spline == pytest.approx(joining_weights(few, AT_MHZ, "polynomial", order), abs=1e-12)


def test_spline_converges_with_the_fourth_power_of_the_spacing() -> None:
    errors = []
    for count in (9, 17, 33):
        maps = np.geomspace(40.0, 400.0, count)
        at = np.geomspace(40.0, 400.0, 1000)
        errors.append(np.abs(joining_weights(maps, at, "spline", None) @ np.cos(x_of(maps)) - np.cos(x_of(at))).max())
    # A cubic spline errs as h^4 (de Boor 1978): 16 for each halving, less on the coarsest.
    assert 12.0 < errors[0] / errors[1] < 24.0
    assert 14.0 < errors[1] / errors[2] < 19.0
