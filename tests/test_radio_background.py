"""What the gas is seen against: the cosmic microwave background and an optional excess."""

from __future__ import annotations

import numpy as np
import pytest

from sims.constants import CMB_TEMPERATURE_K, LINE_21CM_MHZ
from sims.errors import InputError
from sims.radio_background import CMB_ALONE, RadioBackground

REDSHIFT = np.array([8.0, 17.0, 30.0])


def test_without_excess_it_is_the_cosmic_microwave_background() -> None:
    np.testing.assert_array_equal(CMB_ALONE.temperature_k(REDSHIFT), CMB_TEMPERATURE_K * (1 + REDSHIFT))
    np.testing.assert_array_equal(CMB_ALONE.log_slope(REDSHIFT), 1.0)
    assert "EXCESS" not in CMB_ALONE.describe()


def test_the_excess_is_received_today_as_it_was_stated() -> None:
    background = RadioBackground(excess_k=2.0, index=-2.5)
    redshift = LINE_21CM_MHZ / 78.0 - 1
    # Brightness over frequency is conserved: what gas meets at 1 + z is received 1 + z times fainter, at 78 MHz.
    np.testing.assert_allclose(background.temperature_k(redshift) / (1 + redshift), CMB_TEMPERATURE_K + 2.0, rtol=1e-14)
    assert "EXCESS of 2 K" in background.describe()


def test_its_slope_is_its_derivative() -> None:
    background = RadioBackground(excess_k=5.0, index=-2.6)
    step = 1e-5
    above, below = (background.temperature_k((1 + REDSHIFT) * np.exp(s * step) - 1) for s in (1, -1))
    slope = (np.log(above) - np.log(below)) / (2 * step)
    # 1e-9: the next order of central differences is step^2, rounding 1e-16/step.
    np.testing.assert_allclose(background.log_slope(REDSHIFT), slope, rtol=1e-9)


def test_all_that_is_wrong_is_named_at_once() -> None:
    with pytest.raises(InputError) as caught:
        RadioBackground(cmb_temperature_k=0.0, excess_k=-1.0, index=np.nan)
    assert len(caught.value.problems) == 3
    with pytest.raises(InputError, match="excess at 78 MHz"):
        RadioBackground(excess_k=np.inf)
