"""Quantities with units in the configuration: every writing that is allowed, and every slip that is not."""

from __future__ import annotations

from typing import Annotated, Any

import pytest
from pydantic import Field, ValidationError

from sims.quantities import (
    SUFFIXES,
    Degree,
    Hours,
    InUnit,
    Kelvin,
    Metre,
    Mhz,
    MhzRange,
    Millikelvin,
    Second,
    Section,
    plain_name,
    unit_of,
)


class Table(Section):
    start_mhz: Mhz = Field(gt=0)
    depth_mk: Millikelvin = 0.0
    height_m: Annotated[Metre, Field(gt=0)] | None = None
    range_mhz: MhzRange = (1.0, 2.0)
    pairs_deg: Annotated[tuple[tuple[float, float], ...], InUnit("deg")] = ()
    share: float = 0.5


class Units(Section):
    a_k: Kelvin
    b_s: Second
    c_hours: Hours
    d_deg: Degree


def problem_of(table: dict[str, Any]) -> str:
    with pytest.raises(ValidationError) as caught:
        Table.model_validate(table)
    return str(caught.value)


# Exact, but for one rounding of the factor between the units: hence 1e-15 of the value.
@pytest.mark.parametrize(
    ("table", "value"),
    [
        ({"start": "70 MHz"}, 70.0),
        ({"start": "70e6 Hz"}, 70.0),
        ({"start": "0.07 GHz"}, 70.0),
        ({"start": "70MHz"}, 70.0),
        ({"start_mhz": 70.0}, 70.0),
        ({"start_mhz": 70}, 70.0),
    ],
)
def test_one_quantity_has_many_writings(table: dict[str, Any], value: float) -> None:
    read = Table.model_validate(table).start_mhz
    assert isinstance(read, float)
    assert read == pytest.approx(value, rel=1e-15)


def test_units_of_the_same_kind_are_converted() -> None:
    read = Units.model_validate({"a": "250 mK", "b": "2 min", "c": "90 min", "d": "30 arcmin"})
    # One multiplication by a rounded factor each.
    assert (read.a_k, read.b_s, read.c_hours, read.d_deg) == pytest.approx((0.25, 120.0, 1.5, 0.5), rel=1e-15)


def test_lists_and_optional_quantities_are_read_the_same_way() -> None:
    read = Table.model_validate(
        {"start": "1 MHz", "range": ["40 MHz", "0.12 GHz"], "pairs": [["1 deg", "60 arcmin"]], "height": "50 cm"}
    )
    assert read.range_mhz == pytest.approx((40.0, 120.0), rel=1e-15)  # one rounding of the factor
    assert read.pairs_deg[0] == pytest.approx((1.0, 1.0), rel=1e-15)
    assert read.height_m == pytest.approx(0.5, rel=1e-15)
    assert Table.model_validate({"start_mhz": 1, "height_m": 0.5}).height_m == 0.5
    assert Table.model_validate({"start_mhz": 1}).height_m is None


@pytest.mark.parametrize(
    ("table", "words"),
    [
        ({"start": 70}, ("start_mhz", "needs its unit", '"<number> MHz"', "…_mhz")),
        ({"start": "70"}, ("wrong unit (no unit)", '"<number> MHz"')),
        ({"start": "70 m"}, ("wrong unit (m)", '"<number> MHz"')),
        ({"start": "seventy MHz"}, ("not a quantity",)),
        ({"start": "70 parsnips"}, ("not a quantity",)),
        ({"start": ""}, ("not a quantity",)),
        ({"start": "nan MHz"}, ("not finite",)),
        ({"start": "inf MHz"}, ("not finite",)),
        ({"start": True}, ("needs its unit",)),
        ({"start": None}, ("needs its unit",)),
        ({"start_mhz": "70 MHz"}, ("already carries the unit MHz",)),
        ({"start_mhz": True}, ("valid number",)),
        ({"start_mhz": float("nan")}, ("finite",)),
        ({"start_mhz": -1.0}, ("greater than 0",)),
        ({"start": "70 MHz", "start_mhz": 70.0}, ("Extra inputs are not permitted",)),
        ({"start_mhz": 70.0, "range": ["40 MHz", 50]}, ("item 1", "needs its unit")),
        ({"start_mhz": 70.0, "pairs": [["1 deg", "2 K"]]}, ("item 0: item 1", "wrong unit (K)")),
        ({"start_mhz": 70.0, "pairs_deg": [[1.0, float("inf")]]}, ("finite",)),
        ({"start_mhz": 70.0, "range": ["40 MHz", "50 MHz", "60 MHz"]}, ("at most 2",)),
        ({"start_mhz": 70.0, "share": True}, ("valid number",)),
        ({"start_mhz": 70.0, "share": "0.5"}, ("valid number",)),
        ({"start_mhz": 70.0, "wide": 1}, ("Extra inputs are not permitted",)),
        ({}, ("start_mhz", "required")),
    ],
)
def test_every_slip_is_refused_and_says_what_is_allowed(table: dict[str, Any], words: tuple[str, ...]) -> None:
    message = problem_of(table)
    for word in words:
        assert word in message


def test_sections_are_frozen() -> None:
    table = Table.model_validate({"start": "70 MHz"})
    with pytest.raises(ValidationError, match="frozen"):
        table.start_mhz = 80.0  # type: ignore[misc]


def test_names_follow_from_the_unit() -> None:
    fields = Table.model_fields
    assert {name: plain_name(name, field) for name, field in fields.items()} == {
        "start_mhz": "start",
        "depth_mk": "depth",
        "height_m": "height",
        "range_mhz": "range",
        "pairs_deg": "pairs",
        "share": "share",
    }
    assert unit_of(fields["share"]) is None
    assert unit_of(fields["height_m"]) == InUnit("m")
    assert all(InUnit(unit).suffix == f"_{suffix}" for unit, suffix in SUFFIXES.items())
