"""The diffuse sky at any frequency: a map, with a curved power law laid on each pixel and the CMB kept apart.

Takes what `sims.sky_maps` reads or `sims.sky_invented` makes, and gives the engine
(`sims.sky_average`) directions and brightness. A curved power law is smooth in ln f, as
the engine's expansion in frequency wants.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from sims.config import HealpixSky, ImageSky, InventedSky
from sims.constants import CMB_TEMPERATURE_K, rayleigh_jeans_k
from sims.errors import InputError, raise_if_any
from sims.sky_invented import INVENTED_FREQUENCY_MHZ, gaussian_field, invented_index_map, invented_sky_map
from sims.sky_maps import DiffuseMap, pixel_directions, read_healpix_map, read_image_map, read_index_map
from sims.streams import stream

__all__ = ["DiffuseSky", "diffuse_map_from", "gaussian_field", "sky_from"]

SkySettings = InventedSky | HealpixSky | ImageSky


@dataclass(frozen=True, eq=False)
class DiffuseSky:
    """Brightness of every direction at every frequency.

    T(f) = (T_map - T_cmb(f0)) (f / f0)^-(beta + gamma ln(f / f0)) + T_cmb(f), with
    T_map = scale (map - zero level) + noise and the CMB in Rayleigh-Jeans brightness.

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

    Raises
    ------
    InputError
        With every problem found: shapes, a range that does not rise, and pixels at or below
        the CMB at f0, whose foreground would be negative.
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
        excess = self._foreground_k()
        dark = ~(excess > 0.0)
        if dark.any():
            raise InputError(
                f"sky: map {self.diffuse_map.source}: {int(dark.sum())} of {dark.size} pixels are at or below the CMB "
                f"at {self.frequency_mhz:g} MHz after zero level ({self.zero_level_k:g} K), scale ({self.scale:g}) and "
                f"noise, lowest {np.min(self.corrected_map_k()):.4g} K, first pixels "
                f"{', '.join(str(pixel) for pixel in np.flatnonzero(dark)[:5])}; allowed: brighter everywhere"
            )
        object.__setattr__(self, "directions", pixel_directions(self.nside, self.diffuse_map.frame))

    @property
    def nside(self) -> int:
        """HEALPix resolution."""
        return self.diffuse_map.nside

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
        brightness += rayleigh_jeans_k(CMB_TEMPERATURE_K, frequency)
        return brightness

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
        return self.corrected_map_k() - rayleigh_jeans_k(CMB_TEMPERATURE_K, self.frequency_mhz)

    def _spectra(self, log_ratio: NDArray[np.float64]) -> NDArray[np.float64]:
        """(f / f0)^-(beta + gamma ln(f / f0)), ndarray[pixel or 1, frequency]."""
        exponent = np.multiply.outer(-np.atleast_1d(self.index), log_ratio)
        exponent -= self.curvature * log_ratio**2
        return np.asarray(np.exp(exponent, out=exponent))

    def _checked(self, frequency_mhz: ArrayLike) -> NDArray[np.float64]:
        frequency = np.atleast_1d(np.asarray(frequency_mhz, dtype=np.float64))
        if frequency.ndim != 1:
            raise InputError(f"sky: frequencies have shape {frequency.shape}; allowed: one dimension")
        outside = ~((frequency >= self.valid_from_mhz) & (frequency <= self.valid_to_mhz))
        if outside.any():
            raise InputError(
                f"sky: {int(outside.sum())} frequencies, {np.min(frequency):g} to {np.max(frequency):g} MHz, reach "
                f"outside sky.valid_from to sky.valid_to; allowed: {self.valid_from_mhz:g} to {self.valid_to_mhz:g} MHz"
            )
        return frequency


def sky_from(settings: SkySettings) -> DiffuseSky:
    """Build the sky that ``[sky]`` describes.

    Parameters
    ----------
    settings : InventedSky or HealpixSky or ImageSky
        The table. Where there is an index map, it gives how the index varies and
        ``sky.index`` its mean over the sphere, so that an error of the mean is one number.
        The invented sky brings such a map with it.

    Returns
    -------
    DiffuseSky

    Raises
    ------
    InputError
        With every problem of the map, and of the index map, found.
    """
    problems: list[str] = []
    try:
        diffuse_map: DiffuseMap | None = diffuse_map_from(settings)
    except InputError as error:
        diffuse_map, problems = None, [*problems, *error.problems]
    try:
        variation = _index_variation(settings)
    except InputError as error:
        problems = [*problems, *error.problems]
    raise_if_any(problems)
    assert diffuse_map is not None
    return DiffuseSky(
        diffuse_map=diffuse_map,
        frequency_mhz=settings.frequency_mhz,
        index=settings.index + variation,
        curvature=settings.curvature,
        zero_level_k=settings.zero_level_k,
        scale=settings.scale,
        valid_from_mhz=settings.valid_from_mhz,
        valid_to_mhz=settings.valid_to_mhz,
    )


def moved_sky(sky: DiffuseSky, before: SkySettings, after: SkySettings) -> DiffuseSky:
    """The sky of `after`, from that of `before`: without reading the map again where only numbers differ.

    Parameters
    ----------
    sky : DiffuseSky
        From `sky_from(before)`, without drawn fields.
    before, after : InventedSky or HealpixSky or ImageSky
        Two settings of the table.

    Returns
    -------
    DiffuseSky
    """
    numbers = ("index", "curvature", "zero_level_k", "scale", "valid_from_mhz", "valid_to_mhz")
    if before.model_copy(update={name: getattr(after, name) for name in numbers}) != after:
        return sky_from(after)
    return replace(
        sky,
        index=sky.index + (after.index - before.index),
        curvature=after.curvature,
        zero_level_k=after.zero_level_k,
        scale=after.scale,
        valid_from_mhz=after.valid_from_mhz,
        valid_to_mhz=after.valid_to_mhz,
    )


def diffuse_map_from(settings: SkySettings) -> DiffuseMap:
    """Read or invent the map that ``[sky]`` names.

    Raises
    ------
    InputError
        With every problem found.
    """
    if settings.kind == "invented":
        if settings.frequency_mhz != INVENTED_FREQUENCY_MHZ:
            raise InputError(
                f"sky.frequency: {settings.frequency_mhz:g} MHz; allowed with kind 'invented': "
                f"{INVENTED_FREQUENCY_MHZ:g} MHz, at which that sky is made"
            )
        return invented_sky_map(settings.nside, stream(settings.map_seed, "invented-sky"))
    if settings.kind == "healpix":
        return read_healpix_map(
            settings.file,
            field=settings.field,
            ordering=settings.ordering,
            frame=settings.frame,
            unit=settings.unit,
            missing=settings.missing,
            nside=settings.nside,
        )
    return read_image_map(
        settings.file,
        frame=settings.frame,
        unit=settings.unit,
        missing=settings.missing,
        nside=settings.nside,
    )


def _index_variation(settings: SkySettings) -> float | NDArray[np.float64]:
    """Departure of the spectral index from its mean over the sphere, at each pixel."""
    if settings.index_map is not None:
        frame = "galactic" if settings.kind == "invented" else settings.frame
        index = read_index_map(settings.index_map, nside=settings.nside, frame=frame)
    elif settings.kind == "invented":
        index = invented_index_map(settings.nside, stream(settings.map_seed, "invented-index"))
    else:
        return 0.0
    return np.asarray(index - index.mean())
