"""Fast redraws: the binned spectra of a changed sky and antenna in a fraction of a second.

An ensemble needs a thousand campaigns. The mean beam of each bin on the sky (`sims.mean_beam`)
makes a changed sky one dot product, exactly. Where a number of beam, vantage or surface is
uncertain too, the mean beam is tabulated at five values of it and interpolated between. What two
of them do together beyond the sum of each is tabulated where a few samples show that a smooth
foreground would not take it away; what three do is left out. Many skies at once are one matrix
product for each frequency, so that the tables are read from memory once for all of them.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from scipy import stats

from reduce.binning import bin_of_each_sample, mean_by_bin
from reduce.knowledge_modes import moving_leaves, thinned
from sims.beam_files import antenna_from
from sims.campaign import geometry_like, scene_of, simulate
from sims.config import Config
from sims.draws import leaf_value, with_leaves
from sims.errors import InputError
from sims.frequency import channel_grid, chebyshev_nodes_mhz, mean_expansion_matrix
from sims.knowledge import Known
from sims.mean_beam import mean_beam
from sims.pixel_sum import PixelSums
from sims.sky import AnySky, sky_from
from sims.sky_average import Sky, at_the_antenna
from sims.vantage import survey_geometry

FloatArray = NDArray[np.float64]
Bars = Callable[[str, int], AbstractContextManager[Callable[[int], None]]]
NEGLIGIBLE_K = 5e-5
ABSORBING_TERMS = 6
SCORES = (-3.0, -1.5, 1.5, 3.0)  # of the unit normal, at which a leaf is tabulated beside its configured value


@dataclass(frozen=True, eq=False)
class Tables:
    """Mean beams side by side, each with the values of the leaves it belongs to.

    Attributes
    ----------
    on_sky : ndarray[node, beam, bin, pixel]
        As `MeanBeam.on_sky`.
    response, polar : ndarray[beam, bin, node]
        As `MeanBeam`.
    """

    on_sky: FloatArray
    response: FloatArray
    polar: FloatArray


@dataclass(frozen=True, eq=False)
class Redrawer:
    """All that a redraw needs; made once by `redrawer`.

    Attributes
    ----------
    config : Config
        Nominal configuration.
    sky : AnySky
        Nominal sky.
    nodes_mhz : ndarray[node]
        Frequencies at which the sky is summed, MHz.
    to_channels : ndarray[node, channel]
        From there to the means over channels.
    leaves : tuple of str
        Paths of the leaves that move the beam on the sky.
    values : tuple of ndarray[point]
        For each leaf the values tabulated, the configured one first.
    pairs : tuple of (int, int)
        Numbers of leaves whose common effect counts: tabulated at the outermost values of both.
    tables : Tables
        The nominal beam; then for each leaf those at its other values; then four for each pair.
    """

    config: Config
    sky: AnySky
    nodes_mhz: FloatArray
    to_channels: FloatArray
    leaves: tuple[str, ...]
    values: tuple[FloatArray, ...]
    pairs: tuple[tuple[int, int], ...]
    tables: Tables

    def spectra(self, changed: Sequence[tuple[Config, Sky]]) -> tuple[FloatArray, FloatArray]:
        """Binned spectra of changed configurations under changed skies, as the engine would give them.

        Parameters
        ----------
        changed : sequence of (Config, Sky)
            Configurations that differ from the nominal one in leaves of ``[knowledge]`` alone, and
            skies of the nominal resolution. Each takes nodes times pixels numbers of memory.

        Returns
        -------
        antenna_temperature_k, signal_response : ndarray[draw, bin, channel]
        """
        shares = np.array([self.shares(config) for config, _ in changed])
        sky_k = self._sky_sums(shares, [sky for _, sky in changed])
        response, polar = (np.einsum("dB,Bbn->dbn", shares, part) for part in (self.tables.response, self.tables.polar))
        rows = []
        for number, (config, _) in enumerate(changed):
            sums = PixelSums(sky_k[number], response[number], polar[number], np.ones_like(sky_k[number]))
            rows.append(at_the_antenna(antenna_from(config.beam), config.surface, self.nodes_mhz, sums))
        return (
            np.array([temperature for temperature, _ in rows]) @ self.to_channels,
            np.array([share for _, share in rows]) @ self.to_channels,
        )

    def shares(self, config: Config) -> FloatArray:
        """What share of each tabulated beam makes the mean beam of a configuration: ndarray[beam]; sums to one."""
        at = [leaf_value(config, path) for path in self.leaves]
        singles = [lagrange(values, value) for values, value in zip(self.values, at, strict=True)]
        whole = 1.0 + sum(float(share[0]) - 1.0 for share in singles)
        doubles: list[FloatArray] = []
        for one, two in self.pairs:
            first, second = (lagrange(_ends(self.values[n]), at[n])[1:] for n in (one, two))
            both = np.outer(first, second)
            # C(x, y) = K(x, y) - K(x) - K(y) + K vanishes where either is as configured.
            doubles.append(both.ravel())
            singles[one][[1, -1]] -= both.sum(axis=1)
            singles[two][[1, -1]] -= both.sum(axis=0)
            whole += float(both.sum())
        return np.concatenate([[whole], *(share[1:] for share in singles), *doubles])

    def _sky_sums(self, shares: FloatArray, skies: Sequence[Sky]) -> FloatArray:
        """Sums over pixels ndarray[draw, bin, node]."""
        nodes, beams, bins, pixels = self.tables.on_sky.shape
        brightness_k = np.array([sky.brightness_k(self.nodes_mhz) for sky in skies])
        sums = np.empty((len(skies), bins, nodes))
        for node, table in enumerate(self.tables.on_sky):
            each = brightness_k[:, :, node] @ table.reshape(beams * bins, pixels).T
            sums[:, :, node] = np.einsum("dB,dBb->db", shares, each.reshape(len(skies), beams, bins))
        return sums


def lagrange(nodes: FloatArray, at: float) -> FloatArray:
    """Weights ndarray[node] with which values at `nodes` make the polynomial's value `at`."""
    weights = np.ones(len(nodes))
    for one, node in enumerate(nodes):
        others = np.delete(nodes, one)
        weights[one] = np.prod((at - others) / (node - others))
    return weights


def tabulated_values(leaf: Known, configured: float) -> FloatArray:
    """Values at which the mean beam is tabulated: the configured one, then those of `SCORES` that differ from it."""
    others = np.unique(leaf.frozen(configured).ppf(stats.norm.cdf(SCORES)))
    return np.concatenate([[configured], others[others != configured]])


def _ends(values: FloatArray) -> FloatArray:
    """The configured value and the two outermost tabulated ones."""
    return values[[0, 1, -1]]


def redrawer(config: Config, progress: Bars) -> Redrawer:
    """Prepare the redraws of a campaign.

    Parameters
    ----------
    config : Config
        Nominal configuration.
    progress : callable
        Makes progress bars: `progress(title, total)` is a context that gives what is told of work done.

    Returns
    -------
    Redrawer

    Raises
    ------
    InputError
        If the sky average is not smooth in frequency: there are no nodes to sum at then.
    """
    geometry, grid = survey_geometry(config.vantage, config.observation), channel_grid(config.channels)
    sky = sky_from(config.sky)
    leaves = moving_leaves(config)
    values = [tabulated_values(leaf, leaf_value(config, leaf.path)) for leaf in leaves]
    paths = tuple(leaf.path for leaf in leaves)
    few = thinned(geometry, config)
    # A ripple that is zero as configured needs nodes too: count them with every leaf far out.
    outermost = with_leaves(config, {path: float(row[-1]) for path, row in zip(paths, values, strict=True)})
    nodes = simulate(outermost, sky, geometry_like(outermost, few, config), grid, _quiet).reached.nodes
    if nodes == 0:
        raise InputError(
            "engine: the sky average is not smooth in frequency within engine.nodes_cap nodes; redraws need it to be"
        )
    nodes_mhz = chebyshev_nodes_mhz(config.channels.start_mhz, config.channels.stop_mhz, nodes)
    label = bin_of_each_sample(geometry, config.bins)
    weight = geometry["integration_s"].values

    pairs = pairs_that_count(config, sky, few, paths, values)
    moves = tabulated_moves(paths, values, pairs)
    pixels = 12 * sky.nside**2
    tables = Tables(
        on_sky=np.empty((nodes, len(moves), config.bins.count, pixels)),
        response=np.empty((len(moves), config.bins.count, nodes)),
        polar=np.empty((len(moves), config.bins.count, nodes)),
    )
    with progress("mean beams on the sky", len(moves)) as advance:
        for number, move in enumerate(moves):
            changed = with_leaves(config, move)
            scene = scene_of(changed, sky, geometry_like(changed, geometry, config))
            beam = mean_beam(scene, nodes_mhz, label, weight, config.bins.count, _quiet)
            tables.on_sky[:, number] = np.moveaxis(beam.on_sky, 2, 0)
            tables.response[number], tables.polar[number] = beam.response, beam.polar
            advance(1)
    return Redrawer(
        config=config,
        sky=sky,
        nodes_mhz=nodes_mhz,
        to_channels=mean_expansion_matrix(grid, nodes).T,
        leaves=paths,
        values=tuple(values),
        pairs=tuple(pairs),
        tables=tables,
    )


def tabulated_moves(
    paths: tuple[str, ...], values: list[FloatArray], pairs: list[tuple[int, int]]
) -> list[dict[str, float]]:
    """What is moved in each tabulated beam: nothing; one leaf at each of its values; both of each pair."""
    moves: list[dict[str, float]] = [{}]
    moves += [{path: float(value)} for path, row in zip(paths, values, strict=True) for value in row[1:]]
    moves += [
        {paths[one]: float(x), paths[two]: float(y)}
        for one, two in pairs
        for x in _ends(values[one])[1:]
        for y in _ends(values[two])[1:]
    ]
    return moves


def pairs_that_count(
    config: Config, sky: AnySky, few: xr.Dataset, paths: tuple[str, ...], values: list[FloatArray]
) -> list[tuple[int, int]]:
    """Pairs of leaves that at their outermost values do more together than a foreground takes away.

    Parameters
    ----------
    config : Config
    sky : AnySky
    few : Dataset
        Geometry of a few samples of each bin.
    paths : tuple of str
        The leaves.
    values : list of ndarray[point]
        From `tabulated_values`.

    Returns
    -------
    list of (int, int)
        Those that leave more than `NEGLIGIBLE_K` after a log polynomial of `ABSORBING_TERMS` terms.
    """
    grid = channel_grid(config.channels)

    def spectrum(moves: dict[str, float]) -> FloatArray:
        changed = with_leaves(config, moves)
        average = simulate(changed, sky, geometry_like(changed, few, config), grid, _quiet)
        return mean_by_bin(average.antenna_temperature_k, few, config.bins)

    nominal = spectrum({})
    alone = [spectrum({path: float(row[-1])}) for path, row in zip(paths, values, strict=True)]
    found = []
    for one in range(len(paths)):
        for two in range(one + 1, len(paths)):
            both = spectrum({paths[one]: float(values[one][-1]), paths[two]: float(values[two][-1])})
            common = both - alone[one] - alone[two] + nominal
            if beyond_foreground_k(common, nominal, grid.centre_mhz, ABSORBING_TERMS) > NEGLIGIBLE_K:
                found.append((one, two))
    return found


def beyond_foreground_k(difference_k: FloatArray, level_k: FloatArray, frequency_mhz: FloatArray, terms: int) -> float:
    """What a log polynomial leaves of a small difference, to first order.

    Parameters
    ----------
    difference_k, level_k : ndarray[bin, channel]
        The difference, and the foreground that it is added to, K; NaN in bins without data.
    frequency_mhz : ndarray[channel]
        Frequency, MHz.
    terms : int
        Terms of the polynomial.

    Returns
    -------
    float
        The largest that is left over bins and channels, K.
    """
    x = np.log(frequency_mhz)
    x = 2.0 * (x - x[0]) / (x[-1] - x[0]) - 1.0
    polynomials = np.polynomial.chebyshev.chebvander(x, terms - 1)
    largest = 0.0
    for row, level in zip(difference_k, level_k, strict=True):
        if np.isfinite(row).all():
            basis = level[:, None] * polynomials
            left = row - basis @ np.linalg.lstsq(basis, row, rcond=None)[0]
            largest = max(largest, float(np.abs(left).max()))
    return largest


def _quiet(samples: int) -> None:
    """The bar counts mean beams."""
