"""Bringing maps together: one frame, one grid, one resolution.

It stands between the readers of single maps (`sims.sky_maps`, `sims.sky_images`) and what
joins several (`sims.sky_survey`). Where nothing has to change, nothing is touched.
"""

from __future__ import annotations

import math

import healpy
import numpy as np
from numpy.typing import NDArray

from sims.errors import InputError
from sims.sky_map_checks import Frame
from sims.sky_maps import pixel_directions, turn_directions

FloatArray = NDArray[np.float64]

# The harmonics end at l = 3 nside - 1. There a Gaussian of this many pixels (standard deviation) is down to 3e-5,
# so that cutting it leaves no rings round a bright source.
_SD_IN_PIXELS = 1.5
# Averaged onto coarser pixels first, a map is displaced by their odd shapes near the poles: so fine, to 1e-3 of it.
_SD_IN_PIXELS_WANTED = 6.0
_FINEST_NSIDE = 1024
# Children of a target pixel to a pixel of the source, each way, as for images.
_CHILDREN_PER_PIXEL = 4
# A kernel this much narrower than a pixel (standard deviation) adds 6 % to the blur of a pixel itself, 0.29 pixels.
_NEGLIGIBLE_SD_IN_PIXELS = 0.1


def frame_rotation(frame: Frame, to_frame: Frame) -> FloatArray:
    """Rotation ndarray[3, 3] that carries row vectors from one frame to another: v_to = v @ R.

    The nearest rotation to what astropy does; for fk4 the elliptic aberration (0.3 arcsec) is left out.
    """
    start = pixel_directions(4, "icrs")
    left, _, right = np.linalg.svd(start.T @ turn_directions(start, frame, to_frame))
    return np.asarray(left @ right)


def regridded(ring: FloatArray, rotation: FloatArray, nside: int) -> FloatArray:
    """Average a HEALPix map over the area of the pixels of a turned grid.

    Each pixel is cut into children, at least four to a pixel of the map each way; a child takes
    the value of the pixel its centre lies in. The mean over the sphere is kept to the
    children's size, no value leaves the range of the map, and what is a pixel of the map
    wide is blurred by up to a pixel.

    Parameters
    ----------
    ring : ndarray[pixel]
        The map, RING order.
    rotation : ndarray[3, 3]
        From the frame of the wanted pixels to that of the map, as `frame_rotation` gives it.
    nside : int
        Resolution wanted.

    Returns
    -------
    ndarray[pixel]
        RING order, in the wanted frame.
    """
    own_nside = healpy.npix2nside(ring.size)
    split = 2 ** max(1, math.ceil(math.log2(_CHILDREN_PER_PIXEL * own_nside / nside)))
    nested = np.empty(healpy.nside2npix(nside))
    block = max(1, 2**20 // split**2)
    for start in range(0, nested.size, block):
        stop = min(start + block, nested.size)
        children = np.arange(start * split**2, stop * split**2)
        vectors = np.column_stack(healpy.pix2vec(nside * split, children, nest=True)) @ rotation
        nested[start:stop] = ring[healpy.vec2pix(own_nside, *vectors.T)].reshape(-1, split**2).mean(axis=1)
    return np.asarray(healpy.reorder(nested, n2r=True), dtype=np.float64)


def kernel_deg(own_deg: float, common_deg: float) -> float:
    """Full width at half maximum, deg, of the Gaussian that turns one Gaussian resolution into a coarser one."""
    return math.sqrt(max(common_deg**2 - own_deg**2, 0.0))


def smoothing_nside(fwhm_deg: float, nside: int) -> int:
    """Resolution at which a Gaussian can be applied so that pixels of `nside` come out right; 0 where it is negligible.

    Raises
    ------
    InputError
        If it is too narrow for the finest grid that is used (nside 1024), but not negligible.
    """
    sd_pixels = math.radians(_sd(fwhm_deg)) / healpy.nside2resol(nside)
    if sd_pixels < _NEGLIGIBLE_SD_IN_PIXELS:
        return 0
    fine = nside * 2 ** max(0, math.ceil(math.log2(_SD_IN_PIXELS / sd_pixels)))
    if fine > max(_FINEST_NSIDE, nside):
        narrowest = math.degrees(_SD_IN_PIXELS * healpy.nside2resol(_FINEST_NSIDE)) / _sd(1.0)
        raise InputError(
            f"a Gaussian of {fwhm_deg:.3g} deg is too narrow to be applied; allowed: {narrowest:.2g} deg and above, "
            "or resolutions that are equal"
        )
    return int(fine)


def reading_nside(fwhm_deg: float, nside: int) -> int:
    """Resolution at which a map is best read to be smoothed so and then averaged down to `nside`."""
    sd_pixels = math.radians(_sd(fwhm_deg)) / healpy.nside2resol(nside)
    if sd_pixels < _NEGLIGIBLE_SD_IN_PIXELS:
        return nside
    fine = nside * 2 ** max(0, math.ceil(math.log2(_SD_IN_PIXELS_WANTED / sd_pixels)))
    return int(min(fine, max(_FINEST_NSIDE, nside)))


def smoothed(ring: FloatArray, fwhm_deg: float, nside: int) -> FloatArray:
    """Smooth a map with a Gaussian and average it down.

    Parameters
    ----------
    ring : ndarray[pixel]
        The map, RING order, at `nside` or finer.
    fwhm_deg : float
        Full width at half maximum of the Gaussian, deg.
    nside : int
        Resolution wanted.

    Returns
    -------
    ndarray[pixel]
        RING order; the mean over the sphere is that of `ring`.

    Raises
    ------
    InputError
        As `smoothing_nside`.
    """
    fine = smoothing_nside(fwhm_deg, nside)
    if fine == 0:
        return np.asarray(healpy.ud_grade(ring, nside), dtype=np.float64)
    fine = max(fine, healpy.npix2nside(ring.size))
    values = np.asarray(healpy.ud_grade(ring, fine), dtype=np.float64)
    blurred = healpy.smoothing(values, sigma=math.radians(_sd(fwhm_deg)), iter=3)
    coarse = np.asarray(healpy.ud_grade(blurred, nside), dtype=np.float64)
    # Harmonics on HEALPix keep the mean to 1e-5 only; a shift of the zero level is not theirs to make.
    return np.asarray(coarse + (ring.mean() - coarse.mean()))


def _sd(fwhm_deg: float) -> float:
    return fwhm_deg / (2.0 * math.sqrt(2.0 * math.log(2.0)))
