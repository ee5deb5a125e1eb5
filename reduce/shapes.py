"""Shapes of a signal beside the trough through turning points: a flattened Gaussian, and any function of a user's."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import ClassVar

import numpy as np
from numba import njit
from numpy.typing import NDArray

from reduce.extrema import curve_turning_points
from reduce.signal_shape import UniformShape, channel_means, quadrature_mhz
from sims.errors import InputError, raise_if_any

FloatArray = NDArray[np.float64]
UserFunction = Callable[[FloatArray, FloatArray], FloatArray]

GAUSSIAN_NAMES = ("depth_mk", "centre_mhz", "width_mhz", "flattening")
FINE_STEP_MHZ = 0.05  # of the grid on which turning points of a user's function are looked for
AT_ONCE = 500
NOTHING = -60.0  # ln of the share of the depth left, for the flattened Gaussian


@njit(cache=True, nogil=True)
def _flattened_rows(frequency_mhz: FloatArray, sets: FloatArray, brightness_k: FloatArray) -> None:
    """`sims.trough.flattened_gaussian_k` of each set of `GAUSSIAN_NAMES`, unchecked and without arrays in between."""
    for row in range(sets.shape[0]):
        # As there: the limit at 0 is 0/0, and 1e-12 is within 1e-12 of it.
        tau = max(sets[row, 3], 1e-12)
        steepness = 4.0 / sets[row, 2] ** 2 * math.log(-math.log1p(math.expm1(-tau) / 2.0) / tau)
        scale = sets[row, 0] / 1e3 / math.expm1(-tau)
        for point in range(frequency_mhz.size):
            power = steepness * (frequency_mhz[point] - sets[row, 1]) ** 2
            # Farther out than this a trough of any depth is below rounding of a kelvin.
            brightness_k[row, point] = 0.0 if power < NOTHING else -scale * math.expm1(-tau * math.exp(power))


@dataclass(frozen=True, eq=False)
class FlattenedGaussian(UniformShape):
    """Flattened Gaussian trough with a uniform prior (form of Bowman et al. 2018, Nature 555, 67).

    Attributes
    ----------
    lower, upper : ndarray[4]
        Bounds of depth, mK, centre, MHz, full width at half depth, MHz, and flattening.
    points_mhz : ndarray[channel, point]
        `quadrature_mhz` of the channels.
    """

    lower: FloatArray
    upper: FloatArray
    points_mhz: FloatArray

    title: ClassVar[str] = "flattened Gaussian"

    @property
    def names(self) -> tuple[str, ...]:
        """Of the parameters."""
        return GAUSSIAN_NAMES

    @property
    def units(self) -> tuple[str, ...]:
        """Of the parameters."""
        return ("mK", "MHz", "MHz", "")

    def signal_k(self, parameters: FloatArray) -> FloatArray:
        """Channel means ndarray[..., channel], K; NaN where depth or flattening is below 0, or the width not above."""
        flat = parameters.reshape(-1, len(GAUSSIAN_NAMES))
        depth_mk, _, width_mhz, flattening = flat.T
        good = np.isfinite(flat).all(axis=1) & (depth_mk >= 0.0) & (width_mhz > 0.0) & (flattening >= 0.0)
        result = np.full((len(flat), len(self.points_mhz)), np.nan)
        if good.any():
            at_points = np.empty((int(good.sum()), self.points_mhz.size))
            _flattened_rows(self.points_mhz.ravel(), flat[good], at_points)
            result[good] = channel_means(at_points)
        return result.reshape(*parameters.shape[:-1], -1)

    def turning_points(self, parameters: FloatArray) -> FloatArray:
        """C alone, at the centre: ndarray[..., 3, 2], MHz and mK; B and D, which this shape has not, are NaN."""
        found = np.full((*parameters.shape[:-1], 3, 2), np.nan)
        found[..., 1, 0], found[..., 1, 1] = parameters[..., 1], -parameters[..., 0]
        return found


def flattened_gaussian(
    frequency_mhz: FloatArray,
    width_mhz: FloatArray,
    *,
    depth_mk: tuple[float, float],
    centre_mhz: tuple[float, float],
    full_width_mhz: tuple[float, float],
    flattening: tuple[float, float],
) -> FlattenedGaussian:
    """Flattened Gaussian on these channels.

    Parameters
    ----------
    frequency_mhz, width_mhz : ndarray[channel]
        Centres and widths of the channels, MHz.
    depth_mk, centre_mhz, full_width_mhz, flattening : tuple of float
        Lowest and highest value of each parameter; the prior is uniform between them.

    Returns
    -------
    FlattenedGaussian

    Raises
    ------
    InputError
        If bounds are not finite and rising, depth or flattening may be negative, or the width not above 0.
    """
    bounds = np.array([depth_mk, centre_mhz, full_width_mhz, flattening], dtype=float)
    problems = _bound_problems("flattened Gaussian", GAUSSIAN_NAMES, bounds)
    for number, strict in ((0, False), (2, True), (3, False)):
        low = bounds[number, 0]
        if low < 0.0 or (strict and low == 0.0):
            must = "above 0" if strict else "0 or above"
            problems.append(f"flattened Gaussian, {GAUSSIAN_NAMES[number]}: lower bound {low:g}; it must be {must}")
    raise_if_any(problems)
    return FlattenedGaussian(bounds[:, 0], bounds[:, 1], quadrature_mhz(frequency_mhz, width_mhz))


@dataclass(frozen=True, eq=False)
class UserShape(UniformShape):
    """Any function of frequency and parameters, with a uniform prior.

    Attributes
    ----------
    function : callable
        Brightness of the sky, K, from frequencies ndarray[point], MHz, and parameters: ndarray[parameter] to
        ndarray[point], or where `batched` ndarray[set, parameter] to ndarray[set, point], which is faster.
    names, units : tuple of str
        Of the parameters.
    lower, upper : ndarray[parameter]
        Bounds, in `units`.
    points_mhz : ndarray[channel, point]
        `quadrature_mhz` of the channels.
    fine_mhz : ndarray[point]
        Where turning points are looked for, MHz: an even grid over the band.
    batched : bool
        Whether `function` takes many sets of parameters at once.
    """

    function: UserFunction
    names: tuple[str, ...]
    units: tuple[str, ...]
    lower: FloatArray
    upper: FloatArray
    points_mhz: FloatArray = field(repr=False)
    fine_mhz: FloatArray = field(repr=False)
    batched: bool = False

    title: ClassVar[str] = "user's shape"

    def signal_k(self, parameters: FloatArray) -> FloatArray:
        """Channel means ndarray[..., channel], K."""
        flat = parameters.reshape(-1, len(self.names))
        means = channel_means(self._at(self.points_mhz.ravel(), flat))
        return means.reshape(*parameters.shape[:-1], len(self.points_mhz))

    def turning_points(self, parameters: FloatArray) -> FloatArray:
        """B, C and D ndarray[..., 3, 2] as `reduce.extrema.curve_turning_points` finds them on the fine grid."""
        flat = parameters.reshape(-1, len(self.names))
        found = [
            curve_turning_points(self.fine_mhz, self._at(self.fine_mhz, flat[start : start + AT_ONCE]))
            for start in range(0, len(flat), AT_ONCE)
        ]
        return np.concatenate([np.empty((0, 3, 2)), *found]).reshape(*parameters.shape[:-1], 3, 2)

    def _at(self, frequency_mhz: FloatArray, sets: FloatArray) -> FloatArray:
        """The function at each set ndarray[set, parameter]: ndarray[set, point], K."""
        if self.batched:
            values = np.asarray(self.function(frequency_mhz, sets), float)
        else:
            rows = [np.asarray(self.function(frequency_mhz, each), float) for each in sets]
            if any(row.shape != frequency_mhz.shape for row in rows):
                raise InputError(f"{self._where()}: one value is needed for each of {frequency_mhz.size} frequencies")
            values = np.array(rows).reshape(len(sets), frequency_mhz.size)
        if values.shape != (len(sets), frequency_mhz.size):
            raise InputError(
                f"{self._where()}: got shape {values.shape}; allowed is [set, frequency], {len(sets)} by "
                f"{frequency_mhz.size}"
            )
        return values

    def _where(self) -> str:
        return f"user's shape, function {getattr(self.function, '__name__', 'without a name')}"


def user_shape(
    function: UserFunction,
    frequency_mhz: FloatArray,
    width_mhz: FloatArray,
    *,
    names: tuple[str, ...],
    units: tuple[str, ...],
    bounds: tuple[tuple[float, float], ...],
    batched: bool = False,
) -> UserShape:
    """A user's function on these channels.

    Parameters
    ----------
    function : callable
        As `UserShape.function`.
    frequency_mhz, width_mhz : ndarray[channel]
        Centres and widths of the channels, MHz.
    names, units : tuple of str
        Of the parameters.
    bounds : tuple of tuple of float
        Lowest and highest value of each parameter; the prior is uniform between them.
    batched : bool
        Whether `function` takes many sets of parameters at once.

    Returns
    -------
    UserShape

    Raises
    ------
    InputError
        If names, units and bounds differ in number, names are not distinct, bounds are not finite and rising, or the
        function does not give a finite brightness for every channel in the middle of the bounds.
    """
    limits = np.array(bounds, dtype=float).reshape(-1, 2)
    if not (len(names) == len(units) == len(limits) > 0) or len(set(names)) < len(names):
        raise InputError(
            f"user's shape: {len(names)} names ({len(set(names))} distinct), {len(units)} units, {len(limits)} pairs "
            "of bounds; as many of each are allowed, at least one, no name twice"
        )
    raise_if_any(_bound_problems("user's shape", names, limits))
    low_mhz, high_mhz = float((frequency_mhz - width_mhz / 2.0).min()), float((frequency_mhz + width_mhz / 2.0).max())
    fine_mhz = np.linspace(low_mhz, high_mhz, max(3, round((high_mhz - low_mhz) / FINE_STEP_MHZ) + 1))
    shape = UserShape(
        function, names, units, limits[:, 0], limits[:, 1], quadrature_mhz(frequency_mhz, width_mhz), fine_mhz, batched
    )
    middle_k = shape.signal_k(limits.mean(axis=1))
    if not np.isfinite(middle_k).all():
        raise InputError(
            f"{shape._where()}: {np.count_nonzero(~np.isfinite(middle_k))} of {middle_k.size} channels are not finite "
            "in the middle of the bounds; every allowed set of parameters must give kelvin everywhere"
        )
    return shape


def _bound_problems(where: str, names: tuple[str, ...], bounds: FloatArray) -> list[str]:
    return [
        f"{where}, {name}: bounds {low:g} to {high:g}; they must be finite and rise"
        for name, (low, high) in zip(names, bounds, strict=True)
        if not (np.isfinite(low) and np.isfinite(high) and low < high)
    ]
