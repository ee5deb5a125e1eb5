"""Beams of known form and their tables, shared by the tests of tabulated beams."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from sims import config
from sims.beam import Beam, beam_from
from sims.beam_grid import GridBeam, grid_beam
from sims.far_field import FarField

Pattern = Callable[[np.ndarray, np.ndarray], np.ndarray]
"""Takes frequency_mhz[frequency] and direction[point, 3]; returns power[point, frequency]."""
LOSSLESS = {"efficiency": 1.0, "structure_temperature_k": 270.0}


def dipole(**settings: object) -> Beam:
    return beam_from(config.Dipole(kind="dipole", **settings, **LOSSLESS))  # type: ignore[arg-type]


def gaussian(width_deg: float) -> Beam:
    return beam_from(
        config.GaussianBeam(kind="gaussian", width_deg=width_deg, frequency_mhz=60.0, width_exponent=1.0, **LOSSLESS)
    )


def unit_vectors(theta_deg: np.ndarray, phi_deg: np.ndarray) -> np.ndarray:
    """Directions of a grid, theta outer; those on the plane lie a hair above it."""
    theta, phi = np.meshgrid(np.radians(theta_deg), np.radians(phi_deg), indexing="ij")
    z = np.where(np.abs(np.cos(theta)) < 1e-14, 1e-14, np.cos(theta))
    return np.stack([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), z], axis=-1).reshape(-1, 3)


def table_from(
    power: np.ndarray, frequency_mhz: np.ndarray, theta_deg: np.ndarray, phi_deg: np.ndarray, *, upper_half: bool
) -> FarField:
    return FarField(
        frequency_mhz=frequency_mhz, theta_deg=theta_deg, phi_deg=phi_deg, power=power, e_theta=None, e_phi=None,
        upper_half=upper_half, radiated_fraction=np.ones(len(frequency_mhz)), source="table", notes=(),
    )  # fmt: skip


def tabulated(
    pattern: Pattern, frequency_mhz: np.ndarray, theta_deg: np.ndarray, phi_deg: np.ndarray, *, upper_half: bool = False
) -> FarField:
    values = pattern(frequency_mhz, unit_vectors(theta_deg, phi_deg))
    power = np.moveaxis(values.reshape(len(theta_deg), len(phi_deg), -1), -1, 0)
    return table_from(np.ascontiguousarray(power), frequency_mhz, theta_deg, phi_deg, upper_half=upper_half)


def even_table(pattern: Pattern, frequency_mhz: np.ndarray, steps: int, *, upper_half: bool = False) -> FarField:
    """A table of equal steps, `steps` of them from pole to pole."""
    step = 180.0 / steps
    theta = step * np.arange((steps // 2 if upper_half else steps) + 1)
    return tabulated(pattern, frequency_mhz, theta, step * np.arange(2 * steps), upper_half=upper_half)


def beam_of(table: FarField, smoothing_mhz: float | None = None) -> GridBeam:
    return grid_beam(table, smoothing_mhz=smoothing_mhz, mounting=np.eye(3), **LOSSLESS)


def random_directions(rng: np.random.Generator, count: int) -> np.ndarray:
    direction = rng.normal(size=(count, 3))
    return np.asarray(direction / np.linalg.norm(direction, axis=1, keepdims=True))


def few_sources(rng: np.random.Generator) -> Pattern:
    """A few point sources with random amplitudes and phases interfere: smooth, of known form, without symmetry."""
    count = rng.integers(2, 7)
    place = random_directions(rng, count) * rng.uniform(0.1, 1.0, (count, 1)) * rng.uniform(1.0, 8.0)
    amplitude = rng.normal(size=count) + 1j * rng.normal(size=count)
    axis, depth = random_directions(rng, 1)[0], rng.uniform()

    def power(frequency_mhz: np.ndarray, direction: np.ndarray) -> np.ndarray:
        phase = (direction @ place.T)[:, :, None] * (frequency_mhz / 100.0)
        field = np.einsum("psf,s->pf", np.exp(1j * phase), amplitude)
        return np.asarray(np.abs(field) ** 2 * (1.0 - depth * (direction @ axis)[:, None] ** 2))

    return power
