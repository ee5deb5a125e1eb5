"""Finding one's way in the models: from a path such as ``sky.zero_level`` to the leaf it names.

`sims.config_load` uses it for error messages and for ``[knowledge]``.
"""

from __future__ import annotations

import types
from dataclasses import dataclass
from typing import Annotated, Any, Union, get_args, get_origin, get_type_hints

from pydantic import BaseModel

from sims.quantities import InUnit, plain_name

TAGS = ("kind", "format")  # keys that tell the members of a union apart


@dataclass(frozen=True)
class Place:
    """A place in the configuration: its type there, and what the file holds there."""

    annotation: Any
    raw: Any
    steps: tuple[str, ...] = ()
    shown: tuple[str, ...] = ()
    unit: InUnit | None = None

    @property
    def path(self) -> str:
        """Full path, names with their units."""
        return ".".join(self.steps)

    @property
    def shown_path(self) -> str:
        """Path as the file writes it."""
        return ".".join(self.shown)


def root(model: type[BaseModel], tree: Any) -> Place:
    """The whole configuration as a place."""
    return Place(model, tree)


def models_of(annotation: Any) -> list[type[BaseModel]]:
    """Models that a type may be: one, or the members of a union."""
    bare = _bare(annotation)
    members = get_args(bare) if _is_union(bare) else (bare,)
    bares = [_bare(member) for member in members]
    return [member for member in bares if isinstance(member, type) and issubclass(member, BaseModel)]


def model_at(place: Place) -> type[BaseModel] | None:
    """The model in force at a place; of several kinds, the one the file names."""
    models = models_of(place.annotation)
    if len(models) < 2:
        return models[0] if models else None
    tag = tag_of(models)
    named = place.raw.get(tag) if isinstance(place.raw, dict) else None
    return next((model for model in models if named in get_args(model.model_fields[tag].annotation)), None)


def tag_of(models: list[type[BaseModel]]) -> str:
    """The key that tells several kinds of a table apart."""
    return next(name for name in TAGS if all(name in model.model_fields for model in models))


def allowed_keys(model: type[BaseModel]) -> list[str]:
    """Names that may stand in a table, without their units."""
    return [plain_name(name, field) for name, field in model.model_fields.items()]


def descend(place: Place, step: str | int) -> Place | None:
    """The place one step below, or None where there is none."""
    model = model_at(place)
    if model is not None:
        return _field_below(place, model, str(step))
    elements = _elements(_bare(place.annotation))
    if elements is None or not str(step).isdigit():
        return None
    number = int(step)
    element = elements[0] if len(elements) == 2 and elements[1] is Ellipsis else None
    if element is None:
        if number >= len(elements):
            return None
        element = elements[number]
    raw = place.raw[number] if isinstance(place.raw, list | tuple) and number < len(place.raw) else None
    text = str(number)
    unit = _mark(element) or place.unit
    return Place(element, raw, (*place.steps, text), (*place.shown, text), unit)


def follow(place: Place, path: str) -> Place | None:
    """The place at a dotted path below, or None."""
    for step in path.split("."):
        below = descend(place, step)
        if below is None:
            return None
        place = below
    return place


def value_at(built: BaseModel, path: str) -> Any:
    """What a built configuration holds at a full path."""
    node: Any = built
    for step in path.split("."):
        node = node[int(step)] if step.isdigit() else getattr(node, step)
    return node


def is_number(place: Place) -> bool:
    """Whether the leaf at a place is a real number."""
    bare = _bare(place.annotation)
    members = get_args(bare) if _is_union(bare) else (bare,)
    return any(_bare(member) is float for member in members)


def _field_below(place: Place, model: type[BaseModel], step: str) -> Place | None:
    hints = get_type_hints(model, include_extras=True)
    for name, field in model.model_fields.items():
        plain = plain_name(name, field)
        if step in (name, plain):
            raw = place.raw if isinstance(place.raw, dict) else {}
            key = plain if plain in raw else name if name in raw else plain
            return Place(hints[name], raw.get(key), (*place.steps, name), (*place.shown, key), _mark(hints[name]))
    return None


def _mark(annotation: Any) -> InUnit | None:
    marks = list(getattr(annotation, "__metadata__", ()))
    for argument in get_args(annotation):
        marks.extend(getattr(argument, "__metadata__", ()))
    return next((mark for mark in marks if isinstance(mark, InUnit)), None)


def _bare(annotation: Any) -> Any:
    while get_origin(annotation) is Annotated:
        annotation = get_args(annotation)[0]
    if _is_union(annotation):
        members = [member for member in get_args(annotation) if member is not types.NoneType]
        if len(members) == 1:
            return _bare(members[0])
    return annotation


def _is_union(annotation: Any) -> bool:
    return get_origin(annotation) in (Union, types.UnionType)


def _elements(annotation: Any) -> tuple[Any, ...] | None:
    return get_args(annotation) if get_origin(annotation) is tuple else None
