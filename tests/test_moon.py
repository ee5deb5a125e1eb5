"""Mirror and limb of the body below, against ray tracing and closed forms."""

from __future__ import annotations

import numpy as np
import pytest

from sims.constants import MOON_MEAN_RADIUS_KM
from sims.moon import fresnel_reflectivity, mirror, visible_fraction
from sims.profile import evaluate_table

DISTANCE = (MOON_MEAN_RADIUS_KM + 100.0) / MOON_MEAN_RADIUS_KM
LIMB_RAD = float(np.arcsin(1.0 / DISTANCE))


@pytest.mark.parametrize(("permittivity", "emissivity"), [(2.7, 0.940789), (3.0, 0.928203)])
def test_normal_emissivity(permittivity: float, emissivity: float) -> None:
    """Fresnel at normal incidence, ((n - 1)/(n + 1))^2; figures to six decimals."""
    assert 1.0 - fresnel_reflectivity(np.array(1.0), permittivity) == pytest.approx(emissivity, abs=5e-7)


def test_grazing_incidence_reflects_all_and_vacuum_nothing() -> None:
    assert fresnel_reflectivity(np.array(0.0), 2.7) == pytest.approx(1.0, abs=1e-15)
    assert fresnel_reflectivity(np.array([0.1, 1.0]), 1.0) == pytest.approx(0.0, abs=1e-30)


def test_brewster_angle_leaves_half_of_one_polarisation() -> None:
    """At tan i = n only the wave across the plane returns: (n^2 - 1)^2/(n^2 + 1)^2, half of it unpolarised."""
    n2 = 2.7
    cosine = 1.0 / np.sqrt(1.0 + n2)
    assert fresnel_reflectivity(np.array(cosine), n2) == pytest.approx(0.5 * ((n2 - 1) / (n2 + 1)) ** 2, rel=1e-12)


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
    table = mirror(LIMB_RAD, 2.7, sphere=True)
    a, b, _ = evaluate_table(table.table, -1.0, table.cosine_limb, np.array([source @ nadir]))[0]
    # The table holds 1e-10 of its largest value; near the limb its argument amplifies rounding a little.
    assert a * source + b * nadir == pytest.approx(image, abs=1e-8)


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
    table = mirror(LIMB_RAD, 20.0, sphere=True)
    weight = evaluate_table(table.table, -1.0, table.cosine_limb, np.array([np.cos(source)]))[0, 2]
    incidence_cosine = np.sin((source - angle) / 2)
    # Central differences are good to step^2 ~ 1e-10 relative; rounding of arccos adds 1e-9.
    assert weight / fresnel_reflectivity(np.array(incidence_cosine), 20.0) == pytest.approx(expected, rel=1e-7)


def test_mirror_image_of_the_whole_sky_fills_the_disk() -> None:
    """The sky outside the disk is seen in it once: weights over reflectivity integrate to the disk's solid angle."""
    table = mirror(LIMB_RAD, 2.7, sphere=True)
    x, w = np.polynomial.legendre.leggauss(400)
    c = -1.0 + (table.cosine_limb + 1.0) * (x + 1) / 2
    a, b, weight = evaluate_table(table.table, -1.0, table.cosine_limb, c).T
    grazing = (np.arccos(c) - np.arccos(a * c + b)) / 2
    share = weight / fresnel_reflectivity(np.sin(grazing), 2.7)
    total = 2 * np.pi * np.sum(w * share) * (table.cosine_limb + 1) / 2
    # 400 Gauss points leave rounding; the table's 1e-10 is what counts.
    assert total == pytest.approx(2 * np.pi * (1 - np.cos(LIMB_RAD)), rel=1e-8)


def test_plane_mirror_turns_the_vertical_component() -> None:
    table = mirror(np.pi / 2, 4.0, sphere=False)
    direction, nadir = np.array([0.6, 0.0, 0.8]), np.array([0.0, 0.0, -1.0])
    a, b, weight = evaluate_table(table.table, -1.0, table.cosine_limb, np.array([direction @ nadir]))[0]
    assert a * direction + b * nadir == pytest.approx([0.6, 0.0, -0.8], abs=1e-12)
    assert weight == pytest.approx(fresnel_reflectivity(np.array(0.8), 4.0), rel=1e-9)


def test_limb_is_a_ramp_of_one_pixel() -> None:
    pixel = 0.01
    offset = np.array([-0.6, -0.25, 0.0, 0.25, 0.6]) * pixel
    got = visible_fraction(np.cos(LIMB_RAD + offset), LIMB_RAD, pixel)
    # The ramp is linear in the cosine; its curvature across a pixel is pixel * cot(limb) / 8 ~ 4e-4.
    assert got == pytest.approx([0.0, 0.25, 0.5, 0.75, 1.0], abs=1e-3)
