"""Verdicts on made-up worlds: the honest are believed, faults are named with their size, few mocks say so."""

from __future__ import annotations

import json

import numpy as np
import pytest
from scipy import stats
from trust_cases import FREEDOM, SD, made_up, world

from reduce.calibration import family_wise_p
from reduce.trough_model import NAMES
from reduce.trust_facts import (
    BIAS_MATTERS,
    BIASED,
    FACTOR_MATTERS,
    FALSE,
    TOO_LARGE,
    TOO_SMALL,
    TRUE,
    UNKNOWN,
    binomial_band,
    numbers_of,
    pull_facts,
    spoken,
    trust_facts,
    verdict,
    world_facts,
)
from sims.errors import InputError

NUMBERS = 4 * numbers_of(6)


def facts_of(count: int, seed: int = 1, **faults: object) -> dict:
    return world_facts(world(count, np.random.default_rng(seed), **faults), NAMES, NUMBERS, as_believed=False)


def only(name: str, value: float, otherwise: float) -> np.ndarray:
    return np.where(np.array(NAMES) == name, value, otherwise)


def test_honest_errors_hold_and_are_stated_as_they_are() -> None:
    facts = facts_of(300)
    assert facts["verdict"]["errors"] == TRUE
    assert facts["verdict"]["text"][0] == "stated errors hold"
    assert facts["verdict"]["departures"] == []
    assert facts["family_wise_p"] > 0.01
    for number, name in enumerate(NAMES):
        own = facts["parameters"][name]
        assert own["mean_sd"] == pytest.approx(SD[number])
        # The errors of mean and width of a normal law, to a tenth as they are estimated from 300 mocks themselves.
        assert own["mean_pull_error"] == pytest.approx(1 / np.sqrt(300), rel=0.15)
        assert own["pull_width_error"] == pytest.approx(1 / np.sqrt(600), rel=0.3)
        assert all(row["inside"] for row in own["coverage"].values())


def test_errors_too_small_are_named_with_their_factor() -> None:
    facts = facts_of(400, factor=only("temperature_c_mk", 1.5, 1.0))
    assert facts["verdict"]["errors"] == FALSE
    assert [(each["parameter"], each["kind"]) for each in facts["verdict"]["departures"]] == [
        ("temperature_c_mk", TOO_SMALL)
    ]
    # The width of 400 normal pulls is known to 3.5 %.
    assert facts["verdict"]["departures"][0]["size"] == pytest.approx(1.5, rel=3 * 0.035)
    size = facts["parameters"]["temperature_c_mk"]["pull_width"]
    assert facts["verdict"]["text"][0] == f"stated errors too small by a factor {size:.2f} in temperature of C"
    assert facts["verdict"]["intervals_off"]
    assert facts["family_wise_p"] < 0.01


def test_a_bias_is_named_with_its_size_and_sign() -> None:
    facts = facts_of(400, bias=only("frequency_c_mhz", -0.8, 0.0))
    assert facts["verdict"]["errors"] == FALSE
    [only_one] = facts["verdict"]["departures"]
    assert (only_one["parameter"], only_one["kind"]) == ("frequency_c_mhz", BIASED)
    # The mean of 400 pulls is known to 0.05.
    assert only_one["size"] == pytest.approx(-0.8, abs=0.15)
    assert facts["verdict"]["text"][0].startswith("biased, in stated errors, by -0.")
    assert "in frequency of C" in facts["verdict"]["text"][0]


def test_errors_too_large_are_not_true_either() -> None:
    facts = facts_of(400, factor=0.6)
    assert facts["verdict"]["errors"] == FALSE
    assert {each["kind"] for each in facts["verdict"]["departures"]} == {TOO_LARGE}
    assert len(facts["verdict"]["departures"]) == 6


@pytest.mark.parametrize("count", [10, 50])
def test_few_mocks_that_show_nothing_cannot_tell(count: int) -> None:
    facts = facts_of(count)
    assert facts["verdict"]["errors"] == UNKNOWN
    assert facts["verdict"]["text"][0].startswith(f"cannot tell with {count} mocks: a bias of ")
    hidden = facts["verdict"]["could_hide"]
    assert hidden["bias"] > BIAS_MATTERS
    assert hidden["factor"] > FACTOR_MATTERS


def test_few_mocks_still_tell_a_great_fault() -> None:
    assert facts_of(50, bias=2.0)["verdict"]["errors"] == FALSE
    assert facts_of(50, factor=3.0)["verdict"]["errors"] == FALSE


@pytest.mark.parametrize(("count", "studies"), [(50, 300), (250, 100)])
def test_an_honest_study_is_blamed_no_more_than_once_in_a_hundred(count: int, studies: int) -> None:
    """Pulls and intervals of four worlds together, normal posteriors."""
    blamed = 0
    for seed in range(studies):
        rng = np.random.default_rng(seed)
        pull = rng.standard_normal((4, count, 6))
        for each in pull:
            parameters = {name: pull_facts(each[:, number]) for number, name in enumerate(NAMES)}
            found = verdict_of(parameters, stats.norm.cdf(-each), count)
            if found == FALSE:
                blamed += 1
                break
    # 1 % by Bonferroni if the bands are right; `studies` tries scatter by sqrt(0.01 / studies), three times that.
    assert blamed / studies <= 0.01 + 3 * np.sqrt(0.01 / studies)


def verdict_of(parameters: dict, rank: np.ndarray, count: int) -> str:
    return str(verdict(parameters, family_wise_p(rank), "", count, NUMBERS)["errors"])


def test_chi_squared_tells_of_a_world_in_which_most_fits_are_improbable() -> None:
    facts = facts_of(200, excess=80.0)
    share = facts["chi_squared"]["share_improbable"]
    expected = stats.ncx2.sf(stats.chi2.isf(0.01, FREEDOM), FREEDOM, 80.0)
    # Binomial scatter of 200 mocks, four times.
    assert share == pytest.approx(expected, abs=4 * np.sqrt(expected * (1 - expected) / 200))
    assert facts["verdict"]["text"][-1] == f"chi-squared tells ({share:.1%} of such fits would be flagged)"
    assert facts_of(200)["verdict"]["text"][-1].startswith("chi-squared does not tell (")
    # Half of the fits flagged, and few of them: either may be so.
    half = facts_of(20, excess=33.0)["verdict"]["text"][-1]
    assert half.startswith("cannot tell with 20 mocks whether chi-squared tells (")


def test_chi_squared_off_is_a_fault_of_the_machinery_where_all_is_as_believed() -> None:
    rng = np.random.default_rng(7)
    good, off = (
        world_facts(world(200, rng, excess=excess), NAMES, NUMBERS, as_believed=True)["verdict"]["text"][-1]
        for excess in (0.0, 20.0)
    )
    assert good.startswith("chi-squared as it should be (")
    assert off.startswith("chi-squared is too large too often (")
    few = world_facts(world(20, rng), NAMES, NUMBERS, as_believed=True)["verdict"]["text"][-1]
    assert few.startswith("cannot tell with 20 mocks whether chi-squared is as it should be (")


def test_binomial_band_holds_the_true_share() -> None:
    low, high = binomial_band(3, 40, 1)
    # Clopper and Pearson: at the ends, so many or more (so many or fewer) have half a per cent.
    assert stats.binom.sf(2, 40, low) == pytest.approx(0.005)
    assert stats.binom.cdf(3, 40, high) == pytest.approx(0.005)
    assert binomial_band(0, 40, 1)[0] == 0.0
    assert binomial_band(40, 40, 1)[1] == 1.0


def test_facts_are_for_json_and_hold_every_world() -> None:
    rng = np.random.default_rng(8)
    found = made_up(200, world(60, rng, name="one", bias=1.5), world(60, rng, name="other"))
    facts = trust_facts(found)
    again = json.loads(json.dumps(facts, allow_nan=False))
    assert again == facts
    assert [each["name"] for each in facts["outside"]] == ["one", "other"]
    assert facts["rules"]["numbers"] == 3 * numbers_of(6) == 75
    alarms = facts["alarms"]["statistic"]
    assert alarms["fresh"] == 100
    assert alarms["inside"]
    assert set(alarms["detected"]) == {"as believed", "one", "other"}
    # Five standard deviations between the two laws, the threshold at 1 %: 2.3 above the lower, 2.7 below the upper.
    assert alarms["detected"]["as believed"] > 0.95
    assert facts["believed"]["share_not_at_rest"] == pytest.approx(0.02, abs=4 * np.sqrt(0.02 / 200))
    assert 350.0 <= facts["believed"]["fewest_effective_draws"] < 400.0
    # One in eleven of 350 to 900 lies below the 400 that are enough.
    assert facts["believed"]["share_short_of_draws"] == pytest.approx(1 / 11, abs=4 * np.sqrt(1 / 11 / 200))


def test_too_few_mocks_are_refused_world_by_world() -> None:
    rng = np.random.default_rng(9)
    with pytest.raises(InputError) as error:
        trust_facts(made_up(9, world(5, rng, name="one")))
    assert error.value.problems == (
        "as believed: 9 mocks; allowed are at least 10",
        "no signal: 9 mocks; allowed are at least 10",
        "one: 5 mocks; allowed are at least 10",
    )


def test_names_as_one_says_them() -> None:
    assert [spoken(name) for name in ("frequency_b_mhz", "temperature_d_mk")] == ["frequency of B", "temperature of D"]
