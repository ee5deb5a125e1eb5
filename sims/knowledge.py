"""How well each number of the configuration is known: the ``[knowledge]`` table as frozen models.

`sims.config_load` finds the leaf that each entry names and its unit; `sims.draws` draws
from these and applies what it drew. Entries here are already in the leaf's own unit.
"""

from __future__ import annotations

from typing import Any, Literal, Self

import numpy as np
from pydantic import Field, model_validator
from scipy import stats

from sims.quantities import Degree, Kelvin, Section


class Known(Section):
    """Distribution of one numeric leaf.

    ``normal`` has `sd` and is centred on the configured value unless `mean` is given; with
    `lower` or `upper` it is truncated there. ``uniform`` runs from `lower` to `upper`.
    ``lognormal`` has its median at the configured value (or `mean`) and `sd` in ln.
    """

    path: str
    distribution: Literal["normal", "uniform", "lognormal"]
    mean: float | None = None
    sd: float | None = Field(default=None, gt=0)
    lower: float | None = None
    upper: float | None = None

    @model_validator(mode="after")
    def _complete(self) -> Self:
        problems = []
        if self.distribution == "uniform":
            if self.lower is None or self.upper is None:
                problems.append("uniform needs lower and upper")
            if self.sd is not None or self.mean is not None:
                problems.append("uniform takes neither mean nor sd")
        elif self.sd is None:
            problems.append(f"{self.distribution} needs sd")
        if self.distribution == "lognormal" and (self.lower is not None or self.upper is not None):
            problems.append("lognormal takes no lower or upper")
        if self.lower is not None and self.upper is not None and self.upper <= self.lower:
            problems.append(f"upper ({self.upper}) must lie above lower ({self.lower})")
        if problems:
            raise ValueError("; ".join(problems))
        return self

    def frozen(self, nominal: float) -> Any:
        """SciPy distribution of the leaf, whose configured value is `nominal`."""
        centre = nominal if self.mean is None else self.mean
        if self.distribution == "uniform":
            assert self.lower is not None
            assert self.upper is not None
            return stats.uniform(self.lower, self.upper - self.lower)
        assert self.sd is not None
        if self.distribution == "lognormal":
            return stats.lognorm(self.sd, scale=centre)
        lower = -np.inf if self.lower is None else (self.lower - centre) / self.sd
        upper = np.inf if self.upper is None else (self.upper - centre) / self.sd
        if np.isinf(lower) and np.isinf(upper):
            return stats.norm(centre, self.sd)
        return stats.truncnorm(lower, upper, loc=centre, scale=self.sd)


class IndexField(Section):
    """Error of the spectral index over the sky: a Gaussian field, and its mean's own error.

    The field has the correlation exp(-theta^2 / (2 L^2)) with L = `correlation_length`, or the
    angular power spectrum C_l ~ (l + l0)^-`angular_index` with l0 = `angular_offset`, of which
    l = 0 is left to `mean_sd`. `sd` is that of each pixel either way.
    """

    sd: float = Field(ge=0, le=1)
    correlation_length_deg: Degree | None = Field(default=None, gt=0, le=180)
    angular_index: float | None = Field(default=None, ge=0, le=10)
    angular_offset: float | None = Field(default=None, ge=0, le=100)
    mean_sd: float = Field(default=0.0, ge=0, le=1)

    @model_validator(mode="after")
    def _one_spectrum(self) -> Self:
        if (self.correlation_length_deg is None) == (self.angular_index is None):
            raise ValueError("give one of correlation_length and angular_index")
        if (self.angular_index is None) != (self.angular_offset is None):
            raise ValueError("angular_index and angular_offset go together")
        return self


class MapNoise(Section):
    """Error of each pixel of the map, independent from pixel to pixel."""

    sd_k: Kelvin = Field(gt=0)


class Correlated(Section):
    """Leaves whose errors go together, by the correlation of their normal scores."""

    paths: tuple[str, ...] = Field(min_length=2)
    correlation: tuple[tuple[float, ...], ...]

    @model_validator(mode="after")
    def _positive(self) -> Self:
        size = len(self.paths)
        if len(self.correlation) != size or any(len(row) != size for row in self.correlation):
            raise ValueError(f"correlation must be {size} x {size}, a row and a column for each path")
        matrix = np.array(self.correlation)
        if not np.allclose(matrix, matrix.T) or not np.allclose(np.diag(matrix), 1.0):
            raise ValueError("correlation must be symmetric with ones on its diagonal")
        if np.linalg.eigvalsh(matrix)[0] < -1e-12:
            raise ValueError("correlation must have no negative eigenvalue")
        return self


class Knowledge(Section):
    """The whole table: leaves, their correlated groups, and fields."""

    leaves: tuple[Known, ...] = ()
    correlated: tuple[Correlated, ...] = ()
    index_field: IndexField | None = None
    map_noise: MapNoise | None = None

    @model_validator(mode="after")
    def _groups(self) -> Self:
        known = {leaf.path for leaf in self.leaves}
        named = [path for group in self.correlated for path in group.paths]
        problems = [f"correlated path {path!r} has no entry of its own" for path in named if path not in known]
        problems += [
            f"{path!r} stands more than once in the groups" for path in sorted(set(named)) if named.count(path) > 1
        ]
        if problems:
            raise ValueError("; ".join(problems))
        return self
