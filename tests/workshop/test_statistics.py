import json

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.workshop.contest import statistics
from hyperforecast.workshop.contest.statistics import NotOffered


def test_every_source_counts_the_same_however_many_rows_it_has():
    # Source a: streams of means 0 and 1; b: one stream of mean 4.
    values = [0, 0, 0, 1, 3, 5]
    result = statistics.bootstrap_mean(values, list("aaaabb"), list("pppqpp"), seed=0)
    assert result.estimate == (0.5 + 4) / 2
    assert (result.n_sources, result.n_streams) == (2, 3)


def test_draws_hold_streams_of_the_sources_drawn_only():
    values, sources, streams = [0.0, 1.0, 4.0], list("aab"), list("pqp")
    result = statistics.bootstrap_mean(values, sources, streams, seed=0)
    # By hand: source a, drawn, averages 0, .5 or 1 with chances 1/4, 1/2 and 1/4. A draw's mean is 0 with
    # chance 1/64, at most .25 with 5/64, and 4 with 1/4.
    assert (result.low, result.high) == (0.25, 4.0)


def test_gap_closed_is_a_ratio_of_sums():
    result = statistics.bootstrap_ratio([1, 3, 0], [2, 4, 2], list("abc"), list("ppp"), seed=0)
    assert result.estimate == 4 / 8
    assert result.low <= 0.5 <= result.high


def test_equal_ratios_leave_no_doubt():
    result = statistics.bootstrap_ratio([1, 2, 3], [2, 4, 6], list("abc"), list("ppp"), seed=0)
    assert (result.estimate, result.low, result.high) == (0.5, 0.5, 0.5)


def test_a_denominator_that_may_vanish_bounds_nothing():
    result = statistics.bootstrap_ratio([1, 1], [3, -1], list("ab"), list("pp"), seed=0)
    assert (result.estimate, result.low, result.high) == (1.0, None, None)
    nothing = statistics.bootstrap_ratio([1, 1], [1, -1], list("ab"), list("pp"), seed=0)
    assert (nothing.estimate, nothing.low, nothing.high) == (None, None, None)


def test_one_source_gives_no_interval():
    result = statistics.bootstrap_mean([1.0, 2.0], list("aa"), list("pq"), seed=0)
    assert result.as_dict() == {"estimate": 1.5, "low": None, "high": None, "n_sources": 1, "n_streams": 2}


def test_intervals_repeat_with_the_seed_and_do_not_depend_on_the_order_of_rows():
    rng = np.random.default_rng(0)
    values, sources, streams = rng.integers(99, size=60), rng.integers(12, size=60), rng.integers(3, size=60)
    first = statistics.bootstrap_mean(values, sources, streams, seed=7)
    order = rng.permutation(60)
    assert statistics.bootstrap_mean(values[order], sources[order], streams[order], seed=7) == first
    assert statistics.bootstrap_mean(values, sources, streams, seed=8) != first
    assert first.low < first.estimate < first.high


def test_tests_over_few_sources_are_not_offered():
    for result in (statistics.signed_rank_test(np.ones(9)), statistics.compare_ranks(np.ones((9, 3)), list("abc"))):
        assert isinstance(result, NotOffered)
        assert result.n_sources == 9 and "at least 10 sources; there are 9" in result.reason
        json.dumps(result.as_dict())


def test_no_difference_at_all():
    same = statistics.signed_rank_test(np.zeros(10))
    assert same.p_value == 1.0 and same.rank_sum_positive == same.rank_sum_negative == 27.5
    ranks = statistics.compare_ranks(np.ones((10, 3)), ["advice", "constant", "search"])
    assert ranks.p_value == 1.0 and set(ranks.average_ranks.values()) == {2.0}


def test_the_higher_score_has_rank_one():
    ranks = statistics.compare_ranks(np.tile([0.5, 0.9, 0.7], (10, 1)), ["advice", "constant", "search"])
    assert ranks.average_ranks == {"advice": 3.0, "constant": 1.0, "search": 2.0}
    json.dumps(ranks.as_dict(), allow_nan=False)


@pytest.mark.parametrize("call, match", [
    (lambda: statistics.bootstrap_mean([], [], [], seed=0), "^values: "),
    (lambda: statistics.bootstrap_mean([1.0, np.nan], list("ab"), list("pp"), seed=0), "^values: .*1 not finite"),
    (lambda: statistics.bootstrap_mean([1.0, 2.0], list("a"), list("pp"), seed=0), "^sources: "),
    (lambda: statistics.bootstrap_mean([1.0, 2.0], list("ab"), list("p"), seed=0), "^streams: "),
    (lambda: statistics.bootstrap_ratio([1.0, 2.0], [1.0], list("ab"), list("pp"), seed=0), "^denominators: "),
    (lambda: statistics.bootstrap_mean([1.0, 2.0], list("ab"), list("pp"), seed=-1), "^seed: "),
    (lambda: statistics.bootstrap_mean([1.0, 2.0], list("ab"), list("pp"), seed=0, draws=0), "^draws: "),
    (lambda: statistics.signed_rank_test([[1.0]]), "^differences: "),
    (lambda: statistics.compare_ranks(np.ones((10, 2)), list("ab")), "^policies: "),
    (lambda: statistics.compare_ranks(np.ones((10, 3)), list("aab")), "^policies: "),
])
def test_wrong_input_is_refused(call, match):
    with pytest.raises(InputError, match=match):
        call()
