"""Synthetic families: each is checked for the property that defines its kind."""

import numpy as np
import pytest
from scipy.stats import chi2
from sklearn.mixture import GaussianMixture
from sklearn.neighbors import NearestNeighbors

from hyperforecast.workshop.streams.stream import Stream
from hyperforecast.workshop.streams.synthetic import FAMILIES, POOL_ROWS, draw_synthetic

SEEDS = range(5)


def draw(family, seed, **options):
    return draw_synthetic(f"synthetic_{family}", seed, **options)


def stream_of(family, seed, **options):
    made = draw(family, seed, **options)
    return Stream(made.collection, made.increments, name=family, source=family, seed=seed,
                  rows_per_class=made.rows_per_class, sensor=made.sensor)


def by_class(drawn):
    """Rows of shape (classes, rows, features)."""
    X = drawn.collection.X
    return X.reshape(-1, POOL_ROWS, X.shape[1]).astype(np.float64)


def nearest_mean_accuracy(stream):
    training = [stream.training(t) for t in range(stream.n_boundaries)]
    X, y = np.concatenate([one.X for one in training]), np.concatenate([one.y for one in training])
    means = np.array([X[y == label].mean(axis=0) for label in range(y.max() + 1)])
    scoring = stream.scoring(stream.n_boundaries - 1)
    return (np.linalg.norm(scoring.X[:, None] - means, axis=2).argmin(axis=1) == scoring.y).mean()


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("seed", SEEDS)
def test_draws_stay_in_their_ranges_and_streams_hand_out_what_they_promise(family, seed):
    drawn = draw_synthetic(family, seed)
    stream = Stream(drawn.collection, drawn.increments, name=family, source=family, seed=seed,
                    rows_per_class=drawn.rows_per_class, sensor=drawn.sensor)
    assert 3 <= stream.n_boundaries <= 10
    assert 4 <= stream.n_features <= 512
    assert 4 <= len(stream.seen(stream.n_boundaries - 1)) <= 60
    assert drawn.collection.X.dtype == np.float32
    for t in range(stream.n_boundaries):
        increment = stream.training(t)
        assert np.isfinite(increment.X).all()
        assert set(increment.y.tolist()) == set(stream.classes(t).tolist())
        for label in stream.classes(t):
            assert 1 <= (increment.y == label).sum() <= drawn.rows_per_class[label] <= 100
    assert (np.bincount(stream.scoring(stream.n_boundaries - 1).y)[stream.seen(stream.n_boundaries - 1)] == 50).all()


@pytest.mark.parametrize("family", FAMILIES)
def test_same_seed_same_bits_other_seed_other_stream(family):
    first, again, other = (draw_synthetic(family, seed) for seed in (1, 1, 2))
    assert first.collection.X.tobytes() == again.collection.X.tobytes()
    assert first.increments == again.increments and first.rows_per_class == again.rows_per_class
    assert first.collection.X.shape != other.collection.X.shape


@pytest.mark.parametrize("family", FAMILIES)
def test_separation_runs_from_hopeless_to_trivial(family):
    accuracy = {separation: np.mean([
        nearest_mean_accuracy(stream_of(family.removeprefix("synthetic_"), seed, separation=separation, classes=10,
                                        increments=4, raw_dimension=40, noise=0.05, rows_per_class=80))
        for seed in SEEDS]) for separation in (0.1, 24.0)}
    # Guessing one class in ten is right .1 of the time; the chance's spread over 5 x 500 rows is .006.
    assert accuracy[0.1] < 0.3
    assert accuracy[24.0] > 0.8


def boxes_m_p_value(classes):
    """Box 1949's test that covariances are equal, chi-squared approximation (formula from memory)."""
    k, n, d = classes.shape
    covariances = np.array([np.cov(rows.T) for rows in classes])
    pooled = covariances.mean(axis=0)
    m = (n - 1) * (k * np.linalg.slogdet(pooled)[1] - np.linalg.slogdet(covariances)[1].sum())
    correction = (2 * d**2 + 3 * d - 1) / (6 * (d + 1) * (k - 1)) * (k / (n - 1) - 1 / (k * (n - 1)))
    return chi2.sf(m * (1 - correction), d * (d + 1) * (k - 1) / 2)


def test_gaussian_classes_share_a_covariance_and_own_covariance_classes_do_not():
    shape = {"classes": 8, "increments": 3, "raw_dimension": 5, "noise": 0.05}
    shared, own = ([boxes_m_p_value(by_class(draw(family, seed, **shape))) for seed in range(9)]
                   for family in ("gaussian", "own_covariance"))
    # One stream in four has heavy tails, which the test takes for unequal covariances.
    assert np.median(shared) > 0.01
    assert max(own) < 1e-12


def test_only_modal_classes_have_clumps():
    # Schwarz 1978: the lower BIC tells how many clumps the rows of a class are worth.
    def worth(rows, n):
        return GaussianMixture(n, n_init=2, random_state=0, reg_covar=1e-3).fit(rows).bic(rows)

    def share_with_clumps(family):
        classes = np.concatenate([by_class(draw(family, seed, classes=6, increments=3, raw_dimension=4, noise=0.02,
                                                separation=20.0)) for seed in SEEDS])
        return np.mean([worth(rows / rows.std(), 3) < worth(rows / rows.std(), 1) for rows in classes])

    assert share_with_clumps("modes") > 0.9
    assert share_with_clumps("own_covariance") < 0.1


def test_manifolds_are_curved():
    # Levina & Bickel 2004: the likelihood's estimate of dimension from distances to the k nearest neighbours
    # (formula from memory) sees the sheet's dimension; principal components see the room that it bends through.
    def local_dimension(rows, k=12):
        distances = NearestNeighbors(n_neighbors=k + 1).fit(rows).kneighbors()[0]
        return 1 / np.mean(np.log(distances[:, -1:] / distances[:, :-1]))

    def linear_dimension(rows):
        spread = np.linalg.svd(rows - rows.mean(axis=0), compute_uv=False) ** 2
        return 1 + np.searchsorted(np.cumsum(spread) / spread.sum(), 0.98)

    def excess(family):
        classes = np.concatenate([by_class(draw(family, seed, classes=6, increments=3, raw_dimension=30, noise=0.0,
                                                separation=3.0))[:3] for seed in range(8)])
        return np.median([linear_dimension(rows) / local_dimension(rows) for rows in classes])

    assert excess("manifold") > 1.5 * excess("gaussian")


@pytest.mark.parametrize("seed", SEEDS)
def test_bags_of_words_are_sparse_whole_numbers(seed):
    X = draw("sparse", seed, raw_dimension=300, classes=6, increments=3).collection.X
    assert (X >= 0).all() and (X == np.round(X)).all()
    assert (X == 0).mean() > 0.5


def test_bags_of_words_come_as_counts_and_as_bits():
    highest = [draw("sparse", seed, raw_dimension=50, classes=6, increments=3).collection.X.max() for seed in range(12)]
    assert min(highest) == 1 and max(highest) > 2


@pytest.mark.parametrize("seed", SEEDS)
def test_imbalance_has_a_long_tail_and_other_families_none(seed):
    rows = sorted(draw("imbalanced", seed, rows_per_class=100, classes=20, increments=4).rows_per_class.values())
    assert rows[-1] == 100
    assert rows[-1] / rows[0] > 3.5
    assert len(set(draw("gaussian", seed).rows_per_class.values())) == 1


@pytest.mark.parametrize("seed", SEEDS)
def test_drift_grows_and_other_families_have_none(seed):
    def departure(family):
        stream = stream_of(family, seed, classes=8, increments=6, raw_dimension=20)
        new = stream.scoring(0).X
        return [np.abs(stream.scoring(t).X[:len(new)] - new).mean() for t in range(stream.n_boundaries)]

    drift = departure("drifting")
    assert drift[0] == 0 and all(later > earlier for earlier, later in zip(drift, drift[1:]))
    assert departure("gaussian") == [0] * 6


def test_a_turning_sensor_keeps_lengths():
    sensor = draw("drifting", 0, raw_dimension=21).sensor
    still = type(sensor)(gain=0 * sensor.gain, offset=0 * sensor.offset, angle=np.ones(10), pairs=sensor.pairs,
                         noise=0 * sensor.noise)
    X = np.random.default_rng(0).normal(size=(30, 21))
    turned = still(X, 2, np.random.default_rng(0))
    np.testing.assert_allclose(np.linalg.norm(turned, axis=1), np.linalg.norm(X, axis=1))
    assert np.abs(turned - X).max() > 0.5


def test_hierarchy_has_close_kin():
    def closeness(family):
        ratios = []
        for seed in SEEDS:
            means = by_class(draw(family, seed, classes=24, increments=4, raw_dimension=64, noise=0.0,
                                  separation=8.0)).mean(axis=1)
            distances = np.linalg.norm(means[:, None] - means, axis=2)
            nearest = np.where(np.eye(24) > 0, np.inf, distances).min(axis=1)
            ratios.append(np.median(nearest) / np.median(distances[np.triu_indices(24, 1)]))
        return np.mean(ratios)

    assert closeness("hierarchy") < 0.8 * closeness("gaussian")


@pytest.mark.parametrize("seed", SEEDS)
def test_rectified_features_are_zero_or_positive(seed):
    X = draw("rectified", seed, raw_dimension=100).collection.X
    assert (X >= 0).all()
    assert 0.2 < (X == 0).mean() < 0.95


def test_some_streams_bring_old_classes_back():
    def returns(seed):
        labels = sum(draw("gaussian", seed, rows_per_class=10, raw_dimension=4).increments, [])
        return len(set(labels)) < len(labels)

    # Three streams in ten: the binomial chance of fewer than 3 or more than 25 in 40 is below .001.
    assert 3 <= sum(returns(seed) for seed in range(40)) <= 25


def test_an_override_leaves_other_draws_alone():
    free, fixed = draw("modes", 4), draw("modes", 4, separation=2.0)
    assert free.increments == fixed.increments
    assert free.collection.X.shape == fixed.collection.X.shape
    assert free.rows_per_class == fixed.rows_per_class


@pytest.mark.parametrize("classes", [3, 11, 59])
def test_given_classes_fit_the_drawn_increments(classes):
    for seed in range(10):
        assert sorted(set(sum(draw("gaussian", seed, classes=classes).increments, []))) == list(range(classes))
