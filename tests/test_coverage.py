"""A sample of the study in `tests/studies`: are the stated errors true, and would it be seen if they were not?"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from contextlib import contextmanager

import numpy as np
import pytest
from small_campaign import CONFIGS, small_config, small_tree

from reduce.calibration import coverage_table, false_alarms, family_wise_p, pulls, uniformity_p
from reduce.ensemble import DrawnSpectra, drawn_spectra
from reduce.mocks import STREAM, Reduced, believed_spectra, mock_bench, reduce_all
from reduce.redraw import redrawer
from reduce.trough_model import NAMES
from reduce.trust import drawn_ensemble, with_knowledge
from sims.config import Config
from sims.config_load import parse_config

MOCKS = 60


@contextmanager
def plain(title: str, total: int) -> Iterator[Callable[[int], None]]:
    yield lambda done: None


def two_bins(**foreground: object) -> Config:
    tree = small_tree(channels={"count": 32})
    tree["foreground"] = foreground
    tree["bins"]["count"] = 2
    boresight = tree["vantage"]["boresight"]
    boresight["directions"] = boresight["directions"][:2]
    return parse_config(tree, CONFIGS)


def reduced(config: Config, with_signal: int, silent: int) -> tuple[list[Reduced], list[Reduced]]:
    """Mocks with a signal and without, truths from ``[knowledge]``."""
    processes = min(2, os.cpu_count() or 1)
    ready = redrawer(config, plain)
    template, seconds = believed_spectra(ready)
    ensemble = None
    if config.foreground.family == "ensemble":
        ensemble = drawn_ensemble(ready, template, plain)
    else:
        template = with_knowledge(template, config, plain)
    bench = mock_bench(config, template, seconds, ensemble)
    drawn = drawn_spectra(ready, STREAM, range(with_signal + silent), lambda done: None)
    parts = DrawnSpectra(drawn.temperature_k[:with_signal], drawn.response[:with_signal])
    rest = DrawnSpectra(drawn.temperature_k[with_signal:], drawn.response[with_signal:])
    found = reduce_all(bench, parts, 0, None, processes, lambda done: None)
    nothing = np.full(len(NAMES), np.nan)
    return found, reduce_all(bench, rest, with_signal, nothing, processes, lambda done: None) if silent else []


def column(found: list[Reduced], name: str) -> np.ndarray:
    return np.array([getattr(each, name) for each in found])


@pytest.mark.slow
@pytest.mark.parametrize(
    "config",
    [small_config(), two_bins(family="ensemble", draws=300)],
    ids=["log polynomial, 8 bins", "ensemble, 2 bins"],
)
def test_intervals_cover_and_noise_alone_does_not_alarm(config: Config) -> None:
    found, silent = reduced(config, MOCKS, MOCKS)
    rank = column(found, "rank")
    assert [row for row in coverage_table(rank, NAMES) if not row.inside] == []
    assert family_wise_p(rank) > 0.01
    # Ranks of the truth are uniform (Talts et al. 2018): one in a thousand for six numbers together.
    assert uniformity_p(rank).min() > 1e-3 / 6
    pull = pulls(column(found, "mean"), column(found, "sd"), column(found, "truth"))
    # Mean 0 and mean square 1; standard errors of normal pulls, four times.
    assert np.abs(pull.mean(axis=0)).max() < 4 / np.sqrt(MOCKS)
    assert np.abs((pull**2).mean(axis=0) - 1.0).max() < 4 * np.sqrt(2 / MOCKS)
    freedom, chi_squared = column(found, "degrees_of_freedom"), column(found, "chi_squared")
    # Variance of chi-squared is twice its freedom: four standard errors of the mean.
    assert abs((chi_squared - freedom).mean()) < 4 * np.sqrt(2 * freedom.mean() / MOCKS)
    for name in ("statistic", "log_bayes_factor"):
        assert false_alarms(column(silent, name)).inside


@pytest.mark.slow
def test_a_foreground_of_too_few_terms_is_caught() -> None:
    """Six terms a bin cannot follow this beam: what they leave passes for a trough, unknown to the errors."""
    found, _ = reduced(two_bins(family="log-polynomial", terms=6), 40, 0)
    rank = column(found, "rank")
    assert family_wise_p(rank) < 1e-6
    pull = pulls(column(found, "mean"), column(found, "sd"), column(found, "truth"))
    # Honest pulls of 40 mocks have a mean square of 1, to 0.22.
    assert (pull**2).mean(axis=0).max() > 4.0
