"""Shapes and information forms for tests of posteriors: made by hand, small, known in closed form."""

from __future__ import annotations

import numpy as np

from reduce.combine import Information
from reduce.shapes import FlattenedGaussian, UserShape, flattened_gaussian, user_shape
from sims.config import Point, PointPrior, TurningPoints

FREQUENCY = np.linspace(40.5, 119.5, 80)
WIDTH = np.ones(80)
SETTINGS = TurningPoints(
    a=Point(frequency_mhz=17.0, temperature_mk=-42.0),
    e=Point(frequency_mhz=180.0, temperature_mk=0.0),
    b=PointPrior(frequency_mhz=(40.0, 58.0), temperature_mk=(-40.0, 10.0)),
    c=PointPrior(frequency_mhz=(55.0, 95.0), temperature_mk=(-300.0, -10.0)),
    d=PointPrior(frequency_mhz=(85.0, 120.0), temperature_mk=(-10.0, 60.0)),
    walkers=64,
    steps=1500,
)
# Depth, mK, centre and full width, MHz, flattening.
BOWL = np.array([150.0, 75.0, 20.0, 4.0])


def information_of(root: np.ndarray, z: np.ndarray) -> Information:
    """All that a likelihood needs, and nothing of a fit."""
    return Information(
        K=root.T @ root, b=root.T @ z, R=root, z=z, chi_squared_min=0.0, degrees_of_freedom=0, rows=len(z),
        nuisance_terms=0, log_det_covariance=0.0, log_det_nuisance=0.0, draws=None,
    )  # fmt: skip


def behind_a_foreground(signal_k: np.ndarray, sigma_k: float, terms: int, seed: int) -> Information:
    """White noise, with a polynomial in ln f projected out: few directions are left to a trough."""
    rng = np.random.default_rng(seed)
    x = np.log(FREQUENCY)
    basis = np.polynomial.legendre.legvander(2.0 * (x - x[0]) / (x[-1] - x[0]) - 1.0, terms - 1)
    whole, _ = np.linalg.qr(basis, mode="complete")
    root = whole[:, terms:].T / sigma_k
    return information_of(root, root @ signal_k + rng.standard_normal(len(root)))


def gaussian_dip(frequency_mhz: np.ndarray, sets: np.ndarray) -> np.ndarray:
    """A Gaussian trough 8 MHz wide (standard deviation): depth, mK, and centre, MHz, are free."""
    depth_mk, centre_mhz = sets.T
    return -depth_mk[:, None] / 1e3 * np.exp(-(((frequency_mhz - centre_mhz[:, None]) / 8.0) ** 2) / 2.0)


def dip_shape(
    depth_mk: tuple[float, float] = (0.0, 300.0), centre_mhz: tuple[float, float] = (50.0, 110.0)
) -> UserShape:
    """`gaussian_dip` on the channels of these tests."""
    return user_shape(
        gaussian_dip, FREQUENCY, WIDTH, names=("depth_mk", "centre_mhz"), units=("mK", "MHz"),
        bounds=(depth_mk, centre_mhz), batched=True,
    )  # fmt: skip


def bowl() -> FlattenedGaussian:
    """Flattened Gaussian on the channels of these tests."""
    return flattened_gaussian(
        FREQUENCY, WIDTH, depth_mk=(0.0, 600.0), centre_mhz=(55.0, 100.0), full_width_mhz=(8.0, 40.0),
        flattening=(0.0, 10.0),
    )  # fmt: skip
