"""The mean beam of a bin as it lies on the sky: with it a changed sky is one dot product.

The mean over many samples of a beam that turns, is hidden and is mirrored is a fixed weight
on each pixel. It costs two runs of the engine once; then any sky's binned spectrum is the sum
of its brightness times these weights, exactly what the engine would give.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from sims.limb import TAPER
from sims.pixel_kernel import spread_samples
from sims.pixel_sum import CHUNK_SAMPLES, PixelSums, pixel_sums, undoubted
from sims.pixels import pixel_grid
from sims.sky_average import Scene, ground_of, mirror_below, pattern_of

FloatArray = NDArray[np.float64]
_NO_MIRROR = np.zeros((1, 1, 4, 4))


@dataclass(frozen=True, eq=False)
class MeanBeam:
    """Weights of the pixels in the mean of each bin, at single frequencies.

    Attributes
    ----------
    on_sky : ndarray[bin, pixel, frequency]
        What a kelvin in a pixel adds to the bin's mean, before the antenna's losses.
    response, polar : ndarray[bin, frequency]
        Means of `PixelSums.response` and `PixelSums.polar`.
    """

    on_sky: FloatArray
    response: FloatArray
    polar: FloatArray

    def sums(self, brightness_k: FloatArray) -> PixelSums:
        """Sums of a sky ndarray[pixel, frequency], K, a row a bin, for `sims.sky_average.at_the_antenna`."""
        sky_k = np.einsum("bpf,pf->bf", self.on_sky, brightness_k)
        return PixelSums(sky_k, self.response, self.polar, np.ones_like(sky_k))


def mean_beam(
    scene: Scene,
    frequency_mhz: FloatArray,
    bin_of_sample: NDArray[np.int64],
    weight: FloatArray,
    bins: int,
    advance: Callable[[int], None],
) -> MeanBeam:
    """Average the beam on the sky.

    Parameters
    ----------
    scene : Scene
        Its sky gives the resolution only.
    frequency_mhz : ndarray[frequency]
        Frequency, MHz.
    bin_of_sample : ndarray[time] of int
        Bin of each sample.
    weight : ndarray[time]
        Weight of each sample in its bin, such as its integration, of any scale.
    bins : int
        Number of bins.
    advance : callable
        Told the number of samples done, each of them once.

    Returns
    -------
    MeanBeam
        Zero in a bin without samples.
    """
    pixels, taper_rad = pixel_grid(scene.sky.nside), scene.taper_rad
    image, pattern = mirror_below(scene, taper_rad), pattern_of(scene.beam, frequency_mhz)
    ground = ground_of(scene, image, frequency_mhz)
    unmirrored = replace(ground, mirror=None)
    dark = np.zeros((len(pixels.directions), len(frequency_mhz)))
    totals = np.bincount(bin_of_sample, weight, minlength=bins)
    on_sky = np.zeros((bins, *dark.shape))
    polar = np.zeros((bins, len(frequency_mhz)))
    for number in range(bins):
        members = np.flatnonzero(bin_of_sample == number)
        for start in range(0, len(members), CHUNK_SAMPLES):
            rows = members[start : start + CHUNK_SAMPLES]
            part, own = scene.pointing.part(rows), (weight[rows] / totals[number])[:, None]
            # The sum of the beam alone is wanted, and what the latitude of the ground adds: no mirror.
            sums = pixel_sums(
                pixels.directions, pixels.weights, dark, pattern, part, unmirrored, taper_rad, lambda done: None
            )
            polar[number] += (own * sums.polar).sum(axis=0)
            hidden, clear = undoubted(part, ground, taper_rad)
            tables, last = (_NO_MIRROR, np.full(len(rows), -2.0))
            if image is not None:
                tables, last = image.at_limb_angles(part.limb_angle_rad)
            spread_samples(
                pixels.directions, pixels.weights, own / sums.beam_sum, pattern.profiles, pattern.grid, pattern.layout,
                part.axes, part.nadir, part.north, np.cross(part.nadir, part.north), part.limb_angle_rad, hidden, clear,
                taper_rad, TAPER, ground.horizon is None,
                np.zeros(1) if ground.horizon is None else ground.horizon.table,
                tables, last, ground.reflectivity, ground.lowest_cosine, on_sky[number],
            )  # fmt: skip
            advance(len(rows))
    return MeanBeam(on_sky, on_sky.sum(axis=1), polar)
