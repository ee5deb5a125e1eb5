"""The trough as the posterior sees it: six numbers, their prior, and the spectrum they draw.

The turning points are named as the literature does: A, the dark-age trough; B, where first
starlight couples the gas; C, the deepest point, where X-ray heating overtakes; D, the peak
before reionisation; E, its end. B, C and D are free, A and E are held. `turning_points` and
`fast_posterior` share this model.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import NDArray

from reduce.signal_shape import POINTS, UniformShape, channel_means, quadrature_mhz
from sims.config import TurningPoints
from sims.errors import InputError
from sims.trough import turning_point_batch_k

__all__ = ["NAMES", "POINTS", "TroughModel", "trough_model"]

FloatArray = NDArray[np.float64]

NAMES = (
    "frequency_b_mhz",
    "frequency_c_mhz",
    "frequency_d_mhz",
    "temperature_b_mk",
    "temperature_c_mk",
    "temperature_d_mk",
)
UNITS = ("MHz", "MHz", "MHz", "mK", "mK", "mK")


@dataclass(frozen=True)
class TroughModel(UniformShape):
    """Cubic trough through A to E with zero slope at each, free at B, C and D.

    Attributes
    ----------
    lower, upper : ndarray[6]
        Bounds of the parameters `NAMES`, MHz and mK.
    held_mhz, held_mk : ndarray[2]
        Frequency and temperature of A and E, MHz and mK.
    points_mhz : ndarray[channel, point]
        Gauss-Legendre points of each channel, MHz; two, of equal weight, exact for cubics.
    """

    lower: FloatArray
    upper: FloatArray
    held_mhz: FloatArray
    held_mk: FloatArray
    points_mhz: FloatArray

    title: ClassVar[str] = "turning_points"
    rule: ClassVar[str] = "have b < c < d in frequency and c lowest in temperature"

    @property
    def names(self) -> tuple[str, ...]:
        """Of the parameters."""
        return NAMES

    @property
    def units(self) -> tuple[str, ...]:
        """Of the parameters."""
        return UNITS

    def signal_k(self, parameters: FloatArray) -> FloatArray:
        """Channel means of the trough.

        Parameters
        ----------
        parameters : ndarray[..., 6]
            As `NAMES`, MHz and mK.

        Returns
        -------
        ndarray[..., channel]
            Brightness, K; NaN where the frequencies do not rise from A to E.
        """
        free_mhz, free_mk = parameters[..., :3], parameters[..., 3:]
        frequency = _with_ends(self.held_mhz, free_mhz)
        temperature = _with_ends(self.held_mk, free_mk)
        trough = turning_point_batch_k(self.points_mhz.ravel(), frequency, temperature / 1e3)
        return channel_means(trough)

    def allowed(self, parameters: FloatArray) -> NDArray[np.bool_]:
        """Where the prior is not zero: inside the bounds, rising in frequency, C the lowest of the three."""
        inside = np.all((parameters >= self.lower) & (parameters <= self.upper), axis=-1)
        f, t = parameters[..., :3], parameters[..., 3:]
        rising = (f[..., 0] < f[..., 1]) & (f[..., 1] < f[..., 2])
        rising &= (f[..., 0] > self.held_mhz[0]) & (f[..., 2] < self.held_mhz[1])
        return np.asarray(inside & rising & (t[..., 1] < t[..., 0]) & (t[..., 1] < t[..., 2]))

    def turning_points(self, parameters: FloatArray) -> FloatArray:
        """Frequency, MHz, and temperature, mK, of B, C and D: ndarray[..., 3, 2]."""
        return np.stack([parameters[..., :3], parameters[..., 3:]], axis=-1)


def trough_model(settings: TurningPoints, frequency_mhz: FloatArray, width_mhz: FloatArray) -> TroughModel:
    """Model for the configured prior on these channels.

    Parameters
    ----------
    settings : TurningPoints
        The ``[turning_points]`` table.
    frequency_mhz, width_mhz : ndarray[channel]
        Centres and widths, MHz.

    Returns
    -------
    TroughModel

    Raises
    ------
    InputError
        If channels lie outside A to E.
    """
    edges = np.stack([frequency_mhz - width_mhz / 2.0, frequency_mhz + width_mhz / 2.0], axis=1)
    a, e = settings.a, settings.e
    if edges.min() < a.frequency_mhz or edges.max() > e.frequency_mhz:
        raise InputError(
            f"turning_points.a to turning_points.e: {a.frequency_mhz} to {e.frequency_mhz} MHz do not enclose the "
            f"channels, {edges.min():g} to {edges.max():g} MHz"
        )
    priors = (settings.b, settings.c, settings.d)
    bounds = np.array([prior.frequency_mhz for prior in priors] + [prior.temperature_mk for prior in priors])
    return TroughModel(
        lower=bounds[:, 0],
        upper=bounds[:, 1],
        held_mhz=np.array([a.frequency_mhz, e.frequency_mhz]),
        held_mk=np.array([a.temperature_mk, e.temperature_mk]),
        points_mhz=quadrature_mhz(frequency_mhz, width_mhz),
    )


def _with_ends(ends: FloatArray, middle: FloatArray) -> FloatArray:
    first = np.broadcast_to(ends[0], (*middle.shape[:-1], 1))
    last = np.broadcast_to(ends[1], (*middle.shape[:-1], 1))
    return np.concatenate([first, middle, last], axis=-1)
