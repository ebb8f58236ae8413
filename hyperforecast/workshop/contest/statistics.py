"""How sure a contest's result is, with the source as the unit.

Seeds and boundaries are averaged within each stream, streams within each source; intervals come from
drawing sources with replacement, then streams within each source drawn. Tests over sources are offered
for at least ten of them.
"""

from dataclasses import asdict, dataclass

import numpy as np
from scipy import stats

from hyperforecast.checks import InputError, check_whole

FEWEST_SOURCES = 10
LEVEL = 0.95
DRAWS = 10_000


@dataclass(frozen=True)
class Interval:
    """An estimate with its 95% percentile interval.

    Attributes
    ----------
    estimate : float or None
        None for a ratio whose denominator is not positive.
    low, high : float or None
        None where the data set no bound: a single source, or a ratio whose denominator was not positive
        in too many draws.
    n_sources, n_streams : int
    """

    estimate: float | None
    low: float | None
    high: float | None
    n_sources: int
    n_streams: int

    def as_dict(self):
        """Return a JSON-able dict."""
        return asdict(self)


@dataclass(frozen=True)
class NotOffered:
    """A test that is not offered.

    Attributes
    ----------
    reason : str
    n_sources : int
    """

    reason: str
    n_sources: int

    def as_dict(self):
        """Return a JSON-able dict."""
        return asdict(self)


@dataclass(frozen=True)
class SignedRankTest:
    """Wilcoxon's signed-rank test of paired differences, two-sided.

    Attributes
    ----------
    rank_sum_positive, rank_sum_negative : float
        The ranks of zero differences are split evenly between the two.
    p_value : float
        Exact without ties and zeros, from the normal approximation otherwise.
    n_sources : int
    """

    rank_sum_positive: float
    rank_sum_negative: float
    p_value: float
    n_sources: int

    def as_dict(self):
        """Return a JSON-able dict."""
        return asdict(self)


@dataclass(frozen=True)
class RankComparison:
    """Average ranks of policies over sources, with Friedman's test and Nemenyi's critical difference.

    Attributes
    ----------
    average_ranks : dict of str to float
        1 is best; equals share the mean of their ranks.
    chi_square, p_value : float
        Friedman's statistic, corrected for ties, and its p.
    critical_difference : float
        Two policies differ at the 5% level if their average ranks differ by at least this.
    n_sources : int
    """

    average_ranks: dict
    chi_square: float
    p_value: float
    critical_difference: float
    n_sources: int

    def as_dict(self):
        """Return a JSON-able dict."""
        return asdict(self)


def bootstrap_mean(values, sources, streams, *, seed, draws=DRAWS):
    """Return the `Interval` of the mean over sources.

    Parameters
    ----------
    values : array of shape (n,)
        One finite number, such as a difference between two policies, for each boundary and seed.
    sources, streams : sequences of length n
        Names; a stream's name need only be unique within its source.
    seed : int
    draws : int
    """
    tree = _average_streams({"values": values}, sources, streams)
    drawn = _resample(tree, seed, draws)[:, :, 0].mean(axis=1)
    estimate = np.mean([stream_means.mean() for stream_means in tree])
    return _interval(estimate, drawn, drawn, tree)


def bootstrap_ratio(numerators, denominators, sources, streams, *, seed, draws=DRAWS):
    """Return the `Interval` of a ratio of sums over sources, such as the gap closed.

    The gap closed is sum(policy - constant) / sum(search - constant); a source counts with its averages.
    A draw whose denominator is not positive has no ratio and may lie anywhere: it widens both ends.

    Parameters
    ----------
    numerators, denominators : arrays of shape (n,)
        Finite numbers for each boundary and seed.
    sources, streams, seed, draws
        As in `bootstrap_mean`.
    """
    tree = _average_streams({"numerators": numerators, "denominators": denominators}, sources, streams)
    above, below = _resample(tree, seed, draws).sum(axis=1).T
    defined = below > 0
    ratios = np.divide(above, below, out=np.zeros(draws), where=defined)
    above, below = np.sum([stream_means.mean(axis=0) for stream_means in tree], axis=0)
    estimate = above / below if below > 0 else None
    return _interval(estimate, np.where(defined, ratios, -np.inf), np.where(defined, ratios, np.inf), tree)


def signed_rank_test(differences):
    """Return a `SignedRankTest` of one difference per source, or `NotOffered` below ten sources.

    Parameters
    ----------
    differences : array of shape (n,)
        Finite; positive favours the first policy.

    References
    ----------
    Demsar 2006, "Statistical Comparisons of Classifiers over Multiple Data Sets", section 3.1.3.
    """
    differences = _numbers("differences", differences, 1)
    n = len(differences)
    if n < FEWEST_SOURCES:
        return _not_offered("Wilcoxon's signed-rank test", n)
    ranks = stats.rankdata(np.abs(differences))
    zeros = ranks[differences == 0].sum() / 2
    positive, negative = ranks[differences > 0].sum() + zeros, ranks[differences < 0].sum() + zeros
    if not differences.any():
        return SignedRankTest(float(positive), float(negative), 1.0, n)
    sizes = np.abs(differences)
    method = "exact" if sizes.all() and len(np.unique(sizes)) == n else "asymptotic"
    p_value = stats.wilcoxon(differences, zero_method="zsplit", correction=False, method=method).pvalue
    return SignedRankTest(float(positive), float(negative), float(p_value), n)


def compare_ranks(scores, policies):
    """Return a `RankComparison` of policies, or `NotOffered` below ten sources.

    Parameters
    ----------
    scores : array of shape (n, k)
        One finite score for each source and policy, k >= 3; higher is better.
    policies : sequence of k str

    References
    ----------
    Demsar 2006, "Statistical Comparisons of Classifiers over Multiple Data Sets", section 3.2.2.
    """
    scores = _numbers("scores", scores, 2)
    n, k = scores.shape
    if k < 3 or len(set(policies)) != k or len(policies) != k:
        raise InputError("policies", f"must name each of at least three columns of scores, which has {k}",
                         ", ".join(map(str, policies)))
    if n < FEWEST_SOURCES:
        return _not_offered("the comparison of average ranks", n)
    ranks = stats.rankdata(-scores, axis=1)
    if np.all(ranks == ranks[0, 0]):
        chi_square, p_value = 0.0, 1.0
    else:
        chi_square, p_value = stats.friedmanchisquare(*scores.T)
    average = {name: float(rank) for name, rank in zip(policies, ranks.mean(axis=0))}
    return RankComparison(average, float(chi_square), float(p_value), critical_difference(k, n), n)


def critical_difference(n_policies, n_sources):
    """Return Nemenyi's critical difference of average ranks at the 5% level (Demsar 2006, section 3.2.2)."""
    check_whole("n_policies", n_policies, low=2)
    check_whole("n_sources", n_sources, low=1)
    q = stats.studentized_range.ppf(LEVEL, n_policies, np.inf) / np.sqrt(2.0)
    return float(q * np.sqrt(n_policies * (n_policies + 1) / (6.0 * n_sources)))


def _not_offered(test, n):
    return NotOffered(f"{test} needs at least {FEWEST_SOURCES} sources; there are {n}", n)


def _numbers(name, values, n_dimensions):
    values = np.asarray(values, dtype=np.float64)
    if values.ndim != n_dimensions or values.size == 0 or not np.isfinite(values).all():
        raise InputError(name, f"must hold finite numbers, at least one, in {n_dimensions} dimension(s)",
                         f"shape {values.shape}, {np.count_nonzero(~np.isfinite(values))} not finite")
    return values


def _average_streams(columns, sources, streams):
    """Return for each source, in order of name, its streams' means, an array (n_streams, n_columns)."""
    table = [_numbers(name, values, 1) for name, values in columns.items()]
    n = len(table[0])
    for name, values in (*zip(columns, table), ("sources", sources), ("streams", streams)):
        if len(values) != n:
            raise InputError(name, f"must have one entry for each of {n} values", len(values))
    table = np.stack(table, axis=1)
    rows = {}
    for row, (source, stream) in enumerate(zip(sources, streams)):
        rows.setdefault(source, {}).setdefault(stream, []).append(row)
    return [np.array([table[rows[source][stream]].mean(axis=0) for stream in sorted(rows[source])])
            for source in sorted(rows)]


def _resample(tree, seed, draws):
    """Return the means of the sources drawn, shape (draws, n_sources, n_columns)."""
    check_whole("draws", draws, low=1)
    rng = np.random.default_rng(check_whole("seed", seed))
    picked = rng.integers(len(tree), size=(draws, len(tree)))
    means = np.empty((*picked.shape, tree[0].shape[1]))
    for index, stream_means in enumerate(tree):
        here = picked == index
        n_streams = len(stream_means)
        # How often each stream is drawn; the product with its means avoids a large gather.
        counts = rng.multinomial(n_streams, np.full(n_streams, 1.0 / n_streams), size=np.count_nonzero(here))
        means[here] = counts @ stream_means / n_streams
    return means


def _interval(estimate, lows, highs, tree):
    n_streams = sum(map(len, tree))
    low = high = None
    if len(tree) > 1:
        tail = (1.0 - LEVEL) / 2.0
        low, high = np.quantile(lows, tail, method="lower"), np.quantile(highs, 1.0 - tail, method="higher")
    plain = [float(value) if value is not None and np.isfinite(value) else None for value in (estimate, low, high)]
    return Interval(*plain, len(tree), n_streams)
