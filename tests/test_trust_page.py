"""What a person gets from ``quietlimb trust``: page, numbers, record and plots, from made-up findings."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr
from config_cases import DEMO
from small_campaign import small_config
from trust_cases import made_up, world

from reduce.report import trust_page as page_module
from reduce.report.style import look, png
from reduce.report.trust_page import COLUMNS, report_trust, trust_page
from reduce.report.trust_plot import trust_figure
from reduce.trust import Trust
from reduce.trust_facts import trust_facts


@contextmanager
def plain(title: str, total: int) -> Iterator[Callable[[int], None]]:
    yield lambda done: None


@pytest.fixture(scope="module")
def found() -> Trust:
    rng = np.random.default_rng(3)
    return made_up(
        200,
        world(60, rng, name="finer index field", factor=2.0),
        world(60, rng, name="another-map-with-a-name-that-is-longer-than-one-would-wish", bias=-1.5, excess=200.0),
        world(20, rng, name="barely tried"),
    )


def test_page_says_where_errors_stop_being_true_and_fits(found: Trust) -> None:
    page = trust_page(trust_facts(found), small_config())
    lines = page.splitlines()
    assert max(map(len, lines)) <= COLUMNS
    assert "INVENTED" in lines[1]
    text = " ".join(page.split())
    assert "= as believed: stated errors hold; chi-squared as it should be" in text
    assert "! finer index field: stated errors too small by a factor" in text
    assert "biased, in stated errors, by -1." in text
    assert "chi-squared tells (" in text
    assert "? barely tried: cannot tell with 20 mocks" in text
    # 200 mocks leave 100 to try the threshold on: the page must not sell that as one in a hundred.
    assert "? false alarms, depth of C over its error: cannot tell with 100 fresh mocks" in text
    for title in ("What was done", "As believed: ", "Without a signal", "How to read this", "Left out"):
        assert sum(line.startswith(title) for line in lines) == 1


def test_tables_hold_the_numbers_in_columns(found: Trust) -> None:
    facts = trust_facts(found)
    lines = trust_page(facts, small_config()).splitlines()
    start = next(n for n, line in enumerate(lines) if line.startswith("As believed"))
    head = lines[start + 2]
    for name, line in zip(found.names, lines[start + 3 : start + 9], strict=True):
        own = facts["believed"]["parameters"][name]
        assert len(line) == len(head)
        assert f"{own['mean_pull']:+.2f} ± {own['mean_pull_error']:.2f}" in line
        assert f"{own['coverage']['68']['found']:.3f}" in line


def test_everything_is_written_as_computed(found: Trust, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    asked: dict[str, Any] = {}

    def ready_made(config: Any, mocks: int, progress: Any, **options: Any) -> Trust:
        asked.update(options, mocks=mocks)
        return found

    monkeypatch.setattr(page_module, "trust", ready_made)
    path, other, out = tmp_path / "campaign.toml", tmp_path / "other-sky.toml", tmp_path / "out"
    for each in (path, other):
        each.write_text(DEMO, encoding="utf-8")
    said = report_trust(path, out, mocks=200, outside=[other], processes=1, update=False, progress=plain)
    assert (asked["mocks"], asked["processes"]) == (200, 1)
    assert [name for name, _ in asked["outside"]] == ["other-sky"]
    assert sorted(file.name for file in out.iterdir()) == ["trust.json", "trust.nc", "trust.png", "trust.txt"]
    assert json.loads((out / "trust.json").read_text()) == trust_facts(found)
    page = (out / "trust.txt").read_text(encoding="utf-8")
    assert said == f"{page}\nwrote trust.json, trust.txt, trust.png, trust.nc to {out}"
    with xr.open_dataset(out / "trust.nc", engine="h5netcdf") as packed:
        assert packed.sizes["mock"] == 200 + 200 + 60 + 60 + 20
        assert np.array_equal(packed["mean"][:200], found.believed.column("mean"))


def test_picture_is_the_same_every_time_and_grows_with_the_worlds(found: Trust) -> None:
    def picture(number: int) -> bytes:
        few = Trust(found.config, found.names, found.believed, found.silent, found.outside[:number])
        with look():
            return png(trust_figure(few, trust_facts(few)))

    first = picture(0)
    assert first == picture(0)
    assert first.startswith(b"\x89PNG")
    height = [int.from_bytes(each[20:24]) for each in (first, picture(3))]
    assert height[1] > height[0]
