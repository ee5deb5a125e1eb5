"""Skies, scenes and the plain sum that the engine's tests and benchmark share."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.spatial.transform import Rotation

from sims.beam import Beam
from sims.config import Surface
from sims.constants import rayleigh_jeans_k
from sims.frequency import ChannelGrid, mean_points
from sims.limb import visible_weight
from sims.mirror import mirror
from sims.moon import fresnel_reflectivity, layered_reflectivity, lowest_cosine
from sims.pixel_sum import Pointing
from sims.pixels import pixel_grid
from sims.profile import evaluate_table
from sims.sky_average import Scene, scene_axes

LIMB_100_KM_RAD = np.radians(71.00998)  # angular radius of the Moon from 100 km (geometry)


@dataclass(frozen=True)
class SmoothSky:
    """A power-law sky whose brightness and index vary over the sphere."""

    nside: int

    def brightness_k(self, frequency_mhz: np.ndarray) -> np.ndarray:
        x, y, z = pixel_grid(self.nside).directions.T
        base = 2000.0 * np.exp(1.5 * z + 0.4 * np.sin(5 * x) * y)
        index = 2.5 + 0.1 * x - 0.05 * y * z
        log_f = np.log(frequency_mhz / 70.0)
        return base[:, None] * np.exp(-index[:, None] * log_f - 0.05 * log_f**2)


@dataclass(frozen=True)
class KinkedSky:
    """The same with an index that jumps at one frequency: straight lines in ln T - ln f, broken there."""

    nside: int
    kink_mhz: float

    def brightness_k(self, frequency_mhz: np.ndarray) -> np.ndarray:
        beyond = np.clip(np.log(frequency_mhz / self.kink_mhz), 0.0, None)
        return SmoothSky(self.nside).brightness_k(frequency_mhz) * np.exp(-0.2 * beyond)


@dataclass(frozen=True)
class EvenSky:
    """The same brightness everywhere, a power law or a black body in frequency."""

    nside: int
    temperature_k: float
    index: float | None

    def brightness_k(self, frequency_mhz: np.ndarray) -> np.ndarray:
        if self.index is None:
            spectrum = rayleigh_jeans_k(self.temperature_k, frequency_mhz)
        else:
            spectrum = self.temperature_k * (frequency_mhz / 70.0) ** -self.index
        return np.repeat(spectrum[None], 12 * self.nside**2, axis=0)


def moving_scene(
    sky: object, beam: Beam, samples: int, *, reflection: bool = True, seed: int = 3, **surface: object
) -> Scene:
    """A beam fixed in the sky while the nadir goes round an orbit."""
    rng = np.random.default_rng(seed)
    attitude = np.repeat(Rotation.random(random_state=rng).as_matrix()[None], samples, axis=0)
    plane = Rotation.random(random_state=rng).as_matrix()
    pointing = along_an_orbit(scene_axes(beam, attitude), np.linspace(0.1, 5.9, samples), plane)
    settings = {"temperature_k": 230.0, "permittivity": 2.7, "reflection": reflection} | surface
    return Scene(sky, beam, pointing, Surface(**settings), sphere=True)  # type: ignore[arg-type]


def along_an_orbit(
    axes: np.ndarray, angle_rad: np.ndarray, plane: np.ndarray, limb_rad: float | np.ndarray = LIMB_100_KM_RAD
) -> Pointing:
    """Pointing with the nadir at these angles along a great circle."""
    cosine, sine, zero = np.cos(angle_rad), np.sin(angle_rad), np.zeros_like(angle_rad)
    return Pointing(
        axes=axes,
        nadir=np.ascontiguousarray(np.stack([cosine, sine, zero], axis=1) @ plane.T),
        limb_angle_rad=np.broadcast_to(limb_rad, angle_rad.shape).astype(float),
        north=np.ascontiguousarray(np.stack([-sine, cosine, zero], axis=1) @ plane.T),
        pole=np.tile(plane[:, 1], (len(angle_rad), 1)),
    )


def plain_at(scene: Scene, frequency_mhz: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Antenna temperature and response by plain NumPy sums over pixels, one frequency at a time."""
    beam, pointing, surface = scene.beam, scene.pointing, scene.surface
    pixels = pixel_grid(scene.sky.nside)
    temperature, response = (np.empty((len(pointing), len(frequency_mhz))) for _ in range(2))
    for s in range(len(pointing)):
        nadir, limb_rad = pointing.nadir[s], float(pointing.limb_angle_rad[s])
        below = pixels.directions @ nadir
        visible = visible_weight(np.arccos(np.clip(below, -1.0, 1.0)), limb_rad, scene.taper_rad)
        image = mirror(limb_rad, limb_rad, scene.taper_rad, sphere=scene.sphere)
        last = np.cos(limb_rad - scene.taper_rad)
        clear = below < last
        along, down, compression, incidence = evaluate_table(image.tables[0], -1.0, last, below[clear]).T
        incidence = np.maximum(incidence, lowest_cosine(surface))
        for j, f in enumerate(frequency_mhz):
            one = np.array([f])
            power = pixels.weights * _power(beam, pointing.axes[s], one, pixels.directions)
            brightness = scene.sky.brightness_k(one)[:, 0]
            sky_sum, share = np.sum(power * visible * brightness), np.sum(power * visible)
            if surface.reflection:
                towards = along[:, None] * pixels.directions[clear] + down[:, None] * nadir
                mirrored = pixels.weights[clear] * _power(beam, pointing.axes[s], one, towards) * visible[clear]
                mirrored *= compression * _reflectivity(surface, incidence, one)
                sky_sum += np.sum(mirrored * brightness[clear])
                share += np.sum(mirrored)
            total = np.sum(power)
            surface_k = rayleigh_jeans_k(surface.temperature_k, f)
            reaching = sky_sum / total + surface_k * (1 - share / total)
            structure_k = rayleigh_jeans_k(beam.structure_temperature_k, f)
            temperature[s, j] = beam.efficiency * reaching + (1 - beam.efficiency) * structure_k
            response[s, j] = beam.efficiency * share / total
    return temperature, response


def _reflectivity(surface: Surface, incidence: np.ndarray, frequency_mhz: np.ndarray) -> np.ndarray:
    if surface.layer is None:
        return fresnel_reflectivity(incidence, surface.permittivity)
    return layered_reflectivity(incidence, surface.permittivity, surface.layer, frequency_mhz)[:, 0]


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
