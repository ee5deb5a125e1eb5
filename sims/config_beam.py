"""Settings of the antenna: its pattern, how it is mounted and what it loses.

`sims.config` puts them together with the other tables. A physical quantity has no silent
default: what may be left out is neutral, such as a tilt of zero.
"""

from __future__ import annotations

from typing import Annotated, Literal, Self

from pydantic import Field, model_validator

from sims.config_types import FilePath
from sims.quantities import Degree, InUnit, Kelvin, Metre, Mhz, Section

Files = Annotated[tuple[FilePath, ...], Field(min_length=1)]
Frequencies = Annotated[tuple[float, ...], InUnit("MHz"), Field(min_length=1)]


class _Beam(Section):
    """What every antenna shares: how it is mounted, what it loses, and the errors its pattern may have."""

    tilt_deg: Degree = Field(default=0.0, ge=-180, le=180)
    tilt_azimuth_deg: Degree = Field(default=0.0, ge=-360, le=360)
    turn_deg: Degree = Field(default=0.0, ge=-360, le=360)
    efficiency: float = Field(gt=0, le=1)
    structure_temperature_k: Kelvin = Field(gt=0)
    dimension_scale: float = Field(default=1.0, gt=0.5, lt=2)
    ripple_fraction: float = Field(default=0.0, ge=-0.5, le=0.5)
    ripple_period_mhz: Mhz = Field(default=10.0, gt=0)
    ripple_phase_deg: Degree = Field(default=0.0, ge=-360, le=360)


class ShortDipole(_Beam):
    """``[beam] kind = "short-dipole"``: the limit of a wire far shorter than the wave."""

    kind: Literal["short-dipole"]


class Dipole(_Beam):
    """``[beam] kind = "dipole"``: a thin wire with sinusoidal current, alone or over a conducting plane."""

    kind: Literal["dipole"]
    length_m: Metre = Field(gt=0)
    height_m: Annotated[Metre, Field(gt=0)] | None = None
    wire: Literal["horizontal", "vertical"] = "horizontal"


class GaussianBeam(_Beam):
    """``[beam] kind = "gaussian"``: round, width falling as a power of frequency."""

    kind: Literal["gaussian"]
    width_deg: Degree = Field(gt=0, le=180)
    frequency_mhz: Mhz = Field(gt=0)
    width_exponent: float = Field(ge=0, le=2)


class NecSource(Section):
    """``beam.source.format = "nec"``: print-outs of the NEC-2 method-of-moments code, read by their field columns."""

    format: Literal["nec"]
    files: Files


class PowerColumn(Section):
    """Power in one column, by name or by number from 1."""

    column: str | int
    unit: Literal["dBi", "linear"]


class FieldColumns(Section):
    """Complex fields in four columns: the two parts of E-theta, then those of E-phi."""

    columns: tuple[str | int, str | int, str | int, str | int]
    parts: Literal["real-imaginary", "magnitude-phase"]


class TableSource(Section):
    """``beam.source.format = "table"``: delimited text, its columns, units and angles declared here."""

    format: Literal["table"]
    files: Files
    delimiter: Literal["comma", "semicolon", "tab", "space"]
    header_lines: int = Field(ge=0, le=1000)
    theta: str | int
    phi: str | int
    angle_unit: Literal["deg", "rad"]
    theta_from: Literal["zenith", "horizon"]
    phi_sense: Literal["x-to-y", "compass"]
    power: PowerColumn | None = None
    fields: FieldColumns | None = None
    frequency: str | int | None = None
    frequency_unit: Literal["Hz", "kHz", "MHz", "GHz"] = "MHz"
    frequencies_mhz: Frequencies | None = None

    @model_validator(mode="after")
    def _complete(self) -> Self:
        problems = []
        if (self.power is None) == (self.fields is None):
            problems.append("give power or fields, one of the two")
        if (self.frequency is None) == (self.frequencies_mhz is None):
            problems.append("give frequency (a column) or frequencies (one a file), one of the two")
        if self.frequencies_mhz is not None and len(self.frequencies_mhz) != len(self.files):
            problems.append(f"{len(self.frequencies_mhz)} frequencies for {len(self.files)} files; give one for each")
        if problems:
            raise ValueError("; ".join(problems))
        return self


class HealpixSource(Section):
    """``beam.source.format = "healpix"``: HEALPix FITS with a map for each frequency, z the pole, x at phi 0."""

    format: Literal["healpix"]
    files: Files
    frequencies_mhz: Frequencies
    unit: Literal["dBi", "linear"]
    ordering: Literal["header", "ring", "nested"] = "header"


class NetcdfSource(Section):
    """``beam.source.format = "netcdf"``: a file with dims frequency, theta and phi, units on the coordinates."""

    format: Literal["netcdf"]
    file: FilePath
    variable: str | None = None
    field_variables: tuple[str, str, str, str] | None = None
    unit: Literal["dBi", "linear"] = "linear"

    @model_validator(mode="after")
    def _complete(self) -> Self:
        if (self.variable is None) == (self.field_variables is None):
            raise ValueError(
                "give variable (power) or field_variables (real and imaginary part of E-theta, then of E-phi), "
                "one of the two"
            )
        return self


Source = Annotated[NecSource | TableSource | HealpixSource | NetcdfSource, Field(discriminator="format")]


class BeamMode(Section):
    """``[[beam.modes]]``: another pattern; the beam is moved towards it by the amplitude."""

    source: Source
    amplitude: float = Field(default=0.0, ge=-100, le=100)


class FileBeam(_Beam):
    """``[beam] kind = "file"``: a pattern from a solver or a chamber."""

    kind: Literal["file"]
    source: Source
    quantity: Literal["gain", "directivity"]
    missing_power: Literal["efficiency", "ground-loss", "numerical"]
    smoothing_mhz: Annotated[Mhz, Field(gt=0)] | None = None
    modes: tuple[BeamMode, ...] = ()


Beam = Annotated[ShortDipole | Dipole | GaussianBeam | FileBeam, Field(discriminator="kind")]
