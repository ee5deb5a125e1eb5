"""The demo and the real sky from end to end, as README has them."""

from __future__ import annotations

import json
import re
import tomllib
from pathlib import Path

import numpy as np
import pytest
from small_campaign import CONFIGS, small_tree

from reduce.handoff import information_from
from reduce.pipeline import STAGES, run
from reduce.trough_model import NAMES
from sims.errors import InputError
from sims.products import read_netcdf, read_product
from sims.schema import BUNDLE, SPECTRA, TRUTH

README = Path(__file__).parents[1] / "README.md"
MADE = {name for stage in STAGES for name in stage.makes}


@pytest.fixture(scope="module")
def demo(tmp_path_factory: pytest.TempPathFactory) -> Path:
    out = tmp_path_factory.mktemp("demo") / "out"
    run(CONFIGS / "demo.toml", out)
    return out


def truth_of(config: Path) -> np.ndarray:
    signal = tomllib.loads(config.read_text(encoding="utf-8"))["signal"]
    numbers = [signal[point][name] for name in ("frequency", "temperature") for point in "bcd"]
    return np.array([float(number.split()[0]) for number in numbers])


@pytest.mark.slow
def test_demo_makes_everything_and_finds_what_was_put_in(demo: Path) -> None:
    assert {path.name for path in demo.iterdir()} == MADE | {"run.json", "log.txt"}
    spectra = read_product(demo / "spectra.nc", SPECTRA)
    read_product(demo / "truth.nc", TRUTH)
    bundle = read_product(demo / "bundle.nc", BUNDLE)
    assert spectra.sizes["bin"] == 8
    assert spectra.sizes["channel"] == 256
    result = json.loads((demo / "turning_points.json").read_text(encoding="utf-8"))
    assert result["convergence"]["converged"]
    means = [result["points"][point][name]["median"] for name in ("frequency_mhz", "temperature_mk") for point in "BCD"]
    off = np.array(means) - truth_of(CONFIGS / "demo.toml")
    covariance = np.array(result["covariance"]["matrix"])
    # Six numbers at three standard deviations each: a fair posterior fails this once in sixty demos.
    assert np.all(np.abs(off) < 3 * np.sqrt(np.diag(covariance))), dict(zip(NAMES, off, strict=True))
    for dataset in (spectra, bundle, read_netcdf(demo / "posterior.nc"), read_netcdf(demo / "truth.nc")):
        assert dataset.attrs["sky"] == "invented"
        assert {"configuration", "versions", "seed"} <= set(dataset.attrs)
    assert result["sky"] == "invented"
    information = information_from(bundle)
    # Chi-squared at the best signal, five of its own standard deviations wide.
    freedom = information.degrees_of_freedom
    assert information.chi_squared_min == pytest.approx(freedom, abs=5 * np.sqrt(2 * freedom))


@pytest.mark.slow
def test_readme_prints_the_numbers_of_the_demo(demo: Path) -> None:
    """Each number of README's table stands in the demo's page, to a tenth of the posterior's width."""
    result = json.loads((demo / "turning_points.json").read_text(encoding="utf-8"))
    text = README.read_text(encoding="utf-8")
    rows = re.findall(r"^(?:  ([BCD])|   ) +(-?[\d.]+)  \( *(-?[\d.]+) to +(-?[\d.]+)\) (MHz|mK)", text, re.MULTILINE)
    assert len(rows) == 6
    point = ""
    for name, median, low, high, unit in rows:
        point = name or point
        found = result["points"][point]["frequency_mhz" if unit == "MHz" else "temperature_mk"]
        printed = [float(median), float(low), float(high)]
        # Another BLAS leads the sampler another way: a tenth of sigma is five times its error.
        assert printed == pytest.approx([found["median"], *found["interval_68"]], abs=0.1 * found["standard_deviation"])


def write(path: Path, tree: dict[str, object]) -> Path:
    """A configuration as TOML, by way of its JSON, which is TOML's inline form but for the colons."""
    lines = []
    for section, table in tree.items():
        lines.append(f"[{section}]")
        lines += [f"{key} = {inline(value)}" for key, value in table.items()]  # type: ignore[attr-defined]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def inline(value: object) -> str:
    if isinstance(value, dict):
        return "{" + ", ".join(f'"{key}" = {inline(item)}' for key, item in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(inline(item) for item in value) + "]"
    if hasattr(value, "isoformat"):
        return value.isoformat()  # type: ignore[attr-defined,no-any-return]
    return json.dumps(value)


@pytest.mark.slow
def test_changing_the_foreground_redoes_only_what_depends_on_it(tmp_path: Path) -> None:
    out = tmp_path / "out"
    first = run(write(tmp_path / "a.toml", small_tree(foreground={"terms": 5})), out)
    assert first.reused == ()
    again = run(tmp_path / "a.toml", out)
    assert again.redone == ()
    other = write(tmp_path / "b.toml", small_tree(foreground={"terms": 6}))
    before = {path.name: path.read_bytes() for path in out.iterdir() if path.name != "log.txt"}
    with pytest.raises(InputError, match=r"\[foreground\] differs"):
        run(other, out)
    assert {path.name: path.read_bytes() for path in out.iterdir() if path.name != "log.txt"} == before
    changed = run(other, out, update=True)
    assert changed.reused == ("observe",)
    assert (out / "spectra.nc").read_bytes() == before["spectra.nc"]
    fresh = run(other, tmp_path / "fresh")
    for name in ("z", "R"):
        np.testing.assert_array_equal(
            changed.products.dataset("bundle.nc")[name], fresh.products.dataset("bundle.nc")[name]
        )


@pytest.mark.slow
def test_real_sky_runs_the_main_job(tmp_path: Path) -> None:
    outcome = run(CONFIGS / "real-sky.toml", tmp_path / "out")
    result = outcome.products["turning_points.json"]
    assert result["convergence"]["converged"]
    off = [
        (result["points"][point]["frequency_mhz"]["median"] - truth)
        / result["points"][point]["frequency_mhz"]["standard_deviation"]
        for point, truth in zip("BCD", truth_of(CONFIGS / "real-sky.toml")[:3], strict=True)
    ]
    assert np.all(np.abs(off) < 3)
