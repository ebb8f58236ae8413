"""Conformal intervals against published facts and simulations.

Romano, Patterson & Candes 2019, "Conformalized Quantile Regression": score and rank, and coverage in
[1 - alpha, 1 - alpha + 1/(n + 1)]. Vovk 2012, "Conditional validity of inductive conformal predictors" (from
memory): given the calibration set, coverage is Beta(k, n + 1 - k). Lee, Barber & Willett 2023,
"Distribution-free inference with hierarchical data" (from memory): the grouped guarantee.
"""

import math
from fractions import Fraction

import numpy as np
import pytest

from hyperforecast.forecasting.intervals import grouped_conformal_threshold

stats = pytest.importorskip("scipy.stats")
linear_model = pytest.importorskip("sklearn.linear_model")


def conformal_threshold(scores, alpha):
    """Split conformal: every score is a group of its own."""
    return grouped_conformal_threshold(scores, np.arange(len(scores)), alpha)


def test_rank_is_exact_for_every_n_and_percent():
    for n in (1, 9, 19, 49, 99, 149, 199, 499):
        scores = np.arange(1, n + 1)
        for percent in range(1, 100):
            rank = math.ceil((n + 1) * (1 - Fraction(percent, 100)))
            assert conformal_threshold(scores, percent / 100) == (rank if rank <= n else math.inf)


def test_the_two_traps():
    # Float arithmetic gives rank 124 here, and numpy's quantile of k/n is the score after the k-th.
    assert math.ceil(150 * (1 - .18)) == 124
    assert conformal_threshold(np.arange(1, 150), .18) == 123
    assert np.quantile(np.arange(1, 100), 90 / 99, method="higher") == 91
    assert conformal_threshold(np.arange(1, 100), .1) == 90


def test_coverage_given_the_calibration_set_is_beta():
    # Uniform scores: the coverage of a threshold is the threshold itself. n = 99, alpha = .1: Beta(90, 10).
    rng = np.random.default_rng(0)
    coverage = np.array([conformal_threshold(scores, .1) for scores in rng.random((4000, 99))])
    law = stats.beta(90, 10)
    assert law.mean() == pytest.approx(.9) and law.std() == pytest.approx(.029851, abs=1e-6)
    assert law.ppf([.05, .95]) == pytest.approx([.84672, .94417], abs=1e-5)
    assert coverage.mean() == pytest.approx(.9, abs=4 * law.std() / math.sqrt(4000))
    assert stats.kstest(coverage, law.cdf).pvalue > .001


def test_conformalized_quantiles_cover_where_the_quantiles_do_not():
    # Forecast quantiles that are far too narrow, and noise that grows with x; 1000 repetitions of n = 49, alpha = .2.
    rng = np.random.default_rng(1)
    x = rng.random((1000, 50))
    truth = .5 + .1 * x * rng.normal(size=x.shape)
    low, high = .5 - .02 * x, .5 + .02 * x
    scores = np.maximum(low - truth, truth - high)
    covered = raw = 0
    for i in range(len(x)):
        covered += scores[i, -1] <= conformal_threshold(scores[i, :-1], .2)
        raw += low[i, -1] <= truth[i, -1] <= high[i, -1]
    # k = 40 of 49: the coverage is 40/50 exactly; four standard errors are .05.
    assert covered / 1000 == pytest.approx(.8, abs=.05)
    assert raw / 1000 < .3


def test_absolute_errors_give_split_conformal_intervals():
    rng = np.random.default_rng(2)
    X = rng.random((400, 3))
    y = .2 + X @ [.2, .1, .1] + .05 * rng.normal(size=400)
    model = linear_model.LinearRegression().fit(X[:100], y[:100])
    forecast = model.predict(X[100:])
    scores = np.abs(forecast[:199] - y[100:299])
    threshold = conformal_threshold(scores, .1)
    assert (scores <= threshold).sum() == 180
    # 101 new rows; coverage has mean .9 and standard deviation below .04 (calibration and test together).
    assert np.mean(np.abs(forecast[199:] - y[299:]) <= threshold) == pytest.approx(.9, abs=.16)


def simulated_sources(rng, n_sources):
    """Scores with a strong effect of the source; sources of very different sizes, the noisy ones the small ones."""
    effects = rng.exponential(size=n_sources)
    sizes = np.where(effects > .7, 3, 60)
    groups = np.repeat(np.arange(n_sources), sizes)
    return effects[groups] * np.abs(1 + .3 * rng.normal(size=len(groups))), groups


def test_grouped_threshold_covers_new_sources_and_the_pooled_one_does_not():
    rng = np.random.default_rng(3)
    covered = pooled = 0
    for _ in range(1500):
        scores, groups = simulated_sources(rng, 20)
        new = groups == 19
        truth = scores[new][0]
        covered += truth <= grouped_conformal_threshold(scores[~new], groups[~new], .2)
        pooled += truth <= conformal_threshold(scores[~new], .2)
    # Guaranteed at least .8, four standard errors below allowed; not idle either: at most 1/20 more.
    assert .8 - .042 <= covered / 1500 <= .85 + .042
    assert pooled / 1500 < .65
