"""The runner, with toy stages: what is reused, what is redone, and what is left alone."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr
from config_cases import load_text, small_with

from reduce.runner import LOG, RECORD, Made, Outcome, Products, Stage, Tools, run_stages, stage_keys
from sims.config import Config
from sims.errors import InputError

Work = Callable[[Products, Any, Tools], Made]


class Toy:
    """Three stages in a row and a count of how often each worked."""

    def __init__(self) -> None:
        self.worked: list[str] = []
        self.stages: tuple[Stage, ...] = (
            Stage("sow", "sow the seed", ("receiver",), (), ("a.nc", "note.txt"), self._sow),
            Stage("grow", "let it grow", ("foreground",), ("a.nc",), ("b.json",), self._grow),
            Stage("reap", "bring it in", (), ("b.json", "note.txt"), ("c.png", "summary.txt"), self._reap),
        )

    def _sow(self, products: Products, config: Config, tools: Tools) -> Made:
        self.worked.append("sow")
        with tools.progress("sowing", 2) as advance:
            advance(2)
        tools.note("seed is in")
        values = np.arange(4.0) + config.receiver.temperature_k
        return {"a.nc": xr.Dataset({"x": ("row", values)}), "note.txt": f"{config.receiver.temperature_k} K\n"}

    def _grow(self, products: Products, config: Config, tools: Tools) -> Made:
        self.worked.append("grow")
        return {"b.json": {"sum": float(products.dataset("a.nc")["x"].sum()) * config.foreground.terms}}

    def _reap(self, products: Products, config: Config, tools: Tools) -> Made:
        self.worked.append("reap")
        text = f"{products['b.json']['sum']:g} from {products['note.txt']}"
        return {"c.png": text.encode(), "summary.txt": text}


@pytest.fixture
def toy() -> Toy:
    return Toy()


@pytest.fixture
def config(tmp_path: Path) -> Config:
    return load_text(small_with(), tmp_path)


@pytest.fixture
def out(tmp_path: Path) -> Path:
    return tmp_path / "deep" / "out"


def go(toy: Toy, config: Config, out: Path, *, update: bool = False) -> Outcome:
    toy.worked.clear()
    return run_stages(toy.stages, config, out, update=update, progress=None, given={})


def changed(config: Config, section: str, **values: Any) -> Config:
    return config.model_copy(update={section: getattr(config, section).model_copy(update=values)})


def contents(folder: Path) -> dict[str, bytes]:
    return {str(path.relative_to(folder)): path.read_bytes() for path in sorted(folder.rglob("*")) if path.is_file()}


def all_but_log(folder: Path) -> dict[str, bytes]:
    return {name: content for name, content in contents(folder).items() if name != LOG}


# ---------------------------------------------------------------- reuse


def test_everything_is_made_once_and_then_reused(toy: Toy, config: Config, out: Path) -> None:
    first = go(toy, config, out)
    assert first.redone == ("sow", "grow", "reap")
    assert first.reused == ()
    assert set(contents(out)) == {"a.nc", "note.txt", "b.json", "c.png", "summary.txt", RECORD, LOG}
    before = all_but_log(out)
    second = go(toy, config, out)
    assert toy.worked == []
    assert second.reused == ("sow", "grow", "reap")
    assert second.summary == first.summary
    assert all_but_log(out) == before
    xr.testing.assert_equal(second.products.dataset("a.nc"), first.products.dataset("a.nc"))
    assert second.products["b.json"] == first.products["b.json"]
    assert second.products["c.png"] == first.products["c.png"]


def test_products_carry_their_provenance(toy: Toy, config: Config, out: Path) -> None:
    attrs = go(toy, config, out).products.dataset("a.nc").attrs
    assert attrs["campaign"] == config.run.name
    assert attrs["seed"] == str(config.run.seed)
    assert Config.model_validate_json(attrs["configuration"]) == config
    assert set(json.loads(attrs["versions"])) >= {"python", "quietlimb", "numpy"}
    record = json.loads((out / RECORD).read_text())
    assert set(record["products"]) == {"a.nc", "note.txt", "b.json", "c.png", "summary.txt"}
    assert record["configuration"] == config.model_dump(mode="json")


def test_the_log_grows_and_tells_what_was_done(toy: Toy, config: Config, out: Path) -> None:
    go(toy, config, out)
    once = (out / LOG).read_text()
    assert "seed is in" in once
    go(toy, config, out)
    assert (out / LOG).read_text().startswith(once)
    assert (out / LOG).read_text().count("reused") == 3


def test_the_same_run_gives_the_same_bytes(toy: Toy, config: Config, out: Path) -> None:
    go(toy, config, out)
    go(toy, config, out.parent / "again")
    again = all_but_log(out.parent / "again")
    assert again == all_but_log(out)


# ---------------------------------------------------------------- update


@pytest.mark.parametrize(
    ("section", "values", "redone"),
    [
        ("receiver", {"temperature_k": 151.0}, ("sow", "grow", "reap")),
        ("foreground", {"terms": 5}, ("grow", "reap")),
        ("surface", {"permittivity": 3.0}, ()),
    ],
)
def test_an_update_redoes_what_depends_and_nothing_else(
    section: str, values: dict[str, Any], redone: tuple[str, ...], toy: Toy, config: Config, out: Path
) -> None:
    go(toy, config, out)
    other = changed(config, section, **values)
    outcome = go(toy, other, out, update=True)
    assert tuple(toy.worked) == outcome.redone == redone
    fresh = go(toy, other, out.parent / "fresh")
    assert outcome.summary == fresh.summary
    assert json.loads((out / RECORD).read_text())["configuration"] == other.model_dump(mode="json")
    go(toy, other, out)
    assert toy.worked == []


def test_another_configuration_is_refused_without_update(toy: Toy, config: Config, out: Path) -> None:
    go(toy, config, out)
    before = contents(out)
    with pytest.raises(InputError) as caught:
        go(toy, changed(config, "foreground", terms=5), out)
    (problem,) = caught.value.problems
    assert "[foreground] differs" in problem
    assert "--update to replace b.json, c.png, summary.txt" in problem
    assert contents(out) == before
    assert toy.worked == []


def test_an_update_of_nothing_is_no_error(toy: Toy, config: Config, out: Path) -> None:
    assert go(toy, config, out, update=True).redone == ("sow", "grow", "reap")
    assert go(toy, config, out, update=True).redone == ()


def test_input_files_count_by_content_not_by_name(toy: Toy, config: Config, tmp_path: Path) -> None:
    def with_file(name: str, content: str) -> Config:
        (tmp_path / name).write_text(content)
        return config.model_copy(update={"sky": config.sky.model_copy(update={"index_map": tmp_path / name})})

    stages = (replace(toy.stages[0], sections=("sky",)),)
    key = stage_keys(stages, with_file("one.fits", "x"), {})
    assert stage_keys(stages, with_file("two.fits", "x"), {}) == key
    assert stage_keys(stages, with_file("one.fits", "y"), {}) != key


def test_given_products_count_by_their_attributes(toy: Toy, config: Config) -> None:
    stages = (toy.stages[1],)

    def key(checksum: str) -> dict[str, str]:
        return stage_keys(stages, config, {"a.nc": xr.Dataset(attrs={"input_sha256": checksum})})

    assert key("1") == key("1")
    assert key("1") != key("2")


# ---------------------------------------------------------------- folders


def test_a_folder_that_holds_other_things_is_refused(toy: Toy, config: Config, out: Path) -> None:
    out.mkdir(parents=True)
    (out / "thesis.tex").write_text("precious")
    for update in (False, True):
        with pytest.raises(InputError, match=f"{out} is not empty and holds no run.json"):
            go(toy, config, out, update=update)
    assert contents(out) == {"thesis.tex": b"precious"}


def test_an_empty_folder_is_taken(toy: Toy, config: Config, out: Path) -> None:
    out.mkdir(parents=True)
    assert len(go(toy, config, out).redone) == 3


@pytest.mark.parametrize(
    "record",
    [
        "",
        "{}",
        "[]",
        "not json",
        '{"products": [], "configuration": {}}',
        '{"products": {"a": 1}, "configuration": {}}',
    ],
)
def test_a_record_of_something_else_is_refused(record: str, toy: Toy, config: Config, out: Path) -> None:
    out.mkdir(parents=True)
    (out / RECORD).write_text(record)
    for update in (False, True):
        with pytest.raises(InputError, match="is not a record of quietlimb"):
            go(toy, config, out, update=update)
    assert contents(out) == {RECORD: record.encode()}


def test_a_file_is_no_folder(toy: Toy, config: Config, tmp_path: Path) -> None:
    path = tmp_path / "out"
    path.write_text("precious")
    with pytest.raises(InputError, match="out is a file; name a folder"):
        go(toy, config, path)
    with pytest.raises(InputError, match="cannot be made"):
        go(toy, config, path / "below")
    assert path.read_text() == "precious"


def test_products_of_another_command_are_not_mixed_in(toy: Toy, config: Config, out: Path) -> None:
    """A fit into the folder of a mock would leave the mock's truth beside somebody else's spectra."""
    go(toy, config, out)
    before = contents(out)
    fewer = replace(toy.stages[2], needs=("b.json",), makes=("summary.txt",))
    for update in (False, True):
        with pytest.raises(InputError, match=r"holds c\.png, which this command does not make"):
            run_stages((*toy.stages[:2], fewer), config, out, update=update, progress=None, given={})
    assert contents(out) == before


# ---------------------------------------------------------------- damage


@pytest.mark.parametrize(("name", "redone"), [("a.nc", ("sow",)), ("b.json", ("grow",)), ("c.png", ("reap",))])
def test_an_edited_product_is_found_out_and_redone(
    name: str, redone: tuple[str, ...], toy: Toy, config: Config, out: Path
) -> None:
    go(toy, config, out)
    before = all_but_log(out)
    (out / name).write_bytes(before[name] + b" ")
    outcome = go(toy, config, out)
    assert outcome.redone == redone
    assert all_but_log(out) == before


def test_a_lost_product_is_made_again(toy: Toy, config: Config, out: Path) -> None:
    go(toy, config, out)
    (out / "note.txt").unlink()
    assert go(toy, config, out).redone == ("sow",)
    assert (out / "note.txt").is_file()


def failing(toy: Toy, number: int, error: BaseException) -> Toy:
    def fail(products: Products, config: Any, tools: Tools) -> Made:
        raise error

    broken = Toy()
    stages = list(toy.stages)
    stages[number] = replace(stages[number], work=fail)
    broken.stages = tuple(stages)
    return broken


@pytest.mark.parametrize("error", [KeyboardInterrupt(), RuntimeError("no convergence"), MemoryError()])
def test_an_interrupted_run_is_taken_up_where_it_stopped(
    error: BaseException, toy: Toy, config: Config, out: Path
) -> None:
    with pytest.raises(type(error)):
        go(failing(toy, 1, error), config, out)
    assert set(contents(out)) == {"a.nc", "note.txt", RECORD, LOG}
    assert f"stopped: {type(error).__name__}" in (out / LOG).read_text()
    outcome = go(toy, config, out)
    assert outcome.reused == ("sow",)
    assert outcome.redone == ("grow", "reap")


def test_a_run_killed_between_a_product_and_its_record_redoes_that_stage(toy: Toy, config: Config, out: Path) -> None:
    go(toy, config, out)
    record = json.loads((out / RECORD).read_text())
    del record["products"]["b.json"]
    (out / RECORD).write_text(json.dumps(record))
    assert go(toy, config, out).redone == ("grow",)


def test_bad_input_found_by_a_stage_leaves_the_folder_as_it_was(toy: Toy, config: Config, out: Path) -> None:
    go(toy, config, out)
    before = contents(out)
    with pytest.raises(InputError, match="no sample is left"):
        go(
            failing(toy, 0, InputError("no sample is left")),
            changed(config, "receiver", offset_k=1.0),
            out,
            update=True,
        )
    assert contents(out) == before


def test_bad_input_found_late_says_what_was_already_replaced(toy: Toy, config: Config, out: Path) -> None:
    go(toy, config, out)
    other = changed(config, "receiver", temperature_k=151.0)
    with pytest.raises(InputError) as caught:
        go(failing(toy, 1, InputError("too many terms")), other, out, update=True)
    assert caught.value.problems[0] == "too many terms"
    assert "already holds the new products of sow" in caught.value.problems[1]
    outcome = go(toy, other, out, update=True)
    assert outcome.redone == ("grow", "reap")


def test_bad_input_in_a_new_folder_does_not_spoil_it_for_the_next_try(toy: Toy, config: Config, out: Path) -> None:
    with pytest.raises(InputError):
        go(failing(toy, 0, InputError("no sample is left")), config, out)
    assert go(toy, changed(config, "receiver", temperature_k=151.0), out).redone == ("sow", "grow", "reap")


def test_a_stage_that_makes_something_else_is_a_mistake_of_ours(toy: Toy, config: Config, out: Path) -> None:
    toy.stages = (replace(toy.stages[0], makes=("a.nc",)),)
    with pytest.raises(RuntimeError, match="stage sow made"):
        go(toy, config, out)
