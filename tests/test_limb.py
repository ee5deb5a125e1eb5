"""The step that stands for the limb: its moments, its symmetry, and where it has no room."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.polynomial import Polynomial

from sims.limb import TAPER, TAPER_PIXELS, step, taper_width_rad, visible_weight


def test_moments_vanish_up_to_the_seventh() -> None:
    """The slope integrates to 1 and is orthogonal to t, ..., t^7: a smooth sky takes it for a sharp edge."""
    odd = np.zeros(2 * len(TAPER))
    odd[1::2] = TAPER
    slope = Polynomial(odd).deriv()
    moments = []
    for power in range(9):
        whole = (slope * Polynomial([0.0] * power + [1.0])).integ()
        moments.append(whole(1.0) - whole(-1.0))
    assert moments[:8] == pytest.approx([1.0, *[0.0] * 7], abs=1e-12)
    assert abs(moments[8]) > 1e-4


def test_step_is_odd_about_one_half_and_flat_outside() -> None:
    t = np.linspace(-1.3, 1.3, 53)
    value = visible_weight(t, 0.0, 1.0)
    assert value + value[::-1] == pytest.approx(np.ones(53), abs=1e-13)
    assert value[t <= -1] == pytest.approx(0.0, abs=1e-13)
    assert value.max() < 1.1


def test_kernel_and_plain_step_are_one() -> None:
    t = np.linspace(-1.2, 1.2, 41)
    assert [step(x, TAPER) for x in t] == pytest.approx(visible_weight(t, 0.0, 1.0), abs=1e-13)


def test_integral_of_a_smooth_function_over_the_visible_sky() -> None:
    """Legendre functions of degree 12 about the nadir: the step against the sharp edge at 71 deg."""
    limb, width = 1.24, 0.08
    x, w = np.polynomial.legendre.leggauss(6000)
    function = np.polynomial.legendre.Legendre.basis(12)
    soft = np.sum(w * visible_weight(np.arccos(x), limb, width) * function(x))
    edge = function.integ()(np.cos(limb)) - function.integ()(-1.0)
    # The eighth moment, 0.01, times (12 x 0.08)^8 / 8!, over the slope's scale: below 1e-7.
    assert soft == pytest.approx(edge, abs=1e-7)


def test_width_leaves_room_for_small_disks_and_high_horizons() -> None:
    assert taper_width_rad(0.01, np.array([1.2, 1.3])) == pytest.approx(0.01 * TAPER_PIXELS)
    assert taper_width_rad(0.01, np.array([0.02, 1.3])) == pytest.approx(0.01)
    assert taper_width_rad(0.01, np.array([np.pi - 0.04])) == pytest.approx(0.02)
