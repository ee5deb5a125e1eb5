"""Made-up findings of mocks: worlds whose stated errors are wrong by a known amount."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import stats
from small_campaign import small_config

from reduce.mocks import Reduced
from reduce.trough_model import NAMES
from reduce.trust import Trust, World

FloatArray = NDArray[np.float64]

FREEDOM = 100.0
SD = np.array([1.0, 1.5, 2.0, 5.0, 20.0, 6.0])
MIDDLE = np.array([48.0, 72.0, 100.0, -5.0, -120.0, 20.0])


def world(
    count: int,
    rng: np.random.Generator,
    *,
    name: str = "made up",
    factor: FloatArray | float = 1.0,
    bias: FloatArray | float = 0.0,
    excess: float = 0.0,
    silent: bool = False,
) -> World:
    """Normal posteriors of width `SD` about an estimate that errs by `factor` times that, and by `bias` of it always.

    Chi-squared follows its law with a non-centrality of `excess`.
    """
    law = stats.ncx2(FREEDOM, excess) if excess else stats.chi2(FREEDOM)
    reduced = []
    for _ in range(count):
        truth = MIDDLE + SD * rng.standard_normal(6)
        mean = truth + SD * (factor * rng.standard_normal(6) + bias)
        reduced.append(
            Reduced(
                truth=np.full(6, np.nan) if silent else truth,
                mean=mean,
                sd=SD.copy(),
                rank=np.zeros(6) if silent else stats.norm.cdf((truth - mean) / SD),
                statistic=rng.normal(1.0 if silent else 6.0, 1.0),
                log_bayes_factor=rng.normal(-4.0 if silent else 12.0, 2.0),
                chi_squared=float(law.rvs(random_state=rng)),
                degrees_of_freedom=FREEDOM,
                effective=rng.uniform(350.0, 900.0),
                at_rest=bool(rng.random() > 0.02),
            )
        )
    return World(name, f"what is true in the world {name}", tuple(reduced))


def made_up(count: int, *outside: World, seed: int = 1, believed: World | None = None) -> Trust:
    """Findings of an honest reduction, beside worlds from outside."""
    rng = np.random.default_rng(seed)
    believed = world(count, rng, name="as believed") if believed is None else believed
    return Trust(small_config(), NAMES, believed, world(count, rng, name="no signal", silent=True), outside)
