"""The engine: sky x beam x attitude -> antenna temperature and signal response of every sample.

A beam-weighted mean of a smooth sky is a very smooth function of frequency. It is evaluated
at Chebyshev nodes in ln f and expanded to channel means, so its cost does not grow with the
number of channels. That is checked in every run at random frequencies off the nodes; the
count of nodes is raised to a cap, and beyond it every channel is integrated on its own.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from sims.beam import Beam, beam_tables
from sims.beam_grid import GridBeam
from sims.config import Engine, Surface
from sims.constants import rayleigh_jeans_k
from sims.frequency import ChannelGrid, chebyshev_nodes_mhz, expansion_matrix, mean_expansion_matrix
from sims.horizon import Horizon
from sims.limb import taper_width_rad
from sims.mirror import Mirror, mirror
from sims.moon import lowest_cosine, reflectivity_table, surface_brightness_k
from sims.pixel_sum import Ground, Pattern, PixelSums, Pointing, pixel_sums
from sims.pixels import pixel_grid

FloatArray = NDArray[np.float64]
BATCH_FREQUENCIES = 32
MAX_HALVINGS = 12
NODE_GROWTH = 1.4
MIRROR_STEP_RAD = 0.05
HIGHEST_LIMB_RAD = 1.56  # a sphere seen from 100 m: no orbit is lower


class Sky(Protocol):
    """What the engine asks of a sky."""

    @property
    def nside(self) -> int:
        """HEALPix resolution."""

    def brightness_k(self, frequency_mhz: FloatArray) -> FloatArray:
        """Brightness ndarray[pixel, frequency], K, CMB included; ring order, ICRS."""


@dataclass(frozen=True)
class Scene:
    """Everything that the angular average is taken over.

    Attributes
    ----------
    sky : Sky
    beam : Beam or GridBeam
    pointing : Pointing
        Axes of the beam and the body below, one row a sample.
    surface : Surface
        Temperature, permittivity, and whether the sky's image in it counts.
    sphere : bool
        True where the body below is the Moon seen from orbit, False for the ground under a site.
    horizon : Horizon or None
        Elevation of the horizon round a site; None where it is level, at the limb angle.
    """

    sky: Sky
    beam: Beam | GridBeam
    pointing: Pointing
    surface: Surface
    sphere: bool
    horizon: Horizon | None = None

    def part(self, rows: slice | NDArray[np.int64]) -> Scene:
        """The same for some of the samples."""
        return replace(self, pointing=self.pointing.part(rows))

    @property
    def taper_rad(self) -> float:
        """Half the width of the taper that stands for the limb, rad."""
        limb = self.pointing.limb_angle_rad
        if self.horizon is not None:
            limb = np.pi / 2 + np.array([self.horizon.lowest_rad, self.horizon.highest_rad])
        return taper_width_rad(pixel_grid(self.sky.nside).side_rad, limb)


@dataclass(frozen=True)
class Reached:
    """What the engine had to do and what it reached, for the record.

    Attributes
    ----------
    nodes : int
        Chebyshev nodes used; 0 where every channel was integrated on its own.
    error_k : float
        Largest difference at the check frequencies, K (for the fall-back: between the two
        quadratures of a channel, K).
    evaluations : int
        Frequencies at which the sky was averaged.
    """

    nodes: int
    error_k: float
    evaluations: int


@dataclass(frozen=True)
class SkyAverage:
    """Result of the engine.

    Attributes
    ----------
    antenna_temperature_k : ndarray[time, channel]
        Mean over each channel, K: sky, its image in the surface, the surface's own
        emission, and the antenna's losses.
    signal_response : ndarray[time, channel]
        The w(f) with which a signal filling the sky reaches the antenna.
    reached : Reached
    """

    antenna_temperature_k: FloatArray
    signal_response: FloatArray
    reached: Reached


def scene_axes(beam: Beam | GridBeam, attitude: FloatArray) -> FloatArray:
    """Profile axes in ICRS: ndarray[time, factor, 3] from rotation matrices ndarray[time, 3, 3]."""
    return np.asarray(np.einsum("tij,jk,fk->tfi", attitude, beam.mounting, beam.axes))


def sky_average(
    scene: Scene, grid: ChannelGrid, settings: Engine, rng: np.random.Generator, advance: Callable[[int], None]
) -> SkyAverage:
    """Average the sky for every sample and channel.

    Parameters
    ----------
    scene : Scene
    grid : ChannelGrid
        Channels; each is the mean over its width.
    settings : Engine
        Nodes, cap and tolerance.
    rng : numpy.random.Generator
        Picks the frequencies of the check.
    advance : callable
        Told the number of samples done.

    Returns
    -------
    SkyAverage

    Raises
    ------
    InputError
        If the sky or the beam cannot be evaluated in this band.
    """
    tell_nothing: Callable[[int], None] = lambda samples: None  # noqa: E731
    some = scene.part(_spread(len(scene.pointing), settings.check_samples))
    start, stop = float(grid.edges_mhz[0]), float(grid.edges_mhz[-1])
    check_mhz = rng.uniform(start, stop, settings.check_frequencies)
    exact = evaluate(some, check_mhz, tell_nothing)
    nodes = settings.nodes
    while True:
        at_nodes = evaluate(some, chebyshev_nodes_mhz(start, stop, nodes), tell_nothing)
        matrix = expansion_matrix(start, stop, nodes, check_mhz)
        error = _difference_k(exact, tuple(values @ matrix.T for values in at_nodes))
        if error <= settings.tolerance_k:
            break
        if nodes >= settings.nodes_cap:
            return _channel_by_channel(scene, some, grid, settings.tolerance_k, advance)
        nodes = min(int(np.ceil(NODE_GROWTH * nodes)), settings.nodes_cap)
    temperature, response = evaluate(scene, chebyshev_nodes_mhz(start, stop, nodes), advance)
    to_channels = mean_expansion_matrix(grid, nodes).T
    return SkyAverage(temperature @ to_channels, response @ to_channels, Reached(nodes, error, nodes))


def evaluate(scene: Scene, frequency_mhz: FloatArray, advance: Callable[[int], None]) -> tuple[FloatArray, FloatArray]:
    """Antenna temperature and signal response at single frequencies.

    Parameters
    ----------
    scene : Scene
    frequency_mhz : ndarray[frequency]
        Frequencies, MHz.
    advance : callable
        Told the number of samples done, all frequencies of them.

    Returns
    -------
    antenna_temperature_k : ndarray[time, frequency]
        eta (sky + emission of what hides it) + (1 - eta) T_structure, K. The emission is
        the surface's brightness times what is left of the beam, so that an isotropic
        sky at the surface's own brightness returns exactly that.
    signal_response : ndarray[time, frequency]
        eta times the part of the beam that meets the sky, straight or mirrored.
    """
    taper_rad = scene.taper_rad
    image = mirror_below(scene, taper_rad)
    batches = np.array_split(frequency_mhz, int(np.ceil(len(frequency_mhz) / BATCH_FREQUENCIES)))
    done = [0]

    def advance_part(samples: int) -> None:
        done[0] += samples
        whole, done[0] = divmod(done[0], len(batches))
        advance(whole)

    parts = [_evaluate_batch(scene, batch, image, taper_rad, advance_part) for batch in batches]
    return np.concatenate([part[0] for part in parts], axis=1), np.concatenate([part[1] for part in parts], axis=1)


def _evaluate_batch(
    scene: Scene, frequency_mhz: FloatArray, image: Mirror | None, taper_rad: float, advance: Callable[[int], None]
) -> tuple[FloatArray, FloatArray]:
    pixels = pixel_grid(scene.sky.nside)
    sums = pixel_sums(
        pixels.directions,
        pixels.weights,
        np.ascontiguousarray(scene.sky.brightness_k(frequency_mhz)),
        pattern_of(scene.beam, frequency_mhz),
        scene.pointing,
        ground_of(scene, image, frequency_mhz),
        taper_rad,
        advance,
    )
    return at_the_antenna(scene.beam, scene.surface, frequency_mhz, sums)


def at_the_antenna(
    beam: Beam | GridBeam, surface: Surface, frequency_mhz: FloatArray, sums: PixelSums
) -> tuple[FloatArray, FloatArray]:
    """Antenna temperature and response from the sums over pixels: emission and losses added.

    Parameters
    ----------
    beam : Beam or GridBeam
    surface : Surface
    frequency_mhz : ndarray[frequency]
        Frequency, MHz.
    sums : PixelSums
        Of samples, or means of them: all this is linear in the sums.

    Returns
    -------
    antenna_temperature_k, signal_response : ndarray[row, frequency]
        As `evaluate`.
    """
    equator_k, change_k = surface_brightness_k(surface, frequency_mhz)
    structure_k = rayleigh_jeans_k(beam.structure_temperature_k, frequency_mhz)
    reaching = sums.sky_k + equator_k * (1.0 - sums.response) + change_k * sums.polar
    efficiency, lost = beam.efficiency_at(frequency_mhz), beam.ground_share_at(frequency_mhz)
    received = (1.0 - lost) * reaching + lost * equator_k
    return efficiency * received + (1.0 - efficiency) * structure_k, efficiency * (1.0 - lost) * sums.response


def pattern_of(beam: Beam | GridBeam, frequency_mhz: FloatArray) -> Pattern:
    """The beam in the form the kernel reads."""
    count = len(frequency_mhz)
    if isinstance(beam, GridBeam):
        return Pattern(np.zeros((0, 1, 4, count)), beam.node_table(frequency_mhz), beam.layout)
    return Pattern(beam_tables(beam, frequency_mhz), np.zeros((4, 4, count)), np.zeros(5))


def ground_of(scene: Scene, image: Mirror | None, frequency_mhz: FloatArray) -> Ground:
    """What the body below does with the sky, in the form the kernel reads."""
    surface = scene.surface
    return Ground(
        mirror=image,
        reflectivity=reflectivity_table(surface, frequency_mhz),
        lowest_cosine=lowest_cosine(surface),
        horizon=scene.horizon,
        warmer_poles=surface.polar_temperature_k is not None,
        sphere=scene.sphere,
    )


def mirror_below(scene: Scene, taper_rad: float) -> Mirror | None:
    """Tables of the mirror image for all samples of a scene; None where nothing is reflected."""
    if not scene.surface.reflection:
        return None
    limb = scene.pointing.limb_angle_rad
    lowest, highest = float(limb.min()), float(limb.max())
    if highest - lowest > 1e-9:
        # Some samples and all of them then share one set of tables.
        lowest = MIRROR_STEP_RAD * np.floor(lowest / MIRROR_STEP_RAD)
        highest = min(MIRROR_STEP_RAD * np.ceil(highest / MIRROR_STEP_RAD), HIGHEST_LIMB_RAD)
    return mirror(max(lowest, 2.0 * taper_rad), highest, taper_rad, sphere=scene.sphere)


def _spread(count: int, wanted: int) -> NDArray[np.int64]:
    """Up to `wanted` sample numbers spread over all."""
    return np.unique(np.linspace(0, count - 1, min(wanted, count)).astype(np.int64))


def _difference_k(exact: tuple[FloatArray, FloatArray], other: tuple[FloatArray, ...]) -> float:
    """Largest difference of temperature, or of response as 1 K of signal would show it, K."""
    return max(float(np.abs(one - two).max()) for one, two in zip(exact, other, strict=True))


def _channel_by_channel(
    scene: Scene, some: Scene, grid: ChannelGrid, tolerance_k: float, advance: Callable[[int], None]
) -> SkyAverage:
    """Integrate each channel alone; those where Simpson's rule disagrees with itself are halved."""
    frequency, weight, channel, error = _adaptive_points(some, grid, tolerance_k)
    temperature, response = evaluate(scene, frequency, advance)
    matrix = np.zeros((len(frequency), grid.count))
    np.add.at(matrix, (np.arange(len(frequency)), channel), weight)
    return SkyAverage(temperature @ matrix, response @ matrix, Reached(0, error, len(frequency)))


def _adaptive_points(
    some: Scene, grid: ChannelGrid, tolerance_k: float
) -> tuple[FloatArray, FloatArray, NDArray[np.int64], float]:
    lower, upper = grid.edges_mhz[:-1], grid.edges_mhz[1:]
    channel = np.arange(grid.count)
    share = np.ones(grid.count)
    five = np.array([7.0, 32.0, 12.0, 32.0, 7.0]) / 90.0
    three = np.array([1.0, 0.0, 4.0, 0.0, 1.0]) / 6.0
    points: list[FloatArray] = []
    weights: list[FloatArray] = []
    channels: list[NDArray[np.int64]] = []
    reached = 0.0
    for halving in range(MAX_HALVINGS + 1):
        frequency = lower[:, None] + (upper - lower)[:, None] * np.linspace(0.0, 1.0, 5)
        values = evaluate(some, frequency.ravel(), lambda samples: None)
        error = np.zeros(len(lower))
        for value in values:
            at = value.reshape(len(some.pointing), -1, 5)
            error = np.maximum(error, np.abs(at @ (five - three)).max(axis=0) * share)
        settled = (error <= tolerance_k) if halving < MAX_HALVINGS else np.ones(len(lower), dtype=bool)
        reached = max(reached, float(error[settled].max(initial=0.0)))
        points.append(frequency[settled].ravel())
        weights.append((share[settled, None] * five).ravel())
        channels.append(np.repeat(channel[settled], 5))
        left = ~settled
        if not left.any():
            break
        middle = 0.5 * (lower[left] + upper[left])
        lower, upper = np.concatenate([lower[left], middle]), np.concatenate([middle, upper[left]])
        channel, share = np.tile(channel[left], 2), np.tile(share[left] / 2.0, 2)
    return np.concatenate(points), np.concatenate(weights), np.concatenate(channels), reached
