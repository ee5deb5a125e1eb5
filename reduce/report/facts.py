"""What the figures and the summary share: draws, names of bins, the truth if there is one, what a fit leaves.

Everything comes from the products and the configuration; nothing is fitted here.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from reduce.covariance import DiagonalLowRank
from reduce.joint_fit import covariance_modes_k
from reduce.removed import without_known
from reduce.runner import Products
from reduce.trough_model import NAMES, POINTS
from sims.config import Config, FitConfig, FixedBoresight, ScheduledBoresight, TurningPointSignal

FloatArray = NDArray[np.float64]

MOST_DRAWS = 4000


def invented(products: Products, config: FitConfig) -> bool:
    """Whether the sky, and so the campaign, is made up."""
    if isinstance(config, Config) and config.sky.kind == "invented":
        return True
    return bool(products.dataset("spectra.nc").attrs.get("sky") == "invented")


def posterior_draws(posterior: xr.Dataset) -> FloatArray:
    """All draws ndarray[draw, 6], as `trough_model.NAMES`, MHz and mK."""
    return np.stack([posterior[name].values.ravel() for name in NAMES], axis=1)


def thinned(draws: FloatArray) -> FloatArray:
    """At most `MOST_DRAWS` of the draws, evenly spread over them."""
    rows = np.unique(np.linspace(0, len(draws) - 1, min(len(draws), MOST_DRAWS)).astype(int))
    return np.asarray(draws[rows])


def bins_with_data(products: Products) -> list[int]:
    """Numbers, in spectra.nc, of the bins of bundle.nc."""
    return [int(number) for number in np.atleast_1d(products.dataset("bundle.nc").attrs["bins_with_data"])]


def bin_labels(products: Products, config: FitConfig) -> tuple[str, list[str]]:
    """What distinguishes the bins, and a short name for each bin of spectra.nc."""
    spectra = products.dataset("spectra.nc")
    count = spectra.sizes["bin"]
    if "bin_labels" in spectra.attrs:
        return "bin", [str(label) for label in np.atleast_1d(spectra.attrs["bin_labels"])]
    numbers = [str(number) for number in range(count)]
    if not isinstance(config, Config) or config.bins.count != count:
        return "bin", numbers
    boresight = config.vantage.boresight
    if config.bins.by == "pointing":
        directions: list[tuple[float, float]] = []
        if isinstance(boresight, FixedBoresight):
            directions = list(boresight.directions_deg)
        elif isinstance(boresight, ScheduledBoresight):
            directions = [target.direction_deg for target in boresight.targets]
        named = [f"{number}: {ra:.0f}°, {dec:+.0f}°".replace("-", "−") for number, (ra, dec) in enumerate(directions)]
        return "bin: boresight RA, Dec", named
    span, unit = {"orbit-phase": (1.0, ""), "sidereal-time": (24.0, " h")}.get(config.bins.by, (0.0, ""))
    if span == 0.0:
        return "bin", numbers
    edges = np.linspace(0.0, span, count + 1)
    named = [f"{number}: {edges[number]:.3g} to {edges[number + 1]:.3g}{unit}" for number in range(count)]
    return f"bin: {config.bins.by.replace('-', ' ')}", named


def true_signal_k(products: Products) -> FloatArray | None:
    """Signal ndarray[channel] that was put in, K; None where nobody knows."""
    if "truth.nc" not in products:
        return None
    return np.asarray(products.dataset("truth.nc")["signal_k"].values)


def true_points(products: Products, config: FitConfig) -> dict[str, tuple[float, float]] | None:
    """Frequency, MHz, and temperature, mK, of B, C and D as put in.

    None where there is no truth, or it is not a trough through turning points.
    """
    if "truth.nc" not in products or not isinstance(config, Config):
        return None
    if not isinstance(config.signal, TurningPointSignal):
        return None
    points = (config.signal.b, config.signal.c, config.signal.d)
    return {name: (point.frequency_mhz, point.temperature_mk) for name, point in zip(POINTS, points, strict=True)}


def beyond_foreground_k(packed: xr.Dataset, values_k: FloatArray) -> FloatArray:
    """What the foreground fit leaves of spectra put on top of it, to first order.

    Parameters
    ----------
    packed : xarray.Dataset
        `sims.schema.BUNDLE`.
    values_k : ndarray[bin, channel, ...]
        Spectra, K.

    Returns
    -------
    ndarray[bin, channel, ...]
        Residual, K; NaN where flagged.
    """
    left_k = _beyond_free_k(packed, values_k)
    known = int(packed.attrs.get("foreground_known_modes", 0))
    if not known:
        return left_k
    good = packed["flag"].values == 0
    modes_k = covariance_modes_k(packed, packed["fiducial_signal_k"].values)
    covariance = DiagonalLowRank.from_bins(packed["noise_variance"].values, _beyond_free_k(packed, modes_k), good)
    left_k[good] = without_known(covariance, known, left_k[good])
    return left_k


def _beyond_free_k(packed: xr.Dataset, values_k: FloatArray) -> FloatArray:
    """What the free terms leave.

    The modes of the covariance have no part along them (`reduce.joint_fit`), so the generalised fit
    of the free terms is the one weighted by the noise, bin by bin.
    """
    good = packed["flag"].values == 0
    sigma_k = np.sqrt(packed["noise_variance"].values)
    tangent_k = packed["foreground_modes"].values
    left_k = np.full(values_k.shape, np.nan)
    for number, mask in enumerate(good):
        scale = sigma_k[number, mask]
        axes, _ = np.linalg.qr((tangent_k[number][:, mask] / scale).T)
        flat = values_k[number, mask].reshape(len(scale), -1) / scale[:, None]
        for _ in range(2):  # the second pass clears what rounding of a large value leaves
            flat = flat - axes @ (axes.T @ flat)
        left_k[number, mask] = (flat * scale[:, None]).reshape(values_k[number, mask].shape)
    return left_k


def left_of_signal_k(packed: xr.Dataset, signal_k: FloatArray) -> FloatArray:
    """What the foreground fit leaves ndarray[bin, channel] of a signal ndarray[channel], K."""
    return beyond_foreground_k(packed, packed["signal_response"].values * signal_k)


def residual_seen_k(packed: xr.Dataset) -> FloatArray:
    """Residual ndarray[bin, channel] to be drawn, K: less what the known foreground's modes imitate; NaN where flagged.

    A foreground without modes of its own leaves the bundle's residual as it is.
    """
    residual_k = np.asarray(packed["residual_k"].values)
    return beyond_foreground_k(packed, residual_k) if packed.attrs.get("foreground_known_modes", 0) else residual_k


def systematic_sigma_k(packed: xr.Dataset) -> FloatArray | None:
    """Standard deviation ndarray[bin, channel], K, that modes leave after the fit; None without modes.

    A known foreground's own modes are not among them.
    """
    modes_k = covariance_modes_k(packed, packed["fiducial_signal_k"].values)
    modes_k = modes_k[..., : modes_k.shape[-1] - int(packed.attrs.get("foreground_known_modes", 0))]
    if not modes_k.shape[-1]:
        return None
    return np.asarray(np.sqrt((beyond_foreground_k(packed, modes_k) ** 2).sum(axis=-1)))


def attribute_list(dataset: xr.Dataset, name: str) -> list[Any]:
    """An attribute as a list: files give a list of one back as its item."""
    return list(np.atleast_1d(dataset.attrs[name])) if name in dataset.attrs else []
