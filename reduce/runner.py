"""The runner: timing, provenance, reuse, progress and safe writing, all in this one place.

The record in the folder keeps, for every product, the key of the stage that made it: a digest
of the settings, input files and upstream keys it depends on, and the file's checksum. A
product for which both still hold is reused; a folder that holds products of another
configuration is refused unless an update is asked for. Where the input is at fault and
nothing has been redone, the folder is left as it was, record and log included.
"""

from __future__ import annotations

import hashlib
import json
import platform
import time
from collections.abc import Callable, Mapping
from contextlib import AbstractContextManager, nullcontext
from dataclasses import dataclass, field
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from typing import Any, Protocol

import xarray as xr
from threadpoolctl import threadpool_limits

from sims.config import FitConfig
from sims.errors import InputError
from sims.products import read_netcdf, sha256_of, write_bytes, write_product, write_text

RECORD = "run.json"
LOG = "log.txt"
LIBRARIES = ("quietlimb", "numpy", "scipy", "astropy", "healpy", "xarray", "numba", "emcee", "arviz")

Advance = Callable[[int], None]
Made = Mapping[str, Any]
"""What a stage returns: products by file name."""


class Progress(Protocol):
    """Makes progress bars."""

    def __call__(self, title: str, total: int) -> AbstractContextManager[Advance]:
        """Bar that is told of work done."""


class Products(dict[str, Any]):
    """What stages hand on, by file name: Datasets, tables for JSON, text, pictures as bytes."""

    def dataset(self, name: str) -> xr.Dataset:
        """The Dataset of this name."""
        found = self[name]
        assert isinstance(found, xr.Dataset)
        return found


@dataclass(frozen=True)
class Tools:
    """What a stage may use beside its input: progress bars and the log."""

    progress: Progress
    note: Callable[[str], None]


@dataclass(frozen=True)
class Stage:
    """One line of the table of contents.

    Attributes
    ----------
    name : str
        Short name, in keys and the record.
    title : str
        What it does, for the log.
    sections : tuple of str
        Tables of the configuration it depends on.
    needs, makes : tuple of str
        Products it takes and leaves.
    work : callable
        Plain function (products, settings, tools) -> products.
    """

    name: str
    title: str
    sections: tuple[str, ...]
    needs: tuple[str, ...]
    makes: tuple[str, ...]
    work: Callable[[Products, Any, Tools], Made]


@dataclass(frozen=True)
class Outcome:
    """What a run left.

    Attributes
    ----------
    folder : Path
        Where the products are.
    redone, reused : tuple of str
        Names of stages.
    products : Products
        Everything, in memory.
    """

    folder: Path
    redone: tuple[str, ...]
    reused: tuple[str, ...]
    products: Products

    @property
    def summary(self) -> str:
        """The page for the terminal."""
        return str(self.products["summary.txt"])


@dataclass
class _Journal:
    """Lines for the log, each with the time since the start."""

    started: float = field(default_factory=time.monotonic)
    lines: list[str] = field(default_factory=list)

    def note(self, line: str) -> None:
        self.lines.append(f"{time.monotonic() - self.started:8.2f} s  {line}")

    def append_to(self, path: Path) -> None:
        with path.open("a", encoding="utf-8") as handle:
            handle.write("\n".join(self.lines) + "\n\n")


def run_stages(
    stages: tuple[Stage, ...],
    config: FitConfig,
    out: Path,
    *,
    update: bool,
    progress: Progress | None,
    given: Mapping[str, xr.Dataset],
) -> Outcome:
    """Run stages into a folder, reusing what still holds.

    Parameters
    ----------
    stages : tuple of Stage
        In order.
    config : FitConfig
    out : Path
        Folder; made if it is not there.
    update : bool
        Allow products of another configuration to be replaced.
    progress : Progress or None
    given : mapping of str to Dataset
        Products that no stage makes: spectra that somebody measured.

    Returns
    -------
    Outcome

    Raises
    ------
    InputError
        If `out` is not a folder, holds other things, or products of another configuration.
    """
    keys = stage_keys(stages, config, given)
    record = _claim(out, stages, keys, config, update)
    before = json.dumps(record)
    record |= {"configuration": config.model_dump(mode="json"), "versions": _versions()}
    journal = _Journal()
    journal.note(f"{datetime.now(UTC):%Y-%m-%d %H:%M:%S} UTC, quietlimb {version('quietlimb')}, {config.run.name}")
    tools = Tools(progress or _no_progress, journal.note)
    products = Products(given)
    redone: list[str] = []
    reused: list[str] = []
    try:
        for stage in stages:
            if _holds(out, stage, keys[stage.name], record):
                products.update({name: _read(out / name) for name in stage.makes})
                reused.append(stage.name)
                journal.note(f"{stage.title}: reused")
                continue
            begun = time.monotonic()
            # The matrices are small: a second BLAS thread costs more in waiting than it brings.
            with threadpool_limits(1, user_api="blas"):
                made = stage.work(products, config, tools)
            if set(made) != set(stage.makes):
                raise RuntimeError(f"stage {stage.name} made {sorted(made)}, not {sorted(stage.makes)}")
            for name, product in made.items():
                products[name] = _write(out / name, product, config)
                record["products"][name] = {"key": keys[stage.name], "sha256": sha256_of(out / name)}
            _write_record(out, record)
            redone.append(stage.name)
            journal.note(f"{stage.title}: {time.monotonic() - begun:.2f} s")
    except InputError as error:
        if not redone:
            raise
        journal.note(f"stopped: {type(error).__name__}: {error}")
        journal.append_to(out / LOG)
        left = f"--out: {out} already holds the new products of {', '.join(redone)}; all else in it is as it was"
        raise InputError([*error.problems, left]) from None
    except BaseException as error:
        journal.note(f"stopped: {type(error).__name__}: {error}")
        journal.append_to(out / LOG)
        raise
    if json.dumps(record) != before:
        _write_record(out, record)
    journal.append_to(out / LOG)
    return Outcome(out, tuple(redone), tuple(reused), products)


def stage_keys(stages: tuple[Stage, ...], config: FitConfig, given: Mapping[str, xr.Dataset]) -> dict[str, str]:
    """Digest of all that each stage depends on, by its name."""
    made_by = {name: stage.name for stage in stages for name in stage.makes}
    inputs = {name: json.dumps(dict(dataset.attrs), sort_keys=True, default=str) for name, dataset in given.items()}
    keys: dict[str, str] = {}
    for stage in stages:
        settings = {section: _section(config, section) for section in stage.sections}
        upstream = [keys[made_by[name]] if name in made_by else inputs[name] for name in stage.needs]
        text = json.dumps([stage.name, version("quietlimb"), settings, upstream], sort_keys=True)
        keys[stage.name] = hashlib.sha256(text.encode()).hexdigest()
    return keys


def _section(config: FitConfig, name: str) -> Any:
    """A table of the configuration, its files replaced by their checksums."""
    section = getattr(config, name)
    return None if section is None else _checksums(section.model_dump())


def _checksums(value: Any) -> Any:
    """Settings as JSON takes them, files at any depth as their checksums, dates as text."""
    if isinstance(value, Path):
        return sha256_of(value)
    if isinstance(value, datetime):
        return value.isoformat()
    if isinstance(value, dict):
        return {key: _checksums(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_checksums(item) for item in value]
    return value


def _claim(
    out: Path, stages: tuple[Stage, ...], keys: dict[str, str], config: FitConfig, update: bool
) -> dict[str, Any]:
    """Make the folder ours, or say why it cannot be; returns the record of what it holds."""
    if out.exists() and not out.is_dir():
        raise InputError(f"--out: {out} is a file; name a folder")
    try:
        out.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(f"--out: {out} cannot be made ({error.strerror})") from None
    if not (out / RECORD).is_file():
        if any(out.iterdir()):
            raise InputError(f"--out: {out} is not empty and holds no {RECORD}; name a new folder")
        record = {"configuration": config.model_dump(mode="json"), "versions": _versions(), "products": {}}
        try:
            _write_record(out, record)
        except OSError as error:
            raise InputError(f"--out: {out} cannot be written to ({error.strerror})") from None
        return record
    record = _read_record(out / RECORD)
    held = record["products"]
    wanted = {name: keys[stage.name] for stage in stages for name in stage.makes}
    others = sorted(set(held) - set(wanted))
    if others:
        raise InputError(f"--out: {out} holds {', '.join(others)}, which this command does not make; name a new folder")
    changed = sorted(name for name, product in held.items() if product["key"] != wanted[name])
    if changed and not update:
        raise InputError(
            f"--out: {out} holds products of another run ({', '.join(_differences(record, config))}); name a new "
            f"folder, or give --update to replace {', '.join(changed)}"
        )
    return record


def _write_record(out: Path, record: dict[str, Any]) -> None:
    write_text(out / RECORD, json.dumps(record, indent=1) + "\n")


def _read_record(path: Path) -> dict[str, Any]:
    try:
        record = json.loads(path.read_text(encoding="utf-8"))
        if not isinstance(record["products"], dict) or not isinstance(record["configuration"], dict):
            raise TypeError
        for product in record["products"].values():
            _ = product["key"], product["sha256"]
    except (OSError, ValueError, KeyError, TypeError):
        raise InputError(f"--out: {path} is not a record of quietlimb; name a new folder") from None
    return dict(record)


def _differences(before: dict[str, Any], config: FitConfig) -> list[str]:
    now, then = config.model_dump(mode="json"), before["configuration"]
    tables = [name for name in (*now, *(set(then) - set(now))) if now.get(name) != then.get(name)]
    return [f"[{name}] differs" for name in tables] or ["input files or versions differ, or an update was cut short"]


def _holds(out: Path, stage: Stage, key: str, record: dict[str, Any]) -> bool:
    """Whether all that a stage makes is there, made with this key, and unchanged since."""
    for name in stage.makes:
        product = record["products"].get(name)
        if product is None or product["key"] != key or not (out / name).is_file():
            return False
        if sha256_of(out / name) != product["sha256"]:
            return False
    return True


def _read(path: Path) -> Any:
    if path.suffix == ".nc":
        return read_netcdf(path)
    if path.suffix == ".json":
        return json.loads(path.read_text(encoding="utf-8"))
    return path.read_text(encoding="utf-8") if path.suffix == ".txt" else path.read_bytes()


def _write(path: Path, product: Any, config: FitConfig) -> Any:
    if isinstance(product, xr.Dataset):
        signed = product.assign_attrs(_provenance(config))
        write_product(signed, path)
        return signed
    content = json.dumps(product, indent=1) + "\n" if isinstance(product, dict) else product
    write_bytes(path, content.encode() if isinstance(content, str) else content)
    return product


def _provenance(config: FitConfig) -> dict[str, str]:
    return {
        "campaign": config.run.name,
        "seed": str(config.run.seed),
        "configuration": config.model_dump_json(),
        "versions": json.dumps(_versions()),
    }


def _versions() -> dict[str, str]:
    return {"python": platform.python_version(), **{name: version(name) for name in LIBRARIES}}


def _no_progress(title: str, total: int) -> AbstractContextManager[Advance]:
    return nullcontext(lambda done: None)
