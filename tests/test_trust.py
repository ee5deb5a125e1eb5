"""Mocks of many worlds: each as it says, reproducible alone, no number in two worlds, and told from silence."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from typing import Any

import numpy as np
import pytest
from small_campaign import CONFIGS, small_tree

from reduce import mocks
from reduce import trust as trust_module
from reduce.ensemble import DrawnSpectra, drawn_spectra
from reduce.mocks import believed_spectra, mock_bench, reduce_all, reduce_mock
from reduce.redraw import redrawer
from reduce.trough_model import NAMES
from reduce.trust import STREAM, Trust, packed_trust, trust, with_knowledge, worlds_outside
from sims.config import Config
from sims.config_load import parse_config
from sims.errors import InputError

MOCKS = 4


@contextmanager
def plain(title: str, total: int) -> Iterator[Callable[[int], None]]:
    yield lambda done: None


class HereAndNow:
    """Stands in for a pool of processes, whose start would take longer than the mocks."""

    def __init__(self, processes: int, **options: Any) -> None:
        assert processes == 1

    def __enter__(self) -> HereAndNow:
        return self

    def __exit__(self, *error: object) -> None:
        return None

    def map(self, work: Callable[[Any], Any], tasks: Iterable[Any]) -> Iterator[Any]:
        return map(work, tasks)


def two_bins(**foreground: Any) -> Config:
    """The small campaign with two pointings and few channels."""
    tree = small_tree(channels={"count": 32})
    tree["foreground"] = foreground or {"family": "log-polynomial", "terms": 8}
    tree["bins"]["count"] = 2
    boresight = tree["vantage"]["boresight"]
    boresight["directions"] = boresight["directions"][:2]
    return parse_config(tree, CONFIGS)


@pytest.fixture
def quick(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(mocks, "ProcessPoolExecutor", HereAndNow)
    monkeypatch.setattr(trust_module, "FEWEST_OUTSIDE", 2)


def check_worlds(found: Trust, outside: list[str]) -> None:
    assert [world.name for world in found.outside] == ["finer index field", "map errors", *outside]
    assert len(found.believed.reduced) == len(found.silent.reduced) == MOCKS
    assert all(len(world.reduced) == 2 for world in found.outside)
    assert np.isnan(found.silent.column("truth")).all()
    truths = np.concatenate([world.column("truth") for world in (found.believed, *found.outside)])
    # A trough of its own for each: no number is in two worlds.
    assert len(np.unique(truths[:, 0])) == len(truths)
    for world in (found.believed, *found.outside):
        rank = world.column("rank")
        assert ((rank >= 0.0) & (rank <= 1.0)).all()
        assert (world.column("effective") > 100.0).all()
    off = (found.believed.column("mean") - found.believed.column("truth")) / found.believed.column("sd")
    # 24 pulls of honest posteriors within bounds: beyond five, never.
    assert np.abs(off).max() < 5.0
    # Troughs of 10 to 300 mK against errors of some mK: most stand out of what silence gives.
    assert np.median(found.believed.column("statistic")) > found.silent.column("statistic").max()
    assert np.median(found.believed.column("log_bayes_factor")) > found.silent.column("log_bayes_factor").max()


def test_mocks_of_a_free_family_and_of_worlds_from_outside(quick: None) -> None:
    config = two_bins()
    found = trust(config, MOCKS, plain, outside=[("twin", config)], processes=1)
    check_worlds(found, ["twin"])
    # Mock 2 made again alone.
    ready = redrawer(config, plain)
    template, seconds = believed_spectra(ready)
    bench = mock_bench(config, with_knowledge(template, config, plain), seconds, None)
    alone = drawn_spectra(ready, STREAM, [2], lambda done: None)
    again = reduce_mock(bench, alone.temperature_k[0], alone.response[0], 2, None)
    assert np.array_equal(again.truth, found.believed.reduced[2].truth)
    # A draw made among others differs by rounding of 10^4 K, far below the noise; errors by less than a thousandth.
    assert again.mean == pytest.approx(found.believed.reduced[2].mean, abs=1e-3 * again.sd.max(), rel=1e-3)
    # A world from outside that is the same campaign is drawn as the believed one is: mock 12, after 4, 4, 2 and 2.
    alone = drawn_spectra(ready, STREAM, [12], lambda done: None)
    twin = reduce_mock(bench, alone.temperature_k[0], alone.response[0], 12, None)
    assert np.array_equal(twin.truth, found.outside[2].reduced[0].truth)
    assert twin.mean == pytest.approx(found.outside[2].reduced[0].mean, abs=1e-3 * twin.sd.max(), rel=1e-3)


def test_mocks_of_an_ensemble_and_their_record(quick: None) -> None:
    found = trust(two_bins(family="ensemble", draws=150), MOCKS, plain, processes=1)
    check_worlds(found, [])
    packed = packed_trust(found)
    assert packed.sizes == {"mock": 2 * MOCKS + 4, "parameter": 6}
    assert packed["parameter"].values.tolist() == list(NAMES)
    own = packed.isel(mock=packed["world"].values == "map errors")
    assert np.array_equal(own["mean"], found.outside[1].column("mean"))
    assert np.array_equal(packed["chi_squared"][:MOCKS], found.believed.column("chi_squared"))
    assert packed.attrs["sky"] == "invented"


def test_a_map_without_errors_is_the_believed_one(monkeypatch: pytest.MonkeyPatch) -> None:
    ready = redrawer(two_bins(), plain)
    numbers = range(7, 10)
    expected = drawn_spectra(ready, STREAM, numbers, lambda done: None)

    def drawn(world: str) -> DrawnSpectra:
        return {name: spectra for name, _, spectra in worlds_outside(ready, 3, 4, plain)}[world]

    erring, finer = drawn("map errors"), drawn("finer index field")
    monkeypatch.setattr(trust_module, "MAP_ERROR", 0.0)
    exact = drawn("map errors")
    # Rounding of 10^4 K.
    assert np.abs(exact.temperature_k - expected.temperature_k).max() < 1e-8
    # 5 % in patches of 10 deg, of which a beam sees some tens: about a per cent is left, of thousands of kelvin.
    change = np.abs(erring.temperature_k / expected.temperature_k - 1.0)
    assert 1e-4 < np.median(change) < 0.05
    assert np.array_equal(erring.response, expected.response)
    # The finer field is drawn with other numbers, 4 to 6: other antennas, so another response.
    assert not np.allclose(finer.response, expected.response)


def test_worlds_with_other_bins_are_refused_before_any_mock(monkeypatch: pytest.MonkeyPatch) -> None:
    def never(*words: Any) -> None:
        raise AssertionError

    monkeypatch.setattr(trust_module, "drawn_spectra", never)
    monkeypatch.setattr(trust_module, "reduce_all", never)
    tree = small_tree(channels={"count": 32})
    with pytest.raises(InputError, match="bins; allowed are the"):
        trust(two_bins(), MOCKS, plain, outside=[("other", parse_config(tree, CONFIGS))])


def test_processes_reduce_as_one_does(monkeypatch: pytest.MonkeyPatch) -> None:
    config = two_bins()
    ready = redrawer(config, plain)
    template, seconds = believed_spectra(ready)
    bench = mock_bench(config, with_knowledge(template, config, plain), seconds, None)
    drawn = drawn_spectra(ready, STREAM, range(2), lambda done: None)
    told: list[int] = []
    apart = reduce_all(bench, drawn, 0, None, 2, told.append)
    assert sum(told) == 2
    for number, each in enumerate(apart):
        here = reduce_mock(bench, drawn.temperature_k[number], drawn.response[number], number, None)
        assert np.array_equal(here.truth, each.truth)
        assert here.mean == pytest.approx(each.mean, rel=1e-6)
