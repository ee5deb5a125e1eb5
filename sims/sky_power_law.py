"""A sky from one map, with a curved power law laid on each pixel and the CMB kept apart.

Takes what `sims.sky_maps` reads or `sims.sky_invented` makes; `sims.sky` builds it. A curved
power law is smooth in ln f, as the engine's expansion in frequency wants.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from sims.errors import InputError, raise_if_any
from sims.sky_layers import Layers
from sims.sky_map_checks import Frame
from sims.sky_maps import DiffuseMap, pixel_directions


@dataclass(frozen=True, eq=False)
class DiffuseSky:
    """Brightness of every direction at every frequency.

    T(f) = (T_map - T_cmb(f0)) (f / f0)^-(beta + gamma ln(f / f0)) + T_cmb(f), with
    T_map = scale (map - zero level) + noise and the CMB in Rayleigh-Jeans brightness. With gas
    or a background, `layers` takes the place of the CMB.

    Attributes
    ----------
    diffuse_map : DiffuseMap
        The map as read.
    frequency_mhz : float
        f0, frequency of the map, MHz.
    index : float or ndarray[pixel]
        beta, dimensionless; T ~ f^-beta.
    curvature : float
        gamma, dimensionless.
    zero_level_k : float
        Error of the map's zero level, K, subtracted before scaling.
    scale : float
        Factor on the map.
    valid_from_mhz, valid_to_mhz : float
        Range of frequencies the spectrum is held to be good for, MHz.
    noise_k : float or ndarray[pixel]
        Added to the corrected map, K.
    layers : Layers
        What lies before and behind; the CMB alone where nothing is said.

    Raises
    ------
    InputError
        With every problem found: shapes, a range that does not rise, and pixels at or below
        the CMB (and what else `layers` takes off) at f0, whose foreground would be negative.
    """

    diffuse_map: DiffuseMap
    frequency_mhz: float
    index: float | NDArray[np.float64]
    curvature: float
    zero_level_k: float
    scale: float
    valid_from_mhz: float
    valid_to_mhz: float
    noise_k: float | NDArray[np.float64] = 0.0
    layers: Layers = field(default_factory=Layers)
    directions: NDArray[np.float64] = field(init=False, repr=False)

    def __post_init__(self) -> None:
        pixels = self.diffuse_map.temperature_k.size
        problems = [
            f"sky: {name} has shape {np.shape(value)}; allowed: one number, or {pixels} pixels"
            for name, value in (("index", self.index), ("noise", self.noise_k))
            if np.shape(value) not in ((), self.diffuse_map.temperature_k.shape)
        ]
        if not np.all(np.isfinite(self.index)):
            problems.append("sky: index is not finite everywhere; allowed: finite numbers")
        if not 0.0 < self.valid_from_mhz < self.valid_to_mhz:
            problems.append(
                f"sky: valid_from {self.valid_from_mhz:g} MHz, valid_to {self.valid_to_mhz:g} MHz; "
                "allowed: positive and rising"
            )
        if not self.frequency_mhz > 0.0:
            problems.append(f"sky: frequency {self.frequency_mhz:g} MHz of the map; allowed: positive")
        raise_if_any(problems)
        name = f"sky: map {self.diffuse_map.source}"
        state = f"at {self.frequency_mhz:g} MHz after zero level ({self.zero_level_k:g} K), scale ({self.scale:g}) "
        galaxy, corrected = self._foreground_k(), self.corrected_map_k()
        raise_if_any(dark_pixels_problem(galaxy, corrected, name, f"{state}and noise", self.layers))
        object.__setattr__(self, "directions", pixel_directions(self.nside, self.diffuse_map.frame))

    @property
    def nside(self) -> int:
        """HEALPix resolution."""
        return self.diffuse_map.nside

    @property
    def frame(self) -> Frame:
        """Frame of the pixels."""
        return self.diffuse_map.frame

    def corrected_map_k(self) -> NDArray[np.float64]:
        """Map at its own frequency after zero level, scale and noise, ndarray[pixel], K, CMB included."""
        return np.asarray(self.scale * (self.diffuse_map.temperature_k - self.zero_level_k) + self.noise_k)

    def brightness_k(self, frequency_mhz: ArrayLike) -> NDArray[np.float64]:
        """Brightness of every pixel.

        Parameters
        ----------
        frequency_mhz : array_like[frequency]
            Frequencies, MHz; within `valid_from_mhz` to `valid_to_mhz`.

        Returns
        -------
        ndarray[pixel, frequency]
            Rayleigh-Jeans brightness temperature, K, CMB included; C-contiguous.

        Raises
        ------
        InputError
            If a frequency lies outside the valid range: a spectrum is not extrapolated silently.
        """
        frequency = self._checked(frequency_mhz)
        brightness = self._foreground_k()[:, np.newaxis] * self._spectra(np.log(frequency / self.frequency_mhz))
        return self.layers.seen_k(brightness, frequency)

    def mean_k(self, frequency_mhz: ArrayLike) -> NDArray[np.float64]:
        """Mean over the sphere at each frequency, ndarray[frequency], K; checks as `brightness_k`."""
        return np.asarray(self.brightness_k(frequency_mhz).mean(axis=0))

    def with_index_field(self, change: ArrayLike) -> DiffuseSky:
        """Copy with `change`, a number or ndarray[pixel], added to the spectral index."""
        return replace(self, index=self.index + np.asarray(change, dtype=np.float64))

    def with_map_noise(self, noise_k: ArrayLike) -> DiffuseSky:
        """Copy with `noise_k`, K, a number or ndarray[pixel], added to the corrected map at its own frequency.

        Raises
        ------
        InputError
            If a pixel would fall to the CMB or below.
        """
        return replace(self, noise_k=self.noise_k + np.asarray(noise_k, dtype=np.float64))

    def _foreground_k(self) -> NDArray[np.float64]:
        return self.layers.galaxy_k(self.corrected_map_k(), self.frequency_mhz)

    def _spectra(self, log_ratio: NDArray[np.float64]) -> NDArray[np.float64]:
        """(f / f0)^-(beta + gamma ln(f / f0)), ndarray[pixel or 1, frequency]."""
        exponent = np.multiply.outer(-np.atleast_1d(self.index), log_ratio)
        exponent -= self.curvature * log_ratio**2
        return np.asarray(np.exp(exponent, out=exponent))

    def _checked(self, frequency_mhz: ArrayLike) -> NDArray[np.float64]:
        return frequencies_within(frequency_mhz, self.valid_from_mhz, self.valid_to_mhz)


def frequencies_within(frequency_mhz: ArrayLike, valid_from_mhz: float, valid_to_mhz: float) -> NDArray[np.float64]:
    """Frequencies as ndarray[frequency], MHz, refused where they leave the valid range."""
    frequency = np.atleast_1d(np.asarray(frequency_mhz, dtype=np.float64))
    if frequency.ndim != 1:
        raise InputError(f"sky: frequencies have shape {frequency.shape}; allowed: one dimension")
    outside = ~((frequency >= valid_from_mhz) & (frequency <= valid_to_mhz))
    if outside.any():
        raise InputError(
            f"sky: {int(outside.sum())} frequencies, {np.min(frequency):g} to {np.max(frequency):g} MHz, reach "
            f"outside sky.valid_from to sky.valid_to; allowed: {valid_from_mhz:g} to {valid_to_mhz:g} MHz"
        )
    return frequency


def dark_pixels_problem(
    galaxy_k: NDArray[np.float64], map_k: NDArray[np.float64], name: str, state: str, layers: Layers
) -> list[str]:
    """What is to be said of pixels whose emission, ndarray[pixel], K, is not positive; nothing if there are none."""
    dark = ~(galaxy_k > 0.0)
    if not dark.any():
        return []
    behind = "the CMB"
    behind += " with the background" if layers.background is not None and layers.background.in_maps else ""
    behind += " and the emission of the gas" if layers.gas is not None and layers.gas.in_maps else ""
    return [
        f"{name}: {int(dark.sum())} of {dark.size} pixels are at or below {behind} {state}, lowest "
        f"{np.min(map_k):.4g} K, first pixels {', '.join(str(pixel) for pixel in np.flatnonzero(dark)[:5])}; "
        "allowed: brighter everywhere"
    ]
