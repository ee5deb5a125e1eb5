"""The limb on a grid of pixels: a taper a few pixels wide that stands in for the edge.

A sum over pixels cannot follow a sharp edge: each pixel is in or out, and the series jumps
as the limb moves. Weighting by the area of each pixel that stands clear cures the jumps and
leaves an error of second order, 30 mK of a sky of 2,000 K at nside 64. Here the edge is
replaced by an odd polynomial step across five pixels on either side whose moments vanish
up to the seventh: against a smooth sky the step integrates as the edge does, and the sum
over pixels resolves it.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.polynomial import Polynomial
from numpy.typing import NDArray

TAPER_PIXELS = 5.0
_SMOOTHNESS = 4  # the step is C4 where it begins and ends
_MOMENTS = 8  # the kernel's first moment that does not vanish


def _taper_coefficients() -> NDArray[np.float64]:
    """Coefficients c of the step 1/2 + t (c0 + c1 t^2 + ...), t from -1 to 1 across the taper.

    Its slope is (1 - t^2)^4 times the polynomial in t^2 that makes the integral 1 and the
    even moments below the eighth vanish; the odd ones vanish by symmetry.
    """
    square = Polynomial([0.0, 0.0, 1.0])
    bump = Polynomial([1.0, 0.0, -1.0]) ** _SMOOTHNESS
    terms = _MOMENTS // 2

    def integral(function: Polynomial) -> float:
        whole = function.integ()
        return float(whole(1.0) - whole(-1.0))

    moments = np.array([[integral(bump * square ** (i + j)) for j in range(terms)] for i in range(terms)])
    shares = np.linalg.solve(moments, np.eye(terms)[0])
    slope = sum((share * bump * square**power for power, share in enumerate(shares)), Polynomial([0.0]))
    return np.ascontiguousarray(slope.integ().coef[1::2])


TAPER = _taper_coefficients()
TAPER.flags.writeable = False


@njit(inline="always")
def step(t, taper):  # type: ignore[no-untyped-def]
    """The step at t, -1 where hidden to 1 where clear."""
    if t <= -1.0:
        return 0.0
    if t >= 1.0:
        return 1.0
    square = t * t
    value = taper[7]
    for power in range(6, -1, -1):
        value = value * square + taper[power]
    return 0.5 + t * value


def taper_width_rad(side_rad: float, limb_angle_rad: NDArray[np.float64]) -> float:
    """Half the width of the taper, the same for all samples.

    Parameters
    ----------
    side_rad : float
        Side of a pixel, rad.
    limb_angle_rad : ndarray[time]
        Angle from nadir to limb, rad.

    Returns
    -------
    float
        Five pixels, rad; less where the smallest disk has no room for them, or the sky beside the
        largest: a disk of few pixels cannot be resolved, and costs accuracy.
    """
    room = min(float(np.min(limb_angle_rad)), np.pi - float(np.max(limb_angle_rad)))
    return min(TAPER_PIXELS * side_rad, 0.5 * room)


def visible_weight(from_nadir_rad: NDArray[np.float64], limb_angle_rad: float, width_rad: float) -> NDArray[np.float64]:
    """Weight of directions by where they lie against the limb, in plain NumPy.

    Parameters
    ----------
    from_nadir_rad : ndarray[...]
        Angle from the nadir, rad.
    limb_angle_rad : float
        Angle from nadir to limb, rad.
    width_rad : float
        From `taper_width_rad`.

    Returns
    -------
    ndarray[...]
        0 behind the limb, 1 clear of it; in the taper it passes these by up to a tenth.
    """
    t = np.clip((np.asarray(from_nadir_rad) - limb_angle_rad) / width_rad, -1.0, 1.0)
    return np.asarray(0.5 + t * np.polynomial.polynomial.polyval(t**2, TAPER))
