"""Maxima of posteriors with two humps made on purpose, and of one with one."""

from __future__ import annotations

import json
from dataclasses import dataclass

import numpy as np
import pytest
from shape_cases import FREQUENCY, SETTINGS, behind_a_foreground, dip_shape, information_of

from reduce.combine import Information
from reduce.fast_posterior import fast_posterior, prior_bank
from reduce.modes import Mode, posterior_modes
from reduce.shapes import UserShape
from reduce.signal_shape import SignalShape
from reduce.turning_points import Posterior, sample_posterior, summarise


def two_dips(upper_mk: float, sigma_k: float) -> Information:
    """Data that hold dips of 100 mK at 60 MHz and of `upper_mk` at 95 MHz, for a shape that has only one."""
    shape = dip_shape()
    both = shape.signal_k(np.array([100.0, 60.0])) + shape.signal_k(np.array([upper_mk, 95.0]))
    return information_of(np.eye(80) / sigma_k, both / sigma_k)


def on_a_grid(information: Information, shape: UserShape) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Depth, centre and ln L on a fine grid of the prior's box."""
    depth = np.linspace(shape.lower[0], shape.upper[0], 301)
    centre = np.linspace(shape.lower[1], shape.upper[1], 601)
    pairs = np.stack(np.meshgrid(depth, centre, indexing="ij"), axis=-1)
    return depth, centre, information.log_likelihood(shape.signal_k(pairs))


@pytest.mark.parametrize("upper_mk", [100.0, 97.0])
def test_two_humps_are_found_with_their_places_heights_and_shares(upper_mk: float) -> None:
    shape, information = dip_shape(), two_dips(upper_mk, 0.04)
    rng = np.random.default_rng(1)
    draws = fast_posterior(information, shape, prior_bank(shape, rng, 8000), rng).parameters
    modes = posterior_modes(information, shape, draws, rng)
    assert len(modes) == 2
    depth, centre, log_likelihood = on_a_grid(information, shape)
    weight = np.exp(log_likelihood - log_likelihood.max())
    low = centre < 77.5
    share_low = weight[:, low].sum() / weight.sum()
    for mode in modes:
        side = low if mode.parameters[1] < 77.5 else ~low
        best = np.unravel_index(np.argmax(log_likelihood[:, side]), log_likelihood[:, side].shape)
        # Steps of the grid are 1 mK and 0.1 MHz.
        assert mode.parameters == pytest.approx([depth[best[0]], centre[side][best[1]]], abs=1.0)
        assert mode.log_likelihood == pytest.approx(log_likelihood[:, side].max(), abs=0.01)
        expected = share_low if side is low else 1.0 - share_low
        # Draws of two humps: a share scatters by less than 0.5/sqrt(1000) for a thousand independent ones, thrice.
        assert mode.share == pytest.approx(expected, abs=0.05)
        assert mode.laplace_share == pytest.approx(expected, abs=0.05)
    assert sum(mode.share for mode in modes) == pytest.approx(1.0)


def test_a_single_hump_is_one_mode_from_any_start() -> None:
    shape = dip_shape()
    information = behind_a_foreground(shape.signal_k(np.array([150.0, 78.0])), 0.01, 3, 2)
    rng = np.random.default_rng(3)
    draws = fast_posterior(information, shape, prior_bank(shape, rng), rng).parameters
    modes = posterior_modes(information, shape, draws, rng)
    assert len(modes) == 1
    assert modes[0].share == 1.0


def test_a_ridge_that_the_prior_cuts_is_one_mode() -> None:
    """Depth times area is all the data see: every start ends somewhere else along one flat ridge."""
    shape = dip_shape(centre_mhz=(70.0, 90.0))
    root = np.ones((1, 80)) / 0.5
    information = information_of(root, root @ shape.signal_k(np.array([100.0, 80.0])))
    rng = np.random.default_rng(4)
    draws = fast_posterior(information, shape, prior_bank(shape, rng), rng).parameters
    assert len(posterior_modes(information, shape, draws, rng)) == 1


def test_a_hump_without_draws_is_flagged() -> None:
    """Draws of one half alone, as of a sampler that lost the other."""
    shape, information = dip_shape(), two_dips(100.0, 0.02)
    rng = np.random.default_rng(5)
    whole = sample_posterior(information, shape, SETTINGS, rng, lambda done: None)
    assert not any("holds no draw" in flag for flag in summarise(whole, shape, information)["flags"])
    half = dip_shape(centre_mhz=(50.0, 77.0))
    lost = sample_posterior(information, half, SETTINGS, rng, lambda done: None)
    found = posterior_modes(information, shape, lost.stacked(), rng)
    assert sorted(mode.share for mode in found) == [0.0, 1.0]
    flags = summarise(Posterior(lost.samples, lost.fast, 0.3, found), shape, information)["flags"]
    assert sum("holds no draw" in flag and "centre_mhz 9" in flag for flag in flags) == 1


@dataclass(frozen=True)
class NormalPrior:
    """A shape that is linear in two amplitudes, K, with a standard normal prior and no bounds."""

    names = ("first_k", "second_k")
    units = ("K", "K")
    lower = np.full(2, -np.inf)
    upper = np.full(2, np.inf)

    def matrix(self) -> np.ndarray:
        x = (FREQUENCY - 80.0) / 40.0
        return np.stack([np.ones_like(x), x])

    def signal_k(self, parameters: np.ndarray) -> np.ndarray:
        return np.asarray(parameters @ self.matrix())

    def allowed(self, parameters: np.ndarray) -> np.ndarray:
        return np.asarray(np.isfinite(parameters).all(axis=-1))

    def draw_prior(self, rng: np.random.Generator, size: int) -> np.ndarray:
        return rng.standard_normal((size, 2))

    def log_prior(self, parameters: np.ndarray) -> np.ndarray:
        return np.asarray(-0.5 * (parameters**2).sum(axis=-1))

    def log_probability(self, parameters: np.ndarray, information: Information) -> np.ndarray:
        return self.log_prior(parameters) + information.log_likelihood(self.signal_k(parameters))

    def turning_points(self, parameters: np.ndarray) -> np.ndarray:
        return np.full((*parameters.shape[:-1], 3, 2), np.nan)


def test_a_prior_that_is_not_uniform_counts_in_draws_and_evidence() -> None:
    shape: SignalShape = NormalPrior()
    sigma_k = 6.0
    rng = np.random.default_rng(6)
    z = shape.signal_k(np.array([1.0, -1.5])) / sigma_k + rng.standard_normal(80)
    information = information_of(np.eye(80) / sigma_k, z)
    design = NormalPrior().matrix().T / sigma_k
    covariance = np.linalg.inv(np.eye(2) + design.T @ design)
    mean = covariance @ design.T @ z
    found = fast_posterior(information, shape, prior_bank(shape, rng, 8000), rng)
    sd = np.sqrt(np.diag(covariance))
    # A few thousand independent draws: five standard errors.
    assert (found.mean() - mean) / sd == pytest.approx(np.zeros(2), abs=0.1)
    assert found.covariance() / np.outer(sd, sd) == pytest.approx(covariance / np.outer(sd, sd), abs=0.15)
    misfit = z @ z - mean @ np.linalg.solve(covariance, mean)
    exact = -0.5 * misfit + 0.5 * np.linalg.slogdet(covariance)[1]
    assert found.log_evidence == pytest.approx(exact, abs=4 * found.log_evidence_error)
    modes: tuple[Mode, ...] = posterior_modes(information, shape, found.parameters, rng)
    assert len(modes) == 1
    posterior = sample_posterior(information, shape, SETTINGS, rng, lambda done: None)
    drawn = posterior.stacked()
    assert (drawn.mean(axis=0) - mean) / sd == pytest.approx(np.zeros(2), abs=0.1)
    summary = summarise(posterior, shape, information)
    assert summary["points"] == {}
    assert summary["detection_statistic"] is None
    assert summary["prior"]["first_k"] == [None, None]
    json.dumps(summary, allow_nan=False)
