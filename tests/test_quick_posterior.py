"""The quick posterior against brute-force integration, the annealed one, and its own evidence."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import logsumexp
from small_campaign import small_config

from reduce.combine import Information
from reduce.fast_posterior import fast_posterior, prior_bank
from reduce.quick_posterior import CompressedBank, compressed_bank, quick_posterior
from reduce.trough_model import TroughModel, trough_model
from sims.frequency import channel_grid


@pytest.fixture(scope="module")
def model() -> TroughModel:
    config = small_config()
    grid = channel_grid(config.channels)
    return trough_model(config.turning_points, grid.centre_mhz, grid.width_mhz)


@pytest.fixture(scope="module")
def bank(model: TroughModel) -> CompressedBank:
    return compressed_bank(model, np.random.default_rng(1))


def information(model: TroughModel, parameters: np.ndarray, error_k: float, noise: np.ndarray | None) -> Information:
    """White noise on every channel, nothing else."""
    channels = len(model.points_mhz)
    root = np.eye(channels) / error_k
    z = root @ model.signal_k(parameters) + (0.0 if noise is None else noise)
    return Information(
        K=root.T @ root, b=root.T @ z, R=root, z=z, chi_squared_min=0.0, degrees_of_freedom=0, rows=channels,
        nuisance_terms=0, log_det_covariance=0.0, log_det_nuisance=0.0, draws=None,
    )  # fmt: skip


TRUTH = np.array([48.0, 71.0, 101.0, -6.0, -105.0, 22.0])


def test_compressed_spectra_are_those_of_the_bank(model: TroughModel, bank: CompressedBank) -> None:
    signal_k = model.signal_k(bank.parameters[:500])
    lost = signal_k - bank.coordinates[:500] @ bank.directions
    # 20 microkelvin rms in each direction left out; there are some hundred of them over all channels.
    assert np.sqrt((lost**2).sum(axis=1)).max() < 2e-3
    assert bank.directions @ bank.directions.T == pytest.approx(np.eye(len(bank.directions)), abs=1e-12)


def test_density_is_that_of_the_uniform_prior(model: TroughModel, bank: CompressedBank) -> None:
    box = np.prod(model.upper - model.lower)
    tries = np.random.default_rng(2).uniform(model.lower, model.upper, (400_000, 6))
    share = model.allowed(tries).mean()
    # Two estimates of a share from 400,000 tries each.
    assert np.exp(-bank.log_density) / box == pytest.approx(share, abs=6 * np.sqrt(2 * share * (1 - share) / 400_000))


@pytest.mark.parametrize("error_k", [0.3, 0.1, 0.05])
def test_moments_and_evidence_against_many_draws_of_the_prior(
    model: TroughModel, bank: CompressedBank, error_k: float
) -> None:
    """From a posterior as wide as the prior to one that the draws still resolve."""
    rng = np.random.default_rng(3)
    known = information(model, TRUTH, error_k, rng.standard_normal(len(model.points_mhz)))
    value, kept = [], []
    for _ in range(20):
        parameters = model.draw_prior(rng, 20_000)
        value.append(known.log_likelihood(model.signal_k(parameters)))
        kept.append(parameters)
    value_all, brute = np.concatenate(value), np.concatenate(kept)
    weight = np.exp(value_all - logsumexp(value_all))
    effective = 1.0 / (weight**2).sum()
    assert effective > 100
    mean = weight @ brute
    sd = np.sqrt(weight @ (brute - mean) ** 2)
    found = quick_posterior(known, model, bank, rng)
    assert found.enough
    # Each mean scatters by its posterior's deviation over the root of its effective draws; five of these.
    scatter = np.sqrt(1.0 / found.effective + 1.0 / effective)
    assert np.abs((found.mean() - mean) / sd).max() < 5 * scatter
    assert np.sqrt(np.diag(found.covariance())) == pytest.approx(sd, rel=5 * scatter)
    # The error of an evidence from n effective of N draws is 1/sqrt(n); the prior's volume adds 0.003.
    assert found.log_evidence == pytest.approx(logsumexp(value_all) - np.log(len(value_all)), abs=5 * scatter + 0.01)


def test_agrees_with_the_annealed_posterior_where_the_bank_is_too_thin(
    model: TroughModel, bank: CompressedBank
) -> None:
    rng = np.random.default_rng(4)
    known = information(model, TRUTH, 1e-3, rng.standard_normal(len(model.points_mhz)))
    found = quick_posterior(known, model, bank, rng)
    annealed = fast_posterior(known, model, prior_bank(model, rng), rng)
    assert found.rounds > 0
    assert found.enough
    sd = np.sqrt(np.diag(annealed.covariance()))
    # 400 effective draws here, some hundreds independent ones there: means to a tenth of a deviation, at 2 sigma.
    assert np.abs((found.mean() - annealed.mean()) / sd).max() < 0.25
    assert np.sqrt(np.diag(found.covariance())) == pytest.approx(sd, rel=0.25)


def test_rank_is_the_posterior_probability_below(model: TroughModel, bank: CompressedBank) -> None:
    found = quick_posterior(information(model, TRUTH, 0.05, None), model, bank, np.random.default_rng(5))
    assert found.rank(model.lower).tolist() == [0.0] * 6
    assert found.rank(model.upper) == pytest.approx(np.ones(6))
    median = np.array([np.interp(0.5, np.cumsum(found.weight[order]), column[order])
                       for column in found.parameters.T for order in [np.argsort(column)]])  # fmt: skip
    assert found.rank(median) == pytest.approx(np.full(6, 0.5), abs=0.01)
