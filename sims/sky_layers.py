"""What lies before and behind the Galaxy's emission: ionised gas, extragalactic background, CMB.

Every sky (`sims.sky_power_law`, `sims.sky_joined`) takes this off its maps before it lays a
spectrum on the rest, and puts it back at each frequency. A map shows

    T = w(tau) T_galaxy + exp(-tau) (T_background + T_cmb) + T_e (1 - exp(-tau)),

with w = exp(-tau) for gas in front of everything and w = (1 - exp(-tau)) / tau for gas mixed
evenly with the emission (radiative transfer through a uniform layer; so used for the Galaxy by
Cane 1979, MNRAS 189, 465). Without gas tau = 0 and w = 1. Black bodies are in Rayleigh-Jeans
brightness throughout.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from sims.config_sky import Background, FreeFree
from sims.constants import CMB_TEMPERATURE_K, rayleigh_jeans_k
from sims.errors import InputError
from sims.sky_map_checks import Frame
from sims.sky_maps import pixel_directions, read_emission_measure_map, turn_directions

FloatArray = NDArray[np.float64]

OPACITY_AT_1_GHZ = 3.28e-7  # at 1e4 K and 1 pc cm^-6; Mezger and Henderson 1967, ApJ 147, 471
OPACITY_TEMPERATURE_POWER = -1.35  # same
OPACITY_FREQUENCY_POWER = -2.1  # same

LEAST_SHOWN = 0.05  # of the Galaxy's emission, for a map to tell it: an error of the map comes out 20-fold


def free_free_opacity(
    frequency_mhz: ArrayLike, electron_temperature_k: float, emission_measure_pc_cm6: ArrayLike
) -> FloatArray:
    """Opacity of ionised gas.

    Parameters
    ----------
    frequency_mhz : array_like[...]
        MHz.
    electron_temperature_k : float
        K.
    emission_measure_pc_cm6 : array_like[...]
        pc cm^-6; broadcast against the frequencies.

    Returns
    -------
    ndarray[...]
        tau = 3.28e-7 (T_e / 1e4 K)^-1.35 (f / GHz)^-2.1 EM (Mezger and Henderson 1967, ApJ 147, 471).
    """
    spectrum = (np.asarray(frequency_mhz, dtype=np.float64) / 1e3) ** OPACITY_FREQUENCY_POWER
    hotness = (electron_temperature_k / 1e4) ** OPACITY_TEMPERATURE_POWER
    return np.asarray(OPACITY_AT_1_GHZ * hotness * spectrum * np.asarray(emission_measure_pc_cm6, dtype=np.float64))


def gas_shape(settings: FreeFree | None, nside: int, frame: Frame) -> FloatArray | None:
    """What of the gas differs from pixel to pixel and does not change with its numbers.

    Parameters
    ----------
    settings : FreeFree or None
        The table.
    nside, frame
        Of the sky's pixels.

    Returns
    -------
    ndarray[pixel] or None
        "map": emission measure as read, pc cm^-6; "slab": |sin b|; "uniform": ones. None without gas.

    Raises
    ------
    InputError
        With every problem of the map.
    """
    if settings is None:
        return None
    if settings.kind == "map":
        return read_emission_measure_map(settings.file, nside=nside, frame=frame)
    if settings.kind == "slab":
        directions = turn_directions(pixel_directions(nside, frame), "icrs", "galactic")
        return np.asarray(np.abs(directions[:, 2]))
    return np.ones(1)


@dataclass(frozen=True, eq=False)
class Layers:
    """Gas, background and CMB of a sky.

    Attributes
    ----------
    gas : FreeFree or None
    background : Background or None
    shape : ndarray[pixel] or ndarray[1] or None
        From `gas_shape`.
    """

    gas: FreeFree | None = None
    background: Background | None = None
    shape: FloatArray | None = None

    def emission_measure_pc_cm6(self) -> FloatArray:
        """Emission measure, ndarray[pixel] or, where it is the same everywhere, ndarray[1]; pc cm^-6."""
        if self.gas is None or self.shape is None:
            return np.zeros(1)
        if self.gas.kind == "map":
            return self.gas.scale * self.shape
        if self.gas.kind == "slab":
            lowest = np.sin(np.radians(self.gas.lowest_latitude_deg))
            return np.asarray(self.gas.emission_measure_pc_cm6 / np.maximum(self.shape, lowest))
        return self.gas.emission_measure_pc_cm6 * self.shape

    def galaxy_k(self, map_k: FloatArray, frequency_mhz: float) -> FloatArray:
        """Emission of the Galaxy alone, K, from what a map shows at a frequency, K; ndarray[pixel] each.

        Raises
        ------
        InputError
            If the gas lets less than `LEAST_SHOWN` of it through somewhere: there it cannot be told from the map.
        """
        offset, factor = self._shown(frequency_mhz)
        return np.asarray((map_k - offset) / factor)

    def galaxy_per_map(self, frequency_mhz: float) -> FloatArray:
        """Change of the Galaxy's emission with what a map shows, ndarray[pixel] or ndarray[1]; as `galaxy_k`."""
        return np.asarray(1.0 / self._shown(frequency_mhz)[1])

    def seen_k(self, galaxy_k: FloatArray, frequency_mhz: FloatArray) -> FloatArray:
        """What is seen, ndarray[pixel, frequency], K, given the Galaxy's emission so; that is written over."""
        offset, factor = self._terms(frequency_mhz, in_maps=False)
        galaxy_k *= factor
        galaxy_k += offset
        return galaxy_k

    def _shown(self, frequency_mhz: float) -> tuple[FloatArray, FloatArray]:
        offset, factor = self._terms(np.array([frequency_mhz]), in_maps=True)
        hidden = int(np.sum(factor < LEAST_SHOWN))
        if hidden:
            raise InputError(
                f"sky.free_free: at {frequency_mhz:g} MHz the gas lets through less than {LEAST_SHOWN:.0%} of the "
                f"Galaxy's emission in {hidden} of {factor.size} directions, least {float(factor.min()):.2g}; allowed "
                "where in_maps = true: thinner gas, or maps at higher frequencies"
            )
        return offset[:, 0], factor[:, 0]

    def _terms(self, frequency_mhz: FloatArray, *, in_maps: bool) -> tuple[FloatArray, FloatArray]:
        """Offset, K, and factor of the Galaxy's emission, ndarray[pixel or 1, frequency].

        With `in_maps` only what the maps are said to show counts.
        """
        behind = np.atleast_2d(rayleigh_jeans_k(CMB_TEMPERATURE_K, frequency_mhz))
        if self.background is not None and (self.background.in_maps or not in_maps):
            ratio = frequency_mhz / self.background.frequency_mhz
            behind = behind + self.background.temperature_k * ratio**-self.background.index
        if self.gas is None or (in_maps and not self.gas.in_maps):
            return behind, np.ones((1, 1))
        measure = self.emission_measure_pc_cm6()[:, np.newaxis]
        tau = free_free_opacity(frequency_mhz, self.gas.electron_temperature_k, measure)
        absorbed = -np.expm1(-tau)
        emitted = rayleigh_jeans_k(self.gas.electron_temperature_k, frequency_mhz) * absorbed
        if self.gas.geometry == "in-front":
            factor = 1.0 - absorbed
        else:
            factor = np.divide(absorbed, tau, out=np.ones_like(tau), where=tau > 0.0)
        return np.asarray(behind * (1.0 - absorbed) + emitted), factor
