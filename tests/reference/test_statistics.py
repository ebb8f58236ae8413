"""The contest's statistics against published examples and scipy.

Demsar 2006 is "Statistical Comparisons of Classifiers over Multiple Data Sets".
"""

import numpy as np
import pytest
from scipy import stats

from hyperforecast.workshop.contest import statistics

# Demsar's table 6 (from memory): area under the curve of C4.5 and three variants on 14 data sets.
# For the last but one data set he prints .975 twice, yet ranks them 2 and 3: hence a fourth digit here.
VARIANTS = ["C4.5", "C4.5+m", "C4.5+cf", "C4.5+m+cf"]
AUC = np.array([
    [0.763, 0.768, 0.771, 0.798], [0.599, 0.591, 0.590, 0.569], [0.954, 0.971, 0.968, 0.967],
    [0.628, 0.661, 0.654, 0.657], [0.882, 0.888, 0.886, 0.898], [0.936, 0.931, 0.916, 0.931],
    [0.661, 0.668, 0.609, 0.685], [0.583, 0.583, 0.563, 0.625], [0.775, 0.838, 0.866, 0.875],
    [1.000, 1.000, 1.000, 1.000], [0.940, 0.962, 0.965, 0.962], [0.619, 0.666, 0.614, 0.669],
    [0.972, 0.981, 0.9751, 0.975], [0.957, 0.978, 0.946, 0.970],
])


def test_signed_ranks():
    differences = np.round(1000 * (AUC[:, 1] - AUC[:, 0]))
    assert list(differences) == [5, -8, 17, 33, 6, -5, 7, 0, 63, 0, 22, 47, 9, 21]
    result = statistics.signed_rank_test(differences)
    assert (result.rank_sum_positive, result.rank_sum_negative) == (93, 12)
    # Demsar's z, without a correction for ties: -2.54.
    z = (12 - 14 * 15 / 4) / np.sqrt(14 * 15 * 29 / 24)
    assert z == pytest.approx(-2.542, abs=0.001)
    assert result.p_value == pytest.approx(2 * stats.norm.cdf(z), abs=2e-4)
    assert result.p_value == pytest.approx(0.01097, abs=1e-5)  # with the correction, by scipy


def test_signed_ranks_are_exact_without_ties():
    # All of n differences positive: 2 of the 2**n equally likely signs are as extreme.
    assert statistics.signed_rank_test(np.arange(1.0, 11.0)).p_value == pytest.approx(2 / 2**10)
    differences = np.random.default_rng(0).normal(0.5, size=15)
    expected = stats.wilcoxon(differences, method="exact").pvalue
    assert statistics.signed_rank_test(differences).p_value == pytest.approx(expected)


def test_average_ranks_and_friedman():
    result = statistics.compare_ranks(AUC, VARIANTS)
    average = np.array([result.average_ranks[name] for name in VARIANTS])
    np.testing.assert_allclose(average, [3.143, 2.000, 2.893, 1.964], atol=0.0005)
    # Demsar's statistics, uncorrected for ties: 9.28 and, after Iman and Davenport, 3.69.
    chi_square = 12 * 14 / (4 * 5) * (np.sum(average**2) - 4 * 5**2 / 4)
    assert chi_square == pytest.approx(9.28, abs=0.005)
    assert 13 * chi_square / (14 * 3 - chi_square) == pytest.approx(3.69, abs=0.005)
    # Ties correction (Friedman): divide by 1 - sum(t^3 - t) / (n (k^3 - k)) over groups of t equal scores.
    ties = sum(np.sum(counts**3 - counts) for counts in (np.unique(row, return_counts=True)[1] for row in AUC))
    assert result.chi_square == pytest.approx(chi_square / (1 - ties / (14 * (4**3 - 4))))
    assert result.chi_square == pytest.approx(10.228, abs=0.001)
    assert result.p_value == pytest.approx(stats.chi2.sf(result.chi_square, 3))


def test_critical_difference():
    assert statistics.compare_ranks(AUC, VARIANTS).critical_difference == pytest.approx(1.25, abs=0.005)
    # Demsar's table 5, q at the 5% level for 2 to 10 classifiers.
    published = [1.960, 2.343, 2.569, 2.728, 2.850, 2.949, 3.031, 3.102, 3.164]
    for k, q in zip(range(2, 11), published):
        ours = statistics.critical_difference(k, 14) / np.sqrt(k * (k + 1) / (6 * 14))
        assert ours == pytest.approx(q, abs=0.001)


def test_bootstrap_of_the_mean_agrees_with_scipy():
    # One stream per source: the plain percentile bootstrap.
    values = np.random.default_rng(3).gamma(2.0, size=25)
    ours = statistics.bootstrap_mean(values, np.arange(25), np.zeros(25), seed=0, draws=40_000)
    theirs = stats.bootstrap((values,), np.mean, method="percentile", n_resamples=40_000,
                             random_state=np.random.default_rng(1)).confidence_interval
    np.testing.assert_allclose([ours.low, ours.high], theirs, atol=0.02)
    assert ours.estimate == pytest.approx(values.mean())


def test_bootstrap_variance_has_both_levels():
    # Two-stage resampling of S sources of m streams each (own derivation): variance of a draw's mean is
    # (variance between source means + mean variance within sources / m) / S, all variances with divisor n.
    rng = np.random.default_rng(5)
    table = rng.normal(size=(40, 1)) + 2.0 * rng.normal(size=(40, 5))
    sources, streams = np.repeat(np.arange(40), 5), np.tile(np.arange(5), 40)
    result = statistics.bootstrap_mean(table.ravel(), sources, streams, seed=0, draws=20_000)
    deviation = np.sqrt((table.mean(axis=1).var() + table.var(axis=1).mean() / 5) / 40)
    # Nearly normal with so many sources, so that the interval is 2 * 1.96 deviations wide.
    assert result.high - result.low == pytest.approx(2 * stats.norm.ppf(0.975) * deviation, rel=0.03)
