"""The stages, in order, as a table of contents; `run` and `fit` for the command and for Python.

Each stage is a plain function from products and frozen settings to products. What is timed,
kept, reused and written lies with `reduce.runner`. No stage but the mock campaign that makes
the truth, and the plots that draw it beside the result, is ever given it.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from reduce.binning import bin_recording, mean_by_bin
from reduce.chromaticity import PASSES, corrected
from reduce.ensemble import (
    STREAM,
    check_campaign,
    drawn_paths,
    drawn_spectra,
    known_from,
    packed_ensemble,
    spread,
    without_drawn,
)
from reduce.handoff import bundle, combined_spectrum_text, information_from
from reduce.joint_fit import joint_fit
from reduce.knowledge_modes import engine_runs, knowledge_modes
from reduce.limits import limits_of
from reduce.limits_text import limits_text
from reduce.redraw import redrawer
from reduce.report.plots import plots
from reduce.report.summary import summary
from reduce.runner import Made, Outcome, Products, Progress, Stage, Tools, run_stages
from reduce.spectra import read_spectra
from reduce.transfer import transfer
from reduce.trough_model import TroughModel, trough_model
from reduce.turning_points import ENSEMBLES, Posterior, sample_posterior, summarise
from sims.campaign import engine_passes, observe
from sims.config import FORWARD_SECTIONS, Config, FitConfig
from sims.config_load import load_config, load_fit_config
from sims.errors import InputError
from sims.products import sha256_of
from sims.radio_background import CMB_ALONE, RadioBackground
from sims.schema import SPECTRA, TRUTH, describe
from sims.streams import stream
from sims.vantage import survey_geometry


def observe_campaign(products: Products, config: FitConfig, tools: Tools) -> Made:
    """Mock campaign -> binned spectra with their covariance, and the truth apart."""
    assert isinstance(config, Config)
    samples = survey_geometry(config.vantage, config.observation).sizes["time"]
    with tools.progress("sky average", samples * engine_passes(config)) as advance:
        observed = observe(config, advance)
    tools.note(f"{samples} samples kept of {config.observation.count}")
    tools.note(_engine_line(observed.reached.nodes, observed.reached.error_k, observed.reached.evaluations))
    spectra = bin_recording(observed.recording, config.bins)
    with tools.progress("what knowledge allows", engine_runs(config)) as advance:
        modes = knowledge_modes(config, advance, spectra["antenna_temperature_k"].values)
    if modes.names:
        spectra = spectra.assign(
            systematic_modes=(("mode", "bin", "channel"), modes.temperature_k),
            response_modes=(("mode", "bin", "channel"), modes.response),
        )
        spectra.attrs["mode_names"] = list(modes.names)
    if config.correction is not None:
        with tools.progress("chromaticity of the beam", PASSES * samples) as advance:
            spectra = corrected(spectra, config, advance)
        tools.note(f"chromaticity of the {config.correction.beam} beam divided out of the foreground")
    truth = observed.truth.assign_attrs(sky=config.sky.kind)
    binned = truth.drop_vars(["foreground_k", "signal_response"]).assign(
        {
            name: (("bin", "channel"), mean_by_bin(truth[name].values, observed.recording, config.bins))
            for name in ("foreground_k", "signal_response")
        }
    )
    return {"spectra.nc": describe(spectra, SPECTRA), "truth.nc": describe(binned, TRUTH)}


def draw_ensemble(products: Products, config: FitConfig, tools: Tools) -> Made:
    """Simulated campaigns over all that is uncertain -> mean and modes of the foreground."""
    assert isinstance(config, Config)
    assert config.foreground.draws is not None
    spectra = products.dataset("spectra.nc")
    check_campaign(spectra, config)
    ready = redrawer(config, tools.progress)
    with tools.progress("drawing the ensemble", config.foreground.draws) as advance:
        drawn = drawn_spectra(ready, STREAM, range(config.foreground.draws), advance)
    found = spread(drawn, np.where(spectra["flag"].values == 0, spectra["noise_variance"].values, np.nan))
    tools.note(
        f"ensemble: {found.draws} draws of {', '.join(drawn_paths(config))}; {len(found.size_of_noise)} modes, the "
        f"largest {found.size_of_noise[0]:.3g} times the noise, {int((found.size_of_noise > 1.0).sum())} above it; "
        f"variance times {found.inflation:.4f} for the number of draws"
    )
    return {"ensemble.nc": packed_ensemble(found, config)}


def subtract_foreground(products: Products, config: FitConfig, tools: Tools) -> Made:
    """Spectra -> bundle: foreground out of all bins together, the rest in the information form."""
    spectra = products.dataset("spectra.nc")
    model = _model(spectra, config)
    ensemble = None
    if config.foreground.family == "ensemble":
        assert isinstance(config, Config)
        ensemble, spectra = known_from(products.dataset("ensemble.nc")), without_drawn(spectra, config)
    fit = joint_fit(spectra, config.foreground, model, stream(config.run.seed, "joint-fit"), ensemble)
    sub = fit.subtraction
    tools.note(
        f"foreground: {config.foreground.family}, {config.foreground.free_terms} free terms a bin and "
        f"{fit.known_modes} modes with a prior, {len(fit.bins)} bins; "
        f"chi-squared {sub.chi_squared:.1f} of {sub.degrees_of_freedom}, condition number {sub.condition_number:.2g}, "
        f"{sub.iterations} iterations"
    )
    return {"bundle.nc": bundle(fit)}


def find_turning_points(products: Products, config: FitConfig, tools: Tools) -> Made:
    """Bundle -> posterior of B, C and D."""
    packed = products.dataset("bundle.nc")
    model, information = _model(packed, config), information_from(packed)
    with tools.progress("sampling turning points", ENSEMBLES * config.turning_points.steps) as advance:
        posterior = sample_posterior(
            information, model, config.turning_points, stream(config.run.seed, "posterior"), advance
        )
    sky = packed.attrs.get("sky", "measured")
    found = {
        "campaign": config.run.name,
        "sky": sky,
        **summarise(posterior, model, information),
        "gas": limits_on_gas(posterior, config),
    }
    return {"posterior.nc": posterior.samples.assign_attrs(sky=sky), "turning_points.json": found}


def limits_on_gas(posterior: Posterior, config: FitConfig) -> dict[str, Any]:
    """What the posterior's draws say of the gas, under the configured radio background."""
    draws = posterior.stacked()
    excess_k, index = config.limits.radio_excess_k, config.limits.radio_index
    background = CMB_ALONE
    if excess_k is not None and index is not None:
        background = RadioBackground(excess_k=excess_k, index=index)
    return limits_of(draws[:, :3], draws[:, 3:], background)


def write_spectrum(products: Products, config: FitConfig, tools: Tools) -> Made:
    """Bundle -> the combined spectrum as plain text."""
    return {"combined_spectrum.txt": combined_spectrum_text(products.dataset("bundle.nc"))}


def judge_transfer(products: Products, config: FitConfig, tools: Tools) -> Made:
    """Bundle -> what of any signal survives the subtraction, as a matrix and by shape."""
    packed = products.dataset("bundle.nc")
    return {"transfer.nc": transfer(packed, _model(packed, config), stream(config.run.seed, "transfer"))}


def report(products: Products, config: FitConfig, tools: Tools) -> Made:
    """Everything -> plots and the summary."""
    pictures = plots(products, config, _model(products.dataset("bundle.nc"), config))
    return {
        **pictures,
        "gas.txt": limits_text(products["turning_points.json"]["gas"]),
        "summary.txt": summary(products, config),
    }


PICTURES = ("spectra.png", "residuals.png", "trough.png", "turning_points.png", "transfer.png", "shapes.png")

_OBSERVE = Stage(
    name="observe",
    title="observe the mock campaign",
    sections=("run", *FORWARD_SECTIONS),
    needs=(),
    makes=("spectra.nc", "truth.nc"),
    work=observe_campaign,
)
_ENSEMBLE = Stage(
    name="ensemble",
    title="draw the ensemble of foregrounds",
    sections=("run", "foreground", *FORWARD_SECTIONS),
    needs=("spectra.nc",),
    makes=("ensemble.nc",),
    work=draw_ensemble,
)
_TURNING_POINTS = Stage(
    name="turning-points",
    title="find the turning points",
    sections=("run", "turning_points", "limits"),
    needs=("bundle.nc",),
    makes=("posterior.nc", "turning_points.json"),
    work=find_turning_points,
)
_SPECTRUM = Stage(
    name="spectrum",
    title="write the combined spectrum",
    sections=(),
    needs=("bundle.nc",),
    makes=("combined_spectrum.txt",),
    work=write_spectrum,
)
_TRANSFER = Stage(
    name="transfer",
    title="judge what the subtraction takes away",
    sections=("run", "turning_points"),
    needs=("bundle.nc",),
    makes=("transfer.nc",),
    work=judge_transfer,
)


def _subtract(more: tuple[str, ...]) -> Stage:
    return Stage(
        name="subtract",
        title="subtract the foreground",
        sections=("run", "foreground", "turning_points"),
        needs=("spectra.nc", *more),
        makes=("bundle.nc",),
        work=subtract_foreground,
    )


def _report(more: tuple[str, ...]) -> Stage:
    return Stage(
        name="report",
        title="draw and sum up",
        sections=("run", "foreground", "turning_points"),
        needs=("spectra.nc", *more, "bundle.nc", "transfer.nc", "posterior.nc", "turning_points.json"),
        makes=(*PICTURES, "gas.txt", "summary.txt"),
        work=report,
    )


_AFTER = (_TURNING_POINTS, _SPECTRUM, _TRANSFER)

STAGES = (_OBSERVE, _subtract(()), *_AFTER, _report(("truth.nc",)))
"""The whole way of a mock campaign."""

ENSEMBLE_STAGES = (_OBSERVE, _ENSEMBLE, _subtract(("ensemble.nc",)), *_AFTER, _report(("truth.nc", "ensemble.nc")))
"""The same with simulated campaigns as the foreground."""

FIT_STAGES = (_subtract(()), *_AFTER, _report(()))
"""The way of spectra that somebody measured."""

ENSEMBLE_FIT_STAGES = (_ENSEMBLE, _subtract(("ensemble.nc",)), *_AFTER, _report(("ensemble.nc",)))
"""The same with simulated campaigns as the foreground."""


def run(config_path: Path, out: Path, *, update: bool = False, progress: Progress | None = None) -> Outcome:
    """Run a mock campaign from sky to turning points.

    Parameters
    ----------
    config_path : Path
        TOML configuration.
    out : Path
        Output folder; made if it is not there.
    update : bool
        Allow products of another configuration in `out` to be replaced; what the change does
        not touch is reused.
    progress : Progress, optional
        Makes progress bars; none by default.

    Returns
    -------
    Outcome
        Folder, stages redone, and the text of the summary.

    Raises
    ------
    InputError
        If the configuration or the folder is not fit for it.
    """
    config = load_config(config_path)
    stages = ENSEMBLE_STAGES if config.foreground.family == "ensemble" else STAGES
    return run_stages(stages, config, out, update=update, progress=progress, given={})


def fit(
    spectra_path: Path,
    config_path: Path,
    out: Path,
    *,
    covariance_path: Path | None = None,
    update: bool = False,
    progress: Progress | None = None,
) -> Outcome:
    """Fit spectra that somebody measured.

    Parameters
    ----------
    spectra_path : Path
        NetCDF or CSV; see `reduce.spectra.read_spectra`.
    config_path : Path
        TOML with at least [run], [foreground] and [turning_points].
    out : Path
        Output folder.
    covariance_path : Path, optional
        Covariance that goes with a CSV table.
    update, progress
        As in `run`.

    Returns
    -------
    Outcome

    Raises
    ------
    InputError
        If spectra, configuration or folder are not fit for it.
    """
    config = load_fit_config(config_path)
    ensemble = config.foreground.family == "ensemble"
    if ensemble and not isinstance(config, Config):
        raise InputError(
            f'{config_path}: foreground.family = "ensemble" simulates campaigns: it needs the tables of a whole one, '
            f"{', '.join(FORWARD_SECTIONS)} (knowledge above all)"
        )
    spectra = read_spectra(spectra_path, covariance_path)
    files = [spectra_path] + ([] if covariance_path is None else [covariance_path])
    spectra.attrs["input_sha256"] = [sha256_of(path) for path in files]
    stages = ENSEMBLE_FIT_STAGES if ensemble else FIT_STAGES
    return run_stages(stages, config, out, update=update, progress=progress, given={"spectra.nc": spectra})


def _model(dataset: xr.Dataset, config: FitConfig) -> TroughModel:
    return trough_model(
        config.turning_points, np.asarray(dataset["frequency_mhz"].values), np.asarray(dataset["width_mhz"].values)
    )


def _engine_line(nodes: int, error_k: float, evaluations: int) -> str:
    if nodes:
        return f"engine: {nodes} Chebyshev nodes, {error_k * 1e6:.2g} microkelvin off them at worst"
    return (
        f"engine: not smooth in frequency; every channel integrated on its own, {evaluations} frequencies, "
        f"{error_k * 1e6:.2g} microkelvin between two quadratures"
    )
