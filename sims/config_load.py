"""TOML file -> `sims.config` models, with every error found together, each with its path.

The command and the pipeline start here. Sections are judged one by one, then against each
other, then ``[knowledge]`` against the leaves it names, then the files they point to.
"""

from __future__ import annotations

import re
import tomllib
from collections.abc import Iterator
from importlib.util import find_spec
from pathlib import Path
from typing import Any, TypeVar, get_type_hints

from pydantic import TypeAdapter, ValidationError

from sims.config import FORWARD_SECTIONS, Config, FitConfig, cross_problems
from sims.config_paths import (
    Place,
    allowed_keys,
    descend,
    follow,
    is_number,
    model_at,
    models_of,
    root,
    tag_of,
    value_at,
)
from sims.errors import InputError, raise_if_any
from sims.knowledge import Knowledge, Known
from sims.quantities import Section, plain_name

Model = TypeVar("Model", bound=FitConfig)

DISTRIBUTION_NUMBERS = ("mean", "sd", "lower", "upper")
ENTRY_KEYS = {"distribution", *DISTRIBUTION_NUMBERS}
UNCERTAIN_SECTIONS = ("sky", "beam", "vantage", "surface", "receiver")
CERTAIN = ("sky.valid_from_mhz", "sky.valid_to_mhz")  # bounds of use, not quantities of the sky
LONGEST_SHOWN = 100
PLAIN_WORDS = (
    ("^(Input|String) should", "should"),
    ("^Tuple should", "list should"),
    (" after validation", ""),
    ("valid tuple", "list"),
    ("valid dictionary or (instance of \\w+|object to extract fields from)", "table"),
)
PACKAGE_PREFIX = "package:"
KNOWLEDGE_TABLES = tuple(name for name in Knowledge.model_fields if name != "leaves")


def load_config(path: Path) -> Config:
    """Read a whole campaign.

    Parameters
    ----------
    path : Path
        TOML file. Files that it names are looked for beside it.

    Returns
    -------
    Config

    Raises
    ------
    InputError
        With every problem of the file, each with its configuration path.
    """
    return _load(path, Config)


def load_fit_config(path: Path) -> FitConfig:
    """Read what ``quietlimb fit`` needs; a whole campaign's file will do and is then checked whole."""
    whole = any(name in _read_toml(path) for name in FORWARD_SECTIONS)
    return _load(path, Config if whole else FitConfig)


def parse_config(tree: dict[str, Any], folder: Path) -> Config:
    """`load_config` for a table already in memory; `folder` is where relative files are looked for."""
    return _build(tree, Config, folder)


def _load(path: Path, model: type[Model]) -> Model:
    tree = _read_toml(path)
    try:
        return _build(tree, model, path.resolve().parent)
    except InputError as error:
        raise InputError([f"{path}: {problem}" for problem in error.problems]) from None


def _read_toml(path: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(path.read_text(encoding="utf-8"))
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"{path}: cannot be read as a text file ({error})") from None
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"{path}: not valid TOML ({error})") from None


def _build(tree: dict[str, Any], model: type[Model], folder: Path) -> Model:
    top = root(model, tree)
    problems = [f"{name}: unknown section; allowed are {', '.join(allowed_keys(model))}"
                for name in tree if name not in model.model_fields]  # fmt: skip
    hints = get_type_hints(model, include_extras=True)
    sections: dict[str, Any] = {}
    for name, field in model.model_fields.items():
        if name == "knowledge":
            sections[name] = _knowledge(tree.get(name, {}), top, set(hints) - set(sections), problems)
        elif name in tree:
            _judge(hints[name], tree[name], descend(top, name), sections, problems)
        elif field.is_required():
            problems.append(f"{name}: section [{name}] is missing")
    problems += cross_problems(sections)
    resolved = {name: _with_files(section, name, folder, problems) for name, section in sections.items()}
    raise_if_any(problems)
    built = model.model_validate(resolved)
    raise_if_any(_unfit_values(built))
    return built


def _unfit_values(built: FitConfig) -> list[str]:
    """Leaves of ``[knowledge]`` whose configured value their distribution cannot be centred on."""
    if not isinstance(built, Config):
        return []
    problems = []
    for leaf in built.knowledge.leaves:
        value = value_at(built, leaf.path)
        if value is None:
            problems.append(f"knowledge.{leaf.path}: the configuration gives it no value")
        elif leaf.distribution == "lognormal":
            median = value if leaf.mean is None else leaf.mean
            if median <= 0.0:
                problems.append(f"knowledge.{leaf.path}: lognormal needs a median above zero (got {median})")
    return problems


def _judge(annotation: Any, raw: Any, place: Place | None, sections: dict[str, Any], problems: list[str]) -> None:
    assert place is not None
    try:
        sections[place.path] = TypeAdapter(annotation).validate_python(raw)
    except ValidationError as error:
        problems.extend(_line(item, place) for item in error.errors())


def _line(item: Any, section: Place) -> str:
    """One error of the models as a line: path, what is wrong, what was got, what is allowed."""
    place, last = section, ""
    unknown = item["type"] == "extra_forbidden"
    for step in item["loc"][:-1] if unknown else item["loc"]:
        below = descend(place, step)
        if below is not None:
            place, last = below, ""
        elif not _is_kind(place, step):
            last = f".{step}"
    path = place.shown_path + last
    if unknown:
        return _unknown_line(place, path, str(item["loc"][-1]))
    if item["type"] == "missing":
        return f"{path}: missing"
    if item["type"].startswith("union_tag"):
        models = models_of(place.annotation)
        tag = tag_of(models)
        names = ", ".join(f'"{kind}"' for model in models for kind in _literals(model.model_fields[tag].annotation))
        got = place.raw.get(tag, "nothing") if isinstance(place.raw, dict) else repr(place.raw)
        return f"{path}.{tag}: got {got!r}; allowed are {names}"
    message = item["msg"].removeprefix("Value error, ")
    for pydantic_word, plain_word in PLAIN_WORDS:
        message = re.sub(pydantic_word, plain_word, message)
    return f"{path}: {message}{_got(place.raw)}"


def _got(raw: Any) -> str:
    """What the file holds, unless it is a table; long lists are cut."""
    if isinstance(raw, dict):
        return ""
    text = repr(raw)
    return f" (got {text})" if len(text) <= LONGEST_SHOWN else f" (got {text[:LONGEST_SHOWN]}…)"


def _unknown_line(table: Place, path: str, key: str) -> str:
    model = model_at(table)
    if model is None:
        return f"{path}.{key}: unknown key"
    for name, field in model.model_fields.items():
        plain = plain_name(name, field)
        if key in (name, plain):
            return f"{path}.{key}: given twice, as {plain} and as {name}; keep one"
    return f"{path}.{key}: unknown key; allowed are {', '.join(allowed_keys(model))}"


def _literals(annotation: Any) -> tuple[str, ...]:
    return tuple(annotation.__args__)


def _is_kind(place: Place, step: Any) -> bool:
    models = models_of(place.annotation)
    return len(models) > 1 and any(step in _literals(model.model_fields[tag_of(models)].annotation) for model in models)


def _knowledge(table: Any, top: Place, unsound: set[str], problems: list[str]) -> Knowledge:
    """The table judged against the leaves it names; those of an unsound section that cannot be found pass."""
    if not isinstance(table, dict):
        problems.append(f"knowledge: should be a table (got {table!r})")
        return Knowledge()
    leaves = []
    for path, entry in _entries({key: value for key, value in table.items() if key not in KNOWLEDGE_TABLES}, ()):
        if path.split(".")[0] in unsound and follow(top, path) is None:
            continue
        known = _known(path, entry, top, problems)
        if known is not None:
            leaves.append(known)
    full = {leaf.path: leaf for leaf in leaves}
    if len(full) < len(leaves):
        problems.append("knowledge: a leaf is named twice, with and without its unit")
    fields = {key: value for key, value in table.items() if key in KNOWLEDGE_TABLES}
    fields = _with_full_paths(fields, top)
    try:
        return Knowledge.model_validate({**fields, "leaves": tuple(full.values())})
    except ValidationError as error:
        place = Place(Knowledge, fields, ("knowledge",), ("knowledge",))
        problems.extend(_line(item, place) for item in error.errors())
        return Knowledge()


def _entries(node: Any, steps: tuple[str, ...]) -> Iterator[tuple[str, Any]]:
    """Every entry below a table: dotted keys of TOML nest, quoted ones do not; both are taken."""
    if steps and (not isinstance(node, dict) or not node or not ENTRY_KEYS.isdisjoint(node)):
        yield ".".join(steps), node
        return
    for key, value in node.items():
        yield from _entries(value, (*steps, key))


def _known(path: str, entry: Any, top: Place, problems: list[str]) -> Known | None:
    where = f"knowledge.{path}"
    place = follow(top, path)
    if place is None or place.steps[0] not in UNCERTAIN_SECTIONS or place.path in CERTAIN:
        allowed = ", ".join(UNCERTAIN_SECTIONS)
        problems.append(f"{where}: names no quantity that can be uncertain; allowed are numbers of {allowed}")
        return None
    if not is_number(place):
        problems.append(f"{where}: names no real number; only numeric leaves can be uncertain")
        return None
    if not isinstance(entry, dict) or "distribution" not in entry:
        problems.append(f'{where}: write {{ distribution = "normal", sd = … }} (got {entry!r})')
        return None
    unknown = sorted(set(entry) - ENTRY_KEYS)
    problems.extend(f"{where}.{key}: unknown key; allowed are {', '.join(sorted(ENTRY_KEYS))}" for key in unknown)
    numbers, wrong = _in_leaf_unit({key: entry[key] for key in entry if key in ENTRY_KEYS}, place, where)
    problems.extend(wrong)
    try:
        known = Known.model_validate({**numbers, "path": place.path})
    except ValidationError as error:
        seen = Place(Known, entry, ("knowledge", path), ("knowledge", path))
        problems.extend(_line(item, seen) for item in error.errors() if not wrong)
        return None
    return None if wrong or unknown else known


def _in_leaf_unit(entry: dict[str, Any], place: Place, where: str) -> tuple[dict[str, Any], list[str]]:
    """The entry with its quantities in the unit of the leaf; a lognormal's sd has none."""
    numbers, wrong = dict(entry), []
    for key in DISTRIBUTION_NUMBERS:
        bare = key == "sd" and entry.get("distribution") == "lognormal"
        if key not in entry or place.unit is None or bare:
            continue
        if not isinstance(entry[key], str):
            wrong.append(
                f'{where}.{key}: a quantity needs its unit: write "<number> {place.unit.unit}"{_got(entry[key])}'
            )
            continue
        try:
            numbers[key] = place.unit.parse_text(entry[key])
        except ValueError as error:
            wrong.append(f"{where}.{key}: {error} (got {entry[key]!r})")
    return numbers, wrong


def _with_full_paths(fields: dict[str, Any], top: Place) -> dict[str, Any]:
    """Correlated groups with the full path of each leaf, so that both names of it will do."""
    groups = fields.get("correlated")
    if not isinstance(groups, list):
        return fields

    def full(path: Any) -> Any:
        place = follow(top, path) if isinstance(path, str) else None
        return path if place is None else place.path

    return {**fields, "correlated": [
        {**group, "paths": [full(path) for path in group["paths"]]}
        if isinstance(group, dict) and isinstance(group.get("paths"), list) else group for group in groups
    ]}  # fmt: skip


def _with_files(value: Any, where: str, folder: Path, problems: list[str]) -> Any:
    """A value with the files it names found, in nested tables and lists too; relative ones beside the configuration."""
    if isinstance(value, Path):
        found = _located(value, folder)
        if not found.is_file():
            problems.append(f"{where}: no such file (got {str(value)!r}, looked for {found})")
        return found
    if isinstance(value, tuple):
        return tuple(_with_files(item, f"{where}.{number}", folder, problems) for number, item in enumerate(value))
    if isinstance(value, Section):
        fields = type(value).model_fields
        found_in = {name: _with_files(getattr(value, name), f"{where}.{name}", folder, problems) for name in fields}
        return value.model_copy(update=found_in)
    return value


def _located(path: Path, folder: Path) -> Path:
    """Where a file is: as named, beside the configuration, or in an installed package (``package:NAME/path``)."""
    text = path.as_posix()
    if text.startswith(PACKAGE_PREFIX):
        name, _, inside = text.removeprefix(PACKAGE_PREFIX).partition("/")
        spec = find_spec(name) if name.isidentifier() else None
        if spec is not None and spec.submodule_search_locations:
            return Path(next(iter(spec.submodule_search_locations))) / inside
        return path
    return path if path.is_absolute() else folder / path
