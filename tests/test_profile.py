"""Piecewise-cubic tables: fourth order, as accurate as promised, exact for cubics."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from sims.errors import InputError
from sims.profile import cubic_table, evaluate_table

RNG = np.random.default_rng(4)


def smooth(x: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.stack([np.sin(3.0 * x), np.exp(-2.0 * x) + 0.1], axis=-1)


def largest_error(intervals: int) -> NDArray[np.float64]:
    # A tolerance of 1 takes the first table that is made, so the number of intervals is the one asked for.
    table = cubic_table(smooth, -1.0, 1.0, tolerance=1.0, intervals=intervals)
    assert table.shape == (intervals, 4, 2)
    x = np.linspace(-1.0, 1.0, 20_001)
    return np.abs(evaluate_table(table, -1.0, 1.0, x) - smooth(x)).max(axis=0)


def test_error_falls_with_the_fourth_power_of_the_interval() -> None:
    """Interpolation by cubics through four equal steps: the error term is h^4 times the fourth derivative."""
    errors = np.array([largest_error(n) for n in (32, 64, 128, 256)])
    orders = np.log2(errors[:-1] / errors[1:])
    # The next term is one power of h higher: it moves the order by 0.04 at 32 intervals, and by half as much each time.
    np.testing.assert_allclose(orders, 4.0, atol=0.05)
    np.testing.assert_allclose(orders[-1], 4.0, atol=0.0125)


def test_cubics_are_exact() -> None:
    coefficients = np.array([0.3, -1.2, 2.5, -0.7])
    cubic = np.polynomial.Polynomial(coefficients)
    table = cubic_table(lambda x: cubic(x)[:, None], -0.5, 2.0, intervals=3)
    x = RNG.uniform(-0.5, 2.0, 1000)
    # Rounding only: the values are of order 10, the points at the ends are moved inward by 1e-12 of an interval.
    np.testing.assert_allclose(evaluate_table(table, -0.5, 2.0, x)[:, 0], cubic(x), atol=1e-11)


def test_the_promised_tolerance_is_kept_everywhere() -> None:
    table = cubic_table(smooth, -1.0, 1.0, tolerance=1e-11, intervals=4)
    x = RNG.uniform(-1.0, 1.0, 50_000)
    largest = np.abs(smooth(x)).max(axis=0)
    # The table checks itself at three points an interval, where the error is within a few per cent of its peak.
    assert np.all(np.abs(evaluate_table(table, -1.0, 1.0, x) - smooth(x)).max(axis=0) < 1.1e-11 * largest)


def test_both_ends_of_the_range_can_be_asked_for() -> None:
    table = cubic_table(smooth, -1.0, 1.0, tolerance=1e-12)
    ends = np.array([-1.0, 1.0])
    # The promised tolerance, 1e-12 of the largest value (7.5).
    np.testing.assert_allclose(evaluate_table(table, -1.0, 1.0, ends), smooth(ends), atol=1e-11)


def test_a_break_at_a_dyadic_fraction_costs_nothing() -> None:
    """A mirror that ends at the limb jumps; the jump lies where two intervals meet."""

    def broken(x: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.where(x < 0.25, np.cos(x), 3.0 + x)[:, None]

    table = cubic_table(broken, 0.0, 1.0, intervals=16)
    x = np.concatenate([RNG.uniform(0.0, 0.2499, 500), RNG.uniform(0.2501, 1.0, 500)])
    # The default tolerance, 1e-13, of the largest value, 4.
    np.testing.assert_allclose(evaluate_table(table, 0.0, 1.0, x), broken(x), atol=4e-13)


@pytest.mark.parametrize(
    "function",
    [
        lambda x: np.sin(1e4 * x)[:, None],
        lambda x: np.where(x < 0.3, 0.0, 1.0)[:, None],
        lambda x: np.full((x.size, 1), np.nan),
    ],
    ids=["too fast", "a jump off the intervals", "no number"],
)
def test_what_cannot_be_tabulated_is_refused(function: object) -> None:
    with pytest.raises(InputError, match="cannot be tabulated"):
        cubic_table(function, 0.0, 1.0, cap=512)  # type: ignore[arg-type]


def test_a_column_of_zeros_is_no_division_by_zero() -> None:
    table = cubic_table(lambda x: np.zeros((x.size, 2)), 0.0, 1.0)
    assert not table.any()
