"""What is known of each number: distributions, correlated groups, and draws that can be made again."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from config_cases import load_text, small_with, with_knowledge
from pydantic import ValidationError
from scipy import stats

from sims.config import Config
from sims.draws import draw, leaf_value, with_leaves
from sims.errors import InputError
from sims.knowledge import Correlated, Knowledge, Known

DRAWS = 250
# Chance leads a Kolmogorov-Smirnov test below this once in a hundred thousand runs; seeds are fixed here anyway.
LEAST_P = 1e-5


def known(**entry: Any) -> Known:
    return Known.model_validate({"path": "beam.efficiency", **entry})


def config_with(folder: Path, *lines: str) -> Config:
    return load_text(with_knowledge(small_with(), "[knowledge]", *lines), folder)


def drawn(config: Config, *paths: str) -> np.ndarray:
    values = [draw(config, "test", index).values for index in range(DRAWS)]
    return np.array([[value[path] for value in values] for path in paths])


# ---------------------------------------------------------------- distributions


def test_normal_is_centred_on_the_configured_value_unless_told() -> None:
    assert known(distribution="normal", sd=2.0).frozen(7.0).mean() == 7.0
    assert known(distribution="normal", sd=2.0).frozen(7.0).std() == 2.0
    assert known(distribution="normal", sd=2.0, mean=5.0).frozen(7.0).mean() == 5.0


def test_uniform_runs_from_lower_to_upper() -> None:
    distribution = known(distribution="uniform", lower=-1.0, upper=3.0).frozen(99.0)
    assert distribution.support() == (-1.0, 3.0)
    # Closed form: width / sqrt(12); one rounding.
    assert distribution.std() == pytest.approx(4.0 / np.sqrt(12.0), rel=1e-15)


def test_lognormal_has_its_median_at_the_configured_value() -> None:
    distribution = known(distribution="lognormal", sd=0.3).frozen(5.0)
    # Closed forms of the lognormal, to rounding.
    assert distribution.median() == pytest.approx(5.0, rel=1e-14)
    assert distribution.mean() == pytest.approx(5.0 * np.exp(0.3**2 / 2), rel=1e-14)
    assert np.log(distribution.ppf(stats.norm.cdf(1.0)) / 5.0) == pytest.approx(0.3, rel=1e-12)
    assert known(distribution="lognormal", sd=0.3, mean=2.0).frozen(5.0).median() == pytest.approx(2.0, rel=1e-14)


def test_normal_with_one_bound_at_its_centre_is_half_a_normal() -> None:
    distribution = known(distribution="normal", sd=0.02, upper=1.0).frozen(1.0)
    assert distribution.support() == (-np.inf, 1.0)
    # Half-normal: mean sd sqrt(2/pi) below the bound, variance sd^2 (1 - 2/pi); the library's own digits.
    assert 1.0 - distribution.mean() == pytest.approx(0.02 * np.sqrt(2 / np.pi), rel=1e-9)
    assert distribution.var() == pytest.approx(0.02**2 * (1 - 2 / np.pi), rel=1e-9)


def test_normal_between_bounds_stays_between_them() -> None:
    distribution = known(distribution="normal", sd=1.0, lower=-0.5, upper=2.0).frozen(0.0)
    values = distribution.rvs(20_000, random_state=np.random.default_rng(1))
    assert values.min() >= -0.5
    assert values.max() <= 2.0
    share = (stats.norm.cdf(1.0) - stats.norm.cdf(-0.5)) / (stats.norm.cdf(2.0) - stats.norm.cdf(-0.5))
    # Inside, the shape is the normal's: five binomial sigma.
    assert np.mean(values < 1.0) == pytest.approx(share, abs=5 * np.sqrt(share * (1 - share) / 20_000))


@pytest.mark.parametrize(
    ("entry", "words"),
    [
        ({"distribution": "normal"}, "normal needs sd"),
        ({"distribution": "lognormal"}, "lognormal needs sd"),
        ({"distribution": "uniform", "lower": 0.0}, "needs lower and upper"),
        ({"distribution": "uniform", "lower": 0.0, "upper": 1.0, "sd": 1.0}, "neither mean nor sd"),
        ({"distribution": "uniform", "lower": 0.0, "upper": 1.0, "mean": 1.0}, "neither mean nor sd"),
        ({"distribution": "uniform", "lower": 1.0, "upper": 1.0}, "must lie above lower"),
        ({"distribution": "normal", "sd": 1.0, "lower": 2.0, "upper": 1.0}, "must lie above lower"),
        ({"distribution": "lognormal", "sd": 0.1, "upper": 2.0}, "no lower or upper"),
        ({"distribution": "normal", "sd": 0.0}, "greater than 0"),
        ({"distribution": "normal", "sd": float("inf")}, "finite"),
        ({"distribution": "normal", "sd": True}, "valid number"),
        ({"distribution": "cauchy", "sd": 1.0}, "'normal', 'uniform' or 'lognormal'"),
    ],
)
def test_half_described_distributions_are_refused(entry: dict[str, Any], words: str) -> None:
    with pytest.raises(ValidationError, match=words):
        known(**entry)


# ---------------------------------------------------------------- draws


def test_a_draw_is_reproducible_alone(tmp_path: Path) -> None:
    config = config_with(
        tmp_path,
        'beam.tilt = { distribution = "normal", sd = "1 deg" }',
        'receiver.scale = { distribution = "lognormal", sd = 0.01 }',
    )
    in_turn = [draw(config, "ensemble", index) for index in range(5)]
    alone = draw(config, "ensemble", 3)
    assert alone == in_turn[3]
    assert alone.index == 3
    assert len({value.values["beam.tilt_deg"] for value in in_turn}) == 5
    assert draw(config, "truth", 3).values != alone.values
    other_seed = config.model_copy(update={"run": config.run.model_copy(update={"seed": 1})})
    assert draw(other_seed, "ensemble", 3).values != alone.values


def test_a_draw_moves_its_leaves_and_nothing_else(tmp_path: Path) -> None:
    config = config_with(
        tmp_path,
        'beam.tilt = { distribution = "normal", sd = "1 deg" }',
        '"vantage.boresight.directions.2.1" = { distribution = "normal", sd = "3 arcmin" }',
    )
    one = draw(config, "test")
    assert set(one.values) == {"beam.tilt_deg", "vantage.boresight.directions_deg.2.1"}
    for path, value in one.values.items():
        assert leaf_value(one.config, path) == value
        assert leaf_value(config, path) != value
    back = with_leaves(one.config, {path: leaf_value(config, path) for path in one.values})
    assert back == config


def test_draws_follow_their_distributions(tmp_path: Path) -> None:
    config = config_with(
        tmp_path,
        'sky.zero_level = { distribution = "normal", sd = "3 K" }',
        'beam.efficiency = { distribution = "normal", sd = 0.02, upper = 1.0 }',
        'receiver.temperature = { distribution = "lognormal", sd = 0.2 }',
        'surface.permittivity = { distribution = "uniform", lower = 2.5, upper = 3.5 }',
        'beam.length = { distribution = "normal", mean = "161 cm", sd = "1 mm" }',
    )
    expected = {
        "sky.zero_level_k": stats.norm(0.0, 3.0),
        "beam.efficiency": stats.truncnorm(-np.inf, 1.5, loc=0.97, scale=0.02),
        "receiver.temperature_k": stats.lognorm(0.2, scale=150.0),
        "surface.permittivity": stats.uniform(2.5, 1.0),
        "beam.length_m": stats.norm(1.61, 0.001),
    }
    values = drawn(config, *expected)
    for row, distribution in zip(values, expected.values(), strict=True):
        assert stats.kstest(row, distribution.cdf).pvalue > LEAST_P
    correlation = np.corrcoef(values) - np.eye(5)
    # Leaves that are in no group are independent: five sigma of the sample correlation, 1/sqrt(draws).
    assert np.abs(correlation).max() < 5 / np.sqrt(DRAWS)


def test_correlated_leaves_keep_their_distributions_and_gain_their_correlation(tmp_path: Path) -> None:
    config = config_with(
        tmp_path,
        'sky.zero_level = { distribution = "normal", sd = "3 K" }',
        'beam.tilt = { distribution = "normal", sd = "1 deg" }',
        'sky.scale = { distribution = "lognormal", sd = 0.05 }',
        'receiver.offset = { distribution = "uniform", lower = "-1 K", upper = "1 K" }',
        "[[knowledge.correlated]]",
        'paths = ["sky.zero_level", "sky.scale", "receiver.offset_k"]',
        "correlation = [[1.0, -0.8, 0.5], [-0.8, 1.0, -0.3], [0.5, -0.3, 1.0]]",
    )
    zero, scale, offset, tilt = drawn(config, "sky.zero_level_k", "sky.scale", "receiver.offset_k", "beam.tilt_deg")
    assert stats.kstest(zero, stats.norm(0.0, 3.0).cdf).pvalue > LEAST_P
    assert stats.kstest(scale, stats.lognorm(0.05).cdf).pvalue > LEAST_P
    assert stats.kstest(offset, stats.uniform(-1.0, 2.0).cdf).pvalue > LEAST_P
    scores = np.stack([zero / 3.0, np.log(scale) / 0.05, stats.norm.ppf((offset + 1.0) / 2.0)])
    found = np.corrcoef(scores)
    wanted = np.array([[1.0, -0.8, 0.5], [-0.8, 1.0, -0.3], [0.5, -0.3, 1.0]])
    # A sample correlation of normal scores scatters by (1 - rho^2)/sqrt(n): five of these.
    assert np.all(np.abs(found - wanted) <= 5.0 * (1.0 - wanted**2) / np.sqrt(DRAWS) + 1e-12)
    # What stands outside the group is not drawn into it.
    assert abs(np.corrcoef(tilt, zero)[0, 1]) < 5 / np.sqrt(DRAWS)


def test_fully_correlated_leaves_move_as_one(tmp_path: Path) -> None:
    config = config_with(
        tmp_path,
        'sky.zero_level = { distribution = "normal", sd = "3 K" }',
        'beam.tilt = { distribution = "normal", sd = "1 deg" }',
        "[[knowledge.correlated]]",
        'paths = ["sky.zero_level", "beam.tilt"]',
        "correlation = [[1, -1], [-1, 1]]",
    )
    one = draw(config, "test").values
    # The factor of a singular matrix is good to the root of rounding, 1e-8, of unit scores.
    assert one["sky.zero_level_k"] / 3.0 == pytest.approx(-one["beam.tilt_deg"], abs=1e-7)


def test_draws_in_the_far_tails_keep_their_rank(tmp_path: Path) -> None:
    """Drawn by rank from either end, a lognormal 8 sigma up is as good as one 8 sigma down."""
    distribution = known(distribution="lognormal", sd=0.1).frozen(1.0)
    assert np.log(distribution.isf(stats.norm.sf(8.0))) == pytest.approx(0.8, rel=1e-9)  # the library's own digits
    config = config_with(tmp_path, 'receiver.scale = { distribution = "lognormal", sd = 0.1 }')
    values = np.log(drawn(config, "receiver.scale")[0]) / 0.1
    assert stats.kstest(values, "norm").pvalue > LEAST_P


def test_a_drawn_value_out_of_range_is_refused_with_its_path(tmp_path: Path) -> None:
    config = config_with(tmp_path, 'beam.efficiency = { distribution = "uniform", lower = 1.5, upper = 2.0 }')
    with pytest.raises(InputError, match=r"beam\.efficiency, 1\.\d+, is not allowed.*lower or upper bound"):
        draw(config, "test")
    with pytest.raises(InputError, match=r"surface\.temperature_k.*greater than 0"):
        with_leaves(config, {"surface.temperature_k": -1.0})


# ---------------------------------------------------------------- groups


@pytest.mark.parametrize(
    ("correlation", "words"),
    [
        (((1.0, 0.5),), "must be 2 x 2"),
        (((1.0, 0.5), (0.5,)), "must be 2 x 2"),
        (((1.0, 0.5), (0.4, 1.0)), "symmetric"),
        (((2.0, 0.5), (0.5, 1.0)), "ones on its diagonal"),
        (((1.0, 1.5), (1.5, 1.0)), "negative eigenvalue"),
        (((1.0, float("nan")), (float("nan"), 1.0)), "finite"),
    ],
)
def test_what_is_no_correlation_matrix_is_refused(correlation: Any, words: str) -> None:
    with pytest.raises(ValidationError, match=words):
        Correlated(paths=("a", "b"), correlation=correlation)


def test_groups_name_leaves_that_are_known_and_each_once() -> None:
    leaf = Known(path="a", distribution="normal", sd=1.0)
    other = Known(path="b", distribution="normal", sd=1.0)
    group = Correlated(paths=("a", "b"), correlation=((1.0, 0.1), (0.1, 1.0)))
    assert Knowledge(leaves=(leaf, other), correlated=(group,)).correlated == (group,)
    with pytest.raises(ValidationError, match="'b' has no entry of its own"):
        Knowledge(leaves=(leaf,), correlated=(group,))
    with pytest.raises(ValidationError, match="'a' stands more than once"):
        Knowledge(leaves=(leaf, other), correlated=(group, group))
