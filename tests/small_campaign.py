"""A small campaign for the tests of whole chains: the demo, coarse and quick."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

from sims.config import Config
from sims.config_load import parse_config

CONFIGS = Path(__file__).parents[1] / "configs"


def small_tree(**changes: dict[str, Any]) -> dict[str, Any]:
    """The demo's tables, coarse, with some of their keys replaced; a table given as None is dropped."""
    tree = tomllib.loads((CONFIGS / "demo.toml").read_text(encoding="utf-8"))
    tree["sky"]["nside"] = 8
    tree["channels"]["count"] = 64
    tree["observation"].update(step="1200 s", count=2230)
    tree["turning_points"].update(walkers=64, steps=200)
    for section, keys in changes.items():
        if keys is None:
            tree.pop(section)
        else:
            tree[section] = {**tree.get(section, {}), **keys} if "kind" not in keys else keys
    return tree


def small_config(**changes: Any) -> Config:
    """`small_tree` as a configuration."""
    return parse_config(small_tree(**changes), CONFIGS)
