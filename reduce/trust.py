"""How far the stated errors can be trusted: mocks as believed, mocks without a signal, and worlds that nobody expected.

Mocks as believed come from ``[knowledge]``, as the covariance does, and say whether the machinery is sound. Worlds
from outside say where it stops: their truth comes from a ``[knowledge]`` that the reduction does not have, or from
another configuration altogether (another map, a beam from a solver). All are reduced as the team would.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from reduce.ensemble import STREAM as ENSEMBLE_STREAM
from reduce.ensemble import DrawnSpectra, check_campaign, drawn_spectra, redrawn, spread
from reduce.foreground.known import KnownForeground
from reduce.knowledge_modes import engine_runs, knowledge_modes
from reduce.mocks import STREAM, MockBench, Reduced, believed_spectra, mock_bench, reduce_all
from reduce.redraw import Bars, Redrawer, redrawer
from reduce.trough_model import NAMES
from sims.campaign import drawn_sky
from sims.config import Config
from sims.constants import CMB_TEMPERATURE_K
from sims.draws import draw
from sims.schema import SPECTRA, describe
from sims.sky import AnySky
from sims.sky_invented import gaussian_field
from sims.sky_power_law import DiffuseSky
from sims.streams import stream

FloatArray = NDArray[np.float64]

FEWEST_OUTSIDE = 50
SHARE_OUTSIDE = 5
MAP_ERROR = 0.05
MAP_ERROR_LENGTH_DEG = 10.0


@dataclass(frozen=True, eq=False)
class World:
    """Mocks of one kind, reduced.

    Attributes
    ----------
    name : str
        Short name.
    about : str
        What is true in it, in a sentence.
    reduced : tuple of Reduced
    """

    name: str
    about: str
    reduced: tuple[Reduced, ...]

    def column(self, name: str) -> FloatArray:
        """One attribute of all mocks: ndarray[mock] or ndarray[mock, parameter]."""
        return np.array([getattr(each, name) for each in self.reduced])


@dataclass(frozen=True, eq=False)
class Trust:
    """What `trust` finds.

    Attributes
    ----------
    config : Config
    names : tuple of str
        Parameters of the trough.
    believed : World
        Truths from ``[knowledge]``, troughs from the prior.
    silent : World
        The same without a signal.
    outside : tuple of World
        Truths from elsewhere, troughs from the prior.
    """

    config: Config
    names: tuple[str, ...]
    believed: World
    silent: World
    outside: tuple[World, ...]


def trust(
    config: Config,
    mocks: int,
    progress: Bars,
    *,
    outside: Sequence[tuple[str, Config]] = (),
    ensemble: KnownForeground | None = None,
    processes: int = 2,
) -> Trust:
    """Reduce mocks of many worlds.

    Parameters
    ----------
    config : Config
        The campaign and its reduction.
    mocks : int
        With a signal, and as many without; a fifth as many, and `FEWEST_OUTSIDE` at least, of each world from outside.
    progress : callable
        Makes progress bars.
    outside : sequence of (str, Config)
        Names and configurations of further worlds: same channels and bins, another sky, antenna or ``[knowledge]``.
    ensemble : KnownForeground, optional
        Drawn before, for a foreground that is one; by default it is drawn here.
    processes : int

    Returns
    -------
    Trust

    Raises
    ------
    InputError
        If a world has other channels or bins, or its sky average is not smooth in frequency.
    """
    ready = redrawer(config, progress)
    template, seconds = believed_spectra(ready)
    for _, other in outside:
        check_campaign(template, other)
    if config.foreground.family == "ensemble":
        ensemble = drawn_ensemble(ready, template, progress) if ensemble is None else ensemble
    else:
        template = with_knowledge(template, config, progress)
    bench = mock_bench(config, template, seconds, ensemble)
    with progress("drawing foregrounds", 2 * mocks) as advance:
        foregrounds = drawn_spectra(ready, STREAM, range(2 * mocks), advance)
    parts = DrawnSpectra(foregrounds.temperature_k[:mocks], foregrounds.response[:mocks])
    rest = DrawnSpectra(foregrounds.temperature_k[mocks:], foregrounds.response[mocks:])
    nothing = np.full(len(NAMES), np.nan)
    reducing = _Reducing(bench, progress, processes)
    believed = reducing.world("as believed", "sky, antenna and receiver drawn from [knowledge]", parts, 0, None)
    silent = reducing.world("no signal", "the same without a trough", rest, mocks, nothing)
    few, first = max(FEWEST_OUTSIDE, mocks // SHARE_OUTSIDE), 2 * mocks
    worlds = []
    for name, about, drawn in worlds_outside(ready, few, first, progress):
        worlds.append(reducing.world(name, about, drawn, first, None))
        first += few
    for name, other in outside:
        elsewhere = redrawer(other, progress)
        with progress(f"drawing {name}", few) as advance:
            drawn = drawn_spectra(elsewhere, STREAM, range(first, first + few), advance)
        worlds.append(reducing.world(name, f"truth from the configuration {other.run.name!r}", drawn, first, None))
        first += few
    return Trust(config, NAMES, believed, silent, tuple(worlds))


@dataclass(frozen=True, eq=False)
class _Reducing:
    """What every world is reduced with."""

    bench: MockBench
    progress: Bars
    processes: int

    def world(self, name: str, about: str, drawn: DrawnSpectra, first: int, truth: FloatArray | None) -> World:
        with self.progress(f"reducing mocks: {name}", len(drawn.temperature_k)) as advance:
            reduced = reduce_all(self.bench, drawn, first, truth, self.processes, advance)
        return World(name, about, tuple(reduced))


def drawn_ensemble(ready: Redrawer, template: xr.Dataset, progress: Bars) -> KnownForeground:
    """The ensemble that the configuration asks for."""
    draws = ready.config.foreground.draws
    assert draws is not None
    with progress("drawing the ensemble", draws) as advance:
        drawn = drawn_spectra(ready, ENSEMBLE_STREAM, range(draws), advance)
    return spread(drawn, np.where(template["flag"].values == 0, template["noise_variance"].values, np.nan)).known


def with_knowledge(template: xr.Dataset, config: Config, progress: Bars) -> xr.Dataset:
    """Spectra with the modes that ``[knowledge]`` gives beside a free family."""
    with progress("what knowledge allows", engine_runs(config)) as advance:
        modes = knowledge_modes(config, advance, template["antenna_temperature_k"].values)
    if not modes.names:
        return template
    return describe(
        template.assign(
            systematic_modes=(("mode", "bin", "channel"), modes.temperature_k),
            response_modes=(("mode", "bin", "channel"), modes.response),
        ).assign_attrs(mode_names=list(modes.names)),
        SPECTRA,
    )


def worlds_outside(ready: Redrawer, count: int, first: int, progress: Bars) -> Iterator[tuple[str, str, DrawnSpectra]]:
    """Worlds that can be made of any configuration: name, what is true there, and drawn foregrounds."""
    config = ready.config
    field = config.knowledge.index_field
    if field is not None and field.correlation_length_deg is not None:
        half = field.correlation_length_deg / 2.0
        finer = field.model_copy(update={"correlation_length_deg": half})
        world = config.model_copy(update={"knowledge": config.knowledge.model_copy(update={"index_field": finer})})
        with progress("drawing: finer index field", count) as advance:
            drawn = drawn_spectra(ready, STREAM, range(first, first + count), advance, world)
        yield "finer index field", f"spectral index correlated over {half:g} deg, half of what is believed", drawn
        first += count
    if isinstance(ready.sky, DiffuseSky):
        with progress("drawing: map errors", count) as advance:
            drawn = redrawn(ready, _with_map_errors(ready, range(first, first + count)), count, advance)
        yield (
            "map errors",
            f"the map's gain errs by {MAP_ERROR:.0%} rms from place to place, correlated over "
            f"{MAP_ERROR_LENGTH_DEG:g} deg, which [knowledge] does not say",
            drawn,
        )


def _with_map_errors(ready: Redrawer, numbers: Sequence[int]) -> Iterator[tuple[Config, AnySky]]:
    for number in numbers:
        drawn = draw(ready.config, STREAM, number)
        sky = drawn_sky(ready.config, drawn, ready.sky, STREAM)
        assert isinstance(sky, DiffuseSky)
        field = gaussian_field(
            sky.nside, MAP_ERROR, MAP_ERROR_LENGTH_DEG, stream(ready.config.run.seed, f"{STREAM}/map-errors", number)
        )
        beyond_cmb_k = sky.corrected_map_k() - CMB_TEMPERATURE_K
        yield drawn.config, sky.with_map_noise(beyond_cmb_k * np.expm1(field))


def packed_trust(found: Trust) -> xr.Dataset:
    """Everything of every mock, for a record: worlds one after the other along `mock`."""
    worlds = (found.believed, found.silent, *found.outside)
    per_parameter = ("truth", "mean", "sd", "rank")
    per_mock = ("statistic", "log_bayes_factor", "chi_squared", "degrees_of_freedom", "effective", "at_rest")
    return xr.Dataset(
        {
            "world": ("mock", np.concatenate([[world.name] * len(world.reduced) for world in worlds])),
            **{
                name: (("mock", "parameter"), np.concatenate([world.column(name) for world in worlds]))
                for name in per_parameter
            },
            **{
                name: ("mock", np.concatenate([world.column(name).astype(float) for world in worlds]))
                for name in per_mock
            },
        },
        coords={"parameter": list(found.names)},
        attrs={"campaign": found.config.run.name, "sky": found.config.sky.kind},
    )
