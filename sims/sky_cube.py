"""Readers of a sky at many frequencies in one file: FITS with a column a frequency, or NetCDF.

Beside `sims.sky_survey`, whose `ManyMaps` it fills; `sims.sky_joined` joins them over frequency.
"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import astropy.units as u
import numpy as np
import xarray as xr
from numpy.typing import NDArray

from sims.config_sky import CubeSky
from sims.errors import raise_if_any
from sims.products import read_netcdf
from sims.sky_healpix import (
    check_coordsys,
    check_nside,
    coarser,
    column_values,
    healpix_table,
    missing_pixels,
    order_of,
    own_nside_of,
    whole_ring,
)
from sims.sky_map_checks import check_missing, sha256_of, unit_in_kelvin
from sims.sky_survey import ManyMaps, MapNote

FloatArray = NDArray[np.float64]
DIMENSIONS = {"frequency", "pixel"}
# Frequencies that a file rounds to six figures are still the same.
_SAME_FREQUENCY = 1e-6


def read_cube(settings: CubeSky) -> ManyMaps:
    """Read the maps of ``[sky] kind = "cube"``.

    Parameters
    ----------
    settings : CubeSky
        FITS: a HEALPix table with one column a frequency, as for single maps. NetCDF-4: a
        variable with dimensions frequency and pixel, its unit in the attribute ``units``, the
        coordinate ``frequency`` with ``units``, and attributes ``ordering`` and ``coordsys``
        as a FITS header has them; what is absent is taken as declared.

    Returns
    -------
    ManyMaps

    Raises
    ------
    InputError
        With every problem found.
    """
    return _read_fits(settings) if settings.format == "fits" else _read_netcdf(settings)


def _read_fits(settings: CubeSky) -> ManyMaps:
    header, table, where = healpix_table(settings.file)
    count, columns = len(settings.frequencies_mhz), len(table.names)
    problems: list[str] = []
    if columns != count:
        problems.append(f"{where}: {columns} columns for {count} frequencies; allowed: one column a frequency")
    kelvin = [
        unit_in_kelvin(settings.unit, header.get(f"TUNIT{n + 1}"), f"{where}: header TUNIT{n + 1}", problems)
        for n in range(min(columns, count))
    ]
    raise_if_any(problems)
    columns_of_values = (column_values(table, number, where) * kelvin[number] for number in range(count))
    bad_of = [missing_pixels(column_values(table, number, where), header) for number in range(count)]
    return _maps(settings, header, columns_of_values, bad_of, where, "column", [])


def _read_netcdf(settings: CubeSky) -> ManyMaps:
    dataset, where = read_netcdf(settings.file), str(settings.file)
    problems: list[str] = []
    found = dataset.get(settings.variable)
    if found is None or set(found.dims) != DIMENSIONS:
        has = ", ".join(f"{name}({', '.join(map(str, one.dims))})" for name, one in dataset.data_vars.items())
        problems.append(
            f"{where}: holds {has or 'no variables'}; allowed: {settings.variable} with dimensions frequency and pixel"
        )
        raise_if_any(problems)
    assert found is not None
    if found.dtype.kind not in "fiu":
        problems.append(f"{where}: {settings.variable} holds {found.dtype}; allowed: real numbers")
        raise_if_any(problems)
    kelvin = unit_in_kelvin(
        settings.unit, found.attrs.get("units"), f"{where}: {settings.variable} attribute units", problems
    )
    _check_frequencies(dataset, settings, where, problems)
    values = found.transpose("frequency", "pixel").values.astype(np.float64)
    if len(values) != len(settings.frequencies_mhz):
        problems.append(
            f"{where}: {len(values)} frequencies, {len(settings.frequencies_mhz)} are declared; allowed: as many"
        )
    attributes = {key.upper(): value for key, value in {**dataset.attrs, **found.attrs}.items()}
    bad = [missing_pixels(row, attributes) for row in values]
    return _maps(settings, attributes, iter(values * kelvin), bad, where, "row", problems)


def _check_frequencies(dataset: xr.Dataset, settings: CubeSky, where: str, problems: list[str]) -> None:
    if "frequency" not in dataset.coords:
        problems.append(f"{where}: no coordinate frequency; allowed: frequency with its units in an attribute")
        return
    axis = dataset.coords["frequency"]
    try:
        own_mhz = (np.asarray(axis.values, dtype=np.float64) * u.Unit(axis.attrs.get("units", ""))).to_value(u.MHz)
    except (ValueError, TypeError, u.UnitConversionError):
        problems.append(
            f"{where}: frequency has units {axis.attrs.get('units')!r}; allowed: 'MHz', 'Hz' and such, and numbers"
        )
        return
    declared = np.array(settings.frequencies_mhz)
    if own_mhz.shape == declared.shape and not np.allclose(own_mhz, declared, rtol=_SAME_FREQUENCY, atol=0.0):
        first = int(np.argmax(~np.isclose(own_mhz, declared, rtol=_SAME_FREQUENCY, atol=0.0)))
        problems.append(
            f"{where}: frequency {first} is {own_mhz[first]:.9g} MHz but {declared[first]:.9g} MHz is declared; "
            "allowed: the same"
        )


def _maps(
    settings: CubeSky,
    header: Any,
    columns: Iterator[FloatArray],
    bad_of: list[NDArray[np.bool_]],
    where: str,
    what: str,
    problems: list[str],
) -> ManyMaps:
    """Check what all maps share, then bring them one by one to the wanted resolution."""
    order = order_of(header, settings.ordering, where, problems)
    check_coordsys(header, settings.frame, where, problems)
    own_nside = own_nside_of(bad_of[0].size, header, where, problems)
    check_nside(settings.nside, own_nside, where, problems)
    for number, bad in enumerate(bad_of):
        check_missing(bad, settings.missing, f"{where}, {what} {number}", "pixel", problems)
    raise_if_any(problems)
    read = [
        coarser(whole_ring(values, bad, order, own_nside), settings.nside)
        for values, bad in zip(columns, bad_of, strict=True)
    ]
    checksum, name = sha256_of(settings.file), Path(settings.file).name
    return ManyMaps(
        temperature_k=np.stack(read),
        frequency_mhz=np.array(settings.frequencies_mhz),
        nside=settings.nside,
        frame=settings.frame,
        notes=tuple(
            MapNote(f"{name}, {what} {number}", checksum, settings.frame, settings.unit, int(bad.sum()))
            for number, bad in enumerate(bad_of)
        ),
    )
