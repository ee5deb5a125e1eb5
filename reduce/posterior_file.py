"""Draws of a posterior in ArviZ's conventions: as a Dataset, as InferenceData, and as groups inside posterior.nc.

posterior.nc holds its draws at the root, where plain NetCDF readers look. `add_groups` writes the same draws as the
groups that `arviz.from_netcdf` looks for. Nothing of the clock is written, so equal draws give equal files.
"""

from __future__ import annotations

import warnings
from importlib.metadata import version
from pathlib import Path

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from reduce.signal_shape import SignalShape
from sims.errors import InputError

with warnings.catch_warnings():
    warnings.simplefilter("ignore", FutureWarning)  # ArviZ announces its own refactoring at import
    import arviz

FloatArray = NDArray[np.float64]

LOG_PROBABILITY = "lp"
LONG_NAME = "ln of prior times likelihood, up to a constant"


def samples_dataset(shape: SignalShape, draws: FloatArray, log_probability: FloatArray) -> xr.Dataset:
    """Draws of a shape's parameters.

    Parameters
    ----------
    shape : SignalShape
    draws : ndarray[chain, draw, parameter]
    log_probability : ndarray[chain, draw]
        Of each draw, up to a constant.

    Returns
    -------
    xarray.Dataset
        A variable for each parameter and `lp`, over chain and draw.
    """
    axes = ("chain", "draw")
    samples = xr.Dataset(
        {name: (axes, draws[:, :, number]) for number, name in enumerate(shape.names)},
        coords={"chain": np.arange(draws.shape[0]), "draw": np.arange(draws.shape[1])},
    )
    for name, unit in zip(shape.names, shape.units, strict=True):
        samples[name].attrs = {"units": unit, "long_name": _long_name(name)}
    samples[LOG_PROBABILITY] = (axes, log_probability, {"units": "", "long_name": LONG_NAME})
    return samples


def inference_data(samples: xr.Dataset) -> arviz.InferenceData:
    """The Dataset of posterior.nc, or of `Posterior.samples`, as ArviZ takes it."""
    data = arviz.InferenceData()
    data.add_groups(groups(samples))
    return data


def groups(samples: xr.Dataset) -> dict[str, xr.Dataset]:
    """ArviZ's groups: ``posterior`` holds the parameters, ``sample_stats`` their log probability."""
    parameters = samples.drop_vars(LOG_PROBABILITY, errors="ignore")
    library = str(samples.attrs.get("inference_library", ""))
    attributes = dict(samples.attrs)
    if library:
        attributes["inference_library_version"] = version(library)
    found = {"posterior": parameters.assign_attrs(attributes)}
    if LOG_PROBABILITY in samples:
        found["sample_stats"] = samples[[LOG_PROBABILITY]].assign_attrs(attributes)
    return found


def add_groups(path: Path, samples: xr.Dataset) -> None:
    """Add ArviZ's groups to a NetCDF-4 file that holds the same draws at its root.

    Parameters
    ----------
    path : Path
        The file; its root is left as it is.
    samples : xarray.Dataset

    Raises
    ------
    InputError
        If there is no such file.
    """
    if not path.is_file():
        raise InputError(f"{path}: no such file; groups are added to a file of draws that is there")
    for name, dataset in groups(samples).items():
        packed = {variable: {"zlib": True, "complevel": 2} for variable in dataset.data_vars}
        dataset.to_netcdf(path, mode="a", group=name, engine="h5netcdf", encoding=packed)


def _long_name(name: str) -> str:
    """In words, where the name is one of a turning point."""
    parts = name.split("_")
    if len(parts) == 3 and parts[0] in ("frequency", "temperature") and parts[1] in ("b", "c", "d"):
        return f"{parts[0]} of turning point {parts[1].upper()}"
    return name.replace("_", " ")
