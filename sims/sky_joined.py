"""A sky from maps at several frequencies, joined in each pixel by a smooth rule in ln T over ln f.

Takes what `sims.sky_survey` or `sims.sky_cube` reads, and the rule of `sims.sky_join`; `sims.sky`
builds it. Zero levels and scales are numbers of their own, so that they can be moved without
reading a map again.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from sims.config_sky import Joining
from sims.errors import InputError, raise_if_any
from sims.sky_join import joining_weights
from sims.sky_layers import Layers
from sims.sky_map_checks import Frame
from sims.sky_maps import pixel_directions
from sims.sky_power_law import dark_pixels_problem, frequencies_within
from sims.sky_survey import ManyMaps

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class JoinedSky:
    """Brightness of every direction at every frequency, from several maps.

    T(f) = G(f) + T_cmb(f), ln G(f) = sum_i W_i(f) ln G_i - change ln(f / f0), with
    G_i = scale_i (map_i - zero level_i) - T_cmb(f_i) and W of `sims.sky_join`. With gas or a
    background, `layers` takes the place of the CMB.

    Attributes
    ----------
    maps : ManyMaps
        The maps as read.
    frequency_mhz : float
        f0, where a change of the index leaves the brightness as it is, MHz.
    zero_levels_k, scales : ndarray[map]
        Error of each map's zero level, K, subtracted before its scale is applied.
    join : {"polynomial", "spline"}
    order : int or None
        Order of the polynomial.
    valid_from_mhz, valid_to_mhz : float
        Range of frequencies the join is held to be good for, MHz.
    index_change : float or ndarray[pixel]
        Added to the index, dimensionless; T ~ f^-beta.
    noise_k : float or ndarray[pixel]
        Added to the brightness that a map at f0 would show, K; carried along each pixel's spectrum.
    layers : Layers
        What lies before and behind; the CMB alone where nothing is said.

    Raises
    ------
    InputError
        With every problem found: shapes, and for each map its pixels at or below the CMB (and what
        else `layers` takes off), whose logarithm does not exist.
    """

    maps: ManyMaps
    frequency_mhz: float
    zero_levels_k: FloatArray
    scales: FloatArray
    join: Joining
    order: int | None
    valid_from_mhz: float
    valid_to_mhz: float
    index_change: float | FloatArray = 0.0
    noise_k: float | FloatArray = 0.0
    layers: Layers = field(default_factory=Layers)
    directions: FloatArray = field(init=False, repr=False)
    _log_galaxy: FloatArray = field(init=False, repr=False)
    _gain: FloatArray = field(init=False, repr=False)

    def __post_init__(self) -> None:
        count, pixels = self.maps.temperature_k.shape
        problems = [
            f"sky: {name} has shape {np.shape(value)}; allowed: one number, or {pixels} pixels"
            for name, value in (("index", self.index_change), ("noise", self.noise_k))
            if np.shape(value) not in ((), (pixels,))
        ]
        problems += [
            f"sky: {name} has shape {value.shape}; allowed: {count}, one a map"
            for name, value in (("zero levels", self.zero_levels_k), ("scales", self.scales))
            if value.shape != (count,)
        ]
        if not np.all(np.isfinite(self.index_change)):
            problems.append("sky: index is not finite everywhere; allowed: finite numbers")
        raise_if_any(problems)
        object.__setattr__(self, "_log_galaxy", self._logarithms())
        object.__setattr__(self, "_gain", self._noise_gain())
        object.__setattr__(self, "directions", pixel_directions(self.nside, self.frame))

    @property
    def nside(self) -> int:
        """HEALPix resolution."""
        return self.maps.nside

    @property
    def frame(self) -> Frame:
        """Frame of the pixels."""
        return self.maps.frame

    def corrected_map_k(self, number: int) -> FloatArray:
        """A map at its own frequency after zero level and scale, ndarray[pixel], K, CMB included."""
        return np.asarray(self.scales[number] * (self.maps.temperature_k[number] - self.zero_levels_k[number]))

    def brightness_k(self, frequency_mhz: ArrayLike) -> FloatArray:
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
        frequency = frequencies_within(frequency_mhz, self.valid_from_mhz, self.valid_to_mhz)
        galaxy = self._joined(frequency)
        galaxy -= np.multiply.outer(np.atleast_1d(self.index_change), np.log(frequency / self.frequency_mhz))
        np.exp(galaxy, out=galaxy)
        galaxy *= self._gain[:, np.newaxis]
        return self.layers.seen_k(galaxy, frequency)

    def mean_k(self, frequency_mhz: ArrayLike) -> FloatArray:
        """Mean over the sphere at each frequency, ndarray[frequency], K; checks as `brightness_k`."""
        return np.asarray(self.brightness_k(frequency_mhz).mean(axis=0))

    def misfit(self) -> FloatArray:
        """How far the join passes by each map, ndarray[map]: largest |ln T| over the pixels; zero through all maps."""
        apart = self._joined(self.maps.frequency_mhz) - self._log_galaxy.T
        return np.asarray(np.abs(apart).max(axis=0))

    def with_index_field(self, change: ArrayLike) -> JoinedSky:
        """Copy with `change`, a number or ndarray[pixel], added to the spectral index about f0."""
        return replace(self, index_change=self.index_change + np.asarray(change, dtype=np.float64))

    def with_map_noise(self, noise_k: ArrayLike) -> JoinedSky:
        """Copy with `noise_k`, K, a number or ndarray[pixel], added to what a map at f0 would show.

        Raises
        ------
        InputError
            If a pixel would fall to the CMB or below.
        """
        return replace(self, noise_k=self.noise_k + np.asarray(noise_k, dtype=np.float64))

    def _joined(self, frequency_mhz: FloatArray) -> FloatArray:
        weights = joining_weights(self.maps.frequency_mhz, frequency_mhz, self.join, self.order)
        return np.ascontiguousarray(self._log_galaxy.T @ weights.T)

    def _logarithms(self) -> FloatArray:
        """ln G_i, ndarray[map, pixel]."""
        problems: list[str] = []
        logarithms = np.empty_like(self.maps.temperature_k)
        for number, note in enumerate(self.maps.notes):
            frequency = float(self.maps.frequency_mhz[number])
            corrected = self.corrected_map_k(number)
            try:
                galaxy = self.layers.galaxy_k(corrected, frequency)
            except InputError as error:
                problems += error.problems
                continue
            state = (
                f"at {frequency:g} MHz after zero level ({self.zero_levels_k[number]:g} K) and scale "
                f"({self.scales[number]:g})"
            )
            dark = dark_pixels_problem(galaxy, corrected, f"sky: map {number}, {note.source}", state, self.layers)
            problems += dark
            if not dark:
                np.log(galaxy, out=logarithms[number])
        raise_if_any(problems)
        return logarithms

    def _noise_gain(self) -> FloatArray:
        """1 + noise / G(f0), ndarray[pixel or 1]."""
        if not np.any(self.noise_k):
            return np.ones(1)
        galaxy = np.exp(self._joined(np.array([self.frequency_mhz]))[:, 0])
        added = self.noise_k * self.layers.galaxy_per_map(self.frequency_mhz)
        state = f"at {self.frequency_mhz:g} MHz with the noise of the map"
        raise_if_any(dark_pixels_problem(galaxy + added, galaxy + added, "sky: joined maps", state, self.layers))
        return np.asarray(1.0 + added / galaxy)
