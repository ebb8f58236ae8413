import math

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.forecasting.intervals import grouped_conformal_threshold


def conformal_threshold(scores, alpha):
    """Split conformal: every score is a group of its own."""
    return grouped_conformal_threshold(scores, np.arange(len(scores)), alpha)


def test_threshold_does_not_depend_on_the_order():
    scores = np.arange(1, 20)
    assert conformal_threshold(scores[::-1], .1) == conformal_threshold(scores, .1) == 18


@pytest.mark.parametrize("alpha", [1 - .9, .1, .1 + 1e-16])
def test_alpha_is_read_within_its_rounding(alpha):
    assert conformal_threshold(np.arange(1, 100), alpha) == 90


def test_too_few_scores_give_an_infinite_threshold():
    assert conformal_threshold([.1] * 8, .1) == math.inf
    assert conformal_threshold([.1] * 9, .1) == .1
    assert conformal_threshold([], .1) == math.inf
    assert grouped_conformal_threshold([], [], .1) == math.inf
    assert grouped_conformal_threshold([.1] * 80, np.arange(80) % 8, .1) == math.inf


def test_one_score_per_group_gives_the_smallest_of_the_rank():
    rng = np.random.default_rng(0)
    for n in (5, 19, 20, 99, 149):
        scores = rng.normal(size=n)
        for percent in (5, 10, 18, 50):
            rank = -(-(n + 1) * (100 - percent) // 100)
            expected = np.sort(scores)[rank - 1] if rank <= n else math.inf
            assert conformal_threshold(scores, percent / 100) == expected


def test_copying_every_score_of_a_group_changes_nothing():
    rng = np.random.default_rng(1)
    scores, groups = rng.normal(size=60), np.arange(60) % 12
    copied = np.concatenate([scores, np.tile(scores[groups == 3], 7)])
    copied_groups = np.concatenate([groups, np.full(35, 3)])
    for alpha in (.1, .2, .3):
        assert (grouped_conformal_threshold(copied, copied_groups, alpha)
                == grouped_conformal_threshold(scores, groups, alpha))


def test_grouped_threshold_worked_out():
    # Three groups, the new one the fourth: 1/4 of the weight each. "a" shares its quarter among four scores.
    scores, groups = [1, 2, 3, 4, 5, 6], ["a", "a", "a", "a", "b", "c"]
    expected = {.9: 2, .75: 4, .5: 5, .26: 6, .25: 6, .24: math.inf}
    assert {alpha: grouped_conformal_threshold(scores, groups, alpha) for alpha in expected} == expected


def test_weights_that_no_float_sum_gets_right():
    # Nine groups of seven scores: the group weights 1/7 add up to whole numbers only in exact arithmetic.
    scores, groups = np.arange(63), np.repeat(np.arange(9), 7)
    for kept in range(1, 10):
        assert grouped_conformal_threshold(scores, groups, 1 - kept / 10) == 7 * kept - 1


@pytest.mark.parametrize("call, parameter", [
    (lambda: conformal_threshold([.1, np.nan], .1), "scores"),
    (lambda: conformal_threshold([[.1]], .1), "scores"),
    (lambda: conformal_threshold([.1], 0), "alpha"),
    (lambda: conformal_threshold([.1], 1.0), "alpha"),
    (lambda: grouped_conformal_threshold([.1], ["a"], "10%"), "alpha"),
    (lambda: grouped_conformal_threshold([.1, .2], ["a"], .1), "groups"),
])
def test_bad_input_is_refused(call, parameter):
    with pytest.raises(InputError) as caught:
        call()
    assert caught.value.parameter == parameter
