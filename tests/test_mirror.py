"""The mirror image of the sky in a sphere and in a plane, against ray tracing and finite differences."""

from __future__ import annotations

import numpy as np
import pytest

from sims.constants import MOON_MEAN_RADIUS_KM
from sims.mirror import mirror
from sims.profile import evaluate_table

DISTANCE = (MOON_MEAN_RADIUS_KM + 100.0) / MOON_MEAN_RADIUS_KM
LIMB_RAD = float(np.arcsin(1.0 / DISTANCE))
BEYOND_RAD = 0.08


def lookup(limb_rad: float, cosine: np.ndarray) -> np.ndarray:
    """Columns of the table for one limb angle."""
    image = mirror(limb_rad, limb_rad, BEYOND_RAD, sphere=True)
    return evaluate_table(image.tables[0], -1.0, np.cos(limb_rad - BEYOND_RAD), cosine)


def path_length(image_direction: np.ndarray) -> float:
    """From the antenna at (0, 0, DISTANCE) to the unit sphere."""
    along = image_direction[2] * DISTANCE
    return float(-along - np.sqrt(along**2 - (DISTANCE**2 - 1.0)))


def reflected(image_direction: np.ndarray) -> np.ndarray:
    """Trace a ray from the antenna at (0, 0, DISTANCE) along a direction to the unit sphere and off it."""
    position = np.array([0.0, 0.0, DISTANCE])
    along = image_direction @ position
    path = -along - np.sqrt(along**2 - (DISTANCE**2 - 1.0))
    normal = position + path * image_direction
    return np.asarray(image_direction - 2.0 * (image_direction @ normal) * normal)


@pytest.mark.parametrize("share", [1e-3, 0.2, 0.5, 0.9, 0.999])
def test_sphere_mirror_against_ray_tracing(share: float) -> None:
    angle = share * LIMB_RAD
    image = np.array([np.sin(angle), 0.0, -np.cos(angle)])
    source = reflected(image)
    nadir = np.array([0.0, 0.0, -1.0])
    a, b, _, incidence = lookup(LIMB_RAD, np.array([source @ nadir]))[0]
    # The table holds 1e-9 of its largest value; near the limb its argument amplifies rounding a little.
    assert a * source + b * nadir == pytest.approx(image, abs=1e-8)
    surface = np.array([0.0, 0.0, DISTANCE]) + path_length(image) * image
    assert incidence == pytest.approx(-image @ surface, abs=1e-8)


@pytest.mark.parametrize("share", [0.1, 0.5, 0.9])
def test_compression_of_solid_angle_against_finite_differences(share: float) -> None:
    angle, step = share * LIMB_RAD, 1e-5
    nadir = np.array([0.0, 0.0, -1.0])

    def source_angle(image_angle: float) -> float:
        source = reflected(np.array([np.sin(image_angle), 0.0, -np.cos(image_angle)]))
        return float(np.arccos(source @ nadir))

    rate = (source_angle(angle + step) - source_angle(angle - step)) / (2 * step)
    source = source_angle(angle)
    expected = np.sin(angle) / np.sin(source) / abs(rate)
    # Central differences are good to step^2 ~ 1e-10 relative; rounding of arccos adds 1e-9.
    assert lookup(LIMB_RAD, np.array([np.cos(source)]))[0, 2] == pytest.approx(expected, rel=1e-7)


def test_mirror_image_of_the_whole_sky_fills_the_disk() -> None:
    """The sky outside the disk is seen in it once: compressions integrate to the disk's solid angle."""
    x, w = np.polynomial.legendre.leggauss(400)
    cosine_limb = np.cos(LIMB_RAD)
    c = -1.0 + (cosine_limb + 1.0) * (x + 1) / 2
    total = 2 * np.pi * np.sum(w * lookup(LIMB_RAD, c)[:, 2]) * (cosine_limb + 1) / 2
    # 400 Gauss points leave rounding; the table's 1e-9 is what counts.
    assert total == pytest.approx(2 * np.pi * (1 - cosine_limb), rel=1e-8)


def test_weight_vanishes_at_the_limb_and_runs_on_smoothly_beyond() -> None:
    angle = LIMB_RAD + np.linspace(-0.04, 0.04, 9)
    compression, incidence = lookup(LIMB_RAD, np.cos(angle))[:, 2:].T
    assert compression[4] == pytest.approx(0.0, abs=1e-8)
    assert incidence[4] == pytest.approx(0.0, abs=1e-8)
    assert (compression[:4] < 0).all()
    # A function that broke at the limb would show in the fourth differences at the size of its slope times the step.
    assert np.abs(np.diff(compression, n=4)).max() < 1e-2 * np.abs(np.diff(compression)).max()


def test_plane_mirror_turns_the_vertical_component() -> None:
    image = mirror(np.pi / 2, np.pi / 2, BEYOND_RAD, sphere=False)
    direction, nadir = np.array([0.6, 0.0, 0.8]), np.array([0.0, 0.0, -1.0])
    last = np.cos(np.pi / 2 - BEYOND_RAD)
    a, b, compression, incidence = evaluate_table(image.tables[0], -1.0, last, np.array([direction @ nadir]))[0]
    assert a * direction + b * nadir == pytest.approx([0.6, 0.0, -0.8], abs=1e-12)
    assert (compression, incidence) == pytest.approx((1.0, 0.8), abs=1e-12)


def test_tables_between_limb_angles_are_those_of_the_angle_itself() -> None:
    wanted = np.array([0.5, 0.777, 1.2])
    many = mirror(0.45, 1.25, BEYOND_RAD, sphere=True)
    tables, cosine_last = many.at_limb_angles(wanted)
    share = np.linspace(0.0, 1.0, 50)
    for table, last, angle in zip(tables, cosine_last, wanted, strict=True):
        cosine = -1.0 + (last + 1.0) * share
        # Interpolation over limb angles and the tables themselves keep to a few 1e-9.
        assert evaluate_table(table, -1.0, last, cosine) == pytest.approx(lookup(float(angle), cosine), abs=2e-8)
