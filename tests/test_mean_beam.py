"""The mean beam on the sky against the engine itself."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from engine_cases import EvenSky, SmoothSky, moving_scene

from sims import config
from sims.beam import beam_from
from sims.mean_beam import mean_beam
from sims.sky_average import at_the_antenna, evaluate

MOUNT = {"efficiency": 0.95, "structure_temperature_k": 270.0}
OVER_PLANE = beam_from(config.Dipole(kind="dipole", length_m=2.0, height_m=1.0, **MOUNT))
FREQUENCY = np.array([45.0, 70.0, 110.0])
BIN = np.array([0, 1, 1, 0, 2, 1, 0, 0, 2, 2])
WEIGHT = np.linspace(1.0, 3.0, 10)


def quiet(samples: int) -> None:
    """No progress bar."""


@pytest.mark.parametrize(
    "surface",
    [{}, {"polar_temperature_k": 150.0}, {"layer": config.Layer(thickness_m=3.0, permittivity=6.0)}],
)
def test_any_sky_through_the_mean_beam_is_the_mean_of_the_engine(surface: dict[str, object]) -> None:
    scene = moving_scene(SmoothSky(16), OVER_PLANE, 10, **surface)
    found = mean_beam(scene, FREQUENCY, BIN, WEIGHT, 3, quiet)
    for sky in (SmoothSky(16), EvenSky(16, 500.0, 2.5)):
        temperature, response = evaluate(replace(scene, sky=sky), FREQUENCY, quiet)
        sums = found.sums(sky.brightness_k(FREQUENCY))
        got = at_the_antenna(scene.beam, scene.surface, FREQUENCY, sums)
        for number in range(3):
            share = (WEIGHT * (number == BIN))[:, None] / WEIGHT[number == BIN].sum()
            # The same sums in another order: rounding of 10^4 K over 3,072 pixels.
            assert got[0][number] == pytest.approx((share * temperature).sum(axis=0), rel=1e-11)
            assert got[1][number] == pytest.approx((share * response).sum(axis=0), rel=1e-11)


def test_a_bin_without_samples_stays_empty() -> None:
    scene = moving_scene(SmoothSky(8), OVER_PLANE, 10)
    found = mean_beam(scene, FREQUENCY, np.zeros(10, dtype=np.int64), WEIGHT, 2, quiet)
    assert not found.on_sky[1].any()
