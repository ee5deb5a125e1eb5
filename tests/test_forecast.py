"""Forecast errors against closed forms, the other forecast, and data that say nothing of a parameter."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from shape_cases import BOWL, FREQUENCY, SETTINGS, WIDTH, behind_a_foreground, bowl, information_of

from reduce.combine import Information
from reduce.forecast import fisher_covariance
from reduce.shapes import UserFunction, UserShape, user_shape
from reduce.trough_model import TroughModel, trough_model
from sims.errors import InputError

X = (FREQUENCY - 80.0) / 40.0


def line(frequency_mhz: np.ndarray, sets: np.ndarray) -> np.ndarray:
    """Linear in offset and slope; the third number does nothing."""
    x = (frequency_mhz - 80.0) / 40.0
    return sets[:, :1] + sets[:, 1:2] * x + 0.0 * sets[:, 2:3]


def linear_shape(function: UserFunction = line, names: tuple[str, ...] = ("offset_k", "slope_k", "idle")) -> UserShape:
    count = len(names)
    return user_shape(
        function, FREQUENCY, WIDTH, names=names, units=("K",) * count, bounds=((-3.0, 3.0),) * count, batched=True
    )


def test_forecast_of_a_line_is_that_of_least_squares_and_infinite_for_what_does_nothing() -> None:
    sigma_k = 0.1
    forecast = fisher_covariance(information_of(np.eye(80) / sigma_k, np.zeros(80)), linear_shape(), np.zeros(3))
    design = np.stack([np.ones(80), X], axis=1)
    exact = sigma_k**2 * np.linalg.inv(design.T @ design)
    # Differences of a linear function err by rounding alone, 1e-16 over a step of 1e-2.
    assert forecast.cramer_rao[:2, :2] == pytest.approx(exact, rel=1e-10, abs=1e-15)
    assert forecast.sd[2] == np.inf
    assert np.isnan(forecast.cramer_rao[2, :2]).all()
    prior = 6.0 / np.sqrt(12.0)
    with_prior = np.linalg.inv(np.linalg.inv(exact) + np.eye(2) / prior**2)
    assert forecast.with_prior[:2, :2] == pytest.approx(with_prior, rel=1e-10, abs=1e-15)
    assert forecast.sd_with_prior[2] == pytest.approx(prior, rel=1e-12)


def test_two_numbers_of_which_only_the_sum_counts_are_both_without_bound() -> None:
    def together(frequency_mhz: np.ndarray, sets: np.ndarray) -> np.ndarray:
        return line(frequency_mhz, np.stack([sets[:, 0] + sets[:, 1], sets[:, 2], sets[:, 2]], axis=1))

    shape = linear_shape(together, ("one_k", "other_k", "slope_k"))
    forecast = fisher_covariance(information_of(np.eye(80) / 0.1, np.zeros(80)), shape, np.zeros(3))
    assert np.isinf(forecast.sd[:2]).all()
    assert forecast.sd[2] == pytest.approx(0.1 / np.sqrt((X**2).sum()), rel=1e-9)


def test_fewer_directions_than_parameters_bound_none_and_the_prior_all() -> None:
    root = np.linspace(1.0, 3.0, 80)[None, :]
    forecast = fisher_covariance(information_of(root, np.zeros(1)), linear_shape(), np.zeros(3))
    assert np.isinf(forecast.sd).all()
    assert np.isfinite(forecast.with_prior).all()


def cramer_rao_sd(information: Information, model: TroughModel, at: np.ndarray) -> np.ndarray:
    """The bound with the prior's variance, by one step of central differences and a QR: the other way to it."""
    width = model.upper - model.lower
    steps = np.diag(1e-4 * width)
    slope = (model.signal_k(at + steps) - model.signal_k(at - steps)) / (2.0e-4 * width)[:, None]
    rows = np.concatenate([information.R @ slope.T, np.diag(np.sqrt(12.0) / width)])
    inverse = np.linalg.solve(np.linalg.qr(rows, mode="r"), np.eye(len(at)))
    return np.asarray(np.sqrt((inverse**2).sum(axis=1)))


def test_agrees_with_the_forecast_of_the_trough() -> None:
    model = trough_model(SETTINGS, FREQUENCY, WIDTH)
    at = np.array([48.0, 71.0, 101.0, -6.0, -105.0, 22.0])
    information = behind_a_foreground(model.signal_k(at), 0.005, 6, 1)
    forecast = fisher_covariance(information, model, at)
    # Two steps of central differences; a turning point in a channel bends twice within one.
    assert forecast.sd_with_prior == pytest.approx(cramer_rao_sd(information, model, at), rel=1e-3)
    assert (forecast.sd >= forecast.sd_with_prior).all()


def test_slope_at_the_edge_of_a_shape_is_one_sided() -> None:
    shape = bowl()
    edge = np.array([150.0, 75.0, 20.0, 0.0])
    information = information_of(np.eye(80) / 0.01, np.zeros(80))
    near = fisher_covariance(information, shape, np.array([150.0, 75.0, 20.0, 1e-3]))
    assert fisher_covariance(information, shape, edge).sd == pytest.approx(near.sd, rel=5e-3)


def test_slope_has_converged_where_the_signal_is_smooth() -> None:
    forecast = fisher_covariance(information_of(np.eye(80) / 0.01, np.zeros(80)), bowl(), BOWL)
    assert forecast.slope_error.max() < 1e-4


def test_what_has_no_slope_or_no_prior_is_refused() -> None:
    information = information_of(np.eye(80), np.zeros(80))
    with pytest.raises(InputError, match="no signal at"):
        fisher_covariance(information, bowl(), np.array([-1.0, 75.0, 20.0, 4.0]))
    endless = replace(linear_shape(), upper=np.full(3, np.inf))
    with pytest.raises(InputError, match="give prior_sd"):
        fisher_covariance(information, endless, np.zeros(3))
