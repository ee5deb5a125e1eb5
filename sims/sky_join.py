"""How maps at several frequencies are joined: a rule in ln T over ln f, the same in every pixel.

`sims.sky_joined` applies it. Both rules are linear in the logarithms, so that the join is a
matrix, and both have continuous second derivatives: a straight line from map to map would
leave kinks that no smooth foreground follows.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline

from sims.config_sky import Joining

FloatArray = NDArray[np.float64]


def joining_weights(
    frequency_mhz: FloatArray, at_mhz: FloatArray, join: Joining, order: int | None, derivative: int = 0
) -> FloatArray:
    """Weights of each map's logarithm in the logarithm between them.

    Parameters
    ----------
    frequency_mhz : ndarray[map]
        Frequencies of the maps, MHz, all different, in any order; at least two.
    at_mhz : ndarray[frequency]
        Where the join is wanted, MHz.
    join : {"polynomial", "spline"}
        "polynomial" is a least-squares polynomial in ln f, exact where its order is one less than
        the number of maps, and is its own continuation beyond them. "spline" is the cubic
        spline through all maps whose third derivative is continuous at the first and last but
        one map too (for three maps a parabola, for two a straight line); beyond the outermost
        maps slope and second derivative go on from there: a parabola.
    order : int or None
        Order of the polynomial.
    derivative : {0, 1, 2}
        Which derivative with respect to ln f.

    Returns
    -------
    ndarray[frequency, map]
        W with ln T(f) = W ln T_map; rows of W sum to 1 (derivatives: to 0), so that a scale common to all maps passes.

    Notes
    -----
    A natural spline, whose second derivative is zero at the ends, is not offered: the sky's is not zero,
    and between 50 and 150 MHz that leaves over 100 mK after a smooth foreground is taken off.
    """
    centre = float(np.mean(np.log(frequency_mhz)))
    x, at = np.log(frequency_mhz) - centre, np.log(at_mhz) - centre
    if join == "polynomial":
        assert order is not None
        return _polynomial(x, at, order, derivative)
    return _spline(x, at, derivative)


def _polynomial(x: FloatArray, at: FloatArray, order: int, derivative: int) -> FloatArray:
    half = float(np.abs(x).max())
    fit = np.linalg.pinv(np.polynomial.chebyshev.chebvander(x / half, order))
    each = np.polynomial.chebyshev.chebder(np.eye(order + 1), m=derivative) if derivative else np.eye(order + 1)
    values = np.polynomial.chebyshev.chebval(at / half, each) / half**derivative
    return np.asarray(values.T @ fit)


def _spline(x: FloatArray, at: FloatArray, derivative: int) -> FloatArray:
    order = np.argsort(x)
    knots = x[order]
    spline = CubicSpline(knots, np.eye(x.size), axis=0, bc_type="not-a-knot")
    inside = np.clip(at, knots[0], knots[-1])
    beyond = (at - inside)[:, np.newaxis]
    value, slope, bend = spline(inside), spline(inside, 1), spline(inside, 2)
    sorted_weights = (value + slope * beyond + 0.5 * bend * beyond**2, slope + bend * beyond, bend)[derivative]
    weights = np.empty((at.size, x.size))
    weights[:, order] = sorted_weights
    return weights
