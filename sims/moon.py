"""What lies below the antenna: the Moon's disk, or the ground, as it hides, mirrors and emits.

The engine asks three things of a direction of the sky, all functions of its angle from the
nadir alone: how much of its pixel stands clear of the limb, where in the disk its mirror
image is seen, and how bright that image is.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from sims.profile import cubic_table

MIRROR_TOLERANCE = 1e-10
NEWTON_STEPS = 40


@dataclass(frozen=True)
class Mirror:
    """The specular image of the sky in the body below, tabulated.

    Attributes
    ----------
    table : ndarray[interval, 4, 3]
        Cubics in the cosine from the nadir, from -1 to `cosine_limb`; columns are a, b and
        the weight: the image of direction n appears at m = a n + b nadir, and its solid
        angle there times the reflectivity, over its own solid angle, is the weight.
    cosine_limb : float
        Cosine of the angle from nadir to limb.
    """

    table: NDArray[np.float64]
    cosine_limb: float


def visible_fraction(
    cosine_from_nadir: NDArray[np.float64], limb_angle_rad: float, pixel_angle_rad: float
) -> NDArray[np.float64]:
    """How much of a pixel stands clear of the limb.

    Parameters
    ----------
    cosine_from_nadir : ndarray[...]
        Cosine of the angle between pixel centre and nadir.
    limb_angle_rad : float
        Angle from nadir to limb, rad.
    pixel_angle_rad : float
        Side of a pixel, rad: the limb is a ramp of this width, so a sum over pixels
        changes smoothly as the limb crosses them; its error falls as the pixel's side to 1.7.

    Returns
    -------
    ndarray[...]
        0 behind the limb, 1 clear of it.
    """
    ramp = (np.cos(limb_angle_rad) - cosine_from_nadir) / (pixel_angle_rad * np.sin(limb_angle_rad))
    return np.asarray(np.clip(0.5 + ramp, 0.0, 1.0))


def fresnel_reflectivity(cosine_incidence: NDArray[np.float64], permittivity: float) -> NDArray[np.float64]:
    """Power reflectivity of a smooth lossless dielectric for unpolarised waves (Fresnel).

    Parameters
    ----------
    cosine_incidence : ndarray[...]
        Cosine of the angle of incidence.
    permittivity : float
        Relative permittivity, at least 1.

    Returns
    -------
    ndarray[...]
        Mean of the two polarisations. The antenna's own polarisation is left out.
    """
    c = np.asarray(cosine_incidence, dtype=float)
    root = np.sqrt(permittivity - 1.0 + c**2)
    across = ((c - root) / np.where(c + root > 0.0, c + root, 1.0)) ** 2
    along = ((permittivity * c - root) / np.where(permittivity * c + root > 0.0, permittivity * c + root, 1.0)) ** 2
    return np.asarray(0.5 * (across + along))


@lru_cache(maxsize=4)
def mirror(limb_angle_rad: float, permittivity: float, *, sphere: bool) -> Mirror:
    """Tabulate the mirror image of the sky in a smooth sphere, or in a plane.

    Parameters
    ----------
    limb_angle_rad : float
        Angle from nadir to limb, rad. For a sphere its sine is body radius over distance.
    permittivity : float
        Relative permittivity of the surface.
    sphere : bool
        True for the Moon from orbit, False for level ground.

    Returns
    -------
    Mirror
    """
    cosine_limb = float(np.cos(limb_angle_rad))

    def columns(cosine: NDArray[np.float64]) -> NDArray[np.float64]:
        from_nadir = np.arccos(np.clip(cosine, -1.0, 1.0))
        if not sphere:
            weight = fresnel_reflectivity(-cosine, permittivity)
            return np.stack([np.ones_like(cosine), -2.0 * cosine, weight], axis=1)
        return _sphere_columns(grazing_angle_rad(from_nadir, limb_angle_rad), limb_angle_rad, permittivity)

    table = cubic_table(columns, -1.0, cosine_limb, tolerance=MIRROR_TOLERANCE, intervals=128, cap=4096)
    table.flags.writeable = False  # it is shared by all who ask for the same mirror
    return Mirror(table, cosine_limb)


def image_angle_rad(grazing_rad: NDArray[np.float64], limb_angle_rad: float) -> NDArray[np.float64]:
    """Angle from the nadir at which a ray of this grazing angle leaves the sphere for the antenna, rad."""
    return np.asarray(np.arcsin(np.sin(limb_angle_rad) * np.cos(grazing_rad)))


def source_angle_rad(grazing_rad: NDArray[np.float64], limb_angle_rad: float) -> NDArray[np.float64]:
    """Angle from the nadir from which that ray came: the image's plus twice the grazing angle, rad."""
    return np.asarray(image_angle_rad(grazing_rad, limb_angle_rad) + 2.0 * grazing_rad)


def grazing_angle_rad(from_nadir_rad: NDArray[np.float64], limb_angle_rad: float) -> NDArray[np.float64]:
    """Grazing angle of the ray that comes from these angles, rad: Newton's method, the slope lies between 1 and 2."""
    grazing = np.clip(0.5 * (from_nadir_rad - limb_angle_rad), 0.0, np.pi / 2)
    for _ in range(NEWTON_STEPS):
        excess = source_angle_rad(grazing, limb_angle_rad) - from_nadir_rad
        grazing = np.clip(grazing - excess / (2.0 + _image_rate(grazing, limb_angle_rad)), 0.0, np.pi / 2)
    return grazing


def _image_rate(grazing_rad: NDArray[np.float64], limb_angle_rad: float) -> NDArray[np.float64]:
    """Change of the image's angle with the grazing angle."""
    sine = np.sin(limb_angle_rad)
    return np.asarray(-sine * np.sin(grazing_rad) / np.sqrt(1.0 - (sine * np.cos(grazing_rad)) ** 2))


def _sphere_columns(grazing: NDArray[np.float64], limb_angle_rad: float, permittivity: float) -> NDArray[np.float64]:
    sine_limb = np.sin(limb_angle_rad)
    image = image_angle_rad(grazing, limb_angle_rad)
    source = image + 2.0 * grazing
    image_rate = _image_rate(grazing, limb_angle_rad)
    # At the zenith both sines vanish; their ratio tends to that of the angles.
    overhead = np.pi / 2 - grazing < 1e-6
    ratio = np.where(
        overhead,
        sine_limb / (2.0 - sine_limb),
        np.sin(image) / np.where(overhead, 1.0, np.sin(source)),
    )
    along_nadir = np.cos(image) - ratio * np.cos(source)
    compression = ratio * np.abs(image_rate) / (image_rate + 2.0)
    weight = compression * fresnel_reflectivity(np.sin(grazing), permittivity)
    return np.stack([ratio, along_nadir, weight], axis=1)
