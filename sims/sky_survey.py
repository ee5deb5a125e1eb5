"""The maps of a joined sky: each read, turned into the common frame, smoothed to the common resolution.

Takes the readers of single maps and `sims.sky_grid`; `sims.sky_joined` joins what comes out
over frequency.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import healpy
import numpy as np
from numpy.typing import NDArray

from sims.config_sky import JoinedSky, SurveyMap
from sims.errors import InputError, raise_if_any
from sims.sky_grid import frame_rotation, kernel_deg, reading_nside, regridded, smoothed, smoothing_nside
from sims.sky_images import average_onto_healpix
from sims.sky_map_checks import Frame, sha256_of
from sims.sky_maps import finest_nside, read_healpix_ring, read_image_for

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class MapNote:
    """What was done to a map before it was used, for the record.

    Attributes
    ----------
    source : str
        Name of the file, with the column or row where it has several; or "invented".
    sha256 : str
        Checksum of the file.
    frame : {"galactic", "icrs", "fk5", "fk4"}
        Frame of the file.
    unit : str
        Declared unit.
    filled : int
        Missing values that were filled from their neighbours.
    averaged_from : str
        Cells or pixels that it was averaged from onto those of the sky; empty where they are the same but for size.
    kernel_deg : float
        Full width at half maximum of the Gaussian it was smoothed with, deg; 0 for none.
    resolution_deg : float or None
        Resolution it then has, deg, pixels aside; None where none was declared.
    """

    source: str
    sha256: str
    frame: Frame
    unit: str
    filled: int
    averaged_from: str = ""
    kernel_deg: float = 0.0
    resolution_deg: float | None = None


@dataclass(frozen=True, eq=False)
class ManyMaps:
    """Maps of one sky at several frequencies, as read: one grid, one frame, one resolution.

    Attributes
    ----------
    temperature_k : ndarray[map, pixel]
        Brightness temperature, K, before zero levels and scales; RING order, in `frame`.
    frequency_mhz : ndarray[map]
        MHz, in the order of the settings.
    nside : int
    frame : {"galactic", "icrs", "fk5", "fk4"}
    notes : tuple of MapNote
        One a map.
    """

    temperature_k: FloatArray
    frequency_mhz: FloatArray
    nside: int
    frame: Frame
    notes: tuple[MapNote, ...]


def read_survey_maps(settings: JoinedSky) -> ManyMaps:
    """Read every map of ``[[sky.maps]]``.

    Raises
    ------
    InputError
        With every problem of every map, each with its place in the configuration.
    """
    widths = [one.resolution_deg for one in settings.maps]
    common = max((width for width in widths if width is not None), default=None)
    problems: list[str] = []
    read: list[tuple[FloatArray, MapNote]] = []
    for number, one in enumerate(settings.maps):
        try:
            read.append(_one(one, settings.frame, settings.nside, common))
        except InputError as error:
            problems += [f"sky.maps.{number}: {problem}" for problem in error.problems]
    raise_if_any(problems)
    return ManyMaps(
        temperature_k=np.stack([values for values, _ in read]),
        frequency_mhz=np.array([one.frequency_mhz for one in settings.maps]),
        nside=settings.nside,
        frame=settings.frame,
        notes=tuple(note for _, note in read),
    )


def _one(one: SurveyMap, frame: Frame, nside: int, common_deg: float | None) -> tuple[FloatArray, MapNote]:
    kernel = 0.0
    problems: list[str] = []
    if common_deg is not None and one.resolution_deg is not None:
        kernel = kernel_deg(one.resolution_deg, common_deg)
    fine = 0
    try:
        fine = smoothing_nside(kernel, nside)
    except InputError as error:
        problems += error.problems
    try:
        values, filled = _on_grid(one, frame, nside, reading_nside(kernel, nside))
    except InputError as error:
        raise InputError([*problems, *error.problems]) from None
    raise_if_any(problems)
    note = MapNote(
        source=Path(one.file).name if one.field is None else f"{Path(one.file).name}, column {one.field}",
        sha256=sha256_of(one.file),
        frame=one.frame,
        unit=one.unit,
        filled=filled,
        averaged_from=f"{one.frame} image" if one.format == "image" else one.frame * (one.frame != frame),
        kernel_deg=kernel if fine else 0.0,
        resolution_deg=common_deg,
    )
    return smoothed(values, kernel, nside), note


def _on_grid(one: SurveyMap, frame: Frame, nside: int, fine: int) -> tuple[FloatArray, int]:
    """The map in the common frame, at `fine` or, where its file is coarser, as fine as that; values filled."""
    rotation = None if one.frame == frame else frame_rotation(frame, one.frame)
    if one.format == "image":
        image = read_image_for(one.file, frame=one.frame, unit=one.unit, missing=one.missing, nside=nside)
        return average_onto_healpix(image, min(fine, finest_nside(image)), rotation), image.filled_cells
    read = read_healpix_ring(
        one.file,
        field=one.field or 0,
        ordering=one.ordering or "header",
        frame=one.frame,
        unit=one.unit,
        missing=one.missing,
        nside=nside,
    )
    wanted = min(fine, read.nside)
    if rotation is None:
        return np.asarray(healpy.ud_grade(read.temperature_k, wanted), dtype=np.float64), read.filled_pixels
    return regridded(read.temperature_k, rotation, wanted), read.filled_pixels
