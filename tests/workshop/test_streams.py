"""Streams: the protocol of rows (60/20/20 with caps, groups kept whole), treatments and dealing.

The shares and caps are the contest's rules as written down before any run.
"""

import numpy as np
import pytest
from sklearn.decomposition import PCA
from sklearn.metrics.pairwise import rbf_kernel

from hyperforecast.checks import InputError
from hyperforecast.workshop.streams.dealing import deal_classes, most_classes
from hyperforecast.workshop.streams.stream import Collection, Stream
from hyperforecast.workshop.streams.treatments import fit_treatment


def numbered(*sizes, groups=None):
    """A collection whose only feature is the row's number; class k has sizes[k] rows."""
    n = sum(sizes)
    return Collection(np.arange(n, dtype=np.int64)[:, None], np.repeat(np.arange(len(sizes)), sizes), groups)


def rows(increment):
    return increment.X[:, 0].astype(int).tolist()


def build(collection, increments, **options):
    return Stream(collection, increments, **{"name": "n", "source": "s", "seed": 3, **options})


def test_shares_and_caps_of_each_class():
    # 1000 rows: 200 for selection and for scoring before the caps of 50 and 100; 20 rows: 4 and 4.
    stream = build(numbered(1000, 20, 5), [[0, 1], [2]], rows_per_class=1000)
    count = {part: np.bincount(getattr(stream, part)(1).y).tolist() for part in ("selection", "scoring")}
    assert count == {"selection": [50, 4, 1], "scoring": [100, 4, 1]}
    assert np.bincount(stream.training(0).y).tolist() == [600, 12]
    assert np.bincount(stream.training(1).y).tolist() == [0, 0, 3]


def test_training_rows_are_capped():
    stream = build(numbered(1000, 20, 30), [[0, 1], [2]], rows_per_class=15)
    assert np.bincount(stream.training(0).y).tolist() == [15, 12]
    assert len(stream.training(1)) == 15
    by_class = build(numbered(1000, 20, 30), [[0, 1], [2]], rows_per_class={0: 7, 1: 3, 2: 2})
    assert np.bincount(by_class.training(0).y).tolist() == [7, 3]
    assert len(by_class.training(1)) == 2


@pytest.mark.parametrize("seed", range(5))
def test_parts_are_disjoint_and_classes_return_with_new_rows(seed):
    stream = build(numbered(90, 60, 40, 30), [[0, 1], [2, 0], [3, 0, 1]], seed=seed)
    training = [row for t in range(3) for row in rows(stream.training(t))]
    parts = training + rows(stream.selection(2)) + rows(stream.scoring(2))
    assert len(set(parts)) == len(parts)
    # Class 0 has 54 training rows for its three arrivals.
    assert [int((stream.training(t).y == 0).sum()) for t in range(3)] == [18, 18, 18]


def test_held_out_rows_grow_with_the_classes_seen_and_stay():
    stream = build(numbered(50, 50, 50, 50), [[0, 1], [2], [3, 0]])
    for part in (stream.selection, stream.scoring):
        assert [sorted(set(part(t).y.tolist())) for t in range(3)] == [[0, 1], [0, 1, 2], [0, 1, 2, 3]]
        assert set(rows(part(0))) < set(rows(part(1))) < set(rows(part(2)))
    assert stream.seen(2).tolist() == [0, 1, 2, 3]
    assert stream.classes(2).tolist() == [3, 0]
    assert stream.n_boundaries == 3 and stream.n_features == 1


def test_float32_and_order_mixed_over_classes():
    increment = build(numbered(90, 90, 9), [[0, 1], [2]]).training(0)
    assert increment.X.dtype == np.float32
    assert increment.y.tolist() != sorted(increment.y.tolist())


def test_same_seed_same_bits_other_seed_other_split():
    first, again, other = (build(numbered(90, 90, 9), [[0, 1], [2]], seed=seed) for seed in (1, 1, 2))
    for part in ("training", "selection", "scoring"):
        assert getattr(first, part)(1).X.tobytes() == getattr(again, part)(1).X.tobytes()
    assert rows(first.training(0)) != rows(other.training(0))


@pytest.mark.parametrize("seed", range(5))
def test_no_group_serves_two_parts(seed):
    groups = np.array([f"writer {at % 11}" for at in range(440)])
    stream = build(numbered(110, 110, 110, 110, groups=groups), [[0, 1], [2], [3]], seed=seed)
    training = set(groups[[row for t in range(3) for row in rows(stream.training(t))]])
    selection, scoring = (set(groups[rows(part(2))]) for part in (stream.selection, stream.scoring))
    assert not training & selection and not training & scoring and not selection & scoring
    # 60% and 20% of eleven equal groups are between 6 and 7, and between 2 and 3.
    assert len(training) in (6, 7) and len(selection) in (2, 3) and len(scoring) in (2, 3)


def test_groups_that_cannot_serve_all_parts_are_refused():
    with pytest.raises(InputError, match="groups: must leave each class rows"):
        build(numbered(10, 10, 10, groups=np.repeat(["a", "b", "c"], 10)), [[0, 1], [2]])


@pytest.mark.parametrize("increments, message", [
    ([[0, 1]], "must be at least two"),
    ([[0], [1]], "at least 2 classes in increment 0"),
    ([[0, 1], []], "at least 1 classes in increment 1"),
    ([[0, 1], [2, 2]], "once in increment 1"),
    ([[0, 1], [9]], "at least 5 rows; received 9 with 0"),
    ([["0", "1"], ["2"]], "at least 5 rows; received '0' with 0"),
    ([[0, 1], ["2"]], "all texts or all whole numbers"),
])
def test_increments_that_do_not_fit_are_refused(increments, message):
    with pytest.raises(InputError, match=message):
        build(numbered(10, 10, 10), increments)


def test_sensor_shows_held_out_rows_as_of_the_boundary():
    stream = build(numbered(50, 50, 50), [[0, 1], [2]], sensor=lambda X, t, rng: X + 1000 * t + rng.random(X.shape))
    old = stream.scoring(1).X[:len(stream.scoring(0))] - stream.scoring(0).X
    assert (np.abs(old - 1000) < 1).all()
    assert stream.scoring(1).X.tobytes() == stream.scoring(1).X.tobytes()


# --- treatments


def images(n=60, side=8):
    return np.random.default_rng(0).random((n, side * side)).astype(np.float32)


def treat(features, dimension, X, seed=0, **options):
    return fit_treatment(features, dimension, lambda: X, np.random.default_rng(seed), **options)


def test_principal_components_are_those_of_scikit_learn():
    X = images() @ np.random.default_rng(1).random((64, 20)).astype(np.float32)
    treated = treat("pca", 5, X[:40])(X)
    expected = PCA(5, svd_solver="full").fit(X[:40]).transform(X)
    np.testing.assert_allclose(np.abs(treated), np.abs(expected), atol=1e-3)


def test_fourier_features_approach_the_gaussian_kernel():
    # Rahimi & Recht 2007: inner products of the features tend to the kernel; error about 1/sqrt(dimension).
    X = np.random.default_rng(2).normal(size=(50, 6)).astype(np.float32)
    treated = treat("fourier", 20_000, X)(X)
    standard = (X - X.mean(axis=0)) / X.std(axis=0)
    np.testing.assert_allclose(treated @ treated.T, rbf_kernel(standard, gamma=1 / (2 * 6)), atol=0.04)


def test_convolutions_ignore_brightness_inside_and_are_never_negative():
    convolve = treat("convolution", 32, None, image_shape=(8, 8))
    X = images()
    treated, brighter = convolve(X), convolve(X + 0.5)
    assert treated.shape == (60, 32) and (treated >= 0).all()
    # Kernels that sum to zero change at the border only: the four inner cells are cells 5, 6, 9, 10 of 16.
    inner = [cell * 2 + kernel for cell in (5, 6, 9, 10) for kernel in range(2)]
    np.testing.assert_allclose(treated[:, inner], brighter[:, inner], atol=1e-5)


def test_convolution_of_a_point_gives_the_kernel_back():
    # The response to a single bright pixel, averaged over its cell and the neighbours', is the kernel's positive part.
    point = np.zeros((1, 64), dtype=np.float32)
    point[0, 3 * 8 + 3] = 1
    convolve = treat("convolution", 16, None, image_shape=(8, 8))
    kernel = np.random.default_rng(0).standard_normal((9, 1)).astype(np.float32)
    kernel -= kernel.mean()
    np.testing.assert_allclose(convolve(point).sum() * 4, np.maximum(kernel, 0).sum(), rtol=1e-5)


@pytest.mark.parametrize("features, dimension", [("pca", 7), ("fourier", 33), ("convolution", 48)])
def test_treated_streams_are_deterministic_and_of_the_dimension(features, dimension):
    collection = Collection(images(90), np.repeat([0, 1, 2], 30), image_shape=(8, 8))
    first, again = (build(collection, [[0, 1], [2]], features=features, dimension=dimension) for _ in range(2))
    assert first.n_features == dimension
    assert first.scoring(1).X.dtype == np.float32
    assert first.scoring(1).X.tobytes() == again.scoring(1).X.tobytes()


def test_treatment_learns_from_the_first_training_rows_alone():
    X = images(90)
    changed = X.copy()
    stream = build(Collection(X, np.repeat([0, 1, 2], 30)), [[0, 1], [2]], features="pca", dimension=4)
    changed[60:] += 100
    other = build(Collection(changed, np.repeat([0, 1, 2], 30)), [[0, 1], [2]], features="pca", dimension=4)
    assert stream.scoring(0).X.tobytes() == other.scoring(0).X.tobytes()


@pytest.mark.parametrize("features, dimension, shape, message", [
    ("raw", 5, None, "dimension: must be left out with raw"),
    ("pca", None, None, "dimension: must be a whole number"),
    ("pca", 64, None, "dimension: must be at most 59"),
    ("convolution", 20, (8, 8), "dimension: must be a multiple of 16"),
    ("convolution", 16, None, "features: must be raw, pca or fourier"),
    ("wavelet", 16, None, "features: must be one of raw, pca, fourier, convolution"),
])
def test_treatments_that_do_not_fit_are_refused(features, dimension, shape, message):
    with pytest.raises(InputError, match=message):
        treat(features, dimension, images(), image_shape=shape)


# --- dealing


@pytest.mark.parametrize("seed", range(20))
def test_every_class_is_dealt_once_in_increments_of_allowed_size(seed):
    rng = np.random.default_rng(seed)
    n_increments = int(rng.integers(2, 11))
    labels = list(range(int(rng.integers(n_increments + 1, most_classes(n_increments) + 1))))
    increments = deal_classes(labels, n_increments, rng)
    assert sorted(sum(increments, [])) == labels
    assert 2 <= len(increments[0]) <= 10
    assert all(1 <= len(increment) <= 12 for increment in increments[1:])


def test_classes_beyond_what_increments_hold_are_left_out():
    increments = deal_classes(list(range(200)), 3, np.random.default_rng(0))
    assert [len(increment) for increment in increments] == [10, 12, 12]


def test_recurring_classes_are_old_ones():
    increments = deal_classes(list("abcdefghijkl"), 5, np.random.default_rng(0), recurring=1.0)
    seen = set(increments[0])
    for increment in increments[1:]:
        old = [label for label in increment if label in seen]
        assert 1 <= len(old) <= 3 and len(set(increment)) == len(increment) > len(old)
        seen.update(increment)


def test_too_few_classes_are_refused():
    with pytest.raises(InputError, match="increments: must be at most 2, with 3 classes; received 3"):
        deal_classes([0, 1, 2], 3, np.random.default_rng(0))
