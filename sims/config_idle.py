"""Settings that would do nothing: masks, troughs and ``[knowledge]`` that reach no channel.

`sims.config` asks these beside its own questions between tables. What would do nothing is refused, since
whoever wrote it expects that it does something.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from sims.config_beam import Beam, Dipole, FileBeam, GaussianBeam, ShortDipole
from sims.config_forward import Channels, FlattenedGaussianSignal, Receiver, Signal, TurningPointSignal
from sims.config_reduction import TurningPoints
from sims.config_sky import Sky
from sims.config_vantage import Surface
from sims.knowledge import Knowledge

FARTHEST_WIDTHS = 2.0  # a Gaussian is down to 2^-16 of its depth there, a flattened one further

# Leaves that move nothing while another one stands at the value given, and is not itself uncertain.
ASLEEP: tuple[tuple[tuple[str, ...], str, float], ...] = (
    (("receiver.ripple_period_mhz", "receiver.ripple_phase_deg"), "receiver.ripple_fraction", 0.0),
    (("beam.ripple_period_mhz", "beam.ripple_phase_deg"), "beam.ripple_fraction", 0.0),
    (("beam.tilt_azimuth_deg",), "beam.tilt_deg", 0.0),
    (("surface.temperature_frequency_mhz",), "surface.temperature_exponent", 0.0),
    (("sky.background.index", "sky.background.frequency_mhz"), "sky.background.temperature_k", 0.0),
)


def masks_and_band(channels: Channels) -> list[str]:
    """Masks that touch no channel."""
    return [
        f"channels.masks.{number}, {lower:g} to {upper:g} MHz, touches no channel; allowed are ranges that overlap "
        f"{_band(channels)}"
        for number, (lower, upper) in enumerate(channels.masks_mhz)
        if upper <= channels.start_mhz or lower >= channels.stop_mhz
    ]


def trough_and_band(channels: Channels, signal: Signal) -> list[str]:
    """A trough that hardly reaches the band, or of whose turning points one does not.

    A turning point shapes the trough as far as its neighbours: B below the band and D above it count, as long as C
    lies within.
    """
    if isinstance(signal, TurningPointSignal):
        at_mhz = signal.c.frequency_mhz
        return [] if channels.start_mhz < at_mhz < channels.stop_mhz else [
            f"signal.c, {at_mhz:g} MHz, lies outside {_band(channels)}: signal.{_cut_off(at_mhz, channels)} would do "
            "nothing there; allowed is a c within"
        ]  # fmt: skip
    if isinstance(signal, FlattenedGaussianSignal):
        reach_mhz = FARTHEST_WIDTHS * signal.width_mhz
        if not channels.start_mhz - reach_mhz <= signal.centre_mhz <= channels.stop_mhz + reach_mhz:
            return [
                f"signal.centre, {signal.centre_mhz:g} MHz, lies more than two widths (signal.width, "
                f"{signal.width_mhz:g} MHz) outside {_band(channels)}: no channel would see the trough"
            ]
    return []


def turning_points_and_band(channels: Channels, points: TurningPoints) -> list[str]:
    """Ranges of turning points that leave another one no way to reach the band; see `trough_and_band`."""
    start, stop = channels.start_mhz, channels.stop_mhz
    (b_low, b_high), (c_low, c_high), (d_low, d_high) = (
        point.frequency_mhz for point in (points.b, points.c, points.d)
    )
    if c_high <= start or c_low >= stop:
        name, low, high, idle = "c", c_low, c_high, _cut_off(c_low, channels)
    elif b_low >= stop:
        name, low, high, idle = "b", b_low, b_high, "c and d"
    elif d_high <= start:
        name, low, high, idle = "d", d_low, d_high, "b and c"
    else:
        return []
    allowed = {"b": f"a range that begins below {stop:g} MHz", "d": f"a range that ends above {start:g} MHz"}
    return [
        f"turning_points.{name}.frequency, {low:g} to {high:g} MHz, lies outside {_band(channels)}: {idle} would do "
        f"nothing there; allowed is {allowed.get(name, 'a range that overlaps it')}"
    ]


def knowledge_and_effect(
    run: Any, sky: Sky, beam: Beam, surface: Surface, receiver: Receiver, knowledge: Knowledge
) -> list[str]:
    """Entries of ``[knowledge]`` whose number changes no spectrum, and the correlated groups that name them."""
    tables = {"sky": sky, "beam": beam, "surface": surface, "receiver": receiver}
    idle = dict(_idle(tables, {leaf.path for leaf in knowledge.leaves}))
    if run.truth != "drawn":
        idle["receiver.temperature_k"] = (
            f'run.truth = "{run.truth}": it is the noise of a drawn truth alone; allowed with run.truth = "drawn"'
        )
    problems = []
    for leaf in knowledge.leaves:
        if leaf.path in idle:
            groups = [number for number, group in enumerate(knowledge.correlated) if leaf.path in group.paths]
            also = "".join(f"; knowledge.correlated.{number} names it too" for number in groups)
            problems.append(f"knowledge.{leaf.path}: moves nothing with {idle[leaf.path]}{also}")
    return problems


def _idle(tables: dict[str, Any], known: set[str]) -> Iterator[tuple[str, str]]:
    """Every leaf that moves nothing, with the reason and the way out."""
    beam, surface = tables["beam"], tables["surface"]
    asleep = list(ASLEEP)
    if not (isinstance(beam, FileBeam) and beam.missing_power == "efficiency"):
        asleep.append((("beam.structure_temperature_k",), "beam.efficiency", 1.0))
    if isinstance(beam, GaussianBeam):
        asleep.append((("beam.frequency_mhz", "beam.dimension_scale"), "beam.width_exponent", 0.0))
    for leaves, waker, value in asleep:
        if waker not in known and _value(tables, waker) == value:
            for leaf in leaves:
                yield leaf, f"{waker} = {value:g}; allowed with another value, or with an entry of its own for that"
    if isinstance(beam, GaussianBeam) or (isinstance(beam, Dipole) and beam.wire == "vertical"):
        yield "beam.turn_deg", "this beam, which is round about its axis; allowed with any other"
    if isinstance(beam, ShortDipole):
        yield "beam.dimension_scale", 'beam.kind = "short-dipole", which has no dimensions; allowed with any other'
    if not surface.reflection:
        yield "surface.permittivity", "surface.reflection = false; allowed with true"


def _value(tables: dict[str, Any], path: str) -> Any:
    """What the tables hold at a path, None where that kind of table has no such leaf."""
    node: Any = tables
    for step in path.split("."):
        node = node.get(step) if isinstance(node, dict) else getattr(node, step, None)
    return node


def _cut_off(c_mhz: float, channels: Channels) -> str:
    """The turning point that C, outside the band, keeps out of it."""
    return "b" if c_mhz <= channels.start_mhz else "d"


def _band(channels: Channels) -> str:
    return f"channels.start to channels.stop, {channels.start_mhz:g} to {channels.stop_mhz:g} MHz"
