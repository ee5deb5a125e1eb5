"""The free form against dense Gaussian algebra, its own draws, and the extrema of known curves."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import multivariate_normal
from shape_cases import FREQUENCY, WIDTH, behind_a_foreground, dip_shape, information_of

from reduce.extrema import at_edge, curve_turning_points
from reduce.free_form import FreeForm, free_form, free_form_posterior
from sims.errors import InputError

AMPLITUDE_K = 0.1
DIP = np.array([150.0, 78.0])


@pytest.fixture(scope="module", params=[False, True], ids=["f", "ln f"])
def process(request: pytest.FixtureRequest) -> FreeForm:
    return free_form(
        FREQUENCY, WIDTH, amplitude_k=AMPLITUDE_K, length=0.12 if request.param else 9.0, logarithmic=request.param
    )


def kernel(one_mhz: np.ndarray, other_mhz: np.ndarray, process: FreeForm) -> np.ndarray:
    x, y = (np.log(f) if process.logarithmic else f for f in (one_mhz, other_mhz))
    return process.amplitude_k**2 * np.exp(-((x[:, None] - y) ** 2) / (2.0 * process.length**2))


def test_modes_are_the_kernel_to_the_stated_truncation(process: FreeForm) -> None:
    whole = kernel(process.frequency_mhz, process.frequency_mhz, process)
    assert process.modes_k.T @ process.modes_k == pytest.approx(whole, abs=(1e-5 * AMPLITUDE_K) ** 2 * 1.01)
    assert len(process.modes_k) < 60
    fine = FREQUENCY[:, None] + (np.arange(200) + 0.5) / 200 - 0.5
    between = kernel(fine.ravel(), process.frequency_mhz, process).reshape(80, 200, -1).mean(axis=1)
    # Two points a channel against 200: the fourth derivative over 4320, 1e-2 / 5^4 * 3 / 4320, and 200 themselves.
    assert process.channel_modes_k.T @ process.modes_k == pytest.approx(between, abs=2e-7 * AMPLITUDE_K)


def test_posterior_and_evidence_are_those_of_dense_gaussian_algebra(process: FreeForm) -> None:
    information = behind_a_foreground(dip_shape().signal_k(DIP), 0.01, 5, 1)
    found = free_form_posterior(information, process, np.random.default_rng(2), 10)
    reaching = information.R @ process.channel_modes_k.T
    covariance = np.eye(len(reaching)) + reaching @ reaching.T
    across = process.modes_k.T @ reaching.T
    mean = across @ np.linalg.solve(covariance, information.z)
    variance = (process.modes_k**2).sum(axis=0) - np.einsum("pr,rp->p", across, np.linalg.solve(covariance, across.T))
    # The dense way loses six digits to the condition of its matrix.
    assert found.mean_k == pytest.approx(mean, abs=1e-9 * AMPLITUDE_K)
    assert found.sd_k**2 == pytest.approx(variance, abs=1e-10 * AMPLITUDE_K**2)
    density = multivariate_normal(np.zeros(len(reaching)), covariance).logpdf(information.z)
    assert found.log_evidence == pytest.approx(density + 0.5 * len(reaching) * np.log(2.0 * np.pi), abs=1e-7)
    nothing = float(information.log_likelihood(np.zeros(80)))
    assert found.log_bayes_factor == pytest.approx(found.log_evidence - nothing, abs=1e-9)


def test_draws_scatter_as_the_closed_form_says(process: FreeForm) -> None:
    information = behind_a_foreground(dip_shape().signal_k(DIP), 0.01, 5, 1)
    found = free_form_posterior(information, process, np.random.default_rng(3), 20_000)
    # 20,000 draws: means to 5/sqrt(20,000) of a deviation, deviations to 5/sqrt(40,000).
    assert np.abs(found.draws_k.mean(axis=0) - found.mean_k).max() < 0.036 * found.sd_k.max()
    assert found.draws_k.std(axis=0) == pytest.approx(found.sd_k, rel=0.025)


def test_without_data_the_posterior_is_the_prior(process: FreeForm) -> None:
    found = free_form_posterior(information_of(np.zeros((1, 80)), np.zeros(1)), process, np.random.default_rng(4))
    assert found.sd_k == pytest.approx(np.full(len(found.sd_k), AMPLITUDE_K), rel=1e-9)
    assert found.log_evidence == pytest.approx(0.0, abs=1e-12)
    assert found.log_bayes_factor == pytest.approx(0.0, abs=1e-12)
    assert found.constrained == pytest.approx(0.0, abs=1e-9)
    # Two edges of a band some four independent lengths long: both kinds of draws are there.
    assert 0.05 < found.without_minimum < 0.8
    assert np.isnan(found.turning_points[:, :, 0]).all(axis=1).mean() == pytest.approx(found.without_minimum)


def test_a_deep_trough_is_found_without_being_told_its_shape(process: FreeForm) -> None:
    information = information_of(np.eye(80) / 0.002, dip_shape().signal_k(DIP) / 0.002)
    found = free_form_posterior(information, process, np.random.default_rng(5))
    assert found.without_minimum == 0.0
    frequency, temperature = found.turning_points[:, 1].T
    # The data have no noise put in: the truth lies within two deviations of the mean.
    assert abs(frequency.mean() - 78.0) < 2.0 * frequency.std() < 1.0
    assert abs(temperature.mean() + 150.0) < 2.0 * temperature.std() < 5.0
    assert found.log_bayes_factor > 1000.0


def test_extrema_of_known_curves() -> None:
    grid = np.linspace(40.0, 120.0, 401)
    well = -0.1 * np.cos((grid - 80.03) / 8.0)
    falling, dead = -grid / 1e3, np.full(401, np.nan)
    slope_to_edge = 0.001 * (grid - 70.0) ** 2
    points = curve_turning_points(grid, np.stack([well, falling, dead, slope_to_edge]))
    half = 8.0 * np.pi
    # Parabolas on steps of 0.2 MHz: (0.2/8)^2/24 of a step.
    assert points[0, :, 0] == pytest.approx([80.03 - half, 80.03, 80.03 + half], abs=1e-4)
    assert points[0, :, 1] == pytest.approx([100.0, -100.0, 100.0], abs=1e-5)
    assert np.isnan(points[1:3]).all()
    # A parabola is refined exactly; its highest points are the edges of the band, and are told to be.
    assert points[3, 1] == pytest.approx([70.0, 0.0], abs=1e-9)
    assert points[3, [0, 2], 0].tolist() == [40.0, 120.0]
    assert at_edge(grid, points[3]).tolist() == [True, False, True]
    assert not at_edge(grid, points[0]).any()


@pytest.mark.parametrize(
    ("wrong", "match"),
    [({"amplitude_k": 0.0}, "amplitude_k"), ({"length": np.inf}, "length"), ({"length": 0.5}, "four steps")],
)
def test_processes_that_cannot_be_meant_are_refused(wrong: dict, match: str) -> None:
    with pytest.raises(InputError, match=match):
        free_form(FREQUENCY, WIDTH, **{"amplitude_k": 0.1, "length": 9.0, **wrong})
