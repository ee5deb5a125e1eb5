"""The mirror image of the sky in the body below: where it is seen, and how much smaller it is.

Geometry alone, tabulated against the angle of the source from the nadir; `sims.moon` says
how much of it the surface reflects. For a sphere the tables are laid out for a row of limb
angles, so that one set of them serves an eccentric orbit; `at_limb_angles` gives each
sample its own. The tables run on a little beyond the limb, where the image's weight turns
negative: the taper of `sims.limb` needs a function that does not break there.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import BarycentricInterpolator

from sims.profile import cubic_table

FloatArray = NDArray[np.float64]
MIRROR_TOLERANCE = 1e-9
NEWTON_STEPS = 40
_MOST_KNOTS = 64


@dataclass(frozen=True)
class Mirror:
    """The specular image of the sky, tabulated for a row of limb angles.

    Attributes
    ----------
    tables : ndarray[knot, interval, 4, 4]
        Cubics in the cosine from the nadir, from -1 to the cosine of `last_rad`; columns are
        a, b, the compression and the cosine of incidence: the image of direction n appears
        at m = a n + b nadir, and covers the compression times the solid angle of n.
    limb_angle_rad : ndarray[knot]
        Angles between nadir and limb that the tables hold for.
    beyond_rad : float
        How far beyond the limb the tables run.
    """

    tables: FloatArray
    limb_angle_rad: FloatArray
    beyond_rad: float

    def at_limb_angles(self, limb_angle_rad: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Tables of single samples.

        Parameters
        ----------
        limb_angle_rad : ndarray[time]
            Angle between nadir and limb, rad.

        Returns
        -------
        tables : ndarray[time or 1, interval, 4, 4]
            One for all where only one limb angle is tabulated.
        cosine_last : ndarray[time]
            Where each table ends.
        """
        cosine_last = np.cos(np.maximum(limb_angle_rad - self.beyond_rad, 0.0))
        if len(self.limb_angle_rad) == 1:
            return self.tables, cosine_last
        unit = BarycentricInterpolator(self.limb_angle_rad, np.eye(len(self.limb_angle_rad)))(limb_angle_rad)
        return np.ascontiguousarray(np.tensordot(unit, self.tables, axes=1)), cosine_last


@lru_cache(maxsize=4)
def mirror(lowest_rad: float, highest_rad: float, beyond_rad: float, *, sphere: bool) -> Mirror:
    """Tabulate the mirror image in a smooth sphere, or in a plane.

    Parameters
    ----------
    lowest_rad, highest_rad : float
        Range of the angle from nadir to limb, rad. For a sphere its sine is body radius over
        distance.
    beyond_rad : float
        How far beyond the limb the tables run.
    sphere : bool
        True for the Moon from orbit, False for level ground.

    Returns
    -------
    Mirror
        With as many limb angles (Chebyshev points) as interpolation between them needs to
        keep to 3e-9; an image in a plane depends on none.
    """
    if not sphere:
        return Mirror(_frozen(_plane_table(highest_rad, beyond_rad)[None]), np.array([highest_rad]), beyond_rad)
    if highest_rad - lowest_rad < 1e-9:
        return Mirror(_frozen(_tables(np.array([lowest_rad]), beyond_rad)), np.array([lowest_rad]), beyond_rad)
    count = 4
    while True:
        knots = _chebyshev(lowest_rad, highest_rad, count)
        candidate = Mirror(_tables(knots, beyond_rad), knots, beyond_rad)
        between = np.linspace(lowest_rad, highest_rad, 7)
        interpolated, _ = candidate.at_limb_angles(between)
        exact = _tables(between, beyond_rad, intervals=interpolated.shape[1])
        if np.abs(interpolated - exact).max() < 3e-9 or count >= _MOST_KNOTS:
            _frozen(candidate.tables)
            return candidate
        count += 4


def image_angle_rad(grazing_rad: FloatArray, limb_angle_rad: float) -> FloatArray:
    """Angle from the nadir at which a ray of this grazing angle leaves the sphere for the antenna, rad."""
    return np.asarray(np.arcsin(np.sin(limb_angle_rad) * np.cos(grazing_rad)))


def source_angle_rad(grazing_rad: FloatArray, limb_angle_rad: float) -> FloatArray:
    """Angle from the nadir from which that ray came: the image's plus twice the grazing angle, rad."""
    return np.asarray(image_angle_rad(grazing_rad, limb_angle_rad) + 2.0 * grazing_rad)


def grazing_angle_rad(from_nadir_rad: FloatArray, limb_angle_rad: float) -> FloatArray:
    """Grazing angle of the ray that comes from these angles, rad, by Newton's method.

    The slope lies between 1 and 2 above the limb. Beyond it the angle is negative: the
    analytic continuation of the image, which no ray makes.
    """
    grazing = np.clip(0.5 * (from_nadir_rad - limb_angle_rad), -np.pi / 4, np.pi / 2)
    for _ in range(NEWTON_STEPS):
        excess = source_angle_rad(grazing, limb_angle_rad) - from_nadir_rad
        if np.abs(excess).max(initial=0.0) < 2e-15:
            break
        grazing = np.clip(grazing - excess / (2.0 + _image_rate(grazing, limb_angle_rad)), -np.pi / 4, np.pi / 2)
    return grazing


def _image_rate(grazing_rad: FloatArray, limb_angle_rad: float) -> FloatArray:
    """Change of the image's angle with the grazing angle."""
    sine = np.sin(limb_angle_rad)
    return np.asarray(-sine * np.sin(grazing_rad) / np.sqrt(1.0 - (sine * np.cos(grazing_rad)) ** 2))


def _tables(limb_angle_rad: FloatArray, beyond_rad: float, intervals: int = 0) -> FloatArray:
    """Tables for several limb angles, all on as many intervals as the most demanding needs, or on `intervals`."""
    tables = [
        _sphere_table(float(angle), beyond_rad, intervals or 128, fixed=bool(intervals)) for angle in limb_angle_rad
    ]
    most = max(len(table) for table in tables)
    same = [
        table if len(table) == most else _sphere_table(float(angle), beyond_rad, most, fixed=True)
        for table, angle in zip(tables, limb_angle_rad, strict=True)
    ]
    return np.stack(same)


def _sphere_table(limb_angle_rad: float, beyond_rad: float, intervals: int, *, fixed: bool) -> FloatArray:
    last = float(np.cos(max(limb_angle_rad - beyond_rad, 0.0)))

    def columns(cosine: FloatArray) -> FloatArray:
        from_nadir = np.arccos(np.clip(cosine, -1.0, 1.0))
        return _sphere_columns(grazing_angle_rad(from_nadir, limb_angle_rad), limb_angle_rad)

    tolerance = np.inf if fixed else MIRROR_TOLERANCE
    return cubic_table(columns, -1.0, last, tolerance=tolerance, intervals=intervals, cap=16384)


def _sphere_columns(grazing: FloatArray, limb_angle_rad: float) -> FloatArray:
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
    compression = -ratio * image_rate / (image_rate + 2.0)
    return np.stack([ratio, along_nadir, compression, np.sin(grazing)], axis=1)


def _plane_table(limb_angle_rad: float, beyond_rad: float) -> FloatArray:
    last = float(np.cos(limb_angle_rad - beyond_rad))

    def columns(cosine: FloatArray) -> FloatArray:
        one = np.ones_like(cosine)
        return np.stack([one, -2.0 * cosine, one, -cosine], axis=1)

    return cubic_table(columns, -1.0, last, tolerance=MIRROR_TOLERANCE, intervals=128, cap=4096)


def _chebyshev(lower: float, upper: float, count: int) -> FloatArray:
    angle = np.pi * (np.arange(count) + 0.5) / count
    return np.asarray(0.5 * (lower + upper) - 0.5 * (upper - lower) * np.cos(angle))


def _frozen(tables: FloatArray) -> FloatArray:
    """Shared by all who ask for the same mirror: not to be written to."""
    tables.flags.writeable = False
    return tables
