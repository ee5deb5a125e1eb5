"""Settings of the forward side that have no file of their own: channels, receiver, signal and bins.

`sims.config` puts them together with sky, beam and vantage and with the reduction's tables.
"""

from __future__ import annotations

from itertools import pairwise
from typing import Annotated, Literal, Self

from pydantic import Field, model_validator

from sims.config_types import FilePath
from sims.quantities import Degree, InUnit, Kelvin, Mhz, Millikelvin, Section


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
