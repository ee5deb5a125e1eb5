"""Products keep to their schema: every departure is told, nothing else is."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr

from sims.errors import InputError
from sims.schema import BUNDLE, RECORDING, SPECTRA, TRUTH, Product, Variable, check, describe

SMALL: Product = {
    "frequency_mhz": Variable(("channel",), "MHz", "frequency"),
    "temperature_k": Variable(("bin", "channel"), "K", "temperature", finite=False),
    "weight_s": Variable(("bin",), "s", "weight", required=False),
}


def small() -> xr.Dataset:
    return describe(
        xr.Dataset(
            {
                "frequency_mhz": ("channel", np.array([40.0, 50.0, 60.0])),
                "temperature_k": (("bin", "channel"), np.full((2, 3), np.nan)),
            }
        ),
        SMALL,
    )


def problems(dataset: xr.Dataset) -> tuple[str, ...]:
    with pytest.raises(InputError) as caught:
        check(dataset, SMALL, "here.nc")
    assert all(problem.startswith("here.nc: ") for problem in caught.value.problems)
    return caught.value.problems


def test_describing_writes_units_and_names_and_leaves_the_input_alone() -> None:
    bare = xr.Dataset(
        {"frequency_mhz": ("channel", np.array([40.0])), "temperature_k": (("bin", "channel"), np.zeros((1, 1)))}
    )
    described = describe(bare, SMALL)
    assert described["frequency_mhz"].attrs == {"long_name": "frequency", "units": "MHz"}
    assert bare["frequency_mhz"].attrs == {}
    check(described, SMALL, "here.nc")


def test_optional_variables_and_not_a_number_pass_where_allowed() -> None:
    check(small(), SMALL, "here.nc")
    with_weight = small().assign(weight_s=("bin", np.ones(2), {"units": "s"}))
    check(with_weight, SMALL, "here.nc")


def test_variables_beyond_the_product_are_left_alone() -> None:
    check(small().assign(comment=("bin", ["a", "b"])), SMALL, "here.nc")


def test_missing_variable() -> None:
    assert problems(small().drop_vars("frequency_mhz")) == (
        "here.nc: variable frequency_mhz['channel'] is missing",
    )  # fmt: skip


def test_wrong_dims_and_their_order() -> None:
    turned = small().assign(temperature_k=small()["temperature_k"].transpose())
    (problem,) = problems(turned)
    assert "temperature_k has dims ['channel', 'bin'], allowed are ['bin', 'channel']" in problem


@pytest.mark.parametrize("units", ["mK", None])
def test_wrong_or_missing_units(units: str | None) -> None:
    dataset = small()
    dataset["temperature_k"].attrs = {} if units is None else {"units": units}
    (problem,) = problems(dataset)
    assert f"temperature_k has units {units!r}, allowed is 'K'" in problem


def test_text_is_no_number() -> None:
    dataset = small().assign(frequency_mhz=("channel", ["40", "50", "60"], {"units": "MHz"}))
    assert "allowed are numbers" in problems(dataset)[0]


def test_values_that_are_not_finite_are_counted() -> None:
    dataset = small()
    dataset["frequency_mhz"] = ("channel", np.array([40.0, np.nan, np.inf]), {"units": "MHz"})
    assert problems(dataset) == ("here.nc: frequency_mhz has 2 values that are not finite",)


def test_all_departures_are_told_at_once() -> None:
    dataset = small().drop_vars("frequency_mhz")
    dataset["temperature_k"].attrs["units"] = "mK"
    dataset["weight_s"] = ("bin", np.array([1.0, np.nan]), {"units": "h"})
    assert len(problems(dataset)) == 4


@pytest.mark.parametrize("product", [RECORDING, SPECTRA, TRUTH, BUNDLE])
def test_names_that_end_in_a_unit_carry_that_unit(product: Product) -> None:
    endings = {"_mhz": "MHz", "_km": "km", "_hours": "h", "_k": "K", "_k2": "K2", "_s": "s"}
    for name, variable in product.items():
        assert variable.long_name
        for ending, unit in endings.items():
            if name.endswith(ending):
                assert variable.units == unit, name
