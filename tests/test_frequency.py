"""Channels are means over their width; the Chebyshev expansion in ln f is exact for what it should be exact for."""

from __future__ import annotations

import numpy as np
import pytest

from sims.config import Channels
from sims.frequency import (
    ChannelGrid,
    channel_grid,
    chebyshev_nodes_mhz,
    expansion_matrix,
    mean_expansion_matrix,
    mean_points,
)

START_MHZ, STOP_MHZ = 40.0, 120.0


def grid(count: int, *masks: tuple[float, float]) -> ChannelGrid:
    return channel_grid(Channels(start_mhz=START_MHZ, stop_mhz=STOP_MHZ, count=count, masks_mhz=masks))


def test_channels_tile_the_band() -> None:
    channels = grid(64)
    assert channels.count == 64
    assert channels.edges_mhz[0] == START_MHZ
    assert channels.edges_mhz[-1] == STOP_MHZ
    np.testing.assert_allclose(channels.width_mhz, 1.25, rtol=1e-13)  # rounding of edges near 100
    np.testing.assert_allclose(channels.centre_mhz, 40.625 + 1.25 * np.arange(64), rtol=1e-14)  # rounding


@pytest.mark.parametrize(
    ("mask", "channels"),
    [
        ((50.0, 52.0), [10, 11]),  # ends on edges: only what lies inside
        ((50.1, 50.2), [10]),  # within one channel
        ((50.9, 51.1), [10, 11]),  # across an edge
        ((10.0, 41.0), [0]),
        ((119.5, 300.0), [79]),
        ((130.0, 140.0), []),
    ],
)
def test_a_channel_is_masked_when_any_part_of_it_is(mask: tuple[float, float], channels: list[int]) -> None:
    assert np.flatnonzero(grid(80, mask).masked).tolist() == channels


def test_masks_add_up() -> None:
    assert np.flatnonzero(grid(80, (50.1, 50.2), (60.1, 61.5)).masked).tolist() == [10, 20, 21]


@pytest.mark.parametrize("power", range(8))
def test_channel_means_of_powers_are_exact_to_the_seventh(power: int) -> None:
    """Four Gauss-Legendre points integrate polynomials of degree 7 exactly."""
    edges = np.linspace(1.0, 3.0, 9)
    frequency, weight = mean_points(edges)
    means = frequency**power @ weight
    exact = np.diff(edges ** (power + 1)) / (power + 1) / np.diff(edges)
    np.testing.assert_allclose(means, exact, rtol=1e-13)  # rounding of powers up to 3^8


def test_channel_means_of_a_power_law_are_the_closed_form() -> None:
    edges = grid(64).edges_mhz
    frequency, weight = mean_points(edges)
    exact = np.diff(edges**-1.5) / -1.5 / np.diff(edges)
    # The error of four points goes as (width/f)^8, 1e-12 and with a coefficient far below one; what is left is the
    # rounding of the difference of two nearly equal powers, 1e-16 x 40/1.25.
    np.testing.assert_allclose(frequency**-2.5 @ weight, exact, rtol=1e-13)
    centre = (edges[1:] + edges[:-1]) / 2
    # A mean is not the value at the centre: for f^-2.5 they differ by (2.5 x 3.5 / 24) (width/f)^2, 3.4e-4 at 40.6 MHz.
    off = frequency[0] ** -2.5 @ weight / centre[0] ** -2.5 - 1.0
    assert off == pytest.approx(2.5 * 3.5 / 24 * (1.25 / centre[0]) ** 2, rel=0.01)  # the next term is (width/f)^2 less


def test_nodes_are_chebyshev_points_of_ln_f() -> None:
    nodes = chebyshev_nodes_mhz(START_MHZ, STOP_MHZ, 12)
    x = (np.log(nodes) - np.log(START_MHZ * STOP_MHZ) / 2) / (np.log(STOP_MHZ / START_MHZ) / 2)
    assert np.all(np.diff(nodes) > 0)
    # Roots of T_12; its slope there is 12 at most times 1/sin, so rounding of x grows to some 1e-13.
    np.testing.assert_allclose(np.polynomial.chebyshev.chebval(x, [0] * 12 + [1]), 0.0, atol=1e-12)


@pytest.mark.parametrize("count", [4, 9, 16])
def test_expansion_is_exact_for_polynomials_in_ln_f(count: int) -> None:
    coefficients = np.random.default_rng(count).standard_normal(count)

    def polynomial(frequency_mhz: np.ndarray) -> np.ndarray:
        return np.polynomial.polynomial.polyval(np.log(frequency_mhz / 70.0), coefficients)

    nodes = chebyshev_nodes_mhz(START_MHZ, STOP_MHZ, count)
    wanted = np.linspace(START_MHZ, STOP_MHZ, 333)
    matrix = expansion_matrix(START_MHZ, STOP_MHZ, count, wanted)
    assert matrix.shape == (333, count)
    # Rounding times the Lebesgue constant of 16 Chebyshev points, 2.8.
    np.testing.assert_allclose(matrix @ polynomial(nodes), polynomial(wanted), atol=1e-13)


def test_expansion_reproduces_the_nodes() -> None:
    nodes = chebyshev_nodes_mhz(START_MHZ, STOP_MHZ, 20)
    np.testing.assert_allclose(expansion_matrix(START_MHZ, STOP_MHZ, 20, nodes), np.eye(20), atol=1e-13)  # rounding


def test_expansion_of_a_curved_power_law_converges_geometrically() -> None:
    """ln T polynomial in ln f is entire: each node gains a factor, down to the rounding of thousands of kelvin."""

    def sky_k(frequency_mhz: np.ndarray) -> np.ndarray:
        x = np.log(frequency_mhz / 70.0)
        return 3000.0 * np.exp(-2.5 * x - 0.05 * x**2)

    wanted = np.linspace(START_MHZ, STOP_MHZ, 501)
    errors = []
    for count in range(4, 13):
        values = sky_k(chebyshev_nodes_mhz(START_MHZ, STOP_MHZ, count))
        errors.append(np.abs(expansion_matrix(START_MHZ, STOP_MHZ, count, wanted) @ values - sky_k(wanted)).max())
    # In x in [-1, 1] the function is exp(-a x), a = 2.5 x 0.549 = 1.37; its coefficients are Bessel functions
    # I_n(a), with ratio a / 2n: at least a factor 4 a node from n = 4 on (1.37/8 and falling).
    assert np.all(np.array(errors[1:]) < np.array(errors[:-1]) / 4.0)
    # The first term left out of 12 is 2 x 3070 K x I_12(1.37) = 1.4e-7 K; aliasing doubles it, the curvature adds some.
    assert errors[-1] < 1e-6


def test_mean_expansion_gives_channel_means() -> None:
    """Through 20 nodes a power law reaches its closed-form channel means."""
    channels = grid(128)
    edges = channels.edges_mhz
    nodes = chebyshev_nodes_mhz(START_MHZ, STOP_MHZ, 20)
    means = mean_expansion_matrix(channels, 20) @ (nodes / 70.0) ** -2.5
    exact = 70.0**2.5 * np.diff(edges**-1.5) / -1.5 / channels.width_mhz
    # Twenty nodes leave nothing of the expansion's error; the rest is rounding, as above.
    np.testing.assert_allclose(means, exact, rtol=1e-12)


def test_mean_expansion_converges_with_the_channel_width_at_second_order() -> None:
    """The mean tends to the value at the centre as width squared."""
    nodes = chebyshev_nodes_mhz(START_MHZ, STOP_MHZ, 20)
    off = []
    for count in (20, 40, 80):
        channels = grid(count)
        mean = mean_expansion_matrix(channels, 20) @ (nodes / 70.0) ** -2.5
        off.append(np.abs(mean - (channels.centre_mhz / 70.0) ** -2.5)[count // 2])
    orders = np.log2(np.array(off[:-1]) / np.array(off[1:]))
    # The middle channel's centre moves by half a width from grid to grid, and f^-4.5 with it: a few per cent.
    np.testing.assert_allclose(orders, 2.0, atol=0.15)
