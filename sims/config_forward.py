"""Settings of the forward side: the tables that describe sky, antenna, vantage, receiver and signal.

`sims.config` puts these together with the reduction's into a whole campaign. A physical
quantity has no silent default: what may be left out is neutral, such as a tilt of zero.
"""

from __future__ import annotations

from datetime import UTC, datetime
from itertools import pairwise
from pathlib import Path
from typing import Annotated, Any, Literal, Self

from pydantic import BeforeValidator, Field, model_validator

from sims.quantities import Degree, Hours, InUnit, Kelvin, Km, Metre, Mhz, Millikelvin, Second, Section


def _path(value: Any) -> Any:
    return Path(value) if isinstance(value, str) and value else value


def _utc(value: Any) -> Any:
    if isinstance(value, str):
        try:
            value = datetime.fromisoformat(value)
        except ValueError:
            value = None
    if isinstance(value, datetime):
        return value.replace(tzinfo=UTC) if value.tzinfo is None else value.astimezone(UTC)
    raise ValueError("not a date and time: write 2027-06-01T00:00:00Z")


FilePath = Annotated[Path, BeforeValidator(_path)]
Utc = Annotated[datetime, BeforeValidator(_utc)]
Frame = Literal["galactic", "icrs", "fk5", "fk4"]
EARLIEST = datetime(1973, 1, 2, tzinfo=UTC)  # IERS tables start here
LATEST = datetime(2100, 1, 1, tzinfo=UTC)  # ERFA's series for the Earth and the Moon end here
Nside = Literal[4, 8, 16, 32, 64, 128, 256, 512]


class Channels(Section):
    """``[channels]``: edges of the band, number of channels, ranges to mask."""

    start_mhz: Mhz = Field(gt=0)
    stop_mhz: Mhz = Field(gt=0)
    count: int = Field(ge=8, le=65536)
    masks_mhz: Annotated[tuple[tuple[float, float], ...], InUnit("MHz")] = ()

    @model_validator(mode="after")
    def _rising(self) -> Self:
        if self.stop_mhz <= self.start_mhz:
            raise ValueError(f"stop ({self.stop_mhz} MHz) must lie above start ({self.start_mhz} MHz)")
        wrong = [mask for mask in self.masks_mhz if mask[1] <= mask[0]]
        if wrong:
            raise ValueError(f"masks must rise from lower to upper edge, got {wrong}")
        return self


class _Sky(Section):
    """What every kind of sky shares: the spectrum laid on one map."""

    nside: Nside
    frequency_mhz: Mhz = Field(gt=0)
    index: float = Field(ge=1.0, le=4.0)
    curvature: float = Field(default=0.0, ge=-1.0, le=1.0)
    index_map: FilePath | None = None
    zero_level_k: Kelvin = 0.0
    scale: float = Field(default=1.0, gt=0)
    valid_from_mhz: Mhz = Field(gt=0)
    valid_to_mhz: Mhz = Field(gt=0)

    @model_validator(mode="after")
    def _rising(self) -> Self:
        if self.valid_to_mhz <= self.valid_from_mhz:
            raise ValueError(
                f"valid_to ({self.valid_to_mhz} MHz) must lie above valid_from ({self.valid_from_mhz} MHz)"
            )
        return self


class InventedSky(_Sky):
    """``[sky] kind = "invented"``: the procedural sky that needs no file."""

    kind: Literal["invented"]
    map_seed: int = Field(ge=0)


class _MapSky(_Sky):
    file: FilePath
    frame: Frame
    unit: str = Field(min_length=1)
    missing: Literal["refuse", "fill"] = "refuse"


class HealpixSky(_MapSky):
    """``[sky] kind = "healpix"``: a HEALPix map in FITS."""

    kind: Literal["healpix"]
    field: int = Field(default=0, ge=0)
    ordering: Literal["header", "ring", "nested"] = "header"


class ImageSky(_MapSky):
    """``[sky] kind = "image"``: a plate-carree FITS image of the whole sphere."""

    kind: Literal["image"]


Sky = Annotated[InventedSky | HealpixSky | ImageSky, Field(discriminator="kind")]


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


class Receiver(Section):
    """``[receiver]``: its noise, and the errors left after calibration."""

    temperature_k: Kelvin = Field(ge=0)
    scale: float = Field(default=1.0, gt=0)
    offset_k: Kelvin = 0.0
    ripple_fraction: float = Field(default=0.0, ge=-0.5, le=0.5)
    ripple_period_mhz: Mhz = Field(default=10.0, gt=0)
    ripple_phase_deg: Degree = Field(default=0.0, ge=-360, le=360)


class Point(Section):
    """A turning point: frequency and temperature."""

    frequency_mhz: Mhz = Field(gt=0)
    temperature_mk: Millikelvin = Field(ge=-5000, le=5000)


class TurningPointSignal(Section):
    """``[signal] kind = "turning-points"``: a cubic through A to E, level at each."""

    kind: Literal["turning-points"]
    a: Point
    b: Point
    c: Point
    d: Point
    e: Point

    @model_validator(mode="after")
    def _rising(self) -> Self:
        frequencies = [point.frequency_mhz for point in (self.a, self.b, self.c, self.d, self.e)]
        if any(later <= earlier for earlier, later in pairwise(frequencies)):
            raise ValueError(f"frequencies must rise from a to e, got {frequencies} MHz")
        return self


class FlattenedGaussianSignal(Section):
    """``[signal] kind = "flattened-gaussian"``: a trough of stated depth, centre, width and flatness."""

    kind: Literal["flattened-gaussian"]
    depth_mk: Millikelvin = Field(gt=0, le=5000)
    centre_mhz: Mhz = Field(gt=0)
    width_mhz: Mhz = Field(gt=0)
    flattening: float = Field(ge=0, le=100)


class TableSignal(Section):
    """``[signal] kind = "table"``: a spectrum from a CSV file."""

    kind: Literal["table"]
    file: FilePath


class NoSignal(Section):
    """``[signal] kind = "none"``: a sky without a trough, to learn what the reduction invents."""

    kind: Literal["none"]


Signal = Annotated[TurningPointSignal | FlattenedGaussianSignal | TableSignal | NoSignal, Field(discriminator="kind")]


class Bins(Section):
    """``[bins]``: what the samples are sorted by before they are averaged."""

    by: Literal["all", "pointing", "orbit-phase", "sidereal-time"]
    count: int = Field(default=1, ge=1, le=1024)
