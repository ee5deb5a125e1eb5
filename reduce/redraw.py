"""Fast redraws: the binned spectra of a changed sky and antenna in a fraction of a second.

An ensemble needs a thousand campaigns. The mean beam of each bin on the sky (`sims.mean_beam`)
makes a changed sky one dot product, exactly. Where a number of beam, vantage or surface is
uncertain too, the mean beam is tabulated at five values of it and interpolated between. What two
of them do together beyond the sum of each is tabulated where a few samples show that a smooth
foreground would not take it away; what three do is left out.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from scipy import stats

from reduce.binning import bin_of_each_sample, mean_by_bin
from reduce.knowledge_modes import thinned
from sims.beam_files import antenna_from
from sims.campaign import geometry_like, scene_of, simulate
from sims.config import Config
from sims.draws import leaf_value, with_leaves
from sims.errors import InputError
from sims.frequency import channel_grid, chebyshev_nodes_mhz, mean_expansion_matrix
from sims.knowledge import Known
from sims.mean_beam import MeanBeam, mean_beam
from sims.pixel_sum import PixelSums
from sims.sky import AnySky, sky_from
from sims.sky_average import Sky, at_the_antenna
from sims.vantage import survey_geometry

FloatArray = NDArray[np.float64]
NEGLIGIBLE_K = 5e-5
ABSORBING_TERMS = 6
SCORES = (-3.0, -1.5, 1.5, 3.0)  # of the unit normal, at which a leaf is tabulated beside its configured value
# What acts on the sums over pixels, not in them: exact for any value.
OUTSIDE_THE_SUMS = (
    "beam.efficiency",
    "beam.structure_temperature_k",
    "surface.temperature_k",
    "surface.polar_temperature_k",
    "surface.temperature_exponent",
)


@dataclass(frozen=True, eq=False)
class Pair:
    """What two leaves do together, tabulated at the outermost values of each.

    Attributes
    ----------
    first, second : int
        Numbers of the leaves.
    beams : tuple of tuple of MeanBeam
        At the lower and upper value of the first (rows) and of the second.
    """

    first: int
    second: int
    beams: tuple[tuple[MeanBeam, ...], ...]


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
    nominal : MeanBeam
    moved : tuple of tuple of MeanBeam
        For each leaf the mean beams at its values but the first.
    pairs : tuple of Pair
        Leaves whose common effect counts.
    """

    config: Config
    sky: AnySky
    nodes_mhz: FloatArray
    to_channels: FloatArray
    leaves: tuple[str, ...]
    values: tuple[FloatArray, ...]
    nominal: MeanBeam
    moved: tuple[tuple[MeanBeam, ...], ...]
    pairs: tuple[Pair, ...]

    def spectra(self, config: Config, sky: Sky) -> tuple[FloatArray, FloatArray]:
        """Binned spectra of a changed configuration under a changed sky, as the engine would give them.

        Parameters
        ----------
        config : Config
            Differs from the nominal one in leaves of ``[knowledge]`` alone.
        sky : Sky
            Of the nominal resolution.

        Returns
        -------
        antenna_temperature_k, signal_response : ndarray[bin, channel]
        """
        sums = self._sums(config, np.ascontiguousarray(sky.brightness_k(self.nodes_mhz)))
        temperature, response = at_the_antenna(antenna_from(config.beam), config.surface, self.nodes_mhz, sums)
        return temperature @ self.to_channels, response @ self.to_channels

    def _sums(self, config: Config, brightness_k: FloatArray) -> PixelSums:
        at = [leaf_value(config, path) for path in self.leaves]
        singles = [lagrange(values, value) for values, value in zip(self.values, at, strict=True)]
        whole = 1.0 + sum(float(share[0]) - 1.0 for share in singles)
        parts: list[tuple[float, MeanBeam]] = []
        for pair in self.pairs:
            first, second = (lagrange(_ends(self.values[n]), at[n])[1:] for n in (pair.first, pair.second))
            both = np.outer(first, second)
            # C(x, y) = K(x, y) - K(x) - K(y) + K vanishes where either is as configured.
            parts += [(float(both[a, b]), pair.beams[a][b]) for a in (0, 1) for b in (0, 1)]
            singles[pair.first][[1, -1]] -= both.sum(axis=1)
            singles[pair.second][[1, -1]] -= both.sum(axis=0)
            whole += float(both.sum())
        for share, beams in zip(singles, self.moved, strict=True):
            parts += list(zip(share[1:].tolist(), beams, strict=True))
        found = [(share, beam.sums(brightness_k)) for share, beam in [(whole, self.nominal), *parts] if share != 0.0]
        sky_k, response, polar = (
            np.sum([share * getattr(sums, name) for share, sums in found], axis=0)
            for name in ("sky_k", "response", "polar")
        )
        return PixelSums(sky_k, response, polar, np.ones_like(sky_k))


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


def moving_leaves(config: Config) -> list[Known]:
    """Leaves of ``[knowledge]`` that move the beam on the sky."""
    return [
        leaf
        for leaf in config.knowledge.leaves
        if leaf.path.split(".")[0] in ("beam", "vantage", "surface") and leaf.path not in OUTSIDE_THE_SUMS
    ]


def redrawer(config: Config, advance: Callable[[int, int], None]) -> Redrawer:
    """Prepare the redraws of a campaign.

    Parameters
    ----------
    config : Config
        Nominal configuration.
    advance : callable
        Told the number of mean beams done, of how many: `advance(done, total)`.

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
    total, done = 1 + sum(len(row) - 1 for row in values) + 4 * len(pairs), [0]

    def averaged(moves: dict[str, float]) -> MeanBeam:
        changed = with_leaves(config, moves)
        scene = scene_of(changed, sky, geometry_like(changed, geometry, config))
        found = mean_beam(scene, nodes_mhz, label, weight, config.bins.count, _quiet)
        done[0] += 1
        advance(done[0], total)
        return found

    return Redrawer(
        config=config,
        sky=sky,
        nodes_mhz=nodes_mhz,
        to_channels=mean_expansion_matrix(grid, nodes).T,
        leaves=paths,
        values=tuple(values),
        nominal=averaged({}),
        moved=tuple(
            tuple(averaged({path: float(value)}) for value in row[1:]) for path, row in zip(paths, values, strict=True)
        ),
        pairs=tuple(
            Pair(
                one,
                two,
                tuple(
                    tuple(averaged({paths[one]: float(x), paths[two]: float(y)}) for y in _ends(values[two])[1:])
                    for x in _ends(values[one])[1:]
                ),
            )
            for one, two in pairs
        ),
    )


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
