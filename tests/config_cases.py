"""Configurations for tests: the demo by text substitution, whole or shrunk to seconds."""

from __future__ import annotations

import re
from collections.abc import Sequence
from pathlib import Path

import pytest

from sims.config import Config
from sims.config_load import load_config
from sims.errors import InputError

DEMO = (Path(__file__).parents[1] / "configs" / "demo.toml").read_text(encoding="utf-8")

# Nside 8, 16 channels and a sample every four hours: each sample has a pointing of its own, about 30 are kept.
_SHRINK = (
    ("count = 256", "count = 16"),
    ("nside = 64", "nside = 8"),
    ('step = "120 s"', 'step = "14400 s"'),
    ("count = 22300", "count = 250"),
    ("nodes = *", "nodes = 12"),
    ("walkers = *", "walkers = 64"),
    ("steps = *", "steps = 100"),
)


def substituted(text: str, changes: Sequence[tuple[str, str]]) -> str:
    """`text` with each change made once; ``*`` stands for any value. Finding nothing is a mistake in the test."""
    for old, new in changes:
        pattern = re.escape(old).replace(r"\*", r"\S+")
        text, made = re.subn(pattern, lambda _, to=new: to, text, count=1)
        assert made, old
    return text


def demo_with(*changes: tuple[str, str]) -> str:
    """The demo's text with changes."""
    return substituted(DEMO, changes)


def small_with(*changes: tuple[str, str]) -> str:
    """The demo's text, shrunk, with changes."""
    return substituted(substituted(DEMO, _SHRINK), changes)


def with_knowledge(text: str, *lines: str) -> str:
    """`text` with these lines in place of everything from ``[knowledge]`` on."""
    return "\n".join([text[: text.index("\n[knowledge]")], *lines, ""])


def load_text(text: str, folder: Path) -> Config:
    """Configuration from text, through a file in `folder`."""
    path = folder / "campaign.toml"
    path.write_text(text, encoding="utf-8")
    return load_config(path)


def problems_of(text: str, folder: Path) -> tuple[str, ...]:
    """What is told of a text that must be refused, without the name of its file."""
    with pytest.raises(InputError) as caught:
        load_text(text, folder)
    prefix = f"{folder / 'campaign.toml'}: "
    assert all(problem.startswith(prefix) for problem in caught.value.problems)
    return tuple(problem.removeprefix(prefix) for problem in caught.value.problems)


def only_problem(text: str, folder: Path) -> str:
    """The one problem of a text."""
    problems = problems_of(text, folder)
    assert len(problems) == 1, problems
    return problems[0]
