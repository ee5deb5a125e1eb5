"""Receiver: errors left after calibration, and noise that follows the radiometer equation."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from scipy import stats

from sims.config import Receiver
from sims.receiver import gain, noise_variance_k2, received_k

FREQUENCY_MHZ = np.linspace(40.0, 120.0, 3201)
POINT = 0.0  # a channel without width: the value at its centre


def test_an_ideal_receiver_changes_nothing() -> None:
    ideal = Receiver(temperature_k=150.0)
    antenna = 3000.0 * (FREQUENCY_MHZ / 70.0) ** -2.5
    np.testing.assert_array_equal(gain(FREQUENCY_MHZ, 0.025, ideal), 1.0)
    np.testing.assert_array_equal(received_k(antenna, FREQUENCY_MHZ, 0.025, ideal), antenna)


def test_scale_and_offset_act_in_that_order() -> None:
    settings = Receiver(temperature_k=150.0, scale=1.02, offset_k=-3.0)
    # Written as the closed form; a product and a sum round twice.
    np.testing.assert_allclose(received_k(np.array([100.0]), np.array([70.0]), 1.0, settings), [99.0], rtol=1e-15)


def test_ripple_has_its_amplitude_period_and_phase() -> None:
    amplitude, period_mhz, phase_deg = 2e-3, 16.0, 40.0
    settings = Receiver(
        temperature_k=150.0, ripple_fraction=amplitude, ripple_period_mhz=period_mhz, ripple_phase_deg=phase_deg
    )
    ripple = gain(FREQUENCY_MHZ, POINT, settings) - 1.0
    # 80 MHz hold five whole periods, so their Fourier sum is exact but for the rounding of 1 + 2e-3.
    turns = FREQUENCY_MHZ[:-1] / period_mhz
    found = 2.0 * np.mean(ripple[:-1] * np.exp(-2j * np.pi * turns))
    assert abs(found) == pytest.approx(amplitude, rel=1e-10)
    assert np.degrees(np.angle(found)) == pytest.approx(phase_deg, abs=1e-8)
    # Nothing but that one period.
    np.testing.assert_allclose(ripple, amplitude * np.cos(2 * np.pi * FREQUENCY_MHZ / period_mhz + np.radians(40)),
                               atol=1e-15)  # fmt: skip
    at_peak_mhz = period_mhz * (5.0 - phase_deg / 360.0)
    assert gain(np.array([at_peak_mhz]), POINT, settings)[0] == pytest.approx(1.0 + amplitude, rel=1e-14)


def test_ripple_multiplies_the_scale() -> None:
    settings = Receiver(temperature_k=0.0, scale=2.0, ripple_fraction=0.1, ripple_period_mhz=10.0)
    # cos is 1 at a multiple of the period: rounding only.
    assert gain(np.array([70.0]), POINT, settings)[0] == pytest.approx(2.2, rel=1e-14)


RIPPLED = Receiver(temperature_k=150.0, scale=0.98, ripple_fraction=5e-3, ripple_period_mhz=10.0, ripple_phase_deg=40.0)


def channel_means(function: Callable[[np.ndarray], np.ndarray], centre: np.ndarray, width: np.ndarray) -> np.ndarray:
    """Means over channels by Gauss-Legendre quadrature."""
    x, weight = np.polynomial.legendre.leggauss(12)
    return np.asarray(function(centre[:, None] + 0.5 * width[:, None] * x) @ (weight / 2.0))


@pytest.mark.parametrize("channels", [16, 64, 256])
def test_a_channel_has_the_mean_of_the_ripple_over_its_width(channels: int) -> None:
    edges = np.linspace(40.0, 120.0, channels + 1)
    centre, width = 0.5 * (edges[1:] + edges[:-1]), np.diff(edges)
    by_quadrature = channel_means(lambda f: gain(f, POINT, RIPPLED), centre, width)
    # Twelve points leave nothing of a cosine over half a period; rounding of a gain near 1.
    np.testing.assert_allclose(gain(centre, width, RIPPLED), by_quadrature, atol=1e-14)


def test_ripple_in_wide_channels_by_numbers() -> None:
    """A ripple of 5 K and 10 MHz: channels of 1.25 MHz flatten it to sin(pi/8) / (pi/8) = 0.97450."""
    settings = Receiver(temperature_k=0.0, ripple_fraction=5e-3, ripple_period_mhz=10.0)
    peak = received_k(np.array([1000.0]), np.array([70.0]), np.array([1.25]), settings)
    assert peak[0] - 1000.0 == pytest.approx(5.0 * 0.97450, abs=5e-5)  # five digits are written


def test_a_slope_within_a_channel_leaves_a_second_order_in_its_width() -> None:
    """Mean of a product less product of means: g' T' width^2 / 12, which is what `received_k` leaves out."""

    def sky(f: np.ndarray) -> np.ndarray:
        return np.asarray(3000.0 * (f / 70.0) ** -2.5)

    found = {}
    for channels in (128, 256):
        edges = np.linspace(40.0, 120.0, channels + 1)
        centre, width = 0.5 * (edges[1:] + edges[:-1]), np.diff(edges)
        whole = channel_means(lambda f: gain(f, POINT, RIPPLED) * sky(f), centre, width)
        left = whole - received_k(channel_means(sky, centre, width), centre, width, RIPPLED)
        turn = 2.0 * np.pi / 10.0
        slope = -0.98 * 5e-3 * turn * np.sin(turn * centre + np.radians(40.0))
        predicted = slope * -2.5 * sky(centre) / centre * width**2 / 12.0
        # The next order is smaller by (turn width)^2 / 10, 1.5 % of the peak for 0.625 MHz; the sky's add as much.
        np.testing.assert_allclose(left, predicted, atol=0.03 * np.abs(predicted).max())
        found[channels] = np.abs(left).max()
    assert found[128] / found[256] == pytest.approx(4.0, rel=0.05)  # second order, up to where the channels lie


def test_radiometer_equation_by_numbers() -> None:
    """Dicke (1946): T_sys / sqrt(bandwidth time). 1000 K, 1 MHz, 100 s: 0.1 K."""
    variance = noise_variance_k2(np.array([850.0]), 150.0, np.array([1.0]), np.array([100.0]))
    np.testing.assert_allclose(np.sqrt(variance), 0.1, rtol=1e-14)  # rounding


def test_radiometer_equation_against_square_law_detection() -> None:
    """Power of Gaussian voltages, averaged: its scatter is the radiometer equation's, which knows nothing of them.

    Over a time t a band B yields B t independent complex voltages; the mean of their squares
    estimates T_sys.
    """
    system_k, width_mhz, integration_s, trials = 400.0, 0.001, 0.25, 20_000
    samples = round(width_mhz * 1e6 * integration_s)
    rng = np.random.default_rng(12)
    voltage = rng.standard_normal((trials, 2, samples)) * np.sqrt(system_k / 2.0)
    estimates = (voltage**2).sum(axis=1).mean(axis=1)
    expected = noise_variance_k2(
        np.array([250.0]), 150.0, np.array([width_mhz]), np.array([integration_s])
    )[0]  # fmt: skip
    assert estimates.mean() == pytest.approx(system_k, abs=5.0 * np.sqrt(expected / trials))  # five of its own sigma
    # (n - 1) s^2 / sigma^2 is chi-squared with n - 1 degrees of freedom for Gaussian estimates. Means of 250
    # exponentials are so nearly: their kurtosis, 6/250, widens the spread of s^2 by 1.2 %, which the bounds, out
    # where chance leads once in 1e6, take in.
    ratio = (trials - 1) * estimates.var(ddof=1) / expected
    low, high = stats.chi2(trials - 1).ppf([5e-7, 1.0 - 5e-7])
    assert low < ratio < high


def test_drawn_noise_has_the_stated_variance_in_every_channel() -> None:
    """As the campaign draws it: unit normals times the square root, for a steep sky and unequal times."""
    frequency = np.linspace(40.0, 120.0, 24)
    antenna = 3000.0 * (frequency / 70.0) ** -2.5 * np.array([[1.0], [1.4]])
    seconds = np.array([[60.0], [90.0]])
    variance = noise_variance_k2(antenna, 150.0, np.full(24, 0.3125), seconds)
    assert variance.shape == (2, 24)
    draws = 4000
    noise = np.sqrt(variance) * np.random.default_rng(3).standard_normal((draws, 2, 24))
    squares = (noise**2 / variance).sum(axis=0)
    # Chi-squared with `draws` degrees of freedom in each of 48 cells: none beyond what chance gives once in 1e6.
    low, high = stats.chi2(draws).ppf([1e-6 / 48, 1.0 - 1e-6 / 48])
    assert np.all((squares > low) & (squares < high))
    # Twice the time or twice the width, half the variance; exact powers of two.
    np.testing.assert_array_equal(noise_variance_k2(antenna, 150.0, np.full(24, 0.625), seconds), variance / 2)
    np.testing.assert_array_equal(noise_variance_k2(antenna, 150.0, np.full(24, 0.3125), 2 * seconds), variance / 2)
