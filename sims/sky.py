"""The sky that ``[sky]`` describes: read or invented, corrected, ready for the engine.

The door to the files named ``sky_...``: the engine (`sims.sky_average`) and the campaign take what
comes from here. A change of numbers alone moves a sky without reading its files again.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sims.config_sky import CubeSky, HealpixSky, ImageSky, InventedSky
from sims.config_sky import JoinedSky as JoinedSettings
from sims.errors import InputError, raise_if_any
from sims.knowledge import IndexField
from sims.sky_cube import read_cube
from sims.sky_invented import (
    INVENTED_FREQUENCY_MHZ,
    gaussian_field,
    invented_index_map,
    invented_sky_map,
    power_law_field,
)
from sims.sky_joined import JoinedSky
from sims.sky_layers import Layers, gas_shape
from sims.sky_map_checks import Frame
from sims.sky_maps import DiffuseMap, read_healpix_map, read_image_map, read_index_map
from sims.sky_power_law import DiffuseSky
from sims.sky_survey import ManyMaps, read_survey_maps
from sims.streams import stream

__all__ = [
    "AnySky",
    "DiffuseSky",
    "JoinedSky",
    "SkySettings",
    "diffuse_map_from",
    "gaussian_field",
    "index_error",
    "moved_sky",
    "sky_from",
]

OneMapSettings = InventedSky | HealpixSky | ImageSky
ManyMapsSettings = JoinedSettings | CubeSky
SkySettings = OneMapSettings | ManyMapsSettings
AnySky = DiffuseSky | JoinedSky

# Numbers that change a sky but not what is read for it.
_FREE_OF_ALL = {"background", "valid_from_mhz", "valid_to_mhz"}
_FREE_OF_ONE_MAP = {"index", "curvature", "zero_level_k", "scale"}
_FREE_OF_MANY = {"frequency_mhz", "index_change", "join", "order", "zero_levels_k", "scales", "scale"}
_FREE_OF_EACH = {"zero_level_k", "scale"}
_FREE_OF_GAS = {
    "electron_temperature_k", "emission_measure_pc_cm6", "lowest_latitude_deg", "scale", "geometry", "in_maps",
}  # fmt: skip


def sky_from(settings: SkySettings) -> AnySky:
    """Build the sky that ``[sky]`` describes.

    Parameters
    ----------
    settings : InventedSky or HealpixSky or ImageSky or JoinedSky or CubeSky
        The table. Where there is an index map, it gives how the index varies and
        ``sky.index`` its mean over the sphere, so that an error of the mean is one number.
        The invented sky brings such a map with it.

    Returns
    -------
    DiffuseSky or JoinedSky
        From one map, or from several.

    Raises
    ------
    InputError
        With every problem of the maps, of the index map, and of the map of the gas, found.
    """
    problems: list[str] = []
    read: DiffuseMap | ManyMaps | None = None
    variation: float | NDArray[np.float64] = 0.0
    shape: NDArray[np.float64] | None = None
    try:
        read = _maps_from(settings)
    except InputError as error:
        problems += error.problems
    try:
        variation = _index_variation(settings)
    except InputError as error:
        problems += error.problems
    try:
        shape = gas_shape(settings.free_free, settings.nside, frame_of(settings))
    except InputError as error:
        problems += error.problems
    raise_if_any(problems)
    layers = Layers(settings.free_free, settings.background, shape)
    if isinstance(settings, JoinedSettings | CubeSky):
        assert isinstance(read, ManyMaps)
        zero_levels_k, scales = _corrections(settings)
        return JoinedSky(
            maps=read,
            frequency_mhz=settings.frequency_mhz,
            zero_levels_k=zero_levels_k,
            scales=scales,
            join=settings.join,
            order=settings.order,
            valid_from_mhz=settings.valid_from_mhz,
            valid_to_mhz=settings.valid_to_mhz,
            index_change=settings.index_change,
            layers=layers,
        )
    assert isinstance(read, DiffuseMap)
    return DiffuseSky(
        diffuse_map=read,
        frequency_mhz=settings.frequency_mhz,
        index=settings.index + variation,
        curvature=settings.curvature,
        zero_level_k=settings.zero_level_k,
        scale=settings.scale,
        valid_from_mhz=settings.valid_from_mhz,
        valid_to_mhz=settings.valid_to_mhz,
        layers=layers,
    )


def moved_sky(sky: AnySky, before: SkySettings, after: SkySettings) -> AnySky:
    """The sky of `after`, from that of `before`: without reading a file again where only numbers differ.

    Parameters
    ----------
    sky : DiffuseSky or JoinedSky
        From `sky_from(before)`, without drawn fields.
    before, after : InventedSky or HealpixSky or ImageSky or JoinedSky or CubeSky
        Two settings of the table.

    Returns
    -------
    DiffuseSky or JoinedSky
    """
    if _as_read(before) != _as_read(after):
        return sky_from(after)
    layers = Layers(after.free_free, after.background, sky.layers.shape)
    if isinstance(after, JoinedSettings | CubeSky):
        assert isinstance(sky, JoinedSky)
        zero_levels_k, scales = _corrections(after)
        return replace(
            sky,
            frequency_mhz=after.frequency_mhz,
            zero_levels_k=zero_levels_k,
            scales=scales,
            join=after.join,
            order=after.order,
            index_change=after.index_change,
            valid_from_mhz=after.valid_from_mhz,
            valid_to_mhz=after.valid_to_mhz,
            layers=layers,
        )
    assert isinstance(sky, DiffuseSky)
    assert not isinstance(before, JoinedSettings | CubeSky)
    return replace(
        sky,
        index=sky.index + (after.index - before.index),
        curvature=after.curvature,
        zero_level_k=after.zero_level_k,
        scale=after.scale,
        valid_from_mhz=after.valid_from_mhz,
        valid_to_mhz=after.valid_to_mhz,
        layers=layers,
    )


def index_error(known: IndexField, nside: int, rng: np.random.Generator) -> NDArray[np.float64]:
    """Draw the error of the spectral index over the sky that ``[knowledge.index_field]`` describes.

    Parameters
    ----------
    known : IndexField
        Its standard deviation, its correlation length or angular power law, and the error of its mean.
    nside : int
        HEALPix resolution of the sky.
    rng : numpy.random.Generator
        Gives the field, then the mean.

    Returns
    -------
    ndarray[pixel]
        To be added to the index, dimensionless.
    """
    if known.correlation_length_deg is not None:
        drawn = gaussian_field(nside, known.sd, known.correlation_length_deg, rng)
    else:
        assert known.angular_index is not None
        assert known.angular_offset is not None
        drawn = power_law_field(nside, known.sd, known.angular_index, known.angular_offset, rng)
    return np.asarray(drawn + known.mean_sd * rng.standard_normal())


def frame_of(settings: SkySettings) -> Frame:
    """Frame of the sky's pixels."""
    return "galactic" if isinstance(settings, InventedSky) else settings.frame


def diffuse_map_from(settings: OneMapSettings) -> DiffuseMap:
    """Read or invent the map that ``[sky]`` names.

    Raises
    ------
    InputError
        With every problem found.
    """
    if settings.kind == "invented":
        if settings.frequency_mhz != INVENTED_FREQUENCY_MHZ:
            raise InputError(
                f"sky.frequency: {settings.frequency_mhz:g} MHz; allowed with kind 'invented': "
                f"{INVENTED_FREQUENCY_MHZ:g} MHz, at which that sky is made"
            )
        return invented_sky_map(settings.nside, stream(settings.map_seed, "invented-sky"))
    if settings.kind == "healpix":
        return read_healpix_map(
            settings.file,
            field=settings.field,
            ordering=settings.ordering,
            frame=settings.frame,
            unit=settings.unit,
            missing=settings.missing,
            nside=settings.nside,
        )
    return read_image_map(
        settings.file,
        frame=settings.frame,
        unit=settings.unit,
        missing=settings.missing,
        nside=settings.nside,
    )


def _maps_from(settings: SkySettings) -> DiffuseMap | ManyMaps:
    if isinstance(settings, JoinedSettings):
        return read_survey_maps(settings)
    return read_cube(settings) if isinstance(settings, CubeSky) else diffuse_map_from(settings)


def _corrections(settings: ManyMapsSettings) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Zero level, K, and scale of each map."""
    if isinstance(settings, JoinedSettings):
        return np.array([one.zero_level_k for one in settings.maps]), np.array([one.scale for one in settings.maps])
    count = len(settings.frequencies_mhz)
    zero_levels = np.array(settings.zero_levels_k) if settings.zero_levels_k else np.zeros(count)
    scales = np.array(settings.scales) if settings.scales else np.ones(count)
    return zero_levels, settings.scale * scales


def _index_variation(settings: SkySettings) -> float | NDArray[np.float64]:
    """Departure of the spectral index from its mean over the sphere, at each pixel."""
    if isinstance(settings, JoinedSettings | CubeSky):
        return 0.0
    if settings.index_map is not None:
        index = read_index_map(settings.index_map, nside=settings.nside, frame=frame_of(settings))
    elif settings.kind == "invented":
        index = invented_index_map(settings.nside, stream(settings.map_seed, "invented-index"))
    else:
        return 0.0
    return np.asarray(index - index.mean())


def _as_read(settings: SkySettings) -> dict[str, Any]:
    """What of the settings decides what is read."""
    many = isinstance(settings, JoinedSettings | CubeSky)
    table = settings.model_dump(exclude=_FREE_OF_ALL | (_FREE_OF_MANY if many else _FREE_OF_ONE_MAP))
    for part, free in [(table["free_free"], _FREE_OF_GAS), *((one, _FREE_OF_EACH) for one in table.get("maps", ()))]:
        for name in free & set(part or ()):
            part.pop(name)
    return table
