"""Settings of the sky: the map or maps it is made of and the spectrum laid on them.

`sims.config` puts them together with the other tables. A physical quantity has no silent
default: what may be left out is neutral.
"""

from __future__ import annotations

from typing import Annotated, Literal, Self

from pydantic import Field, model_validator

from sims.config_types import FilePath, Frame, Nside
from sims.quantities import Kelvin, Mhz, Section


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
