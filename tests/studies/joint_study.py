"""The joint ensemble fit beside the customary one: a log polynomial on the single averaged spectrum.

Run it as ``python tests/studies/joint_study.py --config configs/joint.toml --mocks 500``. The same mocks, truths
from ``[knowledge]`` and troughs from the prior, are reduced in both ways; the log polynomial with rising numbers of
terms, until it is unbiased. Both are given the same knowledge of beam and receiver.
"""

from __future__ import annotations

import argparse
from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass
from functools import partial
from multiprocessing import get_context
from pathlib import Path

import numpy as np
import xarray as xr
from numba import set_num_threads
from threadpoolctl import threadpool_limits

from reduce.ensemble import DrawnSpectra, drawn_spectra
from reduce.forecast import fisher_covariance
from reduce.joint_fit import joint_fit
from reduce.mocks import STREAM, MockBench, believed_spectra, mock_bench, mock_spectra
from reduce.redraw import redrawer
from reduce.trough_model import NAMES
from reduce.trust import drawn_ensemble, with_knowledge
from sims.config import Config
from sims.config_load import load_config
from sims.config_reduction import Foreground
from sims.streams import stream

TERMS = range(5, 12)
UNBIASED = 0.1
WIDTH = (0.9, 1.1)


@dataclass(frozen=True, eq=False)
class Found:
    """One fit of one mock; chi-squared is that of the true trough."""

    truth: np.ndarray
    mean: np.ndarray
    sd: np.ndarray
    bound: np.ndarray
    chi_squared: float
    degrees_of_freedom: float


@contextmanager
def plain(title: str, total: int) -> Iterator[Callable[[int], None]]:
    """No bar, but a word."""
    print(f"{title}: {total}", flush=True)
    yield lambda done: None


def averaged(spectra: xr.Dataset) -> xr.Dataset:
    """All bins as one, weighted by their integration."""
    weight = spectra["weight_s"] / spectra["weight_s"].sum()
    mean = (spectra.drop_vars(["flag", "noise_variance", "weight_s"]) * weight).sum("bin").expand_dims("bin")
    kept = mean.transpose("bin", "mode", "channel", ...) if "mode" in mean.dims else mean
    result = kept.assign(
        frequency_mhz=spectra["frequency_mhz"],
        width_mhz=spectra["width_mhz"],
        noise_variance=(weight**2 * spectra["noise_variance"]).sum("bin").expand_dims("bin"),
        flag=spectra["flag"].isel(bin=[0]),
        weight_s=spectra["weight_s"].sum().expand_dims("bin"),
    )
    for name in spectra.variables:
        result[name].attrs = dict(spectra[name].attrs)
    return result.transpose("mode", "bin", "channel", missing_dims="ignore")


def ripple_known_in_both_phases(template: xr.Dataset, config: Config) -> xr.Dataset:
    """Modes of ``[knowledge]``, the ripple's also a quarter turn on: its phase is unknown."""
    first = with_knowledge(template, config, plain)
    turned = config.model_copy(
        update={
            "receiver": config.receiver.model_copy(update={"ripple_phase_deg": config.receiver.ripple_phase_deg - 90.0})
        }
    )
    second = with_knowledge(template, turned, plain)
    names = [str(name) for name in second.attrs["mode_names"]]
    ripple = second.isel(mode=[names.index("receiver.ripple_fraction")])
    return xr.concat([first, ripple], dim="mode", data_vars="minimal", coords="minimal", compat="override")


def fit_one(bench: MockBench, terms: int | None, temperature_k: np.ndarray, response: np.ndarray, number: int) -> Found:
    """Mock `number`, fitted by the ensemble, or averaged and fitted by a log polynomial of `terms`."""
    spectra, truth = mock_spectra(bench, temperature_k, response, number, None)
    rng = stream(bench.config.run.seed, f"{STREAM}/reduction", number)
    if terms is None:
        own = spectra.drop_dims("mode")
        fit = joint_fit(own, bench.config.foreground, bench.model, rng, bench.ensemble, bench.bank)
    else:
        settings = Foreground(family="log-polynomial", terms=terms)
        fit = joint_fit(averaged(spectra), settings, bench.model, rng, None, bench.bank)
    return Found(
        truth,
        fit.posterior.mean(),
        np.sqrt(np.diag(fit.posterior.covariance())),
        fisher_covariance(fit.information, bench.model, truth).sd_with_prior,
        fit.information.chi_squared_min - 2.0 * float(fit.information.log_likelihood(bench.model.signal_k(truth))),
        fit.information.rows - fit.information.nuisance_terms,
    )


def _one_thread() -> None:
    set_num_threads(1)
    threadpool_limits(1)


def _batch(bench: MockBench, terms: int | None, tasks: list[tuple[np.ndarray, np.ndarray, int]]) -> list[Found]:
    return [fit_one(bench, terms, *task) for task in tasks]


def fit_all(bench: MockBench, terms: int | None, drawn: DrawnSpectra, processes: int) -> list[Found]:
    """All mocks."""
    tasks = [(t, w, n) for n, (t, w) in enumerate(zip(drawn.temperature_k, drawn.response, strict=True))]
    batches = [tasks[start : start + 10] for start in range(0, len(tasks), 10)]
    with ProcessPoolExecutor(processes, mp_context=get_context("spawn"), initializer=_one_thread) as pool:
        return [found for part in pool.map(partial(_batch, bench, terms), batches) for found in part]


def line(title: str, found: list[Found]) -> bool:
    """Print one row; whether it is unbiased with honest errors."""
    pull = np.array([(f.mean - f.truth) / f.sd for f in found])
    sd = np.median([f.sd for f in found], axis=0)
    mean, width = pull.mean(axis=0), np.sqrt((pull**2).mean(axis=0))
    slack = 2.0 / np.sqrt(len(found))
    fine = (np.abs(mean) < UNBIASED + slack) & (width > WIDTH[0]) & (width < WIDTH[1] + slack)
    ratio = np.median([f.sd / f.bound for f in found], axis=0)
    chi = np.mean([f.chi_squared / f.degrees_of_freedom for f in found])
    print(
        f"{title:24} C {sd[1]:6.3f} MHz {sd[4]:7.2f} mK  chi2/dof {chi:.3f}  "
        + ("unbiased" if fine.all() else "BIASED")
    )
    for name, row in (("mean pull", mean), ("pull width", width), ("error / its bound", ratio)):
        print(f"   {name:18}" + "".join(f"{value:9.3f}" for value in row))
    return bool(fine.all())


def main() -> None:
    """Run the study and print its table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--config", type=Path, default=Path(__file__).parents[2] / "configs" / "joint.toml")
    parser.add_argument("--mocks", type=int, default=500)
    parser.add_argument("--processes", type=int, default=2)
    options = parser.parse_args()
    config = load_config(options.config)
    ready = redrawer(config, plain)
    template, seconds = believed_spectra(ready)
    ensemble = drawn_ensemble(ready, template, plain)
    drawn = drawn_spectra(ready, STREAM, range(options.mocks), lambda done: None)
    del ready
    bench = mock_bench(config, ripple_known_in_both_phases(template, config), seconds, ensemble)
    print(f"{options.mocks} mocks; median stated errors; pulls of {', '.join(NAMES)}")
    line("ensemble, 8 bins jointly", fit_all(bench, None, drawn, options.processes))
    for terms in TERMS:
        if line(f"{terms} log terms, averaged", fit_all(bench, terms, drawn, options.processes)):
            break


if __name__ == "__main__":
    main()
