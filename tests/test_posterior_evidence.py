"""Posterior and evidence of the annealed draws: against brute-force integration, nested sampling, and themselves."""

from __future__ import annotations

from dataclasses import replace

import dynesty
import numpy as np
import pytest
from scipy.special import logsumexp
from shape_cases import FREQUENCY, WIDTH, behind_a_foreground, dip_shape

from reduce.combine import Information
from reduce.fast_posterior import carried_over, depth_over_its_error, detection_statistic, fast_posterior, prior_bank
from reduce.shapes import UserShape
from reduce.trough_model import trough_model
from reduce.turning_points import sample_posterior, summarise
from sims.config import Point, PointPrior, TurningPoints

DIP = np.array([150.0, 78.0])
# Ranges that do not touch: every draw within them is allowed, and a unit cube maps on the prior.
APART = TurningPoints(
    a=Point(frequency_mhz=17.0, temperature_mk=-42.0),
    e=Point(frequency_mhz=180.0, temperature_mk=0.0),
    b=PointPrior(frequency_mhz=(40.0, 58.0), temperature_mk=(-40.0, 10.0)),
    c=PointPrior(frequency_mhz=(60.0, 85.0), temperature_mk=(-300.0, -45.0)),
    d=PointPrior(frequency_mhz=(87.0, 120.0), temperature_mk=(-30.0, 60.0)),
    walkers=96,
    steps=1600,
)
TROUGH = np.array([48.0, 71.0, 101.0, -6.0, -105.0, 22.0])


def brute_force(information: Information, shape: UserShape) -> tuple[float, np.ndarray, np.ndarray]:
    """ln evidence, means and deviations by the trapezium rule over the box of two numbers."""
    axes = [np.linspace(low, high, 801) for low, high in zip(shape.lower, shape.upper, strict=True)]
    weight = np.ones(801)
    weight[[0, -1]] = 0.5
    weight /= weight.sum()
    pairs = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 2)
    log_likelihood = np.concatenate(
        [information.log_likelihood(shape.signal_k(part)) for part in np.array_split(pairs, 100)]
    )
    log_all = log_likelihood + np.log(np.outer(weight, weight)).ravel()
    log_evidence = float(logsumexp(log_all))
    share = np.exp(log_all - log_evidence)
    mean = share @ pairs
    return log_evidence, mean, np.sqrt(share @ (pairs - mean) ** 2)


@pytest.mark.parametrize(("sigma_k", "terms"), [(0.3, 0), (0.02, 5), (0.002, 6)], ids=["faint", "behind", "bright"])
def test_posterior_and_evidence_are_those_of_brute_force(sigma_k: float, terms: int) -> None:
    shape = dip_shape()
    information = behind_a_foreground(shape.signal_k(DIP), sigma_k, terms or 1, 7)
    log_evidence, mean, sd = brute_force(information, shape)
    rng = np.random.default_rng(8)
    found = fast_posterior(information, shape, prior_bank(shape, rng, 4000), rng)
    # Four standard errors as stated; the rule of 801 points is good to 1e-4 where a deviation is three steps.
    assert found.log_evidence == pytest.approx(log_evidence, abs=4 * found.log_evidence_error)
    assert 0.0 < found.log_evidence_error < 0.15
    # Some 2,000 independent draws: five standard errors.
    assert (found.mean() - mean) / sd == pytest.approx(np.zeros(2), abs=0.11)
    assert np.sqrt(np.diag(found.covariance())) == pytest.approx(sd, rel=0.08)
    nothing = float(information.log_likelihood(np.zeros(80)))
    assert found.log_bayes_factor(information) == pytest.approx(found.log_evidence - nothing, rel=1e-12)


def test_stated_error_of_the_evidence_is_its_scatter() -> None:
    shape = dip_shape()
    information = behind_a_foreground(shape.signal_k(DIP), 0.01, 5, 7)
    log_evidence, _, _ = brute_force(information, shape)
    found = []
    for seed in range(40):
        rng = np.random.default_rng(seed)
        found.append(fast_posterior(information, shape, prior_bank(shape, rng, 1000), rng))
    off = np.array([each.log_evidence for each in found]) - log_evidence
    stated = float(np.mean([each.log_evidence_error for each in found]))
    # Forty runs know a scatter to 11 %, at three deviations; the stated error counts resampling as if independent.
    assert 0.67 * stated < np.sqrt((off**2).mean()) < 1.33 * stated
    assert abs(off.mean()) < 4 * stated / np.sqrt(40)


def test_evidence_is_carried_over_with_the_draws() -> None:
    shape = dip_shape()
    before = behind_a_foreground(shape.signal_k(DIP), 0.02, 5, 7)
    after = behind_a_foreground(shape.signal_k(DIP), 0.0205, 5, 7)
    rng = np.random.default_rng(9)
    carried = carried_over(fast_posterior(before, shape, prior_bank(shape, rng, 4000), rng), before, after, shape, rng)
    assert carried is not None
    assert carried.log_evidence == pytest.approx(brute_force(after, shape)[0], abs=4 * carried.log_evidence_error)


def test_six_numbers_agree_with_nested_sampling() -> None:
    """dynesty (Speagle 2020, MNRAS 493, 3132), random walks from 250 live points."""
    model = trough_model(APART, FREQUENCY, WIDTH)
    information = behind_a_foreground(model.signal_k(TROUGH), 0.005, 5, 1)
    width = model.upper - model.lower
    nested = dynesty.NestedSampler(
        lambda p: float(information.log_likelihood(model.signal_k(p))), lambda cube: model.lower + cube * width, 6,
        nlive=250, sample="rwalk", rstate=np.random.default_rng(9),
    )  # fmt: skip
    nested.run_nested(print_progress=False, dlogz=0.1)
    result = nested.results
    weight = result.importance_weights()
    mean = weight @ result.samples
    sd = np.sqrt(weight @ (result.samples - mean) ** 2)
    rng = np.random.default_rng(2)
    found = fast_posterior(information, model, prior_bank(model, rng, 4000), rng)
    error = float(np.hypot(result.logzerr[-1], found.log_evidence_error))
    assert error < 0.35
    # Within the error that both state: three of it.
    assert found.log_evidence == pytest.approx(result.logz[-1], abs=3 * error)
    effective = 1.0 / (weight**2).sum()
    # Nested draws are some walks of one another: a quarter of their number counted as independent.
    scatter = 4.0 / np.sqrt(effective / 4.0)
    assert (found.mean() - mean) / sd == pytest.approx(np.zeros(6), abs=scatter)
    assert np.sqrt(np.diag(found.covariance())) == pytest.approx(sd, rel=scatter)


def test_the_sampler_of_record_agrees_with_brute_force_and_is_judged() -> None:
    shape = dip_shape()
    information = behind_a_foreground(shape.signal_k(DIP), 0.02, 5, 7)
    _, mean, sd = brute_force(information, shape)
    posterior = sample_posterior(information, shape, APART, np.random.default_rng(3), lambda done: None)
    draws = posterior.stacked()
    summary = summarise(posterior, shape, information)
    effective = min(summary["convergence"]["effective_size"].values())
    assert effective > 2000
    assert summary["convergence"]["converged"]
    assert (draws.mean(axis=0) - mean) / sd == pytest.approx(np.zeros(2), abs=5 / np.sqrt(effective))
    assert draws.std(axis=0) == pytest.approx(sd, rel=5 / np.sqrt(2 * effective))


def test_ensembles_that_disagree_and_chains_that_creep_are_flagged() -> None:
    shape = dip_shape()
    information = behind_a_foreground(shape.signal_k(DIP), 0.02, 5, 7)
    short = APART.model_copy(update={"steps": 400})
    posterior = sample_posterior(information, shape, short, np.random.default_rng(3), lambda done: None)
    centre = posterior.samples["centre_mhz"]
    assert summarise(posterior, shape, information)["convergence"]["converged"]
    # Half a deviation between the ensembles is an R-hat of sqrt(1 + 0.25^2) at least.
    shifted = centre + 0.5 * float(centre.std()) * (centre["chain"] >= len(centre["chain"]) // 2)
    # Sorted, each chain is one slow drift: its draws are worth one or two.
    sorted_draws = centre.copy(data=np.sort(centre.values, axis=1))
    for column, least in ((shifted, 1.03), (sorted_draws, 0.99)):
        broken = replace(posterior, samples=posterior.samples.assign(centre_mhz=column))
        said = summarise(broken, shape, information)
        assert not said["convergence"]["converged"]
        assert said["convergence"]["split_r_hat"]["centre_mhz"] > least
        assert any("has not converged" in flag for flag in said["flags"])


def test_depth_over_its_error_from_draws_is_the_statistic_of_moments() -> None:
    draws = np.random.default_rng(1).normal(TROUGH, 1.0, (500, 6))
    statistic = detection_statistic(draws.mean(axis=0), np.cov(draws.T))
    assert depth_over_its_error(draws[:, 3:]) == pytest.approx(statistic, rel=1e-12)
    alone = np.full((500, 3), np.nan)
    alone[:, 1] = draws[:, 4]
    assert depth_over_its_error(alone) == pytest.approx(-alone[:, 1].mean() / alone[:, 1].std(ddof=1), rel=1e-12)
    assert np.isnan(depth_over_its_error(np.full((5, 3), np.nan)))
