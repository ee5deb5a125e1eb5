"""The foreground as an ensemble of simulated campaigns: mean and modes of redraws over all that is uncertain.

Every number and field of ``[knowledge]`` is drawn anew in each (`reduce.redraw`), so the bins, the
beam's chromaticity and the map's errors come out correlated as the forward model has them (Switzer
and Liu 2014, Phys. Rev. D 90, 023516; Vedantham et al. 2014, MNRAS 437, 1056; for what the bins know of
each other Liu et al. 2013, Phys. Rev. D 87, 043002). The modes are the principal axes of the draws in
units of the noise; each keeps its own variance, and none above a hundredth of the noise is dropped. The
truth of a mock has streams of its own and is in no ensemble.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from itertools import islice

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from reduce.foreground.known import SMALLEST_OF_NOISE, KnownForeground
from reduce.redraw import Redrawer
from sims.campaign import drawn_sky
from sims.config import Config
from sims.draws import draw
from sims.errors import InputError, raise_if_any
from sims.frequency import channel_grid
from sims.receiver import gain, received_k
from sims.schema import ENSEMBLE, describe
from sims.sky_average import Sky

FloatArray = NDArray[np.float64]

STREAM = "ensemble"
AT_ONCE = 16  # skies in memory together: 16 nodes of 49,152 pixels are 6 MB a sky
CHANNELS_AGREE = 1e-3  # of a channel
SPARE_DRAWS = 2.0  # the covariance of fewer draws than this many times its modes is not trusted


@dataclass(frozen=True, eq=False)
class DrawnSpectra:
    """Spectra of many draws, without noise or signal.

    Parameters
    ----------
    temperature_k : ndarray[draw, bin, channel]
        As the receiver reports them, K.
    response : ndarray[draw, bin, channel]
        Signal response, the receiver's gain included.
    """

    temperature_k: FloatArray
    response: FloatArray


@dataclass(frozen=True, eq=False)
class Spread:
    """What an ensemble's covariance is made of.

    Parameters
    ----------
    known : KnownForeground
        Mean and modes, the finite number of draws allowed for.
    size_of_noise : ndarray[mode]
        Standard deviation of each mode before that, in units of the noise; falling.
    draws : int
        Number of draws.
    inflation : float
        Factor on the modes' variance for the finite number of draws.
    """

    known: KnownForeground
    size_of_noise: FloatArray
    draws: int
    inflation: float


def drawn_spectra(
    ready: Redrawer, name: str, numbers: Sequence[int], advance: Callable[[int], None], world: Config | None = None
) -> DrawnSpectra:
    """Spectra of the draws of a stream.

    Parameters
    ----------
    ready : Redrawer
    name : str
        Name of the stream.
    numbers : sequence of int
        Which draws of it; each can be made again alone.
    advance : callable
        Told the number of draws done since it was last told.
    world : Config, optional
        Whose ``[knowledge]`` is drawn from; by default that of `ready`. It differs from it in that alone.

    Returns
    -------
    DrawnSpectra

    Raises
    ------
    InputError
        If a draw is not allowed.
    """
    config = ready.config if world is None else world

    def campaigns() -> Iterator[tuple[Config, Sky]]:
        for number in numbers:
            drawn = draw(config, name, number)
            yield drawn.config, drawn_sky(config, drawn, ready.sky, name)

    return redrawn(ready, campaigns(), len(numbers), advance)


def redrawn(
    ready: Redrawer, campaigns: Iterator[tuple[Config, Sky]], count: int, advance: Callable[[int], None]
) -> DrawnSpectra:
    """Spectra, as the receiver reports them, of `count` changed campaigns, taken a few at a time."""
    grid = channel_grid(ready.config.channels)
    shape = (count, ready.config.bins.count, grid.count)
    temperature_k, response = np.empty(shape), np.empty(shape)
    row = 0
    while changed := list(islice(campaigns, AT_ONCE)):
        antenna_k, reaching = ready.spectra(changed)
        for number, (config, _) in enumerate(changed):
            temperature_k[row] = received_k(antenna_k[number], grid.centre_mhz, grid.width_mhz, config.receiver)
            response[row] = reaching[number] * gain(grid.centre_mhz, grid.width_mhz, config.receiver)
            row += 1
        advance(len(changed))
    return DrawnSpectra(temperature_k, response)


def spread(drawn: DrawnSpectra, noise_variance_k2: FloatArray) -> Spread:
    """Mean and modes of an ensemble.

    Parameters
    ----------
    drawn : DrawnSpectra
    noise_variance_k2 : ndarray[bin, channel]
        Noise of the data to be fitted, K^2; not finite where there are none.

    Returns
    -------
    Spread
        The covariance of n draws with p modes above the noise is too small by (n - p - 2)/(n - 1) in
        the inverse (Hartlap, Simon and Schneider 2007, A&A 464, 399), and the mean of the draws has an
        error of its own: the variance of every mode is multiplied by (1 + 1/n)(n - 1)/(n - p - 2).

    Raises
    ------
    InputError
        If there are too few draws for their modes.
    """
    count = len(drawn.temperature_k)
    with_data = np.isfinite(noise_variance_k2)
    sigma_k = np.sqrt(np.where(with_data, noise_variance_k2, 1.0))
    mean_k = drawn.temperature_k.mean(axis=0)
    off = (drawn.temperature_k - mean_k) / sigma_k
    off[:, ~with_data] = 0.0
    left, singular, _ = np.linalg.svd(off.reshape(count, -1), full_matrices=False)
    size = singular / np.sqrt(count - 1.0)
    kept = size > SMALLEST_OF_NOISE
    size, above = size[kept], int((size > 1.0).sum())
    if count < SPARE_DRAWS * (above + 2):
        raise InputError(
            f"foreground.draws: {count} draws for {above} modes above the noise; allowed are at least "
            f"{int(np.ceil(SPARE_DRAWS * (above + 2)))}"
        )
    inflation = (1.0 + 1.0 / count) * (count - 1.0) / (count - above - 2.0)
    # Unit scores of the draws turn any other quantity of the draws into its change a mode.
    scores = left[:, kept] * np.sqrt(count - 1.0)
    size_up = np.sqrt(inflation)
    response = np.einsum("dm,dbc->mbc", scores, drawn.response - drawn.response.mean(axis=0)) / (count - 1.0)
    modes_k = np.einsum("dm,dbc->mbc", scores, drawn.temperature_k - mean_k) / (count - 1.0)
    return Spread(
        KnownForeground(mean_k, size_up * modes_k, size_up * response, count),
        size_of_noise=size,
        draws=count,
        inflation=inflation,
    )


def packed_ensemble(found: Spread, config: Config) -> xr.Dataset:
    """The product `sims.schema.ENSEMBLE`."""
    grid = channel_grid(config.channels)
    axes = ("mode", "bin", "channel")
    packed = xr.Dataset(
        {
            "frequency_mhz": ("channel", grid.centre_mhz),
            "width_mhz": ("channel", grid.width_mhz),
            "mean_k": (("bin", "channel"), found.known.mean_k),
            "modes_k": (axes, found.known.modes_k),
            "response_modes": (axes, found.known.response),
            "size_of_noise": ("mode", found.size_of_noise),
        },
        attrs={"draws": found.draws, "inflation": found.inflation, "drawn_paths": drawn_paths(config)},
    )
    return describe(packed, ENSEMBLE)


def known_from(packed: xr.Dataset) -> KnownForeground:
    """The ensemble of a product."""
    return KnownForeground(
        packed["mean_k"].values, packed["modes_k"].values, packed["response_modes"].values, int(packed.attrs["draws"])
    )


def drawn_paths(config: Config) -> list[str]:
    """What is drawn anew in each: paths of numbers, and the fields."""
    known = config.knowledge
    fields = [f"knowledge.{name}" for name in ("index_field", "map_noise") if getattr(known, name) is not None]
    return [leaf.path for leaf in known.leaves] + fields


def without_drawn(spectra: xr.Dataset, config: Config) -> xr.Dataset:
    """Spectra without the modes of numbers that the ensemble draws: they would be counted twice."""
    names = [str(name).removesuffix(" (mixed)") for name in np.atleast_1d(spectra.attrs.get("mode_names", []))]
    drawn = set(drawn_paths(config))
    if "systematic_modes" not in spectra or not names:
        return spectra
    kept = [number for number, name in enumerate(names) if name not in drawn]
    left = spectra.isel(mode=kept) if kept else spectra.drop_dims("mode")
    left = left.copy()
    left.attrs.pop("mode_names")
    return left.assign_attrs(mode_names=[names[number] for number in kept]) if kept else left


def check_campaign(spectra: xr.Dataset, config: Config) -> None:
    """Raise `InputError` unless the spectra have the bins and channels that the ensemble will have."""
    grid = channel_grid(config.channels)
    problems = []
    if spectra.sizes["bin"] != config.bins.count:
        problems.append(f"spectra: {spectra.sizes['bin']} bins; allowed are the {config.bins.count} of [bins]")
    if spectra.sizes["channel"] != grid.count:
        problems.append(f"spectra: {spectra.sizes['channel']} channels; allowed are the {grid.count} of [channels]")
    else:
        off_mhz = float(np.abs(spectra["frequency_mhz"].values - grid.centre_mhz).max())
        if off_mhz > CHANNELS_AGREE * float(grid.width_mhz.min()):
            problems.append(f"spectra: channels are up to {off_mhz:g} MHz off those of [channels]; allowed is none")
    raise_if_any(problems)
