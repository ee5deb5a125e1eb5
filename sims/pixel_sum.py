"""The angular part of the engine: beam-weighted sums over the pixels of the sky, in numba.

Plain arrays in, plain arrays out; `sims.sky_average` does the bookkeeping. For every sample
each pixel adds its brightness times the beam towards it where it stands clear of the limb,
and its brightness times the beam towards its mirror image in the body below.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

from sims.beam import Beam
from sims.moon import Mirror
from sims.profile import cubic_table

FloatArray = NDArray[np.float64]
CHUNK_SAMPLES = 64
FEWEST_INTERVALS = 1024


@dataclass(frozen=True)
class Pointing:
    """Where the antenna points and what lies below it, one row a sample.

    Attributes
    ----------
    axes : ndarray[time, factor, 3]
        Axes of the beam's profiles in ICRS.
    nadir : ndarray[time, 3]
        Unit vectors to the centre of the body below, ICRS.
    limb_angle_rad : ndarray[time]
        Angle from nadir to limb, rad.
    """

    axes: FloatArray
    nadir: FloatArray
    limb_angle_rad: FloatArray

    def part(self, rows: slice | NDArray[np.int64]) -> Pointing:
        """Some of the samples."""
        return Pointing(self.axes[rows], self.nadir[rows], self.limb_angle_rad[rows])

    def __len__(self) -> int:
        return len(self.nadir)


def beam_tables(beam: Beam, frequency_mhz: FloatArray) -> FloatArray:
    """Profiles of a beam tabulated for the kernel.

    Parameters
    ----------
    beam : Beam
    frequency_mhz : ndarray[frequency]
        Frequency, MHz.

    Returns
    -------
    ndarray[factor, interval, 4, frequency]
        Cubics in the cosine, all factors on the same intervals.
    """

    def tabulate(profile: Callable[[FloatArray, FloatArray], FloatArray], intervals: int) -> FloatArray:
        return cubic_table(lambda x: profile(frequency_mhz, x), -1.0, 1.0, tolerance=1e-12, intervals=intervals)

    tables = [tabulate(profile, FEWEST_INTERVALS) for profile in beam.profiles]
    most = max(table.shape[0] for table in tables)
    same = [
        table if table.shape[0] == most else tabulate(profile, most)
        for table, profile in zip(tables, beam.profiles, strict=True)
    ]
    return np.stack(same)


def pixel_sums(
    directions: FloatArray,
    brightness_k: FloatArray,
    tables: FloatArray,
    pointing: Pointing,
    mirror: Mirror | None,
    pixel_angle_rad: float,
    advance: Callable[[int], None],
) -> tuple[FloatArray, FloatArray]:
    """Sky brightness and response of every sample.

    Parameters
    ----------
    directions : ndarray[pixel, 3]
        Unit vectors of pixel centres, ICRS.
    brightness_k : ndarray[pixel, frequency]
        Sky brightness, K, C-contiguous.
    tables : ndarray[factor, interval, 4, frequency]
        From `beam_tables`.
    pointing : Pointing
    mirror : Mirror or None
        None where nothing is reflected.
    pixel_angle_rad : float
        Width of the ramp that the limb is, rad.
    advance : callable
        Told the number of samples done, for a progress bar.

    Returns
    -------
    sky_k : ndarray[time, frequency]
        Beam-weighted sum of the sky over the beam's sum over the whole sphere, K.
    response : ndarray[time, frequency]
        The same for a sky of unit brightness.
    """
    shape = (len(pointing), brightness_k.shape[1])
    sky_k, response = np.empty(shape), np.empty(shape)
    mirror_table = np.zeros((1, 4, 3)) if mirror is None else mirror.table
    for rows in _chunks(len(pointing)):
        part = pointing.part(rows)
        cosine_limb = np.cos(part.limb_angle_rad)
        ramp = 1.0 / (pixel_angle_rad * np.sin(part.limb_angle_rad))
        _sum_samples(
            directions, brightness_k, tables, part.axes, part.nadir, cosine_limb, ramp,
            mirror_table, mirror is not None, sky_k[rows], response[rows],
        )  # fmt: skip
        advance(len(part))
    return sky_k, response


def _chunks(count: int) -> Iterator[slice]:
    for start in range(0, count, CHUNK_SAMPLES):
        yield slice(start, min(start + CHUNK_SAMPLES, count))


@njit(inline="always")
def _cell(cosine, intervals):  # type: ignore[no-untyped-def]
    """Interval of a table that a cosine falls into, and how far into it."""
    scaled = (cosine + 1.0) * (0.5 * intervals)
    cell = min(max(int(scaled), 0), intervals - 1)
    return cell, scaled - cell


@njit(inline="always")
def _add_one(table, cosine, whole, weight, brightness_k, sums):  # type: ignore[no-untyped-def]
    """Add a direction to the sums of a beam of one factor: whole beam, part that meets sky, sky."""
    cell, t = _cell(cosine, table.shape[0])
    c = table[cell]
    for j in range(sums.shape[1]):
        gain = ((c[3, j] * t + c[2, j]) * t + c[1, j]) * t + c[0, j]
        sums[0, j] += whole * gain
        sums[1, j] += weight * gain
        sums[2, j] += weight * gain * brightness_k[j]


@njit(inline="always")
def _add_two(tables, first, second, whole, weight, brightness_k, sums):  # type: ignore[no-untyped-def]
    """The same for a beam of two factors."""
    cell, t = _cell(first, tables.shape[1])
    c = tables[0, cell]
    cell, u = _cell(second, tables.shape[1])
    d = tables[1, cell]
    for j in range(sums.shape[1]):
        gain = ((c[3, j] * t + c[2, j]) * t + c[1, j]) * t + c[0, j]
        gain *= ((d[3, j] * u + d[2, j]) * u + d[1, j]) * u + d[0, j]
        sums[0, j] += whole * gain
        sums[1, j] += weight * gain
        sums[2, j] += weight * gain * brightness_k[j]


@njit(inline="always")
def _image(mirror_table, scaled):  # type: ignore[no-untyped-def]
    """Mirror image of a direction: its two components and its weight."""
    cell = min(max(int(scaled), 0), mirror_table.shape[0] - 1)
    t = scaled - cell
    m = mirror_table[cell]
    along = ((m[3, 0] * t + m[2, 0]) * t + m[1, 0]) * t + m[0, 0]
    down = ((m[3, 1] * t + m[2, 1]) * t + m[1, 1]) * t + m[0, 1]
    weight = ((m[3, 2] * t + m[2, 2]) * t + m[1, 2]) * t + m[0, 2]
    return along, down, weight


@njit(parallel=True, cache=True, error_model="numpy", fastmath={"contract"})
def _sum_samples(  # type: ignore[no-untyped-def]
    directions, brightness_k, tables, axes, nadir, cosine_limb, ramp, mirror_table, mirrored, sky_k, response
):
    pixels, frequencies = brightness_k.shape
    last = tables.shape[0] - 1
    for s in prange(len(nadir)):
        sums = np.zeros((3, frequencies))
        one, two, down = axes[s, 0], axes[s, last], nadir[s]
        one_down = one[0] * down[0] + one[1] * down[1] + one[2] * down[2]
        two_down = two[0] * down[0] + two[1] * down[1] + two[2] * down[2]
        mirror_scale = mirror_table.shape[0] / (cosine_limb[s] + 1.0)
        for p in range(pixels):
            x, y, z = directions[p, 0], directions[p, 1], directions[p, 2]
            below = x * down[0] + y * down[1] + z * down[2]
            first = x * one[0] + y * one[1] + z * one[2]
            second = x * two[0] + y * two[1] + z * two[2]
            whole, weight = 1.0, min(max(0.5 + (cosine_limb[s] - below) * ramp[s], 0.0), 1.0)
            for _ in range(2 if mirrored and below < cosine_limb[s] else 1):
                if last == 0:
                    _add_one(tables[0], first, whole, weight, brightness_k[p], sums)
                else:
                    _add_two(tables, first, second, whole, weight, brightness_k[p], sums)
                if whole == 1.0 and mirrored:
                    along, towards, weight = _image(mirror_table, (below + 1.0) * mirror_scale)
                    first = min(max(along * first + towards * one_down, -1.0), 1.0)
                    second = min(max(along * second + towards * two_down, -1.0), 1.0)
                    whole = 0.0
        for j in range(frequencies):
            sky_k[s, j] = sums[2, j] / sums[0, j]
            response[s, j] = sums[1, j] / sums[0, j]
