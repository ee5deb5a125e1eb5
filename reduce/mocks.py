"""Mocks that a reduction is tested on: other skies, antennas, receivers, troughs and noise every time.

Foregrounds are fast redraws from a stream of their own (`reduce.redraw`); a trough from the prior, or none, and
noise are put on each, and it is reduced as any campaign is: with the response that its team believes in, and
never with an ensemble that holds it. `reduce.trust` asks for hundreds.
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from functools import partial
from multiprocessing import get_context

import numpy as np
import xarray as xr
from numba import set_num_threads
from numpy.typing import NDArray
from threadpoolctl import threadpool_limits

from reduce.binning import bin_of_each_sample, sum_by_bin
from reduce.ensemble import DrawnSpectra
from reduce.fast_posterior import detection_statistic
from reduce.foreground.known import KnownForeground
from reduce.joint_fit import joint_fit
from reduce.quick_posterior import CompressedBank, compressed_bank
from reduce.redraw import Redrawer
from reduce.trough_model import TroughModel, trough_model
from sims.config import Config
from sims.frequency import channel_grid
from sims.receiver import gain, noise_variance_k2, received_k
from sims.schema import SPECTRA, describe
from sims.streams import stream
from sims.vantage import survey_geometry

FloatArray = NDArray[np.float64]

STREAM = "trust"
BATCH = 10


@dataclass(frozen=True, eq=False)
class MockBench:
    """What all mocks share: the campaign as its team believes it to be.

    Attributes
    ----------
    config : Config
        Of the reduction.
    template : xarray.Dataset
        Spectra with the believed response, flags and modes; the temperatures are to be filled in.
    seconds : ndarray[bin]
        Time on the antenna, s.
    model : TroughModel
    bank : CompressedBank
    ensemble : KnownForeground or None
    """

    config: Config
    template: xr.Dataset
    seconds: FloatArray
    model: TroughModel
    bank: CompressedBank
    ensemble: KnownForeground | None


@dataclass(frozen=True, eq=False)
class Reduced:
    """One mock reduced.

    Attributes
    ----------
    truth, mean, sd, rank : ndarray[parameter]
        What was put in (NaN where nothing was); posterior mean and standard deviation; posterior
        probability below the truth.
    statistic : float
        Depth of C below B and D over its error.
    log_bayes_factor : float
        ln of the evidence for a trough over that for no signal.
    chi_squared, degrees_of_freedom : float
        With any signal.
    effective : float
        Effective draws of the posterior.
    at_rest : bool
        Whether the fiducial signal stood still.
    """

    truth: FloatArray
    mean: FloatArray
    sd: FloatArray
    rank: FloatArray
    statistic: float
    log_bayes_factor: float
    chi_squared: float
    degrees_of_freedom: float
    effective: float
    at_rest: bool


def believed_spectra(ready: Redrawer) -> tuple[xr.Dataset, FloatArray]:
    """Spectra of the nominal campaign without noise, and the time on the antenna, s, of each bin."""
    config = ready.config
    geometry, grid = survey_geometry(config.vantage, config.observation), channel_grid(config.channels)
    label = bin_of_each_sample(geometry, config.bins)
    weight_s = sum_by_bin(geometry["integration_s"].values[:, None], label, config.bins.count)[:, 0]
    antenna_k, response = ready.spectra([(config, ready.sky)])
    temperature_k = received_k(antenna_k, grid.centre_mhz, grid.width_mhz, config.receiver)
    factor = gain(grid.centre_mhz, grid.width_mhz, config.receiver)
    shape = temperature_k.shape[1:]
    empty = np.where(weight_s > 0.0, 0, 2).astype(np.uint8)[:, None]
    spectra = xr.Dataset(
        {
            "frequency_mhz": ("channel", grid.centre_mhz),
            "width_mhz": ("channel", grid.width_mhz),
            "antenna_temperature_k": (("bin", "channel"), temperature_k[0]),
            "noise_variance": (("bin", "channel"), np.ones(shape)),
            "signal_response": (("bin", "channel"), response[0] * factor),
            "flag": (("bin", "channel"), np.broadcast_to(grid.masked.astype(np.uint8), shape) | empty),
            "weight_s": ("bin", weight_s),
        }
    )
    seconds = np.where(weight_s > 0.0, weight_s, 1.0) * config.observation.duty_cycle
    return with_temperature(spectra, temperature_k[0], seconds, config), seconds


def with_temperature(spectra: xr.Dataset, temperature_k: FloatArray, seconds: FloatArray, config: Config) -> xr.Dataset:
    """The same spectra at other temperatures ndarray[bin, channel], K, with the noise that goes with them."""
    variance = noise_variance_k2(
        temperature_k, config.receiver.temperature_k, spectra["width_mhz"].values, seconds[:, None]
    )
    found = spectra.assign(
        antenna_temperature_k=(("bin", "channel"), temperature_k), noise_variance=(("bin", "channel"), variance)
    )
    return describe(found, SPECTRA)


def mock_bench(
    config: Config, template: xr.Dataset, seconds: FloatArray, ensemble: KnownForeground | None
) -> MockBench:
    """Put together what mocks share; the prior's bank is drawn here."""
    model = trough_model(config.turning_points, template["frequency_mhz"].values, template["width_mhz"].values)
    bank = compressed_bank(model, stream(config.run.seed, f"{STREAM}/bank"))
    return MockBench(config, template, seconds, model, bank, ensemble)


def mock_spectra(
    bench: MockBench, temperature_k: FloatArray, response: FloatArray, number: int, truth: FloatArray | None
) -> tuple[xr.Dataset, FloatArray]:
    """Trough and noise on a drawn foreground.

    Parameters
    ----------
    bench : MockBench
    temperature_k, response : ndarray[bin, channel]
        One draw of `DrawnSpectra`.
    number : int
        Of the mock: its trough and noise can be made again alone.
    truth : ndarray[parameter] or None
        Turning points to put in, NaN for no trough; None draws them from the prior.

    Returns
    -------
    xarray.Dataset, ndarray[parameter]
        Spectra, and what was put in.
    """
    rng = stream(bench.config.run.seed, f"{STREAM}/trough-and-noise", number)
    drawn = bench.model.draw_prior(rng, 1)[0]
    parameters = drawn if truth is None else truth
    signal_k = bench.model.signal_k(parameters) if np.isfinite(parameters).all() else np.zeros(response.shape[1])
    clean_k = temperature_k + response * signal_k
    noise = np.sqrt(with_temperature(bench.template, clean_k, bench.seconds, bench.config)["noise_variance"].values)
    measured_k = clean_k + noise * rng.standard_normal(clean_k.shape)
    return with_temperature(bench.template, measured_k, bench.seconds, bench.config), parameters


def reduce_mock(
    bench: MockBench, temperature_k: FloatArray, response: FloatArray, number: int, truth: FloatArray | None
) -> Reduced:
    """Make one mock and reduce it; arguments as `mock_spectra`."""
    spectra, put_in = mock_spectra(bench, temperature_k, response, number, truth)
    rng = stream(bench.config.run.seed, f"{STREAM}/reduction", number)
    fit = joint_fit(spectra, bench.config.foreground, bench.model, rng, bench.ensemble, bench.bank)
    posterior, nothing = fit.posterior, np.zeros(bench.template.sizes["channel"])
    return Reduced(
        truth=put_in,
        mean=posterior.mean(),
        sd=np.sqrt(np.diag(posterior.covariance())),
        rank=posterior.rank(put_in),
        statistic=detection_statistic(posterior.mean(), posterior.covariance()),
        log_bayes_factor=posterior.log_evidence - float(fit.information.log_likelihood(nothing)),
        chi_squared=fit.information.chi_squared_min,
        degrees_of_freedom=fit.information.degrees_of_freedom,
        effective=posterior.effective,
        at_rest=fit.at_rest,
    )


Task = tuple[FloatArray, FloatArray, int, FloatArray | None]


def _one_thread() -> None:
    """Each process keeps to one thread; more would wait for each other."""
    set_num_threads(1)
    threadpool_limits(1)


def _reduce_batch(bench: MockBench, tasks: list[Task]) -> list[Reduced]:
    return [reduce_mock(bench, *task) for task in tasks]


def reduce_all(
    bench: MockBench,
    drawn: DrawnSpectra,
    first: int,
    truth: FloatArray | None,
    processes: int,
    advance: Callable[[int], None],
) -> list[Reduced]:
    """Reduce a mock on each drawn foreground, in several processes.

    Parameters
    ----------
    bench : MockBench
    drawn : DrawnSpectra
    first : int
        Number of the first mock.
    truth : ndarray[parameter] or None
        As `mock_spectra`, the same for all.
    processes : int
    advance : callable
        Told of each mock done.

    Returns
    -------
    list of Reduced
    """
    tasks: list[Task] = [
        (temperature_k, response, first + number, truth)
        for number, (temperature_k, response) in enumerate(zip(drawn.temperature_k, drawn.response, strict=True))
    ]
    batches = [tasks[start : start + BATCH] for start in range(0, len(tasks), BATCH)]
    results: list[Reduced] = []
    with ProcessPoolExecutor(processes, mp_context=get_context("spawn"), initializer=_one_thread) as pool:
        for found in pool.map(partial(_reduce_batch, bench), batches):
            results += found
            advance(len(found))
    return results
