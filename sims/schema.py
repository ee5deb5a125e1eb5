"""Names, dimensions and units of every product, and the check that a Dataset keeps to them.

All products are NetCDF-4 files. Each variable carries `units` and `long_name`; frequencies
are in MHz, temperatures in K, times in UTC.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr

from sims.errors import raise_if_any


@dataclass(frozen=True)
class Variable:
    """One variable of a product.

    Attributes
    ----------
    dims : tuple of str
        Its dimensions, in order.
    units : str
        Unit as the file writes it; "1" for pure numbers.
    long_name : str
        What it is.
    required : bool
        False where a product may do without.
    finite : bool
        True where every value must be finite.
    """

    dims: tuple[str, ...]
    units: str
    long_name: str
    required: bool = True
    finite: bool = True


Product = dict[str, Variable]

_CHANNELS: Product = {
    "frequency_mhz": Variable(("channel",), "MHz", "effective frequency: centre of the channel"),
    "width_mhz": Variable(("channel",), "MHz", "width of the channel"),
}

RECORDING: Product = {
    **_CHANNELS,
    "time": Variable(("time",), "", "middle of the sample, UTC"),
    "antenna_temperature_k": Variable(("time", "channel"), "K", "calibrated antenna temperature"),
    "noise_variance_k2": Variable(("time", "channel"), "K2", "variance of its radiometer noise"),
    "signal_response": Variable(("time", "channel"), "1", "w(f), as believed: how a signal filling the sky arrives"),
    "flag": Variable(("time", "channel"), "1", "nonzero where not to be used; bit 1: masked channel"),
    "integration_s": Variable(("time",), "s", "time that the sample stands for"),
    "attitude": Variable(("time", "quaternion"), "1", "rotation of antenna-frame vectors into ICRS, scalar last"),
    "position_km": Variable(("time", "axis"), "km", "from the centre of the body below, ICRS axes"),
    "pointing": Variable(("time",), "1", "number of the boresight direction"),
    "orbit_phase": Variable(("time",), "1", "fraction of an orbit since the ascending node", required=False),
    "sidereal_time_hours": Variable(("time",), "h", "apparent local sidereal time", required=False),
}

SPECTRA: Product = {
    **_CHANNELS,
    "antenna_temperature_k": Variable(("bin", "channel"), "K", "mean antenna temperature of the bin", finite=False),
    "noise_variance": Variable(("bin", "channel"), "K2", "variance of its independent noise", finite=False),
    "signal_response": Variable(("bin", "channel"), "1", "w(f) with which a signal filling the sky reaches the bin"),
    "flag": Variable(("bin", "channel"), "1", "nonzero where not to be used; bit 1: masked channel; bit 2: no data"),
    "weight_s": Variable(("bin",), "s", "integration in the bin", required=False),
    "systematic_modes": Variable(
        ("mode", "bin", "channel"),
        "K",
        "each a common error of one standard deviation: covariance is noise + sum of mode mode'",
        required=False,
    ),
    "response_modes": Variable(
        ("mode", "bin", "channel"), "1", "change of the signal response that goes with each mode", required=False
    ),
    "chromaticity_factor": Variable(
        ("bin", "channel"), "1", "what the foreground was divided by for the beam's chromaticity", required=False
    ),
    "chromaticity_error": Variable(("bin", "channel"), "1", "standard deviation of that factor", required=False),
}  # fmt: skip

ENSEMBLE: Product = {
    **_CHANNELS,
    "mean_k": Variable(("bin", "channel"), "K", "mean of the draws, as the receiver reports them"),
    "modes_k": Variable(
        ("mode", "bin", "channel"), "K", "independent deviations of one standard deviation, inflated for the draws"
    ),
    "response_modes": Variable(("mode", "bin", "channel"), "1", "change of the signal response that goes with each"),
    "size_of_noise": Variable(("mode",), "1", "standard deviation of each mode over the noise, before inflation"),
}  # fmt: skip

TRUTH: Product = {
    **_CHANNELS,
    "signal_k": Variable(("channel",), "K", "signal that was put in"),
    "foreground_k": Variable(
        ("bin", "channel"), "K", "antenna temperature without signal, receiver errors and noise", finite=False
    ),
    "signal_response": Variable(("bin", "channel"), "1", "true w(f)", finite=False),
}

BUNDLE: Product = {
    **SPECTRA,
    "foreground_k": Variable(("bin", "channel"), "K", "fitted foreground", finite=False),
    "residual_k": Variable(("bin", "channel"), "K", "spectra less fitted foreground; for looking at", finite=False),
    "foreground_modes": Variable(
        ("bin", "term", "channel"), "K", "tangent of the foreground model, projected out without a prior", finite=False
    ),
    "signal_left_k": Variable(
        ("bin", "channel"), "K", "what the foreground fit leaves of the posterior's mean signal", finite=False
    ),
    "fiducial_signal_k": Variable(("channel",), "K", "signal at which the response's uncertainty was taken"),
    "K": Variable(("channel", "channel_2"), "K-2", "information W' C^-1 W, foreground projected out"),
    "b": Variable(("channel",), "K-1", "W' C^-1 (y - mu), foreground projected out"),
    "R": Variable(("rank", "channel"), "K-1", "square root: ln L(s) = -|R s - z|^2 / 2 + const"),
    "z": Variable(("rank",), "1", "data of the square root"),
}  # fmt: skip

TRANSFER: Product = {
    **_CHANNELS,
    "operator": Variable(("channel", "channel_2"), "1", "what the projected spectrum shows of a signal, applied to it"),
    "survival": Variable(("shape",), "1", "information with the foreground over that of noise alone, lowest first"),
    "shape_k": Variable(
        ("shape", "channel"), "K", "shape of each, one standard deviation of the noise alone; 0 where not used"
    ),
    "trough_survival": Variable(("trough_shape",), "1", "the same among shapes that the prior's troughs are made of"),
    "trough_shape_k": Variable(("trough_shape", "channel"), "K", "shape of each, as shape_k"),
}  # fmt: skip


def describe(dataset: xr.Dataset, product: Product) -> xr.Dataset:
    """Copy of `dataset` with the `units` and `long_name` of its product on every variable.

    Raises
    ------
    InputError
        If it does not keep to the product (`check`).
    """
    described = dataset.copy()
    for name, variable in product.items():
        if name in described.variables:
            described[name].attrs["long_name"] = variable.long_name
            if variable.units:
                described[name].attrs["units"] = variable.units
    check(described, product, "product")
    return described


def check(dataset: xr.Dataset, product: Product, source: str) -> None:
    """Refuse a Dataset that does not keep to its product.

    Parameters
    ----------
    dataset : xarray.Dataset
    product : dict of str to Variable
    source : str
        File or stage it came from, for the message.

    Raises
    ------
    InputError
        With every variable that is missing, misshapen, in another unit or not finite.
    """
    problems = []
    for name, variable in product.items():
        if name not in dataset.variables:
            if variable.required:
                problems.append(f"{source}: variable {name}{list(variable.dims)} is missing")
            continue
        problems += _problems(dataset[name], name, variable, source)
    raise_if_any(problems)


def _problems(values: xr.DataArray, name: str, variable: Variable, source: str) -> list[str]:
    problems = []
    if values.dims != variable.dims:
        return [f"{source}: {name} has dims {list(values.dims)}, allowed are {list(variable.dims)}"]
    units = values.attrs.get("units")
    if variable.units and units != variable.units:
        problems.append(f"{source}: {name} has units {units!r}, allowed is {variable.units!r}")
    if values.dtype.kind not in "fiubM":
        return [*problems, f"{source}: {name} holds {values.dtype}, allowed are numbers"]
    if variable.finite and values.dtype.kind == "f":
        bad = int(np.sum(~np.isfinite(values.values)))
        if bad:
            problems.append(f"{source}: {name} has {bad} values that are not finite")
    return problems
