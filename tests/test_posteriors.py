"""Posteriors of the turning points: an exact Gaussian case, the two samplers against each other, flags."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pytest

from reduce.combine import Information
from reduce.fast_posterior import carried_over, detection_statistic, fast_posterior, prior_bank
from reduce.trough_model import NAMES, TroughModel, trough_model
from reduce.turning_points import sample_posterior, summarise
from sims.config import Point, PointPrior, TurningPoints
from sims.errors import InputError

FREQUENCY = np.linspace(40.5, 119.5, 80)
WIDTH = np.ones(80)
PRIOR = TurningPoints(
    a=Point(frequency_mhz=17.0, temperature_mk=-42.0),
    e=Point(frequency_mhz=180.0, temperature_mk=0.0),
    b=PointPrior(frequency_mhz=(40.0, 58.0), temperature_mk=(-40.0, 10.0)),
    c=PointPrior(frequency_mhz=(55.0, 95.0), temperature_mk=(-300.0, -10.0)),
    d=PointPrior(frequency_mhz=(85.0, 120.0), temperature_mk=(-10.0, 60.0)),
    walkers=64,
    steps=1500,
)
TRUTH = np.array([48.0, 71.0, 101.0, -6.0, -105.0, 22.0])


def information_of(R: np.ndarray, z: np.ndarray) -> Information:
    return Information(
        K=R.T @ R, b=R.T @ z, R=R, z=z, chi_squared_min=0.0, degrees_of_freedom=0, rows=len(z), nuisance_terms=0,
        log_det_covariance=0.0, log_det_nuisance=0.0, draws=None,
    )  # fmt: skip


def white(model: TroughModel, sigma_k: float, seed: int) -> Information:
    """Every channel measured to `sigma_k`, around the truth."""
    noise = np.random.default_rng(seed).standard_normal(80)
    return information_of(np.eye(80) / sigma_k, model.signal_k(TRUTH) / sigma_k + noise)


@dataclass(frozen=True)
class LinearModel(TroughModel):
    """A stand-in whose signal is linear in its parameters, in bounds that do not matter."""

    matrix: np.ndarray

    def signal_k(self, parameters: np.ndarray) -> np.ndarray:
        return np.asarray(parameters @ self.matrix.T)

    def allowed(self, parameters: np.ndarray) -> np.ndarray:
        return np.asarray(np.all((parameters >= self.lower) & (parameters <= self.upper), axis=-1))


@pytest.fixture(scope="module")
def gaussian() -> tuple[LinearModel, Information, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(4)
    scale = np.array([1.0, 2.0, 0.5, 10.0, 30.0, 20.0])
    matrix = rng.standard_normal((80, 6)) / scale
    model = LinearModel(-60 * scale, 60 * scale, np.zeros(2), np.zeros(2), np.zeros((80, 2)), matrix=matrix)
    R = 0.4 * np.eye(80)
    z = R @ matrix @ scale + rng.standard_normal(80)
    precision = (R @ matrix).T @ (R @ matrix)
    covariance = np.linalg.inv(precision)
    return model, information_of(R, z), covariance @ (R @ matrix).T @ z, covariance


def test_fast_posterior_of_a_gaussian_case_is_the_exact_answer(gaussian: tuple) -> None:
    model, information, mean, covariance = gaussian
    sigma = np.sqrt(np.diag(covariance))
    bank = prior_bank(model, np.random.default_rng(1), 8000)
    got = fast_posterior(information, model, bank, np.random.default_rng(2))
    # 8,000 draws moved 24 times are worth a few thousand: means to 5/sqrt(2000) sigma, variances to 5 sqrt(2/2000).
    assert (got.mean() - mean) / sigma == pytest.approx(np.zeros(6), abs=0.11)
    assert np.diag(got.covariance()) / sigma**2 == pytest.approx(np.ones(6), abs=0.16)
    correlation = covariance / np.outer(sigma, sigma)
    assert got.covariance() / np.outer(sigma, sigma) == pytest.approx(correlation, abs=0.16)


def test_sampler_of_a_gaussian_case_is_the_exact_answer(gaussian: tuple) -> None:
    model, information, mean, covariance = gaussian
    sigma = np.sqrt(np.diag(covariance))
    posterior = sample_posterior(information, model, PRIOR, np.random.default_rng(3), lambda done: None)
    draws = posterior.stacked()
    # Some 1,500 effective draws a parameter.
    assert (draws.mean(axis=0) - mean) / sigma == pytest.approx(np.zeros(6), abs=0.13)
    assert draws.std(axis=0) / sigma == pytest.approx(np.ones(6), abs=0.1)


def test_quantiles_and_ranks_of_equal_weights_are_those_of_the_draws() -> None:
    model = trough_model(PRIOR, FREQUENCY, WIDTH)
    information = white(model, 0.02, 5)
    posterior = fast_posterior(
        information, model, prior_bank(model, np.random.default_rng(1)), np.random.default_rng(2)
    )
    median = posterior.quantiles(np.array([0.5]))[0]
    assert posterior.rank(median) == pytest.approx(np.full(6, 0.5), abs=1e-3)


@pytest.mark.parametrize("sigma_k", [0.3, 0.02, 0.002])
def test_fast_and_sampled_posteriors_agree(sigma_k: float) -> None:
    """From a prior hardly touched to turning points known to a percent."""
    model = trough_model(PRIOR, FREQUENCY, WIDTH)
    information = white(model, sigma_k, 6)
    fast = fast_posterior(
        information, model, prior_bank(model, np.random.default_rng(1), 6000), np.random.default_rng(2)
    )
    sampled = sample_posterior(information, model, PRIOR, np.random.default_rng(7), lambda done: None).stacked()
    sigma = sampled.std(axis=0)
    # Both have 1,500 effective draws or more: 5 standard errors of their difference.
    assert (fast.mean() - sampled.mean(axis=0)) / sigma == pytest.approx(np.zeros(6), abs=0.18)
    assert np.sqrt(np.diag(fast.covariance())) / sigma == pytest.approx(np.ones(6), abs=0.15)


def test_a_posterior_is_carried_over_a_small_change_and_not_over_a_large_one() -> None:
    model = trough_model(PRIOR, FREQUENCY, WIDTH)
    before, after, far = (white(model, sigma, 8) for sigma in (0.02, 0.0205, 0.002))
    rng = np.random.default_rng(3)
    posterior = fast_posterior(before, model, prior_bank(model, rng), rng)
    carried = carried_over(posterior, before, after, model, rng)
    assert carried is not None
    fresh = fast_posterior(after, model, prior_bank(model, rng), rng)
    sigma = np.sqrt(np.diag(fresh.covariance()))
    assert (carried.mean() - fresh.mean()) / sigma == pytest.approx(np.zeros(6), abs=0.25)
    assert carried_over(posterior, before, far, model, rng) is None


def test_narrow_prior_and_cold_gas_are_flagged_and_a_good_case_is_not() -> None:
    model = trough_model(PRIOR, FREQUENCY, WIDTH)
    good = white(model, 0.001, 9)
    posterior = sample_posterior(good, model, PRIOR, np.random.default_rng(1), lambda done: None)
    assert summarise(posterior, model, good)["flags"] == []
    cold = TRUTH.copy()
    cold[4] = -280.0
    deep = information_of(np.eye(80) / 0.001, model.signal_k(cold) / 0.001)
    summary = summarise(sample_posterior(deep, model, PRIOR, np.random.default_rng(1), lambda done: None), model, deep)
    # The floor at 71 MHz lies at some -199 mK.
    assert summary["points"]["C"]["share_colder_than_gas"] > 0.99
    assert any("C is colder" in flag for flag in summary["flags"])
    narrow = PRIOR.model_copy(update={"c": PointPrior(frequency_mhz=(55.0, 71.0), temperature_mk=(-300.0, -10.0))})
    edge = trough_model(narrow, FREQUENCY, WIDTH)
    summary = summarise(sample_posterior(good, edge, narrow, np.random.default_rng(1), lambda done: None), edge, good)
    assert any(flag.startswith("frequency_c_mhz runs into the upper bound") for flag in summary["flags"])


def test_a_shape_that_no_trough_has_is_flagged() -> None:
    """A narrow bump beside the trough, at sixty times the noise of a channel."""
    model = trough_model(PRIOR, FREQUENCY, WIDTH)
    bump = 0.06 * np.exp(-(((FREQUENCY - 60.0) / 1.5) ** 2))
    information = information_of(np.eye(80) / 0.001, (model.signal_k(TRUTH) + bump) / 0.001)
    posterior = sample_posterior(information, model, PRIOR, np.random.default_rng(1), lambda done: None)
    assert any(
        flag.startswith("no trough of this shape fits") for flag in summarise(posterior, model, information)["flags"]
    )


def test_noise_that_is_stated_far_too_large_is_flagged() -> None:
    model = trough_model(PRIOR, FREQUENCY, WIDTH)
    noise = 0.001 * np.random.default_rng(4).standard_normal(80)
    information = information_of(np.eye(80) / 0.03, (model.signal_k(TRUTH) + noise) / 0.03)
    posterior = sample_posterior(information, model, PRIOR, np.random.default_rng(1), lambda done: None)
    assert any("is too small to be chance" in flag for flag in summarise(posterior, model, information)["flags"])


def test_what_data_do_not_constrain_is_said_once() -> None:
    model = trough_model(PRIOR, FREQUENCY, WIDTH)
    blind = white(model, 30.0, 5)
    posterior = sample_posterior(blind, model, PRIOR, np.random.default_rng(1), lambda done: None)
    flags = summarise(posterior, model, blind)["flags"]
    assert sum("temperature_b_mk" in flag for flag in flags) == 1
    assert "temperature_b_mk is not constrained: its posterior is as wide as its prior" in flags


def test_likelihood_too_steep_to_follow_is_refused() -> None:
    model = trough_model(PRIOR, FREQUENCY, WIDTH)
    rng = np.random.default_rng(6)
    broken = information_of(np.eye(80) / 0.01, np.full(80, np.nan))
    with pytest.raises(RuntimeError, match="too steep over the prior, or not finite"):
        fast_posterior(broken, model, prior_bank(model, rng), rng)


def test_summary_holds_medians_intervals_and_the_whole_covariance() -> None:
    model = trough_model(PRIOR, FREQUENCY, WIDTH)
    information = white(model, 0.005, 2)
    posterior = sample_posterior(information, model, PRIOR, np.random.default_rng(1), lambda done: None)
    summary = summarise(posterior, model, information)
    matrix = np.array(summary["covariance"]["matrix"])
    assert summary["covariance"]["parameters"] == list(NAMES)
    assert matrix.shape == (6, 6)
    assert np.linalg.eigvalsh(matrix).min() > 0.0
    for number, point in enumerate("BCD"):
        marginal = summary["points"][point]["frequency_mhz"]
        low, high = marginal["interval_68"]
        assert low < marginal["median"] < high
        assert marginal["standard_deviation"] == pytest.approx(np.sqrt(matrix[number, number]), rel=1e-3)
    assert set(posterior.samples.dims) == {"chain", "draw"}


def test_channel_means_of_the_trough_are_exact_for_its_cubics() -> None:
    model = trough_model(PRIOR, FREQUENCY, WIDTH)
    fine = trough_model(PRIOR, np.linspace(40.005, 119.995, 8000), np.full(8000, 0.01))
    expected = fine.signal_k(TRUTH).reshape(80, 100).mean(axis=1)
    # Exact within a cubic piece; a turning point in a channel breaks the second derivative there: 0.1 K / 20^2 / 24.
    assert model.signal_k(TRUTH) == pytest.approx(expected, abs=1e-5)


def test_prior_without_room_is_refused() -> None:
    model = trough_model(PRIOR, FREQUENCY, WIDTH)
    closed = replace(
        model, lower=np.array([57.9, 55.0, 85, -40, -10.001, -10]), upper=np.array([58, 57.9, 120, -11, -10, 60])
    )
    with pytest.raises(InputError, match="widen the bounds"):
        closed.draw_prior(np.random.default_rng(1), 100)


def test_detection_statistic_is_depth_over_its_error() -> None:
    covariance = np.diag([1.0, 1.0, 1.0, 4.0, 9.0, 16.0])
    # Depth 105 + 8 = 113; variance 9 + (4 + 16)/4 = 14.
    assert detection_statistic(TRUTH, covariance) == pytest.approx(113.0 / np.sqrt(14.0), rel=1e-12)
