"""Named random streams: the same numbers for the same name, others for any other."""

from __future__ import annotations

from itertools import combinations

import numpy as np
from scipy import stats

from sims.streams import stream


def test_a_stream_is_its_seed_name_and_index() -> None:
    first, again = stream(7, "noise", 3).standard_normal(64), stream(7, "noise", 3).standard_normal(64)
    np.testing.assert_array_equal(first, again)
    np.testing.assert_array_equal(stream(7, "noise").random(8), stream(7, "noise", 0).random(8))


def test_numbers_do_not_change_from_release_to_release() -> None:
    """A recorded seed must give the recorded campaign: these values were written down when streams were made."""
    np.testing.assert_array_equal(
        stream(20270601, "radiometer-noise", 2).integers(0, 1_000_000, 4), [41473, 151516, 89305, 423878]
    )


def test_streams_of_other_names_seeds_and_draws_are_unrelated() -> None:
    size = 20_000
    keys = [(1, "a", 0), (2, "a", 0), (1, "b", 0), (1, "a", 1), (1, "aa", 0), (0, "a", 1)]
    drawn = [stream(*key).standard_normal(size) for key in keys]
    # The correlation of unrelated numbers has standard deviation 1/sqrt(size); six of them is never seen by chance.
    worst = max(abs(float(np.corrcoef(a, b)[0, 1])) for a, b in combinations(drawn, 2))
    assert worst < 6.0 / np.sqrt(size)


def test_streams_side_by_side_are_as_good_as_one() -> None:
    """The first number of each of many draws is uniform: no draw begins where its neighbour did."""
    first = np.array([stream(11, "ensemble", index).random() for index in range(2000)])
    # A fixed seed, so this passes or fails for good; one in a thousand good generators would fall below.
    assert stats.kstest(first, "uniform").pvalue > 1e-3
