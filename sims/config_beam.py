"""Settings of the antenna: its pattern, how it is mounted and what it loses.

`sims.config` puts them together with the other tables. A physical quantity has no silent
default: what may be left out is neutral, such as a tilt of zero.
"""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from sims.quantities import Degree, Kelvin, Metre, Mhz, Section


class _Beam(Section):
    """What every antenna shares: how it is mounted and what it loses."""

    tilt_deg: Degree = Field(default=0.0, ge=-180, le=180)
    tilt_azimuth_deg: Degree = Field(default=0.0, ge=-360, le=360)
    turn_deg: Degree = Field(default=0.0, ge=-360, le=360)
    efficiency: float = Field(gt=0, le=1)
    structure_temperature_k: Kelvin = Field(gt=0)


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


Beam = Annotated[ShortDipole | Dipole | GaussianBeam, Field(discriminator="kind")]
