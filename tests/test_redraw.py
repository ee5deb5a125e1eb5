"""Fast redraws against full simulations of the same draws."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager

import numpy as np
import pytest
from small_campaign import CONFIGS, small_tree

from reduce.binning import mean_by_bin
from reduce.redraw import Redrawer, beyond_foreground_k, lagrange, redrawer
from sims.campaign import drawn_sky, geometry_like, simulate, true_sky
from sims.config import Config
from sims.config_load import parse_config
from sims.draws import draw
from sims.frequency import channel_grid
from sims.sky import moved_sky, sky_from
from sims.sky_average import Sky
from sims.vantage import survey_geometry


def quiet(samples: int) -> None:
    """No progress bar."""


def campaign() -> Config:
    """The demo's knowledge of sky and antenna, with a plane below the wire and what else moves the beam on the sky."""
    tree = small_tree()
    tree["observation"].update(step="3600 s", count=744)
    tree["beam"] = {**tree["beam"], "length": "2 m", "height": "1 m"}
    tree["knowledge"]["beam.height"] = {"distribution": "normal", "sd": "2 mm"}
    tree["knowledge"]["beam.ripple_fraction"] = {"distribution": "normal", "sd": 1e-4}
    tree["knowledge"]["surface.permittivity"] = {"distribution": "normal", "sd": 0.1}
    return parse_config(tree, CONFIGS)


def one(ready: Redrawer, changed: Config, sky: Sky) -> tuple[np.ndarray, np.ndarray]:
    """A single redraw."""
    temperature, response = ready.spectra([(changed, sky)])
    return temperature[0], response[0]


@pytest.fixture(scope="module")
def ready() -> Redrawer:
    counted: list[int] = []
    totals: list[int] = []

    @contextmanager
    def bar(title: str, total: int) -> Iterator[Callable[[int], None]]:
        totals.append(total)
        yield counted.append

    made = redrawer(campaign(), bar)
    beams = 1 + sum(len(row) - 1 for row in made.values) + 4 * len(made.pairs)
    assert totals == [beams]
    assert sum(counted) == beams
    return made


def in_full(config: Config, changed: Config, sky: Sky) -> tuple[np.ndarray, np.ndarray]:
    geometry, grid = survey_geometry(config.vantage, config.observation), channel_grid(config.channels)
    average = simulate(changed, sky, geometry_like(changed, geometry, config), grid, quiet)
    return (
        mean_by_bin(average.antenna_temperature_k, geometry, config.bins),
        mean_by_bin(average.signal_response, geometry, config.bins),
    )


def test_nominal_campaign_and_changed_skies_are_exact(ready: Redrawer) -> None:
    config = ready.config
    sky = sky_from(config.sky)
    brighter = config.model_copy(update={"sky": config.sky.model_copy(update={"scale": 1.1, "zero_level_k": 2.0})})
    for changed, under in ((config, sky), (brighter, moved_sky(sky, config.sky, brighter.sky))):
        temperature, response = one(ready, changed, under)
        full = in_full(config, changed, under)
        # The engine's own sums, at as many nodes as a ripple needs: its tolerance of a microkelvin is what differs.
        assert np.abs(temperature - full[0]).max() < 2e-6
        assert np.abs(response - full[1]).max() < 1e-8


def test_what_acts_outside_the_sums_is_exact(ready: Redrawer) -> None:
    config = ready.config
    changed = config.model_copy(
        update={
            "beam": config.beam.model_copy(update={"efficiency": 0.9}),
            "surface": config.surface.model_copy(update={"temperature_k": 210.0}),
        }
    )
    temperature, response = one(ready, changed, ready.sky)
    full = in_full(config, changed, ready.sky)
    assert np.abs(temperature - full[0]).max() < 2e-6
    assert np.abs(response - full[1]).max() < 1e-8


@pytest.mark.parametrize("number", range(4))
def test_draw_of_everything_at_once_against_a_full_simulation(ready: Redrawer, number: int) -> None:
    """Sky, index field, tilt, length, height, ripple, permittivity: within 0.1 mK after the foreground fit."""
    config = ready.config
    truth = draw(config, "redraw-test", number)
    sky = true_sky(config, truth, ready.sky)
    temperature, response = one(ready, truth.config, sky)
    full = in_full(config, truth.config, sky)
    nominal = one(ready, config, ready.sky)[0]
    frequency = channel_grid(config.channels).centre_mhz
    difference = temperature - full[0]
    # What two leaves do together is left out: tilt and length change the mean by parts in 10^3 and 10^4 of 10^3 K.
    assert np.abs(difference).max() < 1e-3 * np.abs(full[0] - nominal).max()
    assert beyond_foreground_k(difference, full[0], frequency, 8) < 1e-4
    assert np.abs(response - full[1]).max() < 1e-5


def test_each_draw_can_be_made_again_alone(ready: Redrawer) -> None:
    config = ready.config
    draws = [draw(config, "ensemble", number) for number in (5, 6, 7)]
    together, response = ready.spectra(
        [(each.config, drawn_sky(config, each, ready.sky, "ensemble")) for each in draws]
    )
    again = draw(config, "ensemble", 7)
    assert again.values == draws[2].values
    alone = ready.spectra([(again.config, drawn_sky(config, again, ready.sky, "ensemble"))])
    # One matrix product sums in another order than the other: 1e-13 of 10^4 K.
    assert np.abs(together[2] - alone[0][0]).max() < 1e-8
    assert np.abs(response[2] - alone[1][0]).max() < 1e-12
    # The fields differ from draw to draw, and from those of another name.
    assert np.abs(together[1] - together[0]).max() > 1.0
    other = ready.spectra([(again.config, drawn_sky(config, again, ready.sky, "truth"))])
    assert np.abs(other[0] - alone[0]).max() > 1.0


def test_pairs_are_tabulated_only_where_they_count(ready: Redrawer) -> None:
    named = {frozenset((ready.leaves[one], ready.leaves[two])) for one, two in ready.pairs}
    assert frozenset(("beam.tilt_deg", "beam.ripple_fraction")) in named
    assert len(named) < len(ready.leaves) * (len(ready.leaves) - 1) / 2


def test_lagrange_weights_reproduce_polynomials() -> None:
    nodes = np.array([0.0, -3.0, -1.5, 1.5, 3.0])
    for at in (0.0, 0.7, -2.9, 3.5):
        weights = lagrange(nodes, at)
        assert [weights @ nodes**power for power in range(5)] == pytest.approx(
            [at**power for power in range(5)], abs=1e-11
        )
