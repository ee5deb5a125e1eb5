"""Beam-chromaticity correction: what the beam's change with frequency does to the foreground, divided out.

Optional, after the observation and before any fit. The factor of a bin is the mean of the
Galaxy at one reference frequency through the beam of each frequency, over the same through the
beam of the reference (Mozdzen et al. 2017, MNRAS 464, 4995; 2019, MNRAS 483, 4411), taken over
what of the sky is seen, straight and mirrored. Only the Galaxy is divided: the emission of
ground and structure and the CMB are taken off first and put back, or the CMB alone would gain
0.2 K of structure. It is exact where the spectral index is the same all over the sky.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from reduce.binning import mean_by_bin
from reduce.knowledge_modes import ENGINE_SECTIONS, thinned
from sims.beam_files import antenna_from
from sims.campaign import BlankSky, geometry_like, simulate, true_draw
from sims.config import Config
from sims.constants import CMB_TEMPERATURE_K, rayleigh_jeans_k
from sims.draws import leaf_value, with_leaves
from sims.errors import InputError
from sims.frequency import channel_grid
from sims.receiver import received_k
from sims.sky import AnySky, moved_sky, sky_from
from sims.vantage import survey_geometry

FloatArray = NDArray[np.float64]
PASSES = 2  # of the engine through all samples


@dataclass(frozen=True)
class FrozenGalaxy:
    """The sky of one frequency at all of them, without the CMB."""

    nside: int
    galaxy_k: FloatArray

    def brightness_k(self, frequency_mhz: FloatArray) -> FloatArray:
        """The same for every frequency: ndarray[pixel, frequency], K."""
        return np.repeat(self.galaxy_k[:, None], len(frequency_mhz), axis=1)


@dataclass(frozen=True)
class Factor:
    """The factor and what is known of it.

    Attributes
    ----------
    factor : ndarray[bin, channel]
        The foreground is divided by it; 1 at the reference.
    error : ndarray[bin, channel]
        Its standard deviation, from what ``[knowledge]`` says of sky, beam, vantage and surface.
    apart_k : ndarray[bin, channel]
        What is taken off before and put back after: ground, structure and CMB, K.
    """

    factor: FloatArray
    error: FloatArray
    apart_k: FloatArray


def chromaticity(config: Config, advance: Callable[[int], None]) -> Factor:
    """Factor of every bin and channel.

    Parameters
    ----------
    config : Config
        With a ``[correction]`` table. The beam and the sky are the nominal ones, unless
        ``correction.beam = "true"`` asks for those of a mock's truth.
    advance : callable
        Told the number of samples done, `PASSES` times each.

    Returns
    -------
    Factor
        From all samples; its error from a few of each bin.
    """
    assert config.correction is not None
    believed = true_draw(config).config if config.correction.beam == "true" else config
    everything = survey_geometry(config.vantage, config.observation)
    few = thinned(everything, config)
    sky = sky_from(believed.sky)
    factor, apart_k = _factor(believed, sky, everything, config, advance)
    start, _ = _factor(believed, sky, few, config, _quiet)
    squares = np.zeros_like(factor)
    for leaf in config.knowledge.leaves:
        if leaf.path.split(".")[0] in ENGINE_SECTIONS:
            step = float(leaf.frozen(leaf_value(config, leaf.path)).std())
            moved = _within(believed, leaf.path, leaf_value(believed, leaf.path), step)
            other, _ = _factor(moved, moved_sky(sky, believed.sky, moved.sky), few, config, _quiet)
            squares += (other / start - 1.0) ** 2
    return Factor(factor, factor * np.sqrt(squares), apart_k)


def corrected(spectra: xr.Dataset, config: Config, advance: Callable[[int], None]) -> xr.Dataset:
    """Spectra with the chromaticity of the beam divided out of their foreground.

    Parameters
    ----------
    spectra : xarray.Dataset
        `sims.schema.SPECTRA`, as observed.
    config : Config
        With a ``[correction]`` table.
    advance : callable
        See `chromaticity`.

    Returns
    -------
    xarray.Dataset
        Temperatures, noise, modes and signal response of the corrected spectra: the correction
        is a fixed linear map of the data, so the covariance is carried exactly. The factor and
        its error stand beside them.
    """
    known = chromaticity(config, advance)
    centre = spectra["frequency_mhz"].values
    apart = received_k(known.apart_k, centre, spectra["width_mhz"].values, config.receiver)
    divided = spectra.copy()
    over = xr.DataArray(known.factor, dims=("bin", "channel"))
    divided["antenna_temperature_k"] = (spectra["antenna_temperature_k"] - apart) / over + apart
    divided["noise_variance"] = spectra["noise_variance"] / over**2
    for name in ("signal_response", "systematic_modes", "response_modes"):
        if name in spectra:
            divided[name] = (spectra[name] / over).transpose(*spectra[name].dims)
    for given in spectra.data_vars:
        divided[given].attrs = dict(spectra[given].attrs)
    units = {"units": "1"}
    divided["chromaticity_factor"] = over.assign_attrs(units, long_name="what the foreground was divided by")
    error = xr.DataArray(known.error, dims=("bin", "channel"))
    divided["chromaticity_error"] = error.assign_attrs(units, long_name="standard deviation of that factor")
    return divided


def _factor(
    believed: Config, sky: AnySky, geometry: xr.Dataset, nominal: Config, advance: Callable[[int], None]
) -> tuple[FloatArray, FloatArray]:
    """Mean of the frozen Galaxy over that at the reference, and what is no Galaxy, K: ndarray[bin, channel] each."""
    assert nominal.correction is not None
    grid = channel_grid(nominal.channels)
    seen_from = geometry_like(believed, geometry, nominal)
    reference_mhz = np.array([nominal.correction.reference_mhz])
    galaxy_k = sky.brightness_k(reference_mhz)[:, 0] - rayleigh_jeans_k(CMB_TEMPERATURE_K, reference_mhz)
    frozen = simulate(believed, FrozenGalaxy(sky.nside, galaxy_k), seen_from, grid, advance)
    dark = simulate(believed, BlankSky(sky.nside), seen_from, grid, advance)
    beam = antenna_from(believed.beam)
    kept = beam.efficiency_at(grid.centre_mhz) * (1.0 - beam.ground_share_at(grid.centre_mhz))
    galaxy = mean_by_bin(frozen.antenna_temperature_k - dark.antenna_temperature_k, geometry, nominal.bins) / kept
    at_reference = np.stack([np.interp(reference_mhz[0], grid.centre_mhz, row) for row in galaxy])
    cmb_k = rayleigh_jeans_k(CMB_TEMPERATURE_K, grid.centre_mhz)
    apart_k = mean_by_bin(dark.antenna_temperature_k + dark.signal_response * cmb_k, geometry, nominal.bins)
    return np.asarray(galaxy / at_reference[:, None]), apart_k


def _within(config: Config, path: str, value: float, step: float) -> Config:
    """A leaf moved by its error, up or else down."""
    try:
        return with_leaves(config, {path: value + step})
    except InputError:
        return with_leaves(config, {path: value - step})


def _quiet(samples: int) -> None:
    """No bar: the engine takes less than a second on a few samples."""
