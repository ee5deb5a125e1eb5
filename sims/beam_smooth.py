"""A tabulated beam between and across its frequencies: one linear map from the table to any frequency of its band.

A spline of degree five in f (four continuous derivatives, so no kink at a tabulated frequency) goes through
every cell's power, or, with a smoothing scale, is fitted to it by least squares with a knot every so many MHz: of
waves longer than 2.5 scales 99 % passes, of those shorter than 1.5 scales under a third (more within a scale of the
band's ends). What is taken out is reported in kelvin. Power is joined and not its logarithm: a cell that is zero
stays zero, and a null that moves with frequency is a parabola and no pole. Nothing is ever extrapolated.
`sims.beam_grid` uses this.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import BSpline, make_interp_spline, make_lsq_spline

from sims.beam_spline import AngularSpline
from sims.errors import InputError

FloatArray = NDArray[np.float64]
DEGREE = 5
GAP = 1.8
"""A step this many times its smaller neighbour is called a gap."""
FEWEST_FOR_ERROR = 12
BLOCK_CELLS = 4096
SKY_POWER = np.array([
    0.16551, 0.23156, 0.06297, 0.11637, 0.04781, 0.07357, 0.03777, 0.05066, 0.03081, 0.04165, 0.02342,
    0.0282, 0.01904, 0.02656, 0.01669, 0.01966, 0.01306, 0.01648, 0.01166, 0.01422, 0.01081, 0.01203,
    0.01008, 0.00994, 0.00801, 0.00847, 0.00715, 0.0077, 0.00678, 0.00695, 0.0062, 0.00638,
])  # fmt: skip
"""Variance of the sky over its squared mean in spherical-harmonic degrees 1 to 32: computed from the 408 MHz survey
(Haslam et al. 1982, A&AS 47, 1) with the CMB taken off, its sources left in."""


@dataclass(frozen=True, eq=False)
class FrequencySpline:
    """Splines in frequency as one linear map.

    Attributes
    ----------
    frequency_mhz : ndarray[frequency]
        Tabulated frequencies, MHz, rising.
    knots_mhz : ndarray[knot]
        With those beyond the ends.
    coefficients : ndarray[coefficient, frequency]
        From tabulated values to B-spline coefficients.
    degree : int
        Five, or one less than the number of frequencies if that is smaller: then a single polynomial.
    smoothing_mhz : float or None
        Distance of the knots that was asked for, MHz; None where the spline interpolates.
    """

    frequency_mhz: FloatArray
    knots_mhz: FloatArray
    coefficients: FloatArray
    degree: int
    smoothing_mhz: float | None

    def matrix(self, frequency_mhz: FloatArray) -> FloatArray:
        """Map from tabulated values to values at other frequencies.

        Parameters
        ----------
        frequency_mhz : ndarray[node]
            Frequencies, MHz.

        Returns
        -------
        ndarray[node, frequency]

        Raises
        ------
        InputError
            If any lies outside the tabulated band.
        """
        first, last = float(self.frequency_mhz[0]), float(self.frequency_mhz[-1])
        slack = 1e-9 * last
        if not (np.all(frequency_mhz >= first - slack) and np.all(frequency_mhz <= last + slack)):
            wanted = f"{float(np.min(frequency_mhz)):g} to {float(np.max(frequency_mhz)):g} MHz"
            raise InputError(
                f"beam.files: the table covers {first:g} to {last:g} MHz and {wanted} is wanted; "
                "a beam is not extrapolated in frequency"
            )
        if self.degree == 0:
            return np.ones((len(frequency_mhz), 1))
        inside = np.clip(frequency_mhz, first, last)
        return np.asarray(BSpline.design_matrix(inside, self.knots_mhz, self.degree) @ self.coefficients)

    @property
    def gaps_mhz(self) -> tuple[tuple[float, float], ...]:
        """Intervals without a tabulated frequency where their neighbours lead one to expect some, MHz."""
        step = np.diff(self.frequency_mhz)
        if len(step) < 2:
            return ()
        beside = np.minimum(np.append(step[1:], np.inf), np.append(np.inf, step[:-1]))
        return tuple(
            (float(self.frequency_mhz[i]), float(self.frequency_mhz[i + 1]))
            for i in np.flatnonzero(step > GAP * beside)
        )


@dataclass(frozen=True, eq=False)
class Roughness:
    """What smoothing took out.

    Attributes
    ----------
    frequency_mhz : ndarray[frequency]
        Tabulated frequencies, MHz.
    relative_rms : ndarray[frequency]
        Root mean square over the sphere of what was taken out, over that of the pattern.
    temperature_k : ndarray[frequency]
        What it is worth in antenna temperature, K: root mean square over all orientations of the sky.
    """

    frequency_mhz: FloatArray
    relative_rms: FloatArray
    temperature_k: FloatArray


def frequency_spline(frequency_mhz: FloatArray, smoothing_mhz: float | None) -> FrequencySpline:
    """Spline through, or fitted to, the tabulated frequencies.

    Parameters
    ----------
    frequency_mhz : ndarray[frequency]
        Tabulated frequencies, MHz, rising.
    smoothing_mhz : float or None
        Distance of knots of the least-squares fit, MHz; None to interpolate. Knots with no tabulated
        frequency between them are merged.

    Returns
    -------
    FrequencySpline

    Raises
    ------
    InputError
        If the scale leaves nothing to smooth: as many coefficients as frequencies.
    """
    count = len(frequency_mhz)
    if smoothing_mhz is None:
        if count == 1:
            return FrequencySpline(frequency_mhz, frequency_mhz, np.ones((1, 1)), 0, None)
        spline = make_interp_spline(frequency_mhz, np.eye(count), k=min(DEGREE, count - 1))
        return FrequencySpline(frequency_mhz, spline.t, spline.c, spline.k, None)
    inner = _inner_knots(frequency_mhz, smoothing_mhz)
    if len(inner) + DEGREE + 1 >= count:
        raise InputError(
            f"beam.smoothing_mhz: {smoothing_mhz:g} MHz leaves nothing to smooth with {count} frequencies from "
            f"{frequency_mhz[0]:g} to {frequency_mhz[-1]:g} MHz: {len(inner) + DEGREE + 1} coefficients; "
            "they must be fewer than the frequencies"
        )
    ends = np.repeat(frequency_mhz[[0, -1]], DEGREE + 1)
    knots = np.concatenate([ends[: DEGREE + 1], inner, ends[DEGREE + 1 :]])
    spline = make_lsq_spline(frequency_mhz, np.eye(count), knots, k=DEGREE, method="qr")
    return FrequencySpline(frequency_mhz, spline.t, spline.c, DEGREE, smoothing_mhz)


def _inner_knots(frequency_mhz: FloatArray, smoothing_mhz: float) -> FloatArray:
    first, last = frequency_mhz[0], frequency_mhz[-1]
    edges = np.linspace(first, last, max(round((last - first) / smoothing_mhz), 1) + 1)
    kept = [edges[0]]
    for edge in edges[1:-1]:
        if np.any((frequency_mhz > kept[-1]) & (frequency_mhz <= edge)):
            kept.append(edge)
    while len(kept) > 1 and not np.any((frequency_mhz > kept[-1]) & (frequency_mhz < last)):
        kept.pop()
    return np.array(kept[1:])


def thinned_error(frequency_mhz: FloatArray, power: FloatArray, sphere: AngularSpline) -> tuple[float, float] | None:
    """Error of joining in frequency, from leaving out every other tabulated one.

    Parameters
    ----------
    frequency_mhz : ndarray[frequency]
        Tabulated frequencies, MHz, rising.
    power : ndarray[frequency, theta, phi]
    sphere : AngularSpline

    Returns
    -------
    tuple of float, or None
        Largest over frequency of the root mean square over the sphere, over that of the pattern; and the largest
        in any cell over the pattern's peak. Both for halved steps, divided by 15 although the splines used are of
        sixth order. None below 12 frequencies.
    """
    if len(frequency_mhz) < FEWEST_FOR_ERROR:
        return None
    kept = np.union1d(np.arange(0, len(frequency_mhz), 2), [len(frequency_mhz) - 1])
    left = np.setdiff1d(np.arange(len(frequency_mhz)), kept)
    matrix = np.zeros((len(left), len(frequency_mhz)))
    matrix[:, kept] = frequency_spline(frequency_mhz[kept], None).matrix(frequency_mhz[left])
    matrix[np.arange(len(left)), left] -= 1.0
    scale = 1.0 / sphere.mean(power)
    squares, whole, largest = np.zeros((3, len(left)))
    for rows in _blocks(power):
        some = power[:, rows] * scale[:, None, None]
        missed = np.tensordot(matrix, some, axes=1)
        weight = sphere.theta_weight[rows]
        squares += (missed**2 @ sphere.phi_weight) @ weight
        whole += (some[left] ** 2 @ sphere.phi_weight) @ weight
        largest = np.maximum(largest, np.abs(missed).max(axis=(1, 2)))
    peak = power[left].max(axis=(1, 2)) * scale[left]
    return float(np.sqrt(squares / whole).max()) / 15.0, float((largest / peak).max()) / 15.0


def undershoot(spline: FrequencySpline, power: FloatArray, frequency_mhz: FloatArray) -> FloatArray:
    """How far below zero the spline in frequency goes, over the peak: ndarray[node], zero where nowhere.

    Parameters
    ----------
    spline : FrequencySpline
    power : ndarray[frequency, theta, phi]
    frequency_mhz : ndarray[node]
        Where to look, MHz.
    """
    matrix = spline.matrix(frequency_mhz)
    lowest, highest = np.full((2, len(frequency_mhz)), 0.0)
    for rows in _blocks(power):
        values = np.tensordot(matrix, power[:, rows], axes=1)
        lowest = np.minimum(lowest, values.min(axis=(1, 2)))
        highest = np.maximum(highest, values.max(axis=(1, 2)))
    return np.asarray(np.abs(lowest) / highest)


def roughness_k(
    spline: FrequencySpline,
    power: FloatArray,
    theta_deg: FloatArray,
    phi_deg: FloatArray,
    sphere: AngularSpline,
    sky_mean_k: FloatArray,
) -> Roughness:
    """What the smoothing took out of the pattern, in relative power and in antenna temperature.

    Parameters
    ----------
    spline : FrequencySpline
    power : ndarray[frequency, theta, phi]
        The table; each frequency is brought to directivity first.
    theta_deg, phi_deg : ndarray[theta], ndarray[phi]
        Its directions, deg.
    sphere : AngularSpline
        Of the same directions.
    sky_mean_k : ndarray[frequency]
        Mean of the sky over the sphere, CMB left out (it has no contrast), at the tabulated frequencies, K.

    Returns
    -------
    Roughness
        For a pattern with harmonic power a_l^2 and a sky with s_l^2 (of its squared mean), both summed over
        the orders of a degree, the mean of their product has the variance Sum_l a_l^2 s_l^2/(2l+1) over all rotations;
        the s_l^2 are those of `SKY_POWER`.
    """
    scale = 1.0 / sphere.mean(power)
    matrix = (np.eye(len(scale)) - spline.matrix(spline.frequency_mhz)) * scale
    degrees = len(SKY_POWER)
    order = np.exp(-1j * np.outer(np.radians(phi_deg), np.arange(degrees + 1))) * sphere.phi_weight[:, None]
    squares, whole = np.zeros((2, len(scale)))
    moments = np.empty((len(scale), len(theta_deg), degrees + 1), dtype=np.complex128)
    for rows in _blocks(power):
        removed = np.tensordot(matrix, power[:, rows], axes=1)
        weight = sphere.theta_weight[rows]
        squares += (removed**2 @ sphere.phi_weight) @ weight
        whole += ((power[:, rows] * scale[:, None, None]) ** 2 @ sphere.phi_weight) @ weight
        moments[:, rows] = removed @ order
    degree_power = _degree_power(moments * sphere.theta_weight[:, None], np.cos(np.radians(theta_deg)))
    seen = degree_power[:, 1:] @ (SKY_POWER / (2.0 * np.arange(1, degrees + 1) + 1.0))
    return Roughness(spline.frequency_mhz, np.sqrt(squares / whole), sky_mean_k * np.sqrt(seen))


def _degree_power(moments: NDArray[np.complex128], cosine: FloatArray) -> FloatArray:
    """Sum over orders of squared harmonic coefficients, ndarray[frequency, degree].

    Parameters
    ----------
    moments : ndarray[frequency, theta, order]
        Weighted by theta.
    cosine : ndarray[theta]

    Notes
    -----
    Associated Legendre functions by the recursion in degree, scaled so that each harmonic has a mean square of one
    over the sphere (Press et al. 2007, Numerical Recipes, sec. 6.7).
    """
    degrees = moments.shape[2] - 1
    sine = np.sqrt(np.maximum(1.0 - cosine**2, 0.0))
    power = np.zeros((len(moments), degrees + 1))
    first = np.ones_like(cosine)
    for m in range(degrees + 1):
        before, here = np.zeros_like(cosine), first
        for degree in range(m, degrees + 1):
            power[:, degree] += (1.0 if m == 0 else 2.0) * np.abs(moments[:, :, m] @ here) ** 2
            up = np.sqrt((4.0 * (degree + 1) ** 2 - 1.0) / ((degree + 1) ** 2 - m**2))
            down = np.sqrt(max(degree**2 - m**2, 0) / (4.0 * degree**2 - 1.0)) if degree else 0.0
            before, here = here, up * (cosine * here - down * before)
        first = first * sine * np.sqrt((2.0 * m + 3.0) / (2.0 * m + 2.0))
    return power


def _blocks(power: FloatArray) -> list[slice]:
    """Rows of theta, a few thousand cells at a time, so that no copy of a large table is made."""
    rows = max(BLOCK_CELLS // power.shape[2], 1)
    return [slice(start, start + rows) for start in range(0, power.shape[1], rows)]
