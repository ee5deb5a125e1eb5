"""Shapes beside the trough: their channel means, priors, turning points, and what is refused."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad
from shape_cases import BOWL, FREQUENCY, SETTINGS, WIDTH, behind_a_foreground, bowl, dip_shape

from reduce.fast_posterior import fast_posterior, prior_bank
from reduce.shapes import flattened_gaussian, user_shape
from reduce.signal_shape import SignalShape
from reduce.trough_model import TroughModel, trough_model
from reduce.turning_points import sample_posterior, summarise
from sims.errors import InputError
from sims.trough import flattened_gaussian_k


def shapes() -> list[SignalShape]:
    model: TroughModel = trough_model(SETTINGS, FREQUENCY, WIDTH)
    return [model, bowl(), dip_shape()]


@pytest.mark.parametrize("shape", shapes(), ids=lambda shape: type(shape).__name__)
def test_every_shape_keeps_to_the_protocol(shape: SignalShape) -> None:
    count = len(shape.names)
    assert len(shape.units) == count
    draws = shape.draw_prior(np.random.default_rng(1), 30)
    assert draws.shape == (30, count)
    assert shape.allowed(draws).all()
    assert np.isfinite(shape.signal_k(draws)).all()
    # Any leading axes give what each set gives alone.
    boxed = shape.signal_k(draws.reshape(5, 6, count))
    assert boxed[2, 3] == pytest.approx(shape.signal_k(draws[15]), abs=1e-15)
    assert shape.turning_points(draws.reshape(5, 6, count)).shape == (5, 6, 3, 2)
    assert shape.log_prior(draws).tolist() == [0.0] * 30
    outside = draws.copy()
    outside[:, 0] = shape.upper[0] + 1.0
    assert shape.log_prior(outside).tolist() == [-np.inf] * 30
    information = behind_a_foreground(np.zeros(80), 0.01, 4, 1)
    assert shape.log_probability(outside, information).tolist() == [-np.inf] * 30
    expected = information.log_likelihood(shape.signal_k(draws))
    assert shape.log_probability(draws, information) == pytest.approx(expected, rel=1e-14)


def test_channel_means_of_the_flattened_gaussian_are_its_integrals() -> None:
    def at(f: float) -> float:
        return float(flattened_gaussian_k(np.array([f]), *(BOWL * np.array([1e-3, 1.0, 1.0, 1.0])))[0])

    means = bowl().signal_k(BOWL)
    for channel in (10, 25, 27, 34, 45):
        exact = quad(at, FREQUENCY[channel] - 0.5, FREQUENCY[channel] + 0.5, epsabs=1e-13)[0]
        # Two points err by the fourth derivative over 4320: 0.15 K / (3 MHz)^4 at most, a microkelvin.
        assert means[channel] == pytest.approx(exact, abs=1e-6)


def test_flattened_gaussian_is_not_defined_beyond_its_parameters() -> None:
    sets = np.array([[-1.0, 75.0, 20.0, 4.0], [200.0, 75.0, 0.0, 4.0], [200.0, 75.0, 20.0, -1e-9], BOWL])
    finite = np.isfinite(bowl().signal_k(sets)).all(axis=1)
    assert finite.tolist() == [False, False, False, True]


def test_flattened_gaussian_is_the_one_that_is_injected() -> None:
    shape = bowl()
    sets = np.concatenate([shape.draw_prior(np.random.default_rng(9), 500), [BOWL * [1, 1, 1, 0], [600, 55, 8, 10]]])
    points = flattened_gaussian_k(
        shape.points_mhz.ravel(), sets[:, 0] / 1e3, sets[:, 1], sets[:, 2], sets[:, 3]
    ).reshape(len(sets), 80, 2)
    # Rounding of half a kelvin; a part of 1e-26 of the depth is taken as none.
    assert shape.signal_k(sets) == pytest.approx(points.mean(axis=-1), abs=1e-15)


def test_flattened_gaussian_has_c_alone() -> None:
    points = bowl().turning_points(BOWL)
    assert points[1].tolist() == [75.0, -150.0]
    assert np.isnan(points[[0, 2]]).all()


@pytest.mark.parametrize("sampled", [False, True], ids=["annealed", "sampled"])
def test_flattened_gaussian_is_recovered_behind_a_foreground(sampled: bool) -> None:
    shape = bowl()
    information = behind_a_foreground(shape.signal_k(BOWL), 0.003, 6, 3)
    rng = np.random.default_rng(4)
    if sampled:
        posterior = sample_posterior(information, shape, SETTINGS, rng, lambda done: None)
        draws = posterior.stacked()
        summary = summarise(posterior, shape, information)
        assert summary["flags"] == []
        assert summary["convergence"]["converged"]
        assert list(summary["points"]) == ["C"]
        assert list(summary["parameters"]) == list(shape.names)
        assert summary["log_bayes_factor"]["value"] > 100.0
        assert len(summary["modes"]) == 1
        # A posterior this narrow is nearly normal: its errors are those that the slope forecasts.
        bound = np.array(list(summary["forecast"]["cramer_rao_sd"].values()))
        assert draws.std(axis=0) == pytest.approx(bound, rel=0.2)
    else:
        draws = fast_posterior(information, shape, prior_bank(shape, rng), rng).parameters
    # One noise; each number within four of its deviations.
    assert np.abs((draws.mean(axis=0) - BOWL) / draws.std(axis=0)).max() < 4.0
    assert draws[:, 1].std() < 0.5


def test_a_user_function_gives_what_the_built_in_shape_gives() -> None:
    def function(frequency_mhz: np.ndarray, parameters: np.ndarray) -> np.ndarray:
        depth_mk, centre_mhz, width_mhz, flattening = parameters
        return flattened_gaussian_k(frequency_mhz, depth_mk / 1e3, centre_mhz, width_mhz, flattening)

    built = bowl()
    own = user_shape(
        function, FREQUENCY, WIDTH, names=("a", "b", "c", "d"), units=built.units,
        bounds=tuple(zip(built.lower, built.upper, strict=True)),
    )  # fmt: skip
    draws = built.draw_prior(np.random.default_rng(5), 7)
    assert own.signal_k(draws) == pytest.approx(built.signal_k(draws), abs=1e-15)
    # The bottom of a flattening of 4 is flat: its place to a step of the grid, its depth exactly.
    found = own.turning_points(BOWL)[1]
    assert found[0] == pytest.approx(75.0, abs=0.05)
    assert found[1] == pytest.approx(-150.0, abs=1e-6)


def test_turning_points_of_a_wave_are_its_extrema() -> None:
    def wave(frequency_mhz: np.ndarray, sets: np.ndarray) -> np.ndarray:
        return -sets[:, :1] * np.cos((frequency_mhz - sets[:, 1:]) / 8.0)

    shape = user_shape(
        wave, FREQUENCY, WIDTH, names=("amplitude_k", "centre_mhz"), units=("K", "MHz"),
        bounds=((0.01, 0.5), (70.0, 90.0)), batched=True,
    )  # fmt: skip
    points = shape.turning_points(np.array([0.1, 81.03]))
    half = 8.0 * np.pi
    # A parabola on steps of 0.05 MHz: its top is off by less than (0.05/8)^2/24 of a step, a few hertz.
    assert points[:, 0] == pytest.approx([81.03 - half, 81.03, 81.03 + half], abs=1e-5)
    assert points[:, 1] == pytest.approx([100.0, -100.0, 100.0], abs=1e-6)


def test_bad_bounds_and_functions_are_refused_with_all_that_is_wrong() -> None:
    with pytest.raises(InputError) as caught:
        flattened_gaussian(
            FREQUENCY, WIDTH, depth_mk=(-1.0, 600.0), centre_mhz=(100.0, 55.0), full_width_mhz=(0.0, 40.0),
            flattening=(0.0, np.inf),
        )  # fmt: skip
    assert len(caught.value.problems) == 4
    with pytest.raises(InputError, match="as many of each are allowed"):
        user_shape(lambda f, p: f, FREQUENCY, WIDTH, names=("a", "a"), units=("", ""), bounds=((0, 1), (0, 1)))
    with pytest.raises(InputError, match="one value is needed for each of 160 frequencies"):
        user_shape(lambda f, p: f[:3], FREQUENCY, WIDTH, names=("a",), units=("",), bounds=((0, 1),))
    with pytest.raises(InputError, match="got shape"):
        user_shape(lambda f, p: f, FREQUENCY, WIDTH, names=("a",), units=("",), bounds=((0, 1),), batched=True)
    with pytest.raises(InputError, match="80 of 80 channels are not finite"):
        user_shape(lambda f, p: f * np.nan, FREQUENCY, WIDTH, names=("a",), units=("",), bounds=((0, 1),))
