"""The settings of a campaign and its reduction as frozen models, one class a table of the configuration.

`sims.config_load` turns a TOML file into these; every later stage is handed the one table
it needs. The forward tables stand in files of their own (`sims.config_sky`, ...) and can be had from here.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any, Literal, Self

import numpy as np
from pydantic import Field, model_validator

from sims.config_beam import Beam, Dipole, FileBeam, GaussianBeam, ShortDipole
from sims.config_forward import (
    Bins,
    Channels,
    FlattenedGaussianSignal,
    NoSignal,
    Point,
    Receiver,
    Signal,
    TableSignal,
    TurningPointSignal,
)
from sims.config_idle import knowledge_and_effect, masks_and_band, trough_and_band, turning_points_and_band
from sims.config_reduction import Foreground, Limits, PointPrior, TurningPoints
from sims.config_sky import HealpixSky, ImageSky, InventedSky, Sky
from sims.config_vantage import (
    Boresight,
    FixedBoresight,
    GroundSite,
    Layer,
    LunarOrbit,
    LunarOrbitFile,
    LunarSurface,
    Observation,
    ScheduledBoresight,
    Surface,
    Vantage,
    VerticalBoresight,
)
from sims.knowledge import Knowledge
from sims.quantities import Kelvin, Mhz, Section

__all__ = [
    "FORWARD_SECTIONS",
    "Beam",
    "Bins",
    "Boresight",
    "Channels",
    "Config",
    "Correction",
    "Dipole",
    "Engine",
    "FileBeam",
    "FitConfig",
    "FixedBoresight",
    "FlattenedGaussianSignal",
    "Foreground",
    "GaussianBeam",
    "GroundSite",
    "HealpixSky",
    "ImageSky",
    "InventedSky",
    "Layer",
    "Limits",
    "LunarOrbit",
    "LunarOrbitFile",
    "LunarSurface",
    "NoSignal",
    "Observation",
    "Point",
    "PointPrior",
    "Receiver",
    "Run",
    "ScheduledBoresight",
    "ShortDipole",
    "Signal",
    "Sky",
    "Surface",
    "TableSignal",
    "TurningPointSignal",
    "TurningPoints",
    "Vantage",
    "VerticalBoresight",
    "cross_problems",
]


ORBIT_KINDS = ("lunar-orbit", "lunar-orbit-file")


class Run(Section):
    """``[run]``: the name on every product, the one seed, and where a mock's truth comes from."""

    name: str = Field(min_length=1)
    seed: int = Field(ge=0)
    truth: Literal["nominal", "drawn"] = "nominal"


class Correction(Section):
    """``[correction]``: divide the beam's chromaticity out of the foreground, against one frequency."""

    reference_mhz: Mhz = Field(gt=0)
    beam: Literal["nominal", "true"] = "nominal"


class Engine(Section):
    """``[engine]``: how the sky average is expanded in frequency and checked."""

    nodes: int = Field(default=20, ge=4, le=64)
    nodes_cap: int = Field(default=64, ge=4, le=256)
    tolerance_k: Kelvin = Field(default=1e-6, gt=0)
    check_frequencies: int = Field(default=7, ge=1, le=64)
    check_samples: int = Field(default=16, ge=1, le=4096)

    @model_validator(mode="after")
    def _cap(self) -> Self:
        if self.nodes_cap < self.nodes:
            raise ValueError(f"nodes_cap ({self.nodes_cap}) must not lie below nodes ({self.nodes})")
        return self


class FitConfig(Section):
    """What ``quietlimb fit`` needs: the reduction alone."""

    run: Run
    foreground: Foreground
    turning_points: TurningPoints
    limits: Limits = Limits()


class Config(FitConfig):
    """A whole campaign, from sky to turning points."""

    channels: Channels
    sky: Sky
    beam: Beam
    vantage: Vantage
    surface: Surface
    observation: Observation
    receiver: Receiver
    signal: Signal
    bins: Bins
    engine: Engine = Engine()
    correction: Correction | None = None
    knowledge: Knowledge = Knowledge()

    @model_validator(mode="after")
    def _belong_together(self) -> Self:
        problems = cross_problems({name: getattr(self, name) for name in type(self).model_fields})
        if problems:
            raise ValueError("; ".join(problems))
        return self


FORWARD_SECTIONS = tuple(name for name in Config.model_fields if name not in FitConfig.model_fields)


def cross_problems(sections: Mapping[str, Any]) -> list[str]:
    """What is wrong between sections, as far as those given can tell.

    Parameters
    ----------
    sections : mapping of str to Section
        The sections that are sound in themselves; absent ones are not judged.

    Returns
    -------
    list of str
        One line a problem, with the configuration paths that clash.
    """
    given = {name: section for name, section in sections.items() if section is not None}
    problems: list[str] = []
    for names, judge in _JUDGES:
        if all(name in given for name in names):
            problems += judge(*(given[name] for name in names))
    return problems


def _bins_and_vantage(bins: Bins, vantage: Vantage) -> list[str]:
    needs: dict[str, tuple[str, str, tuple[str, ...]]] = {
        "pointing": ("vantage.boresight.kind", vantage.boresight.kind, ("fixed", "schedule")),
        "orbit-phase": ("vantage.kind", vantage.kind, ORBIT_KINDS),
        "sidereal-time": ("vantage.kind", vantage.kind, ("ground",)),
    }
    problems = []
    where, got, wanted = needs.get(bins.by, ("", "", ("",)))
    if got not in wanted:
        allowed = " or ".join(f'"{kind}"' for kind in wanted)
        problems.append(f'bins.by = "{bins.by}" needs {where} = {allowed}, got "{got}"')
    count = {"all": 1}.get(bins.by, bins.count)
    if bins.by == "pointing" and isinstance(vantage.boresight, FixedBoresight):
        count = len(vantage.boresight.directions_deg)
    if bins.by == "pointing" and isinstance(vantage.boresight, ScheduledBoresight):
        count = len(vantage.boresight.targets)
    if bins.count != count:
        problems.append(f'bins.count must be {count} here, with bins.by = "{bins.by}" (got {bins.count})')
    return problems


def _observation_and_vantage(observation: Observation, vantage: Vantage) -> list[str]:
    problems = []
    if "earth-hidden" in observation.require and vantage.kind == "ground":
        problems.append('observation.require: "earth-hidden" cannot be met by vantage.kind = "ground"')
    if vantage.boresight.kind == "velocity" and vantage.kind not in ORBIT_KINDS:
        problems.append(f'vantage.boresight.kind = "velocity" needs an orbit, got vantage.kind = "{vantage.kind}"')
    return problems


def _surface_and_vantage(surface: Surface, vantage: Vantage) -> list[str]:
    if surface.polar_temperature_k is not None and vantage.kind == "ground":
        return ['surface.polar_temperature is the Moon\'s: it cannot be used with vantage.kind = "ground"']
    return []


def _channels_and_sky(channels: Channels, sky: InventedSky | HealpixSky | ImageSky) -> list[str]:
    if sky.valid_from_mhz <= channels.start_mhz and channels.stop_mhz <= sky.valid_to_mhz:
        return []
    return [
        f"channels.start to channels.stop, {channels.start_mhz} to {channels.stop_mhz} MHz, reach outside "
        f"sky.valid_from to sky.valid_to, {sky.valid_from_mhz} to {sky.valid_to_mhz} MHz; "
        "nothing is extrapolated silently"
    ]


def _channels_and_turning_points(channels: Channels, points: TurningPoints) -> list[str]:
    if points.a.frequency_mhz <= channels.start_mhz and channels.stop_mhz <= points.e.frequency_mhz:
        return []
    return [
        f"turning_points.a to turning_points.e, {points.a.frequency_mhz} to {points.e.frequency_mhz} MHz, must enclose "
        f"channels.start to channels.stop, {channels.start_mhz} to {channels.stop_mhz} MHz"
    ]


def _channels_and_signal(channels: Channels, signal: Any) -> list[str]:
    if signal.kind != "turning-points":
        return []
    low, high = signal.a.frequency_mhz, signal.e.frequency_mhz
    if low <= channels.start_mhz and channels.stop_mhz <= high:
        return []
    return [
        f"signal.a to signal.e, {low} to {high} MHz, must enclose channels.start to channels.stop, "
        f"{channels.start_mhz} to {channels.stop_mhz} MHz"
    ]


def _channels_and_foreground(channels: Channels, foreground: Foreground) -> list[str]:
    edges = np.linspace(channels.start_mhz, channels.stop_mhz, channels.count + 1)
    masked = np.zeros(channels.count, dtype=bool)
    for lower, upper in channels.masks_mhz:
        masked |= (edges[1:] > lower) & (edges[:-1] < upper)
    left = channels.count - int(masked.sum())
    if left > foreground.free_terms:
        return []
    return [
        f"foreground.terms: {foreground.free_terms} terms need more channels than the {left} that channels.count and "
        "channels.masks leave"
    ]


def _channels_and_correction(channels: Channels, correction: Correction) -> list[str]:
    if channels.start_mhz <= correction.reference_mhz <= channels.stop_mhz:
        return []
    return [
        f"correction.reference, {correction.reference_mhz} MHz, must lie within channels.start to channels.stop, "
        f"{channels.start_mhz} to {channels.stop_mhz} MHz"
    ]


def _channels_and_receiver(channels: Channels, receiver: Receiver) -> list[str]:
    width_mhz = (channels.stop_mhz - channels.start_mhz) / channels.count
    if receiver.ripple_period_mhz >= 2.0 * width_mhz:
        return []
    return [
        f"receiver.ripple_period, {receiver.ripple_period_mhz:g} MHz, is shorter than two channels of {width_mhz:g} "
        "MHz: it would be aliased"
    ]


def _run_and_correction(run: Run, correction: Correction) -> list[str]:
    if correction.beam == "true" and run.truth != "drawn":
        return ['correction.beam = "true" needs run.truth = "drawn": with a nominal truth both beams are the same']
    return []


def _plane_below_wire(beam: Any) -> list[str]:
    vertical = beam.kind == "dipole" and beam.wire == "vertical" and beam.height_m is not None
    if vertical and beam.height_m < beam.length_m / 2:
        return [
            f"beam.height, {beam.height_m:g} m, puts the end of a vertical wire of {beam.length_m:g} m below the plane"
        ]
    return []


_JUDGES: tuple[tuple[tuple[str, ...], Callable[..., list[str]]], ...] = (
    (("bins", "vantage"), _bins_and_vantage),
    (("observation", "vantage"), _observation_and_vantage),
    (("surface", "vantage"), _surface_and_vantage),
    (("channels", "sky"), _channels_and_sky),
    (("channels", "turning_points"), _channels_and_turning_points),
    (("channels", "signal"), _channels_and_signal),
    (("channels", "foreground"), _channels_and_foreground),
    (("channels", "receiver"), _channels_and_receiver),
    (("channels", "correction"), _channels_and_correction),
    (("run", "correction"), _run_and_correction),
    (("beam",), _plane_below_wire),
    (("channels",), masks_and_band),
    (("channels", "signal"), trough_and_band),
    (("channels", "turning_points"), turning_points_and_band),
    (("run", "sky", "beam", "surface", "receiver", "knowledge"), knowledge_and_effect),
)
