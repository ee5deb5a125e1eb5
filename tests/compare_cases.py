"""Spectra for tests of comparison and transfer: a log polynomial of six terms, the demo's trough, modes, noise."""

from __future__ import annotations

import numpy as np
import xarray as xr
from config_cases import DEMO, load_text
from numpy.typing import NDArray

from reduce.trough_model import TroughModel, trough_model
from sims.config import Config
from sims.schema import SPECTRA, describe

FloatArray = NDArray[np.float64]
# B, C, D of the demo, MHz and mK.
TROUGH = np.array([48.0, 71.0, 101.0, -6.0, -105.0, 22.0])
# Legendre coefficients of ln T over the band: six, the last 1e-4 of the level, a hundred times the noise of a channel.
COEFFICIENTS = np.array([7.0, -1.4, -0.02, 4e-3, -1e-3, 4e-4])


def demo_config(folder: object) -> Config:
    """The demo's configuration, through a file in `folder`."""
    return load_text(DEMO, folder)  # type: ignore[arg-type]


def channels(count: int) -> tuple[FloatArray, FloatArray]:
    """Centres and widths, MHz, over 40 to 120 MHz."""
    edges = np.linspace(40.0, 120.0, count + 1)
    return 0.5 * (edges[1:] + edges[:-1]), np.diff(edges)


def model_on(config: Config, count: int) -> TroughModel:
    """The demo's prior on these channels."""
    return trough_model(config.turning_points, *channels(count))


def spectra_on(
    model: TroughModel,
    bins: int,
    count: int,
    relative_noise: float,
    seed: int,
    *,
    modes: bool = True,
    coefficients: FloatArray = COEFFICIENTS,
) -> xr.Dataset:
    """Spectra of bins that differ in level and slope, one channel flagged, with or without two systematic modes."""
    rng = np.random.default_rng(seed)
    frequency, width = channels(count)
    x = (2.0 * np.log(frequency) - np.log(40.0 * 120.0)) / np.log(3.0)
    number = np.arange(bins)[:, None]
    foreground = np.exp(np.polynomial.legendre.legval(x, coefficients) + 0.1 * number - 0.02 * number * x)
    response = 0.65 + 0.03 * number + 0.02 * x
    sigma = relative_noise * foreground
    temperature = foreground + response * model.signal_k(TROUGH) + sigma * rng.standard_normal(foreground.shape)
    flag = np.zeros(foreground.shape, dtype=np.uint8)
    flag[:, count // 3] = 1
    cells = ("bin", "channel")
    found = {
        "frequency_mhz": ("channel", frequency),
        "width_mhz": ("channel", width),
        "antenna_temperature_k": (cells, np.where(flag == 0, temperature, np.nan)),
        "noise_variance": (cells, np.where(flag == 0, sigma**2, np.nan)),
        "signal_response": (cells, response),
        "flag": (cells, flag),
    }
    if modes:
        shapes = np.stack([1e-2 * foreground, 3.0 * sigma * np.cos(2.0 * np.pi * frequency / 30.0)])
        found["systematic_modes"] = (("mode", *cells), shapes)
        found["response_modes"] = (("mode", *cells), np.zeros_like(shapes))
    return describe(xr.Dataset(found), SPECTRA)
