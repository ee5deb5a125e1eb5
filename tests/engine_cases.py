"""Skies, scenes and the plain sum that the engine's tests and benchmark share."""

from __future__ import annotations

from dataclasses import dataclass

import healpy as hp
import numpy as np
from scipy.spatial.transform import Rotation

from sims.beam import Beam
from sims.config import Surface
from sims.constants import rayleigh_jeans_k
from sims.frequency import ChannelGrid, mean_points
from sims.moon import mirror, visible_fraction
from sims.pixel_sum import Pointing
from sims.profile import evaluate_table
from sims.sky_average import Scene, pixel_angle_rad, scene_axes

LIMB_100_KM_RAD = np.radians(71.00998)  # angular radius of the Moon from 100 km (geometry)


def pixel_directions(nside: int) -> np.ndarray:
    return np.ascontiguousarray(np.stack(hp.pix2vec(nside, np.arange(12 * nside**2)), axis=1))


@dataclass(frozen=True)
class SmoothSky:
    """A power-law sky whose brightness and index vary over the sphere."""

    nside: int

    @property
    def directions(self) -> np.ndarray:
        return pixel_directions(self.nside)

    def brightness_k(self, frequency_mhz: np.ndarray) -> np.ndarray:
        x, y, z = self.directions.T
        base = 2000.0 * np.exp(1.5 * z + 0.4 * np.sin(5 * x) * y)
        index = 2.5 + 0.1 * x - 0.05 * y * z
        log_f = np.log(frequency_mhz / 70.0)
        return base[:, None] * np.exp(-index[:, None] * log_f - 0.05 * log_f**2)


@dataclass(frozen=True)
class KinkedSky:
    """The same with an index that jumps at one frequency: straight lines in ln T - ln f, broken there."""

    nside: int
    kink_mhz: float

    @property
    def directions(self) -> np.ndarray:
        return pixel_directions(self.nside)

    def brightness_k(self, frequency_mhz: np.ndarray) -> np.ndarray:
        beyond = np.clip(np.log(frequency_mhz / self.kink_mhz), 0.0, None)
        return SmoothSky(self.nside).brightness_k(frequency_mhz) * np.exp(-0.2 * beyond)


@dataclass(frozen=True)
class EvenSky:
    """The same brightness everywhere, a power law or a black body in frequency."""

    nside: int
    temperature_k: float
    index: float | None

    @property
    def directions(self) -> np.ndarray:
        return pixel_directions(self.nside)

    def brightness_k(self, frequency_mhz: np.ndarray) -> np.ndarray:
        if self.index is None:
            spectrum = rayleigh_jeans_k(self.temperature_k, frequency_mhz)
        else:
            spectrum = self.temperature_k * (frequency_mhz / 70.0) ** -self.index
        return np.repeat(spectrum[None], 12 * self.nside**2, axis=0)


def moving_scene(sky: object, beam: Beam, samples: int, *, reflection: bool = True, seed: int = 3) -> Scene:
    """A beam fixed in the sky while the nadir goes round an orbit."""
    rng = np.random.default_rng(seed)
    attitude = np.repeat(Rotation.random(random_state=rng).as_matrix()[None], samples, axis=0)
    angle = np.linspace(0.1, 5.9, samples)
    plane = Rotation.random(random_state=rng).as_matrix()
    nadir = np.stack([np.cos(angle), np.sin(angle), np.zeros(samples)], axis=1) @ plane.T
    pointing = Pointing(scene_axes(beam, attitude), np.ascontiguousarray(nadir), np.full(samples, LIMB_100_KM_RAD))
    surface = Surface(temperature_k=230.0, permittivity=2.7, reflection=reflection)
    return Scene(sky, beam, pointing, surface, sphere=True)  # type: ignore[arg-type]


def plain_at(scene: Scene, frequency_mhz: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Antenna temperature and response by plain NumPy sums over pixels, one frequency at a time."""
    sky, beam, pointing = scene.sky, scene.beam, scene.pointing
    directions = sky.directions
    image = mirror(float(pointing.limb_angle_rad[0]), scene.surface.permittivity, sphere=scene.sphere)
    temperature, response = (np.empty((len(pointing), len(frequency_mhz))) for _ in range(2))
    for s in range(len(pointing)):
        nadir = pointing.nadir[s]
        below = directions @ nadir
        visible = visible_fraction(below, float(pointing.limb_angle_rad[s]), pixel_angle_rad(sky.nside))
        clear = below < np.cos(pointing.limb_angle_rad[s])
        along, down, weight = evaluate_table(image.table, -1.0, image.cosine_limb, below[clear]).T
        for j, f in enumerate(frequency_mhz):
            one = np.array([f])
            power = _power(beam, pointing.axes[s], one, directions)
            brightness = sky.brightness_k(one)[:, 0]
            sky_sum, share = np.sum(power * visible * brightness), np.sum(power * visible)
            if scene.surface.reflection:
                mirrored = _power(
                    beam, pointing.axes[s], one, along[:, None] * directions[clear] + down[:, None] * nadir
                )
                sky_sum += np.sum(mirrored * weight * brightness[clear])
                share += np.sum(mirrored * weight)
            total = np.sum(power)
            surface_k = rayleigh_jeans_k(scene.surface.temperature_k, f)
            reaching = sky_sum / total + surface_k * (1 - share / total)
            structure_k = rayleigh_jeans_k(beam.structure_temperature_k, f)
            temperature[s, j] = beam.efficiency * reaching + (1 - beam.efficiency) * structure_k
            response[s, j] = beam.efficiency * share / total
    return temperature, response


def _power(beam: Beam, axes: np.ndarray, frequency_mhz: np.ndarray, directions: np.ndarray) -> np.ndarray:
    power = np.ones(len(directions))
    for axis, profile in zip(axes, beam.profiles, strict=True):
        power *= profile(frequency_mhz, np.clip(directions @ axis, -1.0, 1.0))[:, 0]
    return power


def plain_channels(scene: Scene, grid: ChannelGrid, points: int = 4) -> tuple[np.ndarray, np.ndarray]:
    """Channel means of `plain_at`."""
    frequency, weight = mean_points(grid.edges_mhz, points)
    values = plain_at(scene, frequency.ravel())
    means = [value.reshape(len(value), grid.count, points) @ weight for value in values]
    return means[0], means[1]
