"""The horizon of a site from a table of azimuth and elevation, and the form of it the engine looks up.

A level horizon needs none of this. The engine asks for the horizon at each pixel of each
sample: it has the pixel's components to the north and to the east, and a pseudo-azimuth of
these, four quarters of a square instead of a circle, spares it the arc tangent.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise
from pathlib import Path

import numpy as np
from numba import njit
from numpy.typing import ArrayLike, NDArray

from sims.csv_table import finite_number, read_csv_rows
from sims.errors import InputError, raise_if_any

FloatArray = NDArray[np.float64]
COLUMNS = ("azimuth_deg", "elevation_deg")
LEAST_ROWS = 3
LOWEST_DEG, HIGHEST_DEG = -10.0, 89.0
LOOKUP_TOLERANCE = 1e-4  # of the sine of the elevation: 0.006 deg
FEWEST_CELLS, MOST_CELLS = 1024, 131_072


@dataclass(frozen=True)
class Horizon:
    """What stands round a site.

    Parameters
    ----------
    azimuths_rad, elevations_rad : ndarray[row]
        Azimuth from north through east, rad, strictly rising within one turn, and the
        elevation of the horizon there, rad.
    """

    azimuths_rad: FloatArray
    elevations_rad: FloatArray

    def elevation_rad(self, azimuth_rad: ArrayLike) -> FloatArray:
        """Elevation of the horizon, rad, at any azimuth: linear between rows, also from the last to the first."""
        azimuth = np.asarray(azimuth_rad, dtype=float)
        return np.asarray(np.interp(azimuth, self.azimuths_rad, self.elevations_rad, period=2.0 * np.pi))

    @property
    def lowest_rad(self) -> float:
        """Lowest elevation of the horizon, rad."""
        return float(self.elevations_rad.min())

    @property
    def highest_rad(self) -> float:
        """Highest elevation of the horizon, rad."""
        return float(self.elevations_rad.max())

    @cached_property
    def table(self) -> FloatArray:
        """What `horizon_sine` looks up: ndarray[node], made at first use by `horizon_table`."""
        return horizon_table(self).sine


@dataclass(frozen=True)
class HorizonTable:
    """A horizon for the engine.

    Attributes
    ----------
    sine : ndarray[node]
        Sine of the elevation at even steps of pseudo-azimuth from 0 to 4; the last repeats
        the first.
    error : float
        Greatest error of `horizon_sine` found, in the sine. It exceeds `LOOKUP_TOLERANCE` only
        beside steps so steep that the finest table blurs them, by less than 1e-4 rad of azimuth.
    """

    sine: FloatArray
    error: float


def read_horizon(path: Path) -> Horizon:
    """Read a horizon from a CSV file with the heading ``azimuth_deg,elevation_deg``.

    Parameters
    ----------
    path : Path
        The file, UTF-8. Azimuths, deg from north through east, rise strictly within 0 to 360;
        elevations lie within -10 to 89 deg; at least 3 rows. Rows at 0 and at 360 must agree.

    Returns
    -------
    Horizon

    Raises
    ------
    InputError
        If the file cannot be read, or anything in it is not allowed; lists each with its line.
    """
    rows, problems = read_csv_rows(path, COLUMNS, LEAST_ROWS)
    points: list[tuple[int, float, float]] = []
    for row in rows:
        azimuth, elevation = (finite_number(field) for field in row.fields)
        place = f"{path}: line {row.line}"
        if azimuth is None or not 0.0 <= azimuth <= 360.0:
            problems.append(f"{place}: azimuth_deg is {row.fields[0]!r}; it must be a number within 0 to 360")
        if elevation is None or not LOWEST_DEG <= elevation <= HIGHEST_DEG:
            problems.append(
                f"{place}: elevation_deg is {row.fields[1]!r}; it must be a number within "
                f"{LOWEST_DEG:g} to {HIGHEST_DEG:g}"
            )
        if azimuth is not None and elevation is not None:
            points.append((row.line, azimuth, elevation))
    problems += [
        f"{path}: line {line}: azimuth_deg {azimuth:g} follows {before:g}; it must rise strictly"
        for (_, before, _), (line, azimuth, _) in pairwise(points)
        if not azimuth > before
    ]
    closed = len(points) > 1 and points[0][1] == 0.0 and points[-1][1] == 360.0
    if closed and points[0][2] != points[-1][2]:
        problems.append(
            f"{path}: line {points[-1][0]}: elevation_deg at 360 is {points[-1][2]:g}, at 0 it is {points[0][2]:g}; "
            "they are one place"
        )
    raise_if_any(problems)
    if closed and len(points) - 1 < LEAST_ROWS:
        raise InputError(f"{path}: {len(points) - 1} places on the horizon; at least {LEAST_ROWS} are needed")
    azimuths, elevations = np.array([point[1:] for point in (points[:-1] if closed else points)]).T
    return Horizon(np.deg2rad(azimuths), np.deg2rad(elevations))


@njit(inline="always")
def pseudo_azimuth(north, east):  # type: ignore[no-untyped-def]
    """Rise from 0 at north by 1 a quarter turn through east, to below 4; 0 at the zenith itself."""
    away = abs(north) + abs(east)
    if away == 0.0:
        return 0.0
    share = north / away
    turned = 1.0 - share if east >= 0.0 else 3.0 + share
    return turned if turned < 4.0 else 0.0


@njit(inline="always")
def horizon_sine(table, north, east):  # type: ignore[no-untyped-def]
    """Sine of the horizon's elevation in the direction of these components (of any length).

    Parameters
    ----------
    table : ndarray[node]
        `HorizonTable.sine`.
    north, east : float
        Components of a direction.

    Returns
    -------
    float
        The direction is clear where its component to the zenith exceeds this.
    """
    cells = table.shape[0] - 1
    scaled = pseudo_azimuth(north, east) * (0.25 * cells)
    cell = min(int(scaled), cells - 1)
    return table[cell] + (scaled - cell) * (table[cell + 1] - table[cell])


def horizon_table(horizon: Horizon) -> HorizonTable:
    """Tabulate a horizon, ever finer until the lookup is good to `LOOKUP_TOLERANCE`.

    Parameters
    ----------
    horizon : Horizon

    Returns
    -------
    HorizonTable
        With 1024 to 131 072 cells; the error is taken at four places in each cell and at the
        rows of the horizon, where it is greatest.
    """
    rows = _pseudo_of(horizon.azimuths_rad)
    cells = FEWEST_CELLS
    while True:
        nodes = 4.0 * np.arange(cells + 1) / cells
        sine = _sine_at(horizon, nodes)
        sine[-1] = sine[0]
        places = np.concatenate([(nodes[:-1, None] + nodes[1] * np.array([0.125, 0.375, 0.625, 0.875])).ravel(), rows])
        error = float(np.abs(np.interp(places, nodes, sine) - _sine_at(horizon, places)).max())
        if error <= LOOKUP_TOLERANCE or cells >= MOST_CELLS:
            sine.flags.writeable = False
            return HorizonTable(sine, error)
        cells *= 2


def _sine_at(horizon: Horizon, pseudo: FloatArray) -> FloatArray:
    return np.asarray(np.sin(horizon.elevation_rad(_azimuth_of(pseudo))))


def _azimuth_of(pseudo: FloatArray) -> FloatArray:
    """Azimuth, rad, of a pseudo-azimuth from 0 to 4."""
    north = np.abs(2.0 - pseudo) - 1.0
    east = 1.0 - np.abs(1.0 - np.where(pseudo > 3.0, pseudo - 4.0, pseudo))
    return np.asarray(np.arctan2(east, north))


def _pseudo_of(azimuth_rad: FloatArray) -> FloatArray:
    """Pseudo-azimuth of an azimuth, rad."""
    north, east = np.cos(azimuth_rad), np.sin(azimuth_rad)
    share = north / (np.abs(north) + np.abs(east))
    return np.asarray(np.where(east >= 0.0, 1.0 - share, 3.0 + share))
