"""Settings of the place: orbit or site, where the boresight points, what lies below, when samples are taken.

`sims.config` puts them together with the other tables. A physical quantity has no silent
default: what may be left out is neutral, such as a roll of zero.
"""

from __future__ import annotations

from itertools import pairwise
from typing import Annotated, Literal, Self

from pydantic import Field, model_validator

from sims.config_types import EARLIEST, LATEST, FilePath, Utc
from sims.constants import MOON_MEAN_RADIUS_KM
from sims.quantities import Degree, Hours, InUnit, Kelvin, Km, Metre, Mhz, Second, Section

LOWEST_PERICENTRE_KM = 5.0


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
    """``boresight.kind = "vertical"``: to the local zenith, the x axis at this azimuth."""

    kind: Literal["vertical"]
    azimuth_deg: Degree = Field(default=0.0, ge=-360, le=360)


class HorizontalBoresight(Section):
    """``boresight.kind = "horizontal"``: along the local horizontal at this azimuth, the x axis up but for the roll."""

    kind: Literal["horizontal"]
    azimuth_deg: Degree = Field(default=0.0, ge=-360, le=360)
    roll_deg: Degree = Field(default=0.0, ge=-360, le=360)


class VelocityBoresight(Section):
    """``boresight.kind = "velocity"``: along the motion round the Moon, the x axis up but for the roll."""

    kind: Literal["velocity"]
    roll_deg: Degree = Field(default=0.0, ge=-360, le=360)


class AntiSunBoresight(Section):
    """``boresight.kind = "anti-sun"``: away from the Sun, the x axis to ICRS north but for the roll."""

    kind: Literal["anti-sun"]
    roll_deg: Degree = Field(default=0.0, ge=-360, le=360)


class SpinBoresight(Section):
    """``boresight.kind = "spin"``: turning about an axis (ICRS) at an angle from it, the x axis away from the axis."""

    kind: Literal["spin"]
    axis_deg: Annotated[tuple[float, float], InUnit("deg")]
    angle_deg: Degree = Field(ge=0, le=180)
    period_s: Second = Field(gt=0)
    phase_deg: Degree = Field(default=0.0, ge=-360, le=360)

    @model_validator(mode="after")
    def _on_the_sphere(self) -> Self:
        if not -90 <= self.axis_deg[1] <= 90:
            raise ValueError(f"declination of the axis must lie within -90 to 90 deg, got {self.axis_deg[1]}")
        return self


class Target(Section):
    """An entry of a schedule: from when on, the boresight lies in this direction (ICRS)."""

    start: Utc
    direction_deg: Annotated[tuple[float, float], InUnit("deg")]
    roll_deg: Degree = Field(default=0.0, ge=-360, le=360)

    @model_validator(mode="after")
    def _on_the_sphere(self) -> Self:
        if not -90 <= self.direction_deg[1] <= 90:
            raise ValueError(f"declination must lie within -90 to 90 deg, got {self.direction_deg[1]}")
        return self


class ScheduledBoresight(Section):
    """``boresight.kind = "schedule"``: to a list of targets, each from its start to that of the next."""

    kind: Literal["schedule"]
    targets: Annotated[tuple[Target, ...], Field(min_length=1)]

    @model_validator(mode="after")
    def _rising(self) -> Self:
        starts = [target.start for target in self.targets]
        if any(later <= earlier for earlier, later in pairwise(starts)):
            raise ValueError(f"starts of targets must rise, got {[f'{start:%Y-%m-%dT%H:%M:%SZ}' for start in starts]}")
        return self


class TabulatedBoresight(Section):
    """``boresight.kind = "table"``: attitudes from a CSV file of UTC times and quaternions, antenna to ICRS."""

    kind: Literal["table"]
    file: FilePath
    longest_gap_s: Second = Field(gt=0)


Boresight = Annotated[
    FixedBoresight
    | VerticalBoresight
    | HorizontalBoresight
    | VelocityBoresight
    | AntiSunBoresight
    | SpinBoresight
    | ScheduledBoresight
    | TabulatedBoresight,
    Field(discriminator="kind"),
]


class LunarOrbit(Section):
    """``[vantage] kind = "lunar-orbit"``: a Kepler orbit whose node and pericentre drift by the Moon's oblateness."""

    kind: Literal["lunar-orbit"]
    altitude_km: Km = Field(ge=5, le=60000)
    eccentricity: float = Field(default=0.0, ge=0, lt=1)
    inclination_deg: Degree = Field(ge=0, le=180)
    node_deg: Degree = Field(ge=-360, le=360)
    pericentre_deg: Degree = Field(default=0.0, ge=-360, le=360)
    phase_deg: Degree = Field(ge=-360, le=360)
    epoch: Utc | None = None
    oblateness: bool = True
    boresight: Boresight

    @model_validator(mode="after")
    def _clear_of_the_ground(self) -> Self:
        lowest_km = (MOON_MEAN_RADIUS_KM + self.altitude_km) * (1.0 - self.eccentricity) - MOON_MEAN_RADIUS_KM
        if lowest_km < LOWEST_PERICENTRE_KM:
            raise ValueError(
                f"pericentre lies {lowest_km:.1f} km above the mean radius, at least {LOWEST_PERICENTRE_KM:g} km is "
                f"needed: got altitude {self.altitude_km:g} km (semi-major axis less mean radius) and eccentricity "
                f"{self.eccentricity:g}"
            )
        return self


class LunarOrbitFile(Section):
    """``[vantage] kind = "lunar-orbit-file"``: an orbit round the Moon from a CCSDS Orbit Ephemeris Message (KVN)."""

    kind: Literal["lunar-orbit-file"]
    file: FilePath
    boresight: Boresight


class _Site(Section):
    """A place on the ground, with a level horizon or one from a table of azimuth and elevation."""

    latitude_deg: Degree = Field(ge=-90, le=90)
    longitude_deg: Degree = Field(ge=-360, le=360)
    horizon_deg: Degree = Field(default=0.0, ge=0, le=45)
    horizon_file: FilePath | None = None

    @model_validator(mode="after")
    def _one_horizon(self) -> Self:
        if self.horizon_file is not None and self.horizon_deg != 0.0:
            raise ValueError(f"give horizon ({self.horizon_deg:g} deg) or horizon_file ({self.horizon_file}), not both")
        return self


class LunarSurface(_Site):
    """``[vantage] kind = "lunar-surface"``: a lander at selenographic (mean-Earth, IAU) latitude and longitude."""

    kind: Literal["lunar-surface"]
    height_m: Metre = Field(ge=-10000, le=12000)
    boresight: Boresight


class GroundSite(_Site):
    """``[vantage] kind = "ground"``: a place on Earth, geodetic (WGS 84)."""

    kind: Literal["ground"]
    height_m: Metre = Field(ge=-500, le=9000)
    boresight: Boresight


Vantage = Annotated[LunarOrbit | LunarOrbitFile | LunarSurface | GroundSite, Field(discriminator="kind")]


class Layer(Section):
    """``[surface.layer]``: what lies under the top layer, whose thickness makes the reflected sky ripple."""

    thickness_m: Metre = Field(gt=0, le=1000)
    permittivity: float = Field(ge=1, le=100)
    loss_tangent: float = Field(default=0.0, ge=0, le=1)


class Surface(Section):
    """``[surface]``: the Moon or soil that fills the sphere below the limb."""

    temperature_k: Kelvin = Field(gt=0, le=1000)
    polar_temperature_k: Annotated[Kelvin, Field(gt=0, le=1000)] | None = None
    temperature_exponent: float = Field(default=0.0, ge=-1, le=1)
    temperature_frequency_mhz: Annotated[Mhz, Field(gt=0)] | None = None
    permittivity: float = Field(ge=1, le=100)
    reflection: bool
    layer: Layer | None = None

    @model_validator(mode="after")
    def _complete(self) -> Self:
        problems = []
        if self.temperature_exponent != 0.0 and self.temperature_frequency_mhz is None:
            problems.append("temperature_exponent needs temperature_frequency, where the temperature holds")
        if self.layer is not None and not self.reflection:
            problems.append("layer acts through reflection alone: reflection = true")
        if problems:
            raise ValueError("; ".join(problems))
        return self


class Observation(Section):
    """``[observation]``: when the samples are taken, which are kept, and the time they stand for."""

    start: Utc
    step_s: Second = Field(gt=0)
    count: int = Field(ge=1, le=10_000_000)
    integration_hours: Hours = Field(gt=0)
    duty_cycle: float = Field(gt=0, le=1)
    require: tuple[Literal["earth-hidden", "sun-hidden"], ...] = ()
    ephemeris: FilePath | None = None

    @model_validator(mode="after")
    def _within_ephemerides(self) -> Self:
        left_s = (LATEST - self.start).total_seconds()
        if self.start < EARLIEST or self.step_s * self.count > left_s:
            raise ValueError(
                f"start, {self.start:%Y-%m-%d}, and count x step, {self.count} x {self.step_s:g} s, must lie within "
                f"{EARLIEST:%Y-%m-%d} to {LATEST:%Y-%m-%d}, where ephemerides and Earth rotation hold"
            )
        return self
