"""Beams from files: reader by format, error patterns mixed in, missing power accounted for.

The door between the readers and the engine: `antenna_from` makes any ``[beam]`` table, closed
form or file, into what the engine integrates.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np

from sims.beam import Beam, Ripple, beam_from, mounting_matrix
from sims.beam_grid import GridBeam, grid_beam
from sims.beam_healpix import read_healpix_files
from sims.beam_nec import read_nec_files
from sims.beam_netcdf import read_netcdf_file
from sims.beam_spline import angular_spline
from sims.beam_table_file import read_table_files
from sims.config_beam import Beam as BeamSettings
from sims.config_beam import FileBeam, HealpixSource, NecSource, NetcdfSource, Source, TableSource
from sims.errors import InputError, raise_if_any
from sims.far_field import FarField

NORMALISED = 0.02  # how far the mean over the sphere of a directivity may lie from 1, and a gain's above it
KEPT_BYTES = 2**30
"""Of tables that are kept in memory: every redraw of a beam with modes asks for all of them again. A table of 1 degree
and 100 frequencies is 52 MB, with complex fields 260 MB. The last one read is kept whatever its size."""


def antenna_from(settings: BeamSettings) -> Beam | GridBeam:
    """Beam as configured.

    Parameters
    ----------
    settings : Beam
        The ``[beam]`` table.

    Returns
    -------
    Beam or GridBeam

    Raises
    ------
    InputError
        If a file cannot be read or does not hold what the settings say.
    """
    if isinstance(settings, FileBeam):
        return _file_beam(settings)
    return beam_from(settings)


def read_far_field(source: Source) -> FarField:
    """Read a pattern; kept in memory until its files change, or `KEPT_BYTES` are needed for others.

    Parameters
    ----------
    source : Source
        Format, files, and what the format leaves open.

    Returns
    -------
    FarField

    Raises
    ------
    InputError
        With every fault of the files, each with its place.
    """
    files = (source.file,) if isinstance(source, NetcdfSource) else source.files
    return _KEPT.table(source, tuple(_stamp(path) for path in files))


def _stamp(path: Path) -> tuple[int, int]:
    """When a file changed, and its size; of a file that is gone the reader tells."""
    try:
        found = path.stat()
    except OSError:
        return 0, 0
    return found.st_mtime_ns, found.st_size


@dataclass(eq=False)
class _Kept:
    """Tables read, the last used last. Stamps say whether the files are still those."""

    limit_bytes: int
    tables: dict[Source, tuple[tuple[tuple[int, int], ...], FarField]] = field(default_factory=dict)

    def table(self, source: Source, stamps: tuple[tuple[int, int], ...]) -> FarField:
        kept = self.tables.pop(source, None)
        if kept is None or kept[0] != stamps:
            kept = stamps, _read(source)
        self.tables[source] = kept
        while len(self.tables) > 1 and sum(_bytes(table) for _, table in self.tables.values()) > self.limit_bytes:
            self.tables.pop(next(iter(self.tables)))
        return kept[1]


_KEPT = _Kept(KEPT_BYTES)


def _bytes(table: FarField) -> int:
    return sum(array.nbytes for array in (table.power, table.e_theta, table.e_phi) if array is not None)


def _read(source: Source) -> FarField:
    if isinstance(source, NecSource):
        return read_nec_files(source)
    if isinstance(source, TableSource):
        return read_table_files(source)
    if isinstance(source, HealpixSource):
        return read_healpix_files(source)
    return read_netcdf_file(source)


def _file_beam(settings: FileBeam) -> GridBeam:
    table = _mixed(read_far_field(settings.source), settings)
    raise_if_any(_normalisation_problems(table, settings))
    if settings.dimension_scale != 1.0:
        # An antenna twice as large has the pattern of half the wavelength.
        table = replace(table, frequency_mhz=table.frequency_mhz / settings.dimension_scale)
    return grid_beam(
        table,
        smoothing_mhz=settings.smoothing_mhz,
        mounting=mounting_matrix(settings.tilt_deg, settings.tilt_azimuth_deg, settings.turn_deg),
        efficiency=settings.efficiency,
        structure_temperature_k=settings.structure_temperature_k,
        missing_power=settings.missing_power,
        ripple=Ripple.of(settings),
    )


def _mixed(table: FarField, settings: FileBeam) -> FarField:
    """The pattern moved towards those of ``[[beam.modes]]`` by their amplitudes."""
    moving = [(number, mode) for number, mode in enumerate(settings.modes) if mode.amplitude != 0.0]
    if not moving:
        return table
    power, problems = table.power.copy(), []
    for number, mode in moving:
        other = read_far_field(mode.source)
        same = all(
            np.array_equal(getattr(table, axis), getattr(other, axis))
            for axis in ("frequency_mhz", "theta_deg", "phi_deg")
        )
        if same:
            power += mode.amplitude * (other.power - table.power)
        else:
            problems.append(
                f"beam.modes.{number}: {other.source} has another grid than {table.source}; give both the same"
            )
    raise_if_any(problems)
    if (power < 0.0).any():
        amplitudes = ", ".join(f"beam.modes.{number}.amplitude = {mode.amplitude:g}" for number, mode in moving)
        raise InputError(f"{amplitudes}: the power becomes negative in {int((power < 0.0).sum())} cells")
    sphere = angular_spline(table.theta_deg, table.phi_deg, upper_half=table.upper_half)
    return replace(table, power=power, radiated_fraction=sphere.mean(power), e_theta=None, e_phi=None)


def _normalisation_problems(table: FarField, settings: FileBeam) -> list[str]:
    if settings.missing_power == "numerical":
        return []
    lowest, highest = float(table.radiated_fraction.min()), float(table.radiated_fraction.max())
    if settings.quantity == "directivity" and (lowest < 1.0 - NORMALISED or highest > 1.0 + NORMALISED):
        return [
            f"{table.source}: the mean of a directivity over the sphere is 1, here {lowest:.4f} to {highest:.4f}; "
            f'allowed is {NORMALISED:g} to either side: is it a gain? or declare missing_power = "numerical"'
        ]
    if highest > 1.0 + NORMALISED:
        return [
            f"{table.source}: a mean gain of {highest:.4f} over the sphere radiates more than went in; allowed is "
            f'{1.0 + NORMALISED:g}: are these dB or linear? or declare missing_power = "numerical"'
        ]
    return []
