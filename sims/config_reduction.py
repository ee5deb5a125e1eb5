"""Settings of the reduction: the foreground model and the turning points with their priors.

`sims.config` puts them together with the forward side's tables.
"""

from __future__ import annotations

from itertools import accumulate
from typing import Literal, Self

from pydantic import Field, model_validator

from sims.config_forward import Point
from sims.quantities import Kelvin, MhzRange, MillikelvinRange, Section

FamilyName = Literal["log-polynomial", "power-series", "galaxy-ionosphere", "gaussian-process", "ensemble"]
DEFAULT_INDEX = 2.5

# For each family the options that it needs, and those that it takes besides.
_OPTIONS: dict[str, tuple[tuple[str, ...], tuple[str, ...]]] = {
    "log-polynomial": (("terms",), ()),
    "power-series": (("terms",), ("index",)),
    "galaxy-ionosphere": (("terms",), ("index",)),
    "gaussian-process": (("terms", "amplitude", "length"), ()),
    "ensemble": (("draws",), ("safety_terms", "safety_sd")),
}


class Foreground(Section):
    """``[foreground]``: the model of what is taken away, and its options.

    ``terms`` a bin have no prior. ``gaussian-process`` lets that log polynomial err by a fraction
    ``amplitude``, correlated over ``length`` in ln f. ``ensemble`` is the mean and the covariance of
    ``draws`` simulated campaigns; ``safety_terms`` of a polynomial a bin stand beside it, each with a
    standard deviation of ``safety_sd`` times the foreground.
    """

    family: FamilyName
    terms: int | None = Field(default=None, ge=1, le=20)
    index: float | None = Field(default=None, ge=1.0, le=4.0)
    amplitude: float | None = Field(default=None, gt=0, le=1.0)
    length: float | None = Field(default=None, ge=0.05, le=100.0)
    draws: int | None = Field(default=None, ge=50, le=100_000)
    safety_terms: int | None = Field(default=None, ge=1, le=20)
    safety_sd: float | None = Field(default=None, gt=0, le=1.0)

    @model_validator(mode="after")
    def _fits_family(self) -> Self:
        needed, taken = _OPTIONS[self.family]
        problems = [
            f"{name} is missing: family {self.family!r} needs it" for name in needed if getattr(self, name) is None
        ]
        problems += [
            f"{name} does nothing with family {self.family!r}; allowed there: family, {', '.join(needed + taken)}"
            for name in type(self).model_fields
            if name not in ("family", *needed, *taken) and getattr(self, name) is not None
        ]
        if self.family == "galaxy-ionosphere" and self.terms is not None and self.terms < 3:
            problems.append(f"terms must be at least 3 here, two of them the ionosphere's (got {self.terms})")
        if (self.safety_terms is None) != (self.safety_sd is None):
            problems.append("safety_terms and safety_sd go together")
        if problems:
            raise ValueError("; ".join(problems))
        return self

    @property
    def free_terms(self) -> int:
        """Terms a bin without prior."""
        return 0 if self.terms is None else self.terms

    @property
    def galaxy_index(self) -> float:
        """The spectral index that a family of powers starts from."""
        return DEFAULT_INDEX if self.index is None else self.index


class PointPrior(Section):
    """Bounds of a turning point: uniform within them."""

    frequency_mhz: MhzRange
    temperature_mk: MillikelvinRange

    @model_validator(mode="after")
    def _rising(self) -> Self:
        for name, bounds in (("frequency", self.frequency_mhz), ("temperature", self.temperature_mk)):
            if bounds[1] <= bounds[0]:
                raise ValueError(f"{name} must rise from lower to upper bound, got {list(bounds)}")
        if self.frequency_mhz[0] <= 0:
            raise ValueError(f"frequency must be positive, got {list(self.frequency_mhz)} MHz")
        return self


class TurningPoints(Section):
    """``[turning_points]``: fixed ends A and E, priors of B, C and D, and the sampler's effort."""

    a: Point
    e: Point
    b: PointPrior
    c: PointPrior
    d: PointPrior
    walkers: int = Field(default=160, ge=64, le=4096)
    steps: int = Field(default=1600, ge=100, le=1_000_000)

    @model_validator(mode="after")
    def _room(self) -> Self:
        lower = [self.a.frequency_mhz, *(point.frequency_mhz[0] for point in (self.b, self.c, self.d))]
        upper = [*(point.frequency_mhz[1] for point in (self.b, self.c, self.d)), self.e.frequency_mhz]
        problems = []
        if self.b.frequency_mhz[0] < self.a.frequency_mhz:
            problems.append("b must start above a")
        if self.d.frequency_mhz[1] > self.e.frequency_mhz:
            problems.append("d must end below e")
        if any(low >= high for low, high in zip(accumulate(lower, max), upper, strict=True)):
            problems.append("the ranges leave no room for a < b < c < d < e in frequency")
        if self.c.temperature_mk[0] >= min(self.b.temperature_mk[1], self.d.temperature_mk[1]):
            problems.append("the ranges leave no room for c below b and d in temperature")
        if self.walkers % 4:
            problems.append(f"walkers must be a multiple of 4 (two ensembles of an even number), got {self.walkers}")
        if problems:
            raise ValueError("; ".join(problems))
        return self


class Limits(Section):
    """``[limits]``: what the limits on the gas assume: a radio background beyond the cosmic microwave one, if any.

    ``radio_excess`` is its brightness today at 78 MHz, a power law in frequency of ``radio_index``.
    """

    radio_excess_k: Kelvin | None = Field(default=None, gt=0, le=1000.0)
    radio_index: float | None = Field(default=None, ge=-4.0, le=0.0)

    @model_validator(mode="after")
    def _together(self) -> Self:
        if (self.radio_excess_k is None) != (self.radio_index is None):
            raise ValueError("radio_excess and radio_index go together")
        return self
