"""Reader of beams in NetCDF: a power or a pair of complex fields over frequency, theta and phi.

One of the readers behind `sims.beam_files`.
"""

from __future__ import annotations

import astropy.units as u
import numpy as np
import xarray as xr
from numpy.typing import NDArray

from sims.config_beam import NetcdfSource
from sims.errors import InputError, raise_if_any
from sims.far_field import FarField, far_field

FloatArray = NDArray[np.float64]
_AXES = {"frequency": "MHz", "theta": "deg", "phi": "deg"}
_VALUE_UNITS = {"db": "dBi", "dbi": "dBi", "1": "linear", "linear": "linear", "dimensionless": "linear"}
_PLURALS = {"degrees": "deg", "radians": "rad"}  # as the CF conventions spell them, and astropy does not


def read_netcdf_file(source: NetcdfSource) -> FarField:
    """Read a beam from a NetCDF file.

    Parameters
    ----------
    source : NetcdfSource
        File, and the variable of the power, or the four of the fields (real and imaginary part
        of E-theta, then of E-phi).

    Returns
    -------
    FarField

    Raises
    ------
    InputError
        If the file cannot be read, lacks a variable, dimension or unit, or its cells are not
        sound. All problems together.
    """
    try:
        opened = xr.open_dataset(source.file, engine="h5netcdf")
    except (OSError, ValueError, LookupError, TypeError, AttributeError, RuntimeError) as error:
        # h5py's of a file that is damaged are of all these kinds
        raise InputError(f"{source.file}: cannot be read as NetCDF-4 ({error})") from None
    with opened as dataset:
        try:
            return _far_field(dataset, source)
        except (OSError, ValueError) as error:
            if isinstance(error, InputError):
                raise
            raise InputError(f"{source.file}: cannot be read as NetCDF-4 ({error})") from None


def _far_field(dataset: xr.Dataset, source: NetcdfSource) -> FarField:
    names = (source.variable,) if source.variable is not None else source.field_variables
    assert names is not None
    problems = [f"{source.file}: no variable {name!r}; it has {', '.join(map(str, dataset.data_vars))}"
                for name in names if name not in dataset.data_vars]  # fmt: skip
    axes = {name: _axis(dataset, name, unit, source, problems) for name, unit in _AXES.items()}
    for name in names:
        if name in dataset.data_vars and set(dataset[name].dims) != set(_AXES):
            got = ", ".join(map(str, dataset[name].dims))
            problems.append(f"{source.file}: {name}: dims {got}; needed are {', '.join(_AXES)}, in any order")
        if name in dataset.data_vars:
            problems += _value_problems(dataset, name, source)
    raise_if_any(problems)
    arrays = [np.asarray(dataset[name].transpose(*_AXES).values, dtype=np.float64) for name in names]
    fields = None
    if source.variable is None:
        fields = (arrays[0] + 1j * arrays[1], arrays[2] + 1j * arrays[3])
        power = np.abs(fields[0]) ** 2 + np.abs(fields[1]) ** 2
    else:
        with np.errstate(over="ignore"):  # becomes a cell that is not finite, and is named as such
            power = 10.0 ** (arrays[0] / 10.0) if source.unit == "dBi" else arrays[0]
    return far_field(
        axes["frequency"], axes["theta"], axes["phi"], power, str(source.file), fields=fields
    )  # fmt: skip


def _value_problems(dataset: xr.Dataset, name: str, source: NetcdfSource) -> list[str]:
    """A kind of number, or a unit in the file, other than what is declared."""
    problems = []
    kind, stated = dataset[name].dtype, str(dataset[name].attrs.get("units", "")).strip().lower()
    if kind.kind not in "fiu":
        problems.append(
            f"{source.file}: {name}: holds {kind}; real numbers are needed, of complex fields both parts, each by "
            "itself (field_variables)"
        )
    if source.variable is None or not stated:
        return problems
    if stated not in _VALUE_UNITS:
        problems.append(
            f"{source.file}: {name}: units {stated!r} in the file; allowed are dBi, dB, 1, linear, dimensionless, none"
        )
    elif _VALUE_UNITS[stated] != source.unit:
        problems.append(f"{source.file}: {name}: units {stated!r} in the file, but declared is unit = {source.unit!r}")
    return problems


def _axis(dataset: xr.Dataset, name: str, unit: str, source: NetcdfSource, problems: list[str]) -> FloatArray:
    """A coordinate in our unit; its own must be stated."""
    if name not in dataset.coords:
        problems.append(f"{source.file}: no coordinate {name!r}; needed are {', '.join(_AXES)}, each with units")
        return np.zeros(0)
    if dataset[name].dims != (name,):
        problems.append(
            f"{source.file}: {name}: dims {', '.join(map(str, dataset[name].dims))}; needed is {name} alone"
        )
        return np.zeros(0)
    stated = str(dataset[name].attrs.get("units", ""))
    stated = _PLURALS.get(stated, stated)
    try:
        factor = float(u.Unit(stated).to(u.Unit(unit))) if stated else None
    except (ValueError, u.UnitConversionError):
        factor = None
    if factor is None:
        problems.append(f"{source.file}: {name}: units {stated!r}; a unit like {unit} is needed")
        return np.zeros(0)
    return np.asarray(dataset[name].values, dtype=float) * factor
