"""Settings of the place: orbit or site, where the boresight points, what lies below, when samples are taken.

`sims.config` puts them together with the other tables. A physical quantity has no silent
default: what may be left out is neutral, such as a roll of zero.
"""

from __future__ import annotations

from typing import Annotated, Literal, Self

from pydantic import Field, model_validator

from sims.config_types import EARLIEST, LATEST, Utc
from sims.quantities import Degree, Hours, InUnit, Kelvin, Km, Metre, Second, Section


class FixedBoresight(Section):
    """``boresight.kind = "fixed"``: directions in the sky (ICRS), each in turn for the dwell time, over and over."""

    kind: Literal["fixed"]
    directions_deg: Annotated[tuple[tuple[float, float], ...], InUnit("deg"), Field(min_length=1)]
    dwell_s: Second = Field(gt=0)
    roll_deg: Degree = Field(default=0.0, ge=-360, le=360)

    @model_validator(mode="after")
    def _on_the_sphere(self) -> Self:
        wrong = [pair for pair in self.directions_deg if not -90 <= pair[1] <= 90]
        if wrong:
            raise ValueError(f"declinations must lie within -90 to 90 deg, got {wrong}")
        return self


class VerticalBoresight(Section):
    """``boresight.kind = "vertical"``: to the local zenith."""

    kind: Literal["vertical"]
    azimuth_deg: Degree = Field(default=0.0, ge=-360, le=360)


Boresight = Annotated[FixedBoresight | VerticalBoresight, Field(discriminator="kind")]


class LunarOrbit(Section):
    """``[vantage] kind = "lunar-orbit"``: a circular orbit, elements at the start of the observation."""

    kind: Literal["lunar-orbit"]
    altitude_km: Km = Field(ge=5, le=20000)
    inclination_deg: Degree = Field(ge=0, le=180)
    node_deg: Degree = Field(ge=-360, le=360)
    phase_deg: Degree = Field(ge=-360, le=360)
    boresight: Boresight


class GroundSite(Section):
    """``[vantage] kind = "ground"``: a place on Earth with a level horizon."""

    kind: Literal["ground"]
    latitude_deg: Degree = Field(ge=-90, le=90)
    longitude_deg: Degree = Field(ge=-360, le=360)
    height_m: Metre = Field(ge=-500, le=9000)
    horizon_deg: Degree = Field(default=0.0, ge=0, le=45)
    boresight: Boresight


Vantage = Annotated[LunarOrbit | GroundSite, Field(discriminator="kind")]


class Surface(Section):
    """``[surface]``: the Moon or soil that fills the sphere below the limb."""

    temperature_k: Kelvin = Field(gt=0, le=1000)
    permittivity: float = Field(ge=1, le=100)
    reflection: bool


class Observation(Section):
    """``[observation]``: when the samples are taken, which are kept, and the time they stand for."""

    start: Utc
    step_s: Second = Field(gt=0)
    count: int = Field(ge=1, le=10_000_000)
    integration_hours: Hours = Field(gt=0)
    duty_cycle: float = Field(gt=0, le=1)
    require: tuple[Literal["earth-hidden", "sun-hidden"], ...] = ()

    @model_validator(mode="after")
    def _within_ephemerides(self) -> Self:
        left_s = (LATEST - self.start).total_seconds()
        if self.start < EARLIEST or self.step_s * self.count > left_s:
            raise ValueError(
                f"start, {self.start:%Y-%m-%d}, and count x step, {self.count} x {self.step_s:g} s, must lie within "
                f"{EARLIEST:%Y-%m-%d} to {LATEST:%Y-%m-%d}, where ephemerides and Earth rotation hold"
            )
        return self
