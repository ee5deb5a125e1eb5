"""The angular part of the engine: beam-weighted sums over the pixels of the sky.

Plain arrays in, plain arrays out: `sims.pixel_kernel` has the loops, `sims.sky_average` does
the bookkeeping. For every sample each pixel adds its brightness times the beam towards it
where it stands clear of the limb, and its brightness times the beam towards its mirror image in the body below.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sims.horizon import Horizon
from sims.limb import TAPER
from sims.mirror import Mirror
from sims.pixel_kernel import sum_samples

FloatArray = NDArray[np.float64]
CHUNK_SAMPLES = 64
_NO_HORIZON = np.zeros(1)


@dataclass(frozen=True)
class Pointing:
    """Where the antenna points and what lies below it, one row a sample.

    Attributes
    ----------
    axes : ndarray[time, factor or 3, 3]
        Axes of the beam in ICRS: those of its profiles, or x, y and z of a tabulated one.
    nadir : ndarray[time, 3]
        Unit vectors to the centre of the body below, ICRS.
    limb_angle_rad : ndarray[time]
        Angle from nadir to limb, rad.
    north : ndarray[time, 3]
        Unit vectors to the north along the ground, ICRS, from which a horizon's azimuth counts.
    pole : ndarray[time, 3]
        Unit vectors to the north pole of the body below, ICRS.
    """

    axes: FloatArray
    nadir: FloatArray
    limb_angle_rad: FloatArray
    north: FloatArray
    pole: FloatArray

    def part(self, rows: slice | NDArray[np.int64]) -> Pointing:
        """Some of the samples."""
        return Pointing(self.axes[rows], self.nadir[rows], self.limb_angle_rad[rows], self.north[rows], self.pole[rows])

    def __len__(self) -> int:
        return len(self.nadir)


@dataclass(frozen=True)
class Pattern:
    """A beam at some frequencies, in one of the two forms the kernel reads; the other is empty.

    Attributes
    ----------
    profiles : ndarray[factor, interval, 4, frequency]
        Cubics in the cosine to each axis, from -1 to 1; the pattern is their product.
    grid : ndarray[theta cell + 3, phi cell + 3, frequency]
        Spline coefficients of a tabulated pattern (`sims.beam_spline`).
    layout : ndarray[5]
        Start and scale of the grid.
    """

    profiles: FloatArray
    grid: FloatArray
    layout: FloatArray


@dataclass(frozen=True)
class Ground:
    """What the body below does with the sky, in the form the kernel reads.

    Attributes
    ----------
    mirror : Mirror or None
        None where nothing is reflected.
    reflectivity : ndarray[interval, 4, frequency or 1]
        Cubics in the cosine of incidence, from `lowest_cosine` to 1.
    lowest_cosine : float
        See `sims.moon`.
    horizon : Horizon or None
        None where it is level.
    warmer_poles : bool
        Whether the temperature depends on latitude, so that `PixelSums.polar` is wanted.
    sphere : bool
        True where the body below is a sphere seen from a distance.
    """

    mirror: Mirror | None
    reflectivity: FloatArray
    lowest_cosine: float
    horizon: Horizon | None
    warmer_poles: bool
    sphere: bool


@dataclass(frozen=True)
class PixelSums:
    """Beam-weighted means, each over the beam's sum over the whole sphere.

    Attributes
    ----------
    sky_k : ndarray[time, frequency]
        Of the sky, straight and mirrored, K.
    response : ndarray[time, frequency]
        The same for a sky of unit brightness.
    polar : ndarray[time, frequency]
        Of the surface's emissivity times the squared sine of its latitude; zero unless wanted.
    beam_sum : ndarray[time, frequency]
        Sum of the beam over the whole sphere, which the means are over.
    """

    sky_k: FloatArray
    response: FloatArray
    polar: FloatArray
    beam_sum: FloatArray


def pixel_sums(
    directions: FloatArray,
    weights: FloatArray,
    brightness_k: FloatArray,
    pattern: Pattern,
    pointing: Pointing,
    ground: Ground,
    taper_rad: float,
    advance: Callable[[int], None],
) -> PixelSums:
    """Sum over the pixels for every sample.

    Parameters
    ----------
    directions : ndarray[pixel, 3]
        Unit vectors of pixel centres, ICRS.
    weights : ndarray[pixel]
        Quadrature weights of `sims.pixels`.
    brightness_k : ndarray[pixel, frequency]
        Sky brightness, K, C-contiguous.
    pattern : Pattern
    pointing : Pointing
    ground : Ground
    taper_rad : float
        Half the width of the taper that the limb is, rad.
    advance : callable
        Told the number of samples done, for a progress bar.

    Returns
    -------
    PixelSums
    """
    shape = (len(pointing), brightness_k.shape[1])
    sky_k, response, polar, beam_sum = (np.empty(shape) for _ in range(4))
    level = ground.horizon is None
    horizon_table = _NO_HORIZON if ground.horizon is None else ground.horizon.table
    for rows in _chunks(len(pointing)):
        part = pointing.part(rows)
        cosine_hidden, cosine_clear = undoubted(part, ground, taper_rad)
        if ground.mirror is None:
            mirror_tables, cosine_last = np.zeros((1, 1, 4, 4)), np.full(len(part), -2.0)
        else:
            mirror_tables, cosine_last = ground.mirror.at_limb_angles(part.limb_angle_rad)
        sum_samples(
            directions, weights, brightness_k, pattern.profiles, pattern.grid, pattern.layout, part.axes,
            part.nadir, part.north, np.cross(part.nadir, part.north), part.pole,
            part.limb_angle_rad, cosine_hidden, cosine_clear, taper_rad, TAPER, level, horizon_table,
            mirror_tables, cosine_last, ground.reflectivity, ground.lowest_cosine, ground.warmer_poles, ground.sphere,
            sky_k[rows], response[rows], polar[rows], beam_sum[rows],
        )  # fmt: skip
        advance(len(part))
    return PixelSums(sky_k, response, polar, beam_sum)


def undoubted(pointing: Pointing, ground: Ground, taper_rad: float) -> tuple[FloatArray, FloatArray]:
    """Cosines from the nadir above which a direction is hidden, and below which it is clear: ndarray[time] twice."""
    lowest, highest = pointing.limb_angle_rad, pointing.limb_angle_rad
    if ground.horizon is not None:
        lowest = np.full(len(pointing), np.pi / 2 + ground.horizon.lowest_rad)
        highest = np.full(len(pointing), np.pi / 2 + ground.horizon.highest_rad)
    return np.cos(np.maximum(lowest - taper_rad, 0.0)), np.cos(np.minimum(highest + taper_rad, np.pi))


def _chunks(count: int) -> Iterator[slice]:
    for start in range(0, count, CHUNK_SAMPLES):
        yield slice(start, min(start + CHUNK_SAMPLES, count))
