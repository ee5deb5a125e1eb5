"""Quantities with units in the configuration: ``"70 MHz"`` under ``start``, or 70 under ``start_mhz``.

A field whose type is one of the aliases below ends in its unit (``start_mhz``). In the
file it may stand under its plain name with a string that carries the unit, or under its
full name as a bare number; nothing else is taken. `sims.config` builds its models of these.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Annotated, Any, get_args

import astropy.units as u
from pydantic import BaseModel, ConfigDict, GetCoreSchemaHandler, model_validator
from pydantic.fields import FieldInfo
from pydantic_core import CoreSchema, core_schema

SUFFIXES = {
    "MHz": "mhz",
    "K": "k",
    "mK": "mk",
    "km": "km",
    "m": "m",
    "deg": "deg",
    "s": "s",
    "h": "hours",
}


@dataclass(frozen=True)
class _Text:
    """A value found under the plain name of a quantity, still to be given its unit."""

    value: Any


@dataclass(frozen=True)
class InUnit:
    """Marks a number, or nested lists of numbers, as a quantity held in `unit`."""

    unit: str

    @property
    def suffix(self) -> str:
        """Ending of the field's name, such as ``_mhz``."""
        return "_" + SUFFIXES[self.unit]

    def __get_pydantic_core_schema__(self, source: Any, handler: GetCoreSchemaHandler) -> CoreSchema:
        return core_schema.no_info_before_validator_function(self.parse, handler(source))

    def parse(self, value: Any) -> Any:
        """Convert what stands in the file to plain numbers in `unit`.

        Raises
        ------
        ValueError
            If the unit is missing, unknown, of another dimension, or given twice.
        """
        if isinstance(value, _Text):
            return self.parse_text(value.value)
        if isinstance(value, list | tuple):
            return _each(self.parse, value)
        if isinstance(value, str):
            raise ValueError(f"the key already carries the unit {self.unit}: write a bare number, or drop the suffix")
        if isinstance(value, int | float) and not isinstance(value, bool):
            return float(value)
        return value

    def parse_text(self, value: Any) -> Any:
        """Convert text with a unit, or nested lists of it, to plain numbers in `unit`."""
        if isinstance(value, list | tuple):
            return _each(self.parse_text, value)
        example = f'"<number> {self.unit}"'
        if not isinstance(value, str):
            raise ValueError(f"a quantity needs its unit: write {example}, or a bare number under …{self.suffix}")
        try:
            quantity = u.Quantity(value)
        except (TypeError, ValueError):
            raise ValueError(f"not a quantity: write {example}") from None
        try:
            number = float(quantity.to_value(u.Unit(self.unit)))
        except u.UnitConversionError:
            unit = quantity.unit.to_string() or "no unit"
            raise ValueError(f"wrong unit ({unit}): write {example} or another unit of the same kind") from None
        if not math.isfinite(number):
            raise ValueError(f"not finite: write {example}")
        return number


def _each(parse: Callable[[Any], Any], values: Iterable[Any]) -> tuple[Any, ...]:
    parsed, problems = [], []
    for number, value in enumerate(values):
        try:
            parsed.append(parse(value))
        except ValueError as error:
            problems.append(f"item {number}: {error}")
    if problems:
        raise ValueError("; ".join(problems))
    return tuple(parsed)


Mhz = Annotated[float, InUnit("MHz")]
Kelvin = Annotated[float, InUnit("K")]
Millikelvin = Annotated[float, InUnit("mK")]
Km = Annotated[float, InUnit("km")]
Metre = Annotated[float, InUnit("m")]
Degree = Annotated[float, InUnit("deg")]
Second = Annotated[float, InUnit("s")]
Hours = Annotated[float, InUnit("h")]
MhzRange = Annotated[tuple[float, float], InUnit("MHz")]
MillikelvinRange = Annotated[tuple[float, float], InUnit("mK")]


def unit_of(field: FieldInfo) -> InUnit | None:
    """Unit mark of a model field, if it is a quantity (optional ones included)."""
    marks = [*field.metadata]
    for argument in get_args(field.annotation):
        marks.extend(getattr(argument, "__metadata__", ()))
    return next((mark for mark in marks if isinstance(mark, InUnit)), None)


def plain_name(name: str, field: FieldInfo) -> str:
    """Name of a field without the ending that carries its unit."""
    mark = unit_of(field)
    return name if mark is None else name.removesuffix(mark.suffix)


def _as_tuples(value: Any) -> Any:
    return tuple(_as_tuples(item) for item in value) if isinstance(value, list) else value


class Section(BaseModel):
    """A table of the configuration: frozen, strict, no unknown keys, quantities by either name."""

    model_config = ConfigDict(frozen=True, strict=True, extra="forbid", allow_inf_nan=False)

    @model_validator(mode="before")
    @classmethod
    def _names_with_units(cls, table: Any) -> Any:
        if not isinstance(table, dict):
            return table
        renamed = {key: _as_tuples(value) for key, value in table.items()}
        for name, field in cls.model_fields.items():
            plain = plain_name(name, field)
            if plain != name and plain in renamed and name not in renamed:
                renamed[name] = _Text(renamed.pop(plain))
        return renamed
