"""The pixels of the sky as the engine sums over them: their centres and quadrature weights.

The sky is given by its values at HEALPix centres, taken as samples of a surface that is
smooth on the scale of a pixel. Equal weights integrate such a surface over the sphere to
1e-5 of it at nside 64; the ring weights here integrate every zonal harmonic up to degree
2 nside exactly, which leaves less than 1e-7 of a sky band-limited to 1.5 nside.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import healpy as hp
import numpy as np
from numpy.typing import NDArray
from scipy.special import eval_legendre

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class PixelGrid:
    """HEALPix pixels in ring order.

    Attributes
    ----------
    directions : ndarray[pixel, 3]
        Unit vectors of the centres.
    weights : ndarray[pixel]
        Quadrature weights, 1 on average.
    side_rad : float
        Side of a pixel, rad: the square root of its solid angle.
    """

    directions: FloatArray
    weights: FloatArray
    side_rad: float


@lru_cache(maxsize=2)
def pixel_grid(nside: int) -> PixelGrid:
    """Lay out the pixels of a resolution.

    Parameters
    ----------
    nside : int
        HEALPix resolution.

    Returns
    -------
    PixelGrid
        Shared by all who ask for the same resolution: its arrays cannot be written to.
    """
    pixel = np.arange(hp.nside2npix(nside))
    directions = np.ascontiguousarray(np.stack(hp.pix2vec(nside, pixel), axis=1))
    weights = ring_weights(nside)[hp.pix2ring(nside, pixel) - 1]
    for array in (directions, weights):
        array.flags.writeable = False
    return PixelGrid(directions, weights, float(np.sqrt(hp.nside2pixarea(nside))))


def ring_weights(nside: int) -> FloatArray:
    """Weight of a pixel on each ring, so that zonal harmonics to degree 2 nside integrate exactly.

    Parameters
    ----------
    nside : int
        HEALPix resolution.

    Returns
    -------
    ndarray[ring]
        From north to south; the smallest changes from 1 that do it (least squares), the
        same on both hemispheres.
    """
    ring = np.arange(1, 2 * nside + 1)
    z = np.where(ring < nside, 1.0 - ring**2 / (3.0 * nside**2), 4.0 / 3.0 - 2.0 * ring / (3.0 * nside))
    pixels = np.where(ring < nside, 4 * ring, 4 * nside) * np.where(ring < 2 * nside, 2.0, 1.0)
    degree = np.arange(0, 2 * nside + 1, 2)
    legendre = eval_legendre(degree[:, None], z[None]) * pixels / hp.nside2npix(nside)
    missing = (degree == 0) - legendre.sum(axis=1)
    northern = 1.0 + np.linalg.lstsq(legendre, missing, rcond=None)[0]
    return np.concatenate([northern, northern[-2::-1]])
