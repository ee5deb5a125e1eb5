"""Recording -> spectra: weighted means over pointing, orbit phase or sidereal time.

Weights are integration times, never the noise of the sample itself: weights that follow the
measured power would favour its low fluctuations.
"""

from __future__ import annotations

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from sims.campaign import FLAG_EMPTY
from sims.config import Bins
from sims.schema import SPECTRA, describe


def bin_of_each_sample(geometry: xr.Dataset, bins: Bins) -> NDArray[np.int64]:
    """Number of the bin that each sample belongs to.

    Parameters
    ----------
    geometry : xarray.Dataset
        With `pointing`, `orbit_phase` or `sidereal_time_hours`, as `bins.by` asks.
    bins : Bins

    Returns
    -------
    ndarray[time]
        0 to `bins.count` - 1.
    """
    if bins.by == "all":
        return np.zeros(geometry.sizes["time"], dtype=np.int64)
    if bins.by == "pointing":
        return geometry["pointing"].values.astype(np.int64)
    fraction = geometry["orbit_phase"] if bins.by == "orbit-phase" else geometry["sidereal_time_hours"] / 24.0
    return np.clip((fraction.values % 1.0 * bins.count).astype(np.int64), 0, bins.count - 1)


def bin_recording(recording: xr.Dataset, bins: Bins) -> xr.Dataset:
    """Average a recording into bins.

    Parameters
    ----------
    recording : xarray.Dataset
        `sims.schema.RECORDING`.
    bins : Bins

    Returns
    -------
    xarray.Dataset
        `sims.schema.SPECTRA`. A channel is used where any sample of the bin has it;
        where none has, it is flagged and its temperature is NaN. The signal response is
        averaged over the samples that the temperature is, or over all where none is used.
    """
    label = bin_of_each_sample(recording, bins)
    weight = recording["integration_s"].values[:, None] * (recording["flag"].values == 0)
    total = sum_by_bin(weight, label, bins.count)
    used = weight > 0.0
    temperature_k = np.where(used, recording["antenna_temperature_k"].values, 0.0)
    variance_k2 = np.where(used, recording["noise_variance_k2"].values, 0.0)
    response = recording["signal_response"].values
    with np.errstate(invalid="ignore", divide="ignore"):
        temperature = sum_by_bin(weight * temperature_k, label, bins.count) / total
        variance = sum_by_bin(weight**2 * variance_k2, label, bins.count) / total**2
        used_response = sum_by_bin(weight * response, label, bins.count) / total
    flags = recording["flag"].values
    everywhere = np.bitwise_and.reduce(flags, axis=0) if len(flags) else np.uint8(0)
    flag = np.where(total > 0.0, 0, everywhere | FLAG_EMPTY).astype(np.uint8)
    spectra = recording[["frequency_mhz", "width_mhz"]].assign(
        antenna_temperature_k=(("bin", "channel"), temperature),
        noise_variance=(("bin", "channel"), variance),
        signal_response=(
            ("bin", "channel"),
            np.where(total > 0.0, used_response, mean_by_bin(response, recording, bins)),
        ),
        flag=(("bin", "channel"), flag),
        weight_s=("bin", sum_by_bin(recording["integration_s"].values[:, None], label, bins.count)[:, 0]),
    )
    spectra.attrs = dict(recording.attrs)
    return describe(spectra.drop_vars("time", errors="ignore"), SPECTRA)


def mean_by_bin(values: NDArray[np.float64], geometry: xr.Dataset, bins: Bins) -> NDArray[np.float64]:
    """Integration-weighted mean ndarray[bin, channel] of ndarray[time, channel]; zero in empty bins."""
    label = bin_of_each_sample(geometry, bins)
    weight = geometry["integration_s"].values[:, None]
    total = sum_by_bin(np.broadcast_to(weight, values.shape), label, bins.count)
    return np.asarray(sum_by_bin(weight * values, label, bins.count) / np.where(total > 0.0, total, 1.0))


def sum_by_bin(values: NDArray[np.float64], label: NDArray[np.int64], count: int) -> NDArray[np.float64]:
    """Sums ndarray[bin, channel] of ndarray[time, channel] by the bin of each row."""
    sums = np.zeros((count, values.shape[1]))
    np.add.at(sums, label, values)
    return sums
