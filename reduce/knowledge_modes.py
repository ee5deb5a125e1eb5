"""What ``[knowledge]`` says of single numbers, as modes of the data's covariance.

Each leaf is moved up and down by its error and the campaign is simulated again, without
noise, on a thinned set of samples. The slope of the binned spectra times the error is a
common error of one standard deviation: a column of U in C = noise + U U'. What the same
move does to the signal response goes with it.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from reduce.binning import bin_of_each_sample, mean_by_bin
from sims.campaign import geometry_like, simulate
from sims.config import Config
from sims.draws import correlation_root, leaf_value, with_leaves
from sims.errors import InputError
from sims.frequency import ChannelGrid, channel_grid
from sims.knowledge import Known
from sims.receiver import gain, received_k
from sims.sky import moved_sky, sky_from
from sims.sky_average import SkyAverage
from sims.vantage import survey_geometry

FloatArray = NDArray[np.float64]

SAMPLES_PER_BIN = 8  # where only the level counts
MOVED_SAMPLES_PER_BIN = 32  # where the beam moves on the sky: a tilt's mode is then good to 3 %, of 8 to 13 %
RATIO_TERMS = 6
ENGINE_SECTIONS = ("sky", "beam", "vantage", "surface")
# What acts on the sums over pixels, not in them: it moves no beam on the sky.
OUTSIDE_THE_SUMS = (
    "beam.efficiency",
    "beam.structure_temperature_k",
    "surface.temperature_k",
    "surface.polar_temperature_k",
    "surface.temperature_exponent",
)


@dataclass(frozen=True)
class KnowledgeModes:
    """Modes of the covariance.

    Attributes
    ----------
    names : tuple of str
        Path of the leaf behind each mode.
    temperature_k : ndarray[mode, bin, channel]
        Error of one standard deviation, K.
    response : ndarray[mode, bin, channel]
        Change of the signal response that goes with it.
    """

    names: tuple[str, ...]
    temperature_k: FloatArray
    response: FloatArray


def engine_runs(config: Config) -> int:
    """How many thinned engine runs the modes take: two a leaf outside the receiver, and the nominal one."""
    return 1 + 2 * sum(leaf.path.split(".")[0] in ENGINE_SECTIONS for leaf in config.knowledge.leaves)


def moving_leaves(config: Config) -> list[Known]:
    """Leaves of ``[knowledge]`` that move the beam on the sky."""
    return [
        leaf
        for leaf in config.knowledge.leaves
        if leaf.path.split(".")[0] in ("beam", "vantage", "surface") and leaf.path not in OUTSIDE_THE_SUMS
    ]


def thinned(geometry: xr.Dataset, config: Config, per_bin: int = SAMPLES_PER_BIN) -> xr.Dataset:
    """Up to `per_bin` samples of each bin, evenly spread."""
    label = bin_of_each_sample(geometry, config.bins)
    rows = [np.flatnonzero(label == number) for number in range(config.bins.count)]
    kept = [row[np.unique(np.linspace(0, len(row) - 1, per_bin).astype(int))] for row in rows if len(row)]
    return geometry.isel(time=np.sort(np.concatenate(kept)))


def knowledge_modes(
    config: Config, advance: Callable[[int], None], measured_k: FloatArray | None = None
) -> KnowledgeModes:
    """Modes for every leaf of ``[knowledge]``.

    Parameters
    ----------
    config : Config
        Nominal configuration.
    advance : callable
        Told the number of engine runs done; `engine_runs` in all.
    measured_k : ndarray[bin, channel], optional
        The binned spectra themselves, K, NaN where there are none: errors of the receiver act on
        them, and the few samples are brought to their level, smoothly in frequency, so that
        none of their noise enters a mode.

    Returns
    -------
    KnowledgeModes
        In the order of the table; correlated leaves mixed, so that the modes are independent.

    Raises
    ------
    InputError
        If a leaf is known so badly that no step of its error is allowed.
    """
    whole = survey_geometry(config.vantage, config.observation)
    few, more = thinned(whole, config), thinned(whole, config, MOVED_SAMPLES_PER_BIN)
    moving = {leaf.path for leaf in moving_leaves(config)}
    grid = channel_grid(config.channels)
    sky = sky_from(config.sky)
    nominal = simulate(config, sky, few, grid, _quiet)
    advance(1)
    level_of_all = None
    if measured_k is not None:
        thin_k = mean_by_bin(nominal.antenna_temperature_k, few, config.bins)
        level_of_all = smooth_ratio(measured_k, thin_k, grid.centre_mhz)
    names, temperatures, responses = [], [], []
    for leaf in config.knowledge.leaves:
        value = leaf_value(config, leaf.path)
        geometry = more if leaf.path in moving else few
        sd = _error(leaf, value)
        pair, reached = [], []
        for sign in (-1.0, 1.0):
            moved = _moved(config, leaf.path, value, sign * sd)
            reached.append(leaf_value(moved, leaf.path))
            average = nominal
            level = level_of_all
            if leaf.path.split(".")[0] in ENGINE_SECTIONS:
                other_sky = moved_sky(sky, config.sky, moved.sky)
                average = simulate(moved, other_sky, geometry_like(moved, geometry, config), grid, _quiet)
                advance(1)
                level = None
            pair.append(_binned(moved, average, geometry, grid, level))
        if reached[1] == reached[0]:
            raise InputError(
                f"knowledge.{leaf.path}: {value} can be moved by its error of {sd:g} neither up nor down within "
                "what is allowed; give the distribution a smaller sd, or bounds"
            )
        (low_k, low_w), (high_k, high_w) = pair
        names.append(leaf.path)
        temperatures.append((high_k - low_k) * sd / (reached[1] - reached[0]))
        responses.append((high_w - low_w) * sd / (reached[1] - reached[0]))
    shape = (len(names), config.bins.count, grid.count)
    root = correlation_root(config.knowledge)
    mixed = {path for group in config.knowledge.correlated for path in group.paths}
    return KnowledgeModes(
        names=tuple(f"{name} (mixed)" if name in mixed else name for name in names),
        temperature_k=np.einsum("mj,mbc->jbc", root, np.array(temperatures).reshape(shape)),
        response=np.einsum("mj,mbc->jbc", root, np.array(responses).reshape(shape)),
    )


def smooth_ratio(measured_k: FloatArray, model_k: FloatArray, frequency_mhz: FloatArray) -> FloatArray:
    """Ratio of two sets of spectra as a smooth function of frequency.

    Parameters
    ----------
    measured_k, model_k : ndarray[bin, channel]
        Spectra, K; not finite or not positive where not to be used.
    frequency_mhz : ndarray[channel]
        Frequency, MHz.

    Returns
    -------
    ndarray[bin, channel]
        exp of a polynomial of `RATIO_TERMS` terms in ln f fitted to the logarithm of the
        ratio; 1 in a bin with too few channels for it.
    """
    x = np.log(frequency_mhz)
    x = 2.0 * (x - x[0]) / (x[-1] - x[0]) - 1.0
    ratio = np.ones_like(model_k)
    with np.errstate(invalid="ignore", divide="ignore"):
        usable = np.isfinite(measured_k / model_k) & (measured_k / model_k > 0.0)
    for row, use in enumerate(usable):
        if use.sum() > RATIO_TERMS:
            logarithm = np.log(measured_k[row, use] / model_k[row, use])
            coefficients = np.polynomial.chebyshev.chebfit(x[use], logarithm, RATIO_TERMS - 1)
            ratio[row] = np.exp(np.polynomial.chebyshev.chebval(x, coefficients))
    return ratio


def _error(leaf: Known, nominal: float) -> float:
    """Root mean square of the leaf about its configured value: where `mean` differs, that counts as error too."""
    distribution = leaf.frozen(nominal)
    return float(np.hypot(distribution.std(), distribution.mean() - nominal))


def _moved(config: Config, path: str, value: float, step: float) -> Config:
    """The configuration with a leaf moved; not at all where what it allows ends before the step does."""
    try:
        return with_leaves(config, {path: value + step})
    except InputError:
        return config


def _binned(
    config: Config, average: SkyAverage, geometry: xr.Dataset, grid: ChannelGrid, level: FloatArray | None
) -> tuple[FloatArray, FloatArray]:
    antenna_k = mean_by_bin(average.antenna_temperature_k, geometry, config.bins)
    if level is not None:
        antenna_k = level * antenna_k
    channels = (grid.centre_mhz, grid.width_mhz)
    response = mean_by_bin(average.signal_response, geometry, config.bins) * gain(*channels, config.receiver)
    return received_k(antenna_k, *channels, config.receiver), response


def _quiet(samples: int) -> None:
    """The bar of the modes counts engine runs, not samples."""
