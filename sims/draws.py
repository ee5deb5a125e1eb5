"""Draws from ``[knowledge]``: a configuration as it might truly be, and one leaf moved by its error.

The mock's truth, the covariance of the data and every ensemble come from here, so that
one table says what is uncertain.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import ValidationError
from scipy import stats

from sims.config import Config
from sims.config_paths import value_at
from sims.errors import InputError
from sims.knowledge import Knowledge, Known
from sims.streams import stream


@dataclass(frozen=True)
class Draw:
    """One draw: the configuration with its leaves moved, and what was drawn.

    Attributes
    ----------
    config : Config
        The configuration with drawn leaves in place.
    values : dict of str to float
        Each leaf's drawn value, in the leaf's unit.
    index : int
        Which draw of its stream; fields are drawn again from it where they are needed.
    """

    config: Config
    values: dict[str, float]
    index: int


def leaf_value(config: Config, path: str) -> float:
    """Configured value of the numeric leaf at `path`."""
    return float(value_at(config, path))


def with_leaves(config: Config, values: dict[str, float]) -> Config:
    """Copy of `config` with the leaves at these paths set.

    Raises
    ------
    InputError
        If a value lies outside what its leaf allows: its distribution wants a bound.
    """
    tree = config.model_dump()
    for path, value in values.items():
        *steps, last = path.split(".")
        node: Any = tree
        for step in steps:
            key: str | int = int(step) if step.isdigit() else step
            if isinstance(node[key], tuple):
                node[key] = list(node[key])
            node = node[key]
        node[int(last) if last.isdigit() else last] = value
    try:
        return Config.model_validate(tree)
    except ValidationError as error:
        raise InputError(
            [
                f"knowledge: a drawn value of {_leaf_at(item['loc'], values)} is not allowed ({item['msg']}); "
                "give the distribution a lower or upper bound"
                for item in error.errors()
            ]
        ) from None


def _leaf_at(location: tuple[str | int, ...], values: dict[str, float]) -> str:
    """The leaf, with its value, that an error of the models is about; their location also names kinds."""
    for path, value in values.items():
        rest = iter([str(step) for step in location])
        if all(step in rest for step in path.split(".")):
            return f"{path}, {value:g},"
    return ".".join(str(step) for step in location) or "one of " + ", ".join(values)


def draw(config: Config, name: str, index: int = 0) -> Draw:
    """Draw every leaf that ``[knowledge]`` names.

    Parameters
    ----------
    config : Config
        Nominal configuration; its seed is used.
    name : str
        Name of the stream, so that truth and ensembles never share numbers.
    index : int
        Which draw; each can be made again alone.

    Returns
    -------
    Draw
        Correlated groups are joined by a Gaussian copula.
    """
    rng = stream(config.run.seed, f"{name}/leaves", index)
    leaves = config.knowledge.leaves
    scores = correlation_root(config.knowledge) @ rng.standard_normal(len(leaves))
    drawn = {
        leaf.path: _from_score(leaf, leaf_value(config, leaf.path), float(score))
        for leaf, score in zip(leaves, scores, strict=True)
    }
    return Draw(config=with_leaves(config, drawn), values=drawn, index=index)


def correlation_root(knowledge: Knowledge) -> NDArray[np.float64]:
    """Matrix L with L L^T the correlation of the leaves: ndarray[leaf, leaf], from independent scores to theirs."""
    place = {leaf.path: number for number, leaf in enumerate(knowledge.leaves)}
    root = np.eye(len(place))
    for group in knowledge.correlated:
        rows = [place[path] for path in group.paths]
        values, vectors = np.linalg.eigh(np.array(group.correlation))
        root[np.ix_(rows, rows)] = vectors * np.sqrt(np.clip(values, 0.0, None))
    return root


def _from_score(leaf: Known, nominal: float, score: float) -> float:
    """Value whose rank in the leaf's distribution is that of `score` in the unit normal."""
    distribution = leaf.frozen(nominal)
    if score < 0.0:
        return float(distribution.ppf(stats.norm.cdf(score)))
    return float(distribution.isf(stats.norm.sf(score)))
