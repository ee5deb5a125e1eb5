"""Settings of the sky: the map or maps it is made of, the spectrum laid on them, and what lies before and behind.

`sims.config` puts them together with the other tables. A physical quantity has no silent
default: what may be left out is neutral.
"""

from __future__ import annotations

from typing import Annotated, Literal, Self

from pydantic import Field, model_validator

from sims.config_types import FilePath, Frame, Nside
from sims.quantities import Degree, InUnit, Kelvin, Mhz, Section

Missing = Literal["refuse", "fill"]
Ordering = Literal["header", "ring", "nested"]
Joining = Literal["polynomial", "spline"]


class _Gas(Section):
    """Ionised gas that absorbs and emits (free-free).

    ``geometry`` says where it is: "in-front" of everything, or "mixed" evenly with the
    emission of the Galaxy. ``in_maps`` says whether the maps show the sky through it, as a
    survey does, or without it, as a map of synchrotron emission alone.
    """

    electron_temperature_k: Kelvin = Field(gt=0, le=1e6)
    geometry: Literal["in-front", "mixed"]
    in_maps: bool


class UniformGas(_Gas):
    """``[sky.free_free] kind = "uniform"``: the same emission measure in every direction."""

    kind: Literal["uniform"]
    emission_measure_pc_cm6: float = Field(ge=0)


class SlabGas(_Gas):
    """``[sky.free_free] kind = "slab"``: a plane-parallel layer, csc|b| times the emission measure at the poles.

    Below ``lowest_latitude`` csc|b| is held: the layer ends somewhere.
    """

    kind: Literal["slab"]
    emission_measure_pc_cm6: float = Field(ge=0)
    lowest_latitude_deg: Degree = Field(gt=0, le=90)


class MappedGas(_Gas):
    """``[sky.free_free] kind = "map"``: a HEALPix map of the emission measure, pc cm^-6, times ``scale``."""

    kind: Literal["map"]
    file: FilePath
    scale: float = Field(default=1.0, ge=0)


FreeFree = Annotated[UniformGas | SlabGas | MappedGas, Field(discriminator="kind")]


class Background(Section):
    """``[sky.background]``: isotropic extragalactic sources, above the CMB, with an index of their own.

    ``in_maps`` says whether the maps contain it, as the zero level of a survey does. Then it
    is taken off them and put back with its own index; else it is added.
    """

    temperature_k: Kelvin = Field(ge=0)
    frequency_mhz: Mhz = Field(gt=0)
    index: float = Field(ge=1.0, le=4.0)
    in_maps: bool


class _AnySky(Section):
    """What every kind of sky shares."""

    nside: Nside
    valid_from_mhz: Mhz = Field(gt=0)
    valid_to_mhz: Mhz = Field(gt=0)
    free_free: FreeFree | None = None
    background: Background | None = None

    @model_validator(mode="after")
    def _rising(self) -> Self:
        if self.valid_to_mhz <= self.valid_from_mhz:
            raise ValueError(
                f"valid_to ({self.valid_to_mhz} MHz) must lie above valid_from ({self.valid_from_mhz} MHz)"
            )
        return self


class _Sky(_AnySky):
    """A spectrum laid on one map."""

    frequency_mhz: Mhz = Field(gt=0)
    index: float = Field(ge=1.0, le=4.0)
    curvature: float = Field(default=0.0, ge=-1.0, le=1.0)
    index_map: FilePath | None = None
    zero_level_k: Kelvin = 0.0
    scale: float = Field(default=1.0, gt=0)


class InventedSky(_Sky):
    """``[sky] kind = "invented"``: the procedural sky that needs no file."""

    kind: Literal["invented"]
    map_seed: int = Field(ge=0)


class _MapSky(_Sky):
    file: FilePath
    frame: Frame
    unit: str = Field(min_length=1)
    missing: Missing = "refuse"


class HealpixSky(_MapSky):
    """``[sky] kind = "healpix"``: a HEALPix map in FITS."""

    kind: Literal["healpix"]
    field: int = Field(default=0, ge=0)
    ordering: Ordering = "header"


class ImageSky(_MapSky):
    """``[sky] kind = "image"``: a plate-carree FITS image of the whole sphere."""

    kind: Literal["image"]


class SurveyMap(Section):
    """One of ``[[sky.maps]]``: a map at one frequency, its frame, unit, resolution, zero level and scale.

    With ``resolution`` (full width at half maximum of the survey's beam) given for every
    map, all are smoothed to the coarsest; with it given for none, none is.
    """

    format: Literal["healpix", "image"]
    file: FilePath
    frame: Frame
    unit: str = Field(min_length=1)
    frequency_mhz: Mhz = Field(gt=0)
    field: int | None = Field(default=None, ge=0)
    ordering: Ordering | None = None
    missing: Missing = "refuse"
    resolution_deg: Degree | None = Field(default=None, gt=0, le=60)
    zero_level_k: Kelvin = 0.0
    scale: float = Field(default=1.0, gt=0)

    @model_validator(mode="after")
    def _healpix_only(self) -> Self:
        given = [name for name in ("field", "ordering") if getattr(self, name) is not None]
        if self.format == "image" and given:
            raise ValueError(f"{' and '.join(given)}: allowed with format 'healpix' only")
        return self


class _ManyMaps(_AnySky):
    """Maps at several frequencies, joined in each pixel over ln f.

    ``frequency`` is where an error of the index leaves the brightness as it is, and where
    noise of the map is added. ``index_change`` is added to the index of every pixel.
    """

    join: Joining
    order: int | None = Field(default=None, ge=1, le=12)
    frequency_mhz: Mhz = Field(gt=0)
    index_change: float = Field(default=0.0, ge=-2.0, le=2.0)

    def _join_problems(self, frequency_mhz: tuple[float, ...], what: str) -> list[str]:
        problems = []
        if len(frequency_mhz) < 2:
            problems.append(f"{what}: {len(frequency_mhz)} given; allowed: two or more")
        twice = sorted({one for one in frequency_mhz if frequency_mhz.count(one) > 1})
        problems += [f"{what}: {one:g} MHz stands more than once; allowed: one map a frequency" for one in twice]
        if self.join == "polynomial" and self.order is None:
            problems.append("order: missing; join = 'polynomial' needs it")
        elif self.join == "spline" and self.order is not None:
            problems.append("order: allowed with join = 'polynomial' only; a spline is cubic")
        elif self.order is not None and self.order > len(frequency_mhz) - 1 > 0:
            problems.append(
                f"order: {self.order}; allowed with {len(frequency_mhz)} maps: 1 to {len(frequency_mhz) - 1}"
            )
        return problems


class JoinedSky(_ManyMaps):
    """``[sky] kind = "joined"``: two or more maps, each from a file of its own, brought onto one grid in ``frame``."""

    kind: Literal["joined"]
    frame: Frame
    maps: tuple[SurveyMap, ...]

    @model_validator(mode="after")
    def _sound(self) -> Self:
        problems = self._join_problems(tuple(one.frequency_mhz for one in self.maps), "maps")
        without = [number for number, one in enumerate(self.maps) if one.resolution_deg is None]
        if 0 < len(without) < len(self.maps):
            named = ", ".join(f"maps.{number}" for number in without)
            problems.append(f"{named}: no resolution; allowed: resolution for every map, or for none")
        if problems:
            raise ValueError("; ".join(problems))
        return self


class CubeSky(_ManyMaps):
    """``[sky] kind = "cube"``: HEALPix maps at many frequencies in one file.

    FITS has one column a frequency, in the order of ``frequencies``; NetCDF has dimensions
    frequency and pixel, and ``frequencies`` must be those of the file.
    ``zero_levels`` and ``scales`` have one entry a frequency, ``scale`` holds for all.
    """

    kind: Literal["cube"]
    format: Literal["fits", "netcdf"]
    file: FilePath
    frame: Frame
    unit: str = Field(min_length=1)
    frequencies_mhz: Annotated[tuple[float, ...], InUnit("MHz")]
    variable: str | None = Field(default=None, min_length=1)
    ordering: Ordering = "header"
    missing: Missing = "refuse"
    zero_levels_k: Annotated[tuple[float, ...], InUnit("K")] = ()
    scales: tuple[float, ...] = ()
    scale: float = Field(default=1.0, gt=0)

    @model_validator(mode="after")
    def _sound(self) -> Self:
        problems = self._join_problems(self.frequencies_mhz, "frequencies")
        problems += [f"frequencies: {one:g} MHz; allowed: above zero" for one in self.frequencies_mhz if not one > 0]
        problems += [f"scales: {one:g}; allowed: above zero" for one in self.scales if not one > 0]
        for name in ("zero_levels_k", "scales"):
            given = len(getattr(self, name))
            if given not in (0, len(self.frequencies_mhz)):
                plain = name.removesuffix("_k")
                problems.append(
                    f"{plain}: {given} given; allowed: {len(self.frequencies_mhz)}, one a frequency, or none"
                )
        if self.format == "netcdf" and self.variable is None:
            problems.append("variable: missing; format 'netcdf' needs the name of the variable")
        if self.format == "fits" and self.variable is not None:
            problems.append("variable: allowed with format 'netcdf' only")
        if problems:
            raise ValueError("; ".join(problems))
        return self


Sky = Annotated[InventedSky | HealpixSky | ImageSky | JoinedSky | CubeSky, Field(discriminator="kind")]
