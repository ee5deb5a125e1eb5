"""What mocks say of stated errors, as numbers for a record and as a plain verdict of each world.

From a `reduce.trust.Trust` to what goes into trust.json; `reduce.report.trust_page` writes it down for a person.

The rules of the verdict. All numbers that verdicts rest on, in all worlds, stay in their bands together in 99 % of
such studies if every stated error is true (Bonferroni). A departure is told where it lies outside of its band and is
worth telling; errors are said to hold only where the band is narrow enough to show what matters; where it is wider,
so many mocks cannot tell.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from reduce.calibration import LEVELS, Alarms, coverage_table, false_alarms, family_wise_p, pulls, uniformity_p
from reduce.quick_posterior import ENOUGH
from reduce.trust import Trust, World
from sims.errors import raise_if_any

FloatArray = NDArray[np.float64]

ALL_TOGETHER = 0.99  # share of studies in which no number leaves its band, if all is well
# An interval of 68 % holds the truth in 65 % of the cases where the bias matters, in 56 % where the factor does.
BIAS_TOLD, BIAS_MATTERS = 0.1, 0.35  # of the stated error
FACTOR_TOLD, FACTOR_MATTERS = 1.1, 1.3  # of the error over the stated one
IMPROBABLE = 0.01  # a fit whose chi-squared is less probable is flagged
IMPROBABLE_MATTERS = 0.1  # of the fits flagged where all is as believed
ALARMS_MATTER = 0.05  # of signal-free campaigns, where one in a hundred is meant
TELLS = 0.5  # chi-squared tells where it flags more of the fits
FEWEST_MOCKS = 10  # of a world
MOST_NAMED = 3

TRUE, FALSE, UNKNOWN = "hold", "do not hold", "cannot tell"
KINDS = TOO_SMALL, BIASED, TOO_LARGE = "too small", "biased", "too large"


@dataclass(frozen=True)
class Departure:
    """A pull that chance does not explain.

    Attributes
    ----------
    name : str
        Parameter.
    kind : str
        One of `KINDS`.
    size : float
        Mean pull; or the factor by which the stated error is too small or too large.
    """

    name: str
    kind: str
    size: float


def trust_facts(found: Trust) -> dict[str, Any]:
    """All numbers and verdicts, ready for JSON.

    Parameters
    ----------
    found : Trust

    Returns
    -------
    dict
        ``rules``, ``alarms`` and the worlds: ``believed``, ``silent``, ``outside``.

    Raises
    ------
    InputError
        If a world has too few mocks to say anything.
    """
    raise_if_any(
        [
            f"{world.name}: {len(world.reduced)} mocks; allowed are at least {FEWEST_MOCKS}"
            for world in (found.believed, found.silent, *found.outside)
            if len(world.reduced) < FEWEST_MOCKS
        ]
    )
    truthful = (found.believed, *found.outside)
    numbers = len(truthful) * numbers_of(len(found.names))
    alarms = {
        name: _alarms(false_alarms(found.silent.column(name)), truthful, name)
        for name in ("statistic", "log_bayes_factor")
    }
    return {
        "campaign": found.config.run.name,
        "seed": found.config.run.seed,
        "foreground": found.config.foreground.model_dump(exclude_none=True),
        "parameters": list(found.names),
        "rules": {
            "all_together": ALL_TOGETHER,
            "numbers": numbers,
            "bias_told": BIAS_TOLD,
            "bias_matters": BIAS_MATTERS,
            "factor_told": FACTOR_TOLD,
            "factor_matters": FACTOR_MATTERS,
            "alarms_matter": ALARMS_MATTER,
            "improbable": IMPROBABLE,
            "improbable_matters": IMPROBABLE_MATTERS,
            "chi_squared_tells": TELLS,
        },
        "alarms": alarms,
        "believed": world_facts(found.believed, found.names, numbers, as_believed=True),
        "silent": {"name": found.silent.name, "about": found.silent.about, **fits_facts(found.silent, numbers)},
        "outside": [world_facts(world, found.names, numbers, as_believed=False) for world in found.outside],
    }


def numbers_of(parameters: int) -> int:
    """How many numbers of one world its verdict rests on: mean and width of pulls, intervals, chi-squared."""
    return (2 + len(LEVELS)) * parameters + 1


def world_facts(world: World, names: tuple[str, ...], numbers: int, *, as_believed: bool) -> dict[str, Any]:
    """One world with a signal.

    Parameters
    ----------
    world : World
    names : tuple of str
        Parameters.
    numbers : int
        That all verdicts together rest on.
    as_believed : bool
        Whether the world is what the reduction expects.

    Returns
    -------
    dict
        Coverage, ranks, pulls and fits, with the verdict.
    """
    rank, sd = world.column("rank"), world.column("sd")
    pull = pulls(world.column("mean"), sd, world.column("truth"))
    rows, uniformity = coverage_table(rank, names), uniformity_p(rank)
    parameters = {
        name: {
            **pull_facts(pull[:, number]),
            "mean_sd": float(sd[:, number].mean()),
            "uniformity_p": float(uniformity[number]),
            "coverage": {
                row.level: {"found": row.found, "low": row.low, "high": row.high, "inside": row.inside}
                for row in rows
                if row.name == name
            },
        }
        for number, name in enumerate(names)
    }
    whole = family_wise_p(rank)
    fits = fits_facts(world, numbers)
    chi_squared = fits["chi_squared"]
    said = _law_text(chi_squared, len(rank)) if as_believed else _warning_text(chi_squared, len(rank))
    return {
        "name": world.name,
        "about": world.about,
        "parameters": parameters,
        "family_wise_p": whole,
        **fits,
        "verdict": verdict(parameters, whole, said, len(rank), numbers),
    }


def pull_facts(pull: FloatArray) -> dict[str, float]:
    """Mean and width of pulls ndarray[mock], with their errors.

    The error of the width is taken from the pulls' own fourth moment, and never below that of a normal law: tails
    that few mocks have not seen yet are no reason to be surer.
    """
    count = len(pull)
    width = float(pull.std(ddof=1))
    fourth = float(((pull - pull.mean()) ** 4).mean()) / width**4
    return {
        "mean_pull": float(pull.mean()),
        "mean_pull_error": width / np.sqrt(count),
        "pull_width": width,
        "pull_width_error": 0.5 * width * float(np.sqrt(max(fourth - 1.0, 2.0) / count)),
    }


def departures(parameters: dict[str, Any], count: int, numbers: int) -> list[Departure]:
    """Pulls outside of their bands by an amount worth telling; arguments as `verdict`."""
    found, reach = [], band_reach(count, numbers)
    for name, facts in parameters.items():
        mean, width = facts["mean_pull"], facts["pull_width"]
        if abs(mean) > max(reach * facts["mean_pull_error"], BIAS_TOLD):
            found.append(Departure(name, BIASED, mean))
        # On a logarithm the law of the width is the more normal, and a factor is as far down as up.
        if abs(np.log(width)) > max(reach * facts["pull_width_error"] / width, np.log(FACTOR_TOLD)):
            found.append(Departure(name, TOO_SMALL, width) if width > 1.0 else Departure(name, TOO_LARGE, 1.0 / width))
    return found


def unseen(parameters: dict[str, Any], count: int, numbers: int) -> tuple[float, float]:
    """Bias and factor, worst parameter, up to which a departure could not be told from chance."""
    reach = band_reach(count, numbers)
    bias = max(reach * facts["mean_pull_error"] for facts in parameters.values())
    factor = max(np.exp(reach * facts["pull_width_error"] / facts["pull_width"]) for facts in parameters.values())
    return float(bias), float(factor)


def band_reach(count: int, numbers: int) -> float:
    """Standard errors from the middle of a two-sided band to its end: Student's t, whose errors are estimates too."""
    return float(stats.t.isf((1.0 - ALL_TOGETHER) / numbers / 2.0, max(count - 1, 1)))


def fits_facts(world: World, numbers: int) -> dict[str, Any]:
    """Chi-squared of the fits of a world, and how well they went."""
    chi_squared, freedom = world.column("chi_squared"), world.column("degrees_of_freedom")
    count, effective = len(chi_squared), world.column("effective")
    flagged = int((stats.chi2.sf(chi_squared, freedom) < IMPROBABLE).sum())
    low, high = binomial_band(flagged, count, numbers)
    return {
        "mocks": count,
        "chi_squared": {
            "mean": float(chi_squared.mean()),
            "mean_error": float(chi_squared.std(ddof=1) / np.sqrt(count)),
            "degrees_of_freedom": float(freedom.mean()),
            "share_improbable": flagged / count,
            "share_low": low,
            "share_high": high,
        },
        "share_not_at_rest": float(1.0 - world.column("at_rest").mean()),
        "fewest_effective_draws": float(effective.min()),
        "share_short_of_draws": float((effective < ENOUGH).mean()),
    }


def binomial_band(successes: int, count: int, numbers: int) -> tuple[float, float]:
    """Where the true share may lie, all numbers together (Clopper and Pearson 1934, Biometrika 26, 404)."""
    tail = (1.0 - ALL_TOGETHER) / numbers / 2.0
    low = stats.beta.ppf(tail, successes, count - successes + 1) if successes else 0.0
    high = stats.beta.isf(tail, successes + 1, count - successes) if successes < count else 1.0
    return float(low), float(high)


def _alarms(found: Alarms, worlds: tuple[World, ...], name: str) -> dict[str, Any]:
    most = found.high / found.fresh
    if not found.inside:
        errors, text = FALSE, f"not the 1 % that was meant, {found.alarms} of {found.fresh}"
    elif most > ALARMS_MATTER:
        errors, text = UNKNOWN, f"cannot tell with {found.fresh} fresh mocks: {most:.0%} could hide"
    else:
        errors, text = TRUE, f"1 % as meant, {found.alarms} of {found.fresh}"
    return {
        "threshold": found.threshold,
        "alarms": found.alarms,
        "fresh": found.fresh,
        "low": found.low,
        "high": found.high,
        "inside": found.inside,
        "verdict": {"errors": errors, "text": [text]},
        "detected": {world.name: float((world.column(name) > found.threshold).mean()) for world in worlds},
    }


def verdict(parameters: dict[str, Any], whole_p: float, chi_squared: str, count: int, numbers: int) -> dict[str, Any]:
    """Whether stated errors hold in a world, in what they fail, and what chi-squared says.

    Parameters
    ----------
    parameters : dict
        `pull_facts` by name.
    whole_p : float
        `family_wise_p` of the intervals.
    chi_squared : str
        What is to be said of chi-squared.
    count : int
        Mocks.
    numbers : int
        That all verdicts together rest on.

    Returns
    -------
    dict
        ``errors`` is one of `TRUE`, `FALSE` and `UNKNOWN`; ``text`` its reasons, a sentence each.
    """
    found = departures(parameters, count, numbers)
    # One interval's own probability: the family-wise one is the smallest times their number.
    intervals_off = whole_p / (len(LEVELS) * len(parameters)) < (1.0 - ALL_TOGETHER) / numbers
    bias, factor = unseen(parameters, count, numbers)
    text = [line for line in (_departure_text(found, kind) for kind in KINDS) if line]
    if intervals_off and not text:
        text.append("intervals do not hold the truth as often as they say: see the coverage")
    errors = FALSE
    if not text and (bias > BIAS_MATTERS or factor > FACTOR_MATTERS):
        errors = UNKNOWN
        text = [
            f"cannot tell with {count} mocks: a bias of {bias:.2f} of the stated error, or errors wrong by a factor "
            f"{factor:.2f}, could hide"
        ]
    elif not text:
        errors, text = TRUE, ["stated errors hold"]
    return {
        "errors": errors,
        "text": [*text, chi_squared],
        "departures": [{"parameter": each.name, "kind": each.kind, "size": each.size} for each in found],
        "could_hide": {"bias": bias, "factor": factor},
        "intervals_off": bool(intervals_off),
    }


def _departure_text(found: list[Departure], kind: str) -> str:
    own = sorted((each for each in found if each.kind == kind), key=lambda each: -abs(each.size))
    if not own:
        return ""
    form = "+.2f" if kind == BIASED else ".2f"
    named = ", ".join(f"{each.size:{form}} in {spoken(each.name)}" for each in own[:MOST_NAMED])
    more = f", and {len(own) - MOST_NAMED} more" if len(own) > MOST_NAMED else ""
    if kind == BIASED:
        return f"biased, in stated errors, by {named}{more}"
    return f"stated errors {kind} by a factor {named}{more}"


def spoken(name: str) -> str:
    """A parameter as one says it: frequency_c_mhz is the frequency of C."""
    quantity, point, _ = name.split("_")
    return f"{quantity} of {point.upper()}"


def _warning_text(chi_squared: dict[str, Any], count: int) -> str:
    """Whether chi-squared would warn of a world that nobody expected."""
    share, low, high = (chi_squared[name] for name in ("share_improbable", "share_low", "share_high"))
    flagged = f"{share:.1%} of such fits would be flagged"
    if low > TELLS:
        return f"chi-squared tells ({flagged})"
    if high < TELLS:
        return f"chi-squared does not tell ({flagged})"
    return f"cannot tell with {count} mocks whether chi-squared tells ({flagged})"


def _law_text(chi_squared: dict[str, Any], count: int) -> str:
    """Whether chi-squared keeps to its law in the world that was expected."""
    share, low, high = (chi_squared[name] for name in ("share_improbable", "share_low", "share_high"))
    flagged = f"{share:.1%} of the fits are less probable than {IMPROBABLE:.0%}"
    if low > IMPROBABLE:
        return f"chi-squared is too large too often ({flagged})"
    if high > IMPROBABLE_MATTERS:
        return f"cannot tell with {count} mocks whether chi-squared is as it should be ({flagged})"
    return f"chi-squared as it should be ({flagged})"
