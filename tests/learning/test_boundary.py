"""Opening a boundary: codes, scaling, rows held back, what the memory allows, summaries."""

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.increments import Increment
from hyperforecast.learning import (
    ClassSummaries, HeadTrainer, Job, close_boundary, open_boundary, present_codes, standardize,
)
from hyperforecast.learning.boundary import MOST_CHECK_ROWS, fit_scaling
from hyperforecast.settings import Plan, Settings


def increment(labels, n_features=4, seed=0):
    labels = np.array(labels)
    return Increment(np.random.default_rng(seed).standard_normal((len(labels), n_features)).astype(np.float32), labels)


def carried(plan, labels, n_features=4):
    boundary = open_boundary(plan, None, increment(labels, n_features))
    kept = 5 if plan.rehearses else None
    attempt = HeadTrainer().learn([Job(boundary, Settings(0.01, 1.0, kept))], seed=0)[0]
    return close_boundary(HeadTrainer(), boundary, attempt, seed=0)


def test_codes_follow_the_order_of_arrival():
    plan = Plan("wa", 0, 1)
    first = carried(plan, ["nut", "cog", "nut", "cog"])
    boundary = open_boundary(plan, first, increment(["bolt", "nut", "axle", "bolt"]))
    assert boundary.classes.tolist() == ["cog", "nut", "axle", "bolt"]
    assert (boundary.n_old, boundary.n_classes, boundary.number) == (2, 4, 1)
    assert boundary.arrived.tolist() == [1, 2, 3]
    assert boundary.y.tolist() == [3, 1, 2, 3]


def test_text_and_numbers_as_labels_give_the_same_bits():
    plan = Plan("icarl", 8, 2)
    heads = []
    for names in ([3, 5, 8], ["ash", "oak", "yew"]):
        names, where = np.array(names), np.repeat([0, 1, 2], 9)
        attempt = HeadTrainer().learn([Job(open_boundary(plan, None, increment(names[where])), Settings(0.05, 1.0, 4))],
                                      seed=0)[0]
        heads.append({name: part.tobytes() for name, part in attempt.head.items()})
    assert heads[0] == heads[1]


@pytest.mark.parametrize("before, after, match", [
    (["a", "b"], [1, 2], "^y: must hold text as before; received whole numbers"),
    ([1, 2], ["a", "b"], "^y: must hold whole numbers as before; received text"),
])
def test_labels_of_another_kind_are_refused(before, after, match):
    plan = Plan("ewc", 0, 1)
    with pytest.raises(InputError, match=match):
        open_boundary(plan, carried(plan, before), increment(after))


@pytest.mark.parametrize("limit", [5, "200 B"])
@pytest.mark.parametrize("method", ["ewc", "icarl"])
def test_a_memory_too_small_for_one_row_of_each_class_is_refused(method, limit):
    # 200 bytes hold eight rows of four float32 features and a label of eight bytes.
    plan = Plan(method, 0, 1, memory_limit=limit)
    most = 5 if limit == 5 else 8
    carryover = carried(plan, np.repeat(np.arange(most), 2))
    with pytest.raises(InputError, match=f"^memory_limit: .*each of {most + 1} classes.*raise it"):
        open_boundary(plan, carryover, increment([most, most]))


@pytest.mark.parametrize("rows, check, kept", [
    (1, 0, 1), (3, 0, 3), (4, 1, 3), (12, 3, 9), (40, 8, 32), (500, 8, 80),
])
def test_what_the_memory_allows_each_class(rows, check, kept):
    boundary = open_boundary(Plan("wa", 0, 1, memory_limit=2 * rows), None, increment([0, 1] * 40))
    assert (boundary.check_per_class, boundary.most_kept) == (check, kept)
    boundary = open_boundary(Plan("lwf", 0, 1, memory_limit=2 * rows), None, increment([0, 1] * 40))
    assert boundary.check_per_class == min(rows, MOST_CHECK_ROWS)


def test_rows_held_back_are_few_and_never_trained_on():
    counts = {0: 1, 1: 4, 2: 5, 3: 23, 4: 200}
    rows = increment(np.random.default_rng(1).permutation(np.repeat(list(counts), list(counts.values()))))
    boundary = open_boundary(Plan("wa", 0, 1), None, rows, seed=3)
    held = np.bincount(boundary.held_back.y, minlength=5)
    assert held.tolist() == [min(count // 5, MOST_CHECK_ROWS) for count in counts.values()]
    assert (np.bincount(boundary.y) + held).tolist() == list(counts.values())
    every = {row.tobytes() for row in standardize(rows.X, boundary.center, boundary.scale)}
    trained, kept = ({row.tobytes() for row in Z} for Z in (boundary.Z, boundary.held_back.Z))
    assert trained | kept == every and not trained & kept
    again, other = (open_boundary(Plan("wa", 0, 1), None, rows, seed=seed) for seed in (3, 4))
    assert again.held_back.Z.tobytes() == boundary.held_back.Z.tobytes() != other.held_back.Z.tobytes()


def test_scaling_is_fixed_at_the_first_increment():
    X = np.random.default_rng(2).standard_normal((500, 3)) * [1, 5, 0.001] + [0, 100, 7]
    center, scale = fit_scaling(X.astype(np.float32))
    np.testing.assert_allclose(center, X.mean(axis=0), rtol=1e-4, atol=1e-6)
    np.testing.assert_allclose(scale[:2], X.std(axis=0)[:2], rtol=1e-4)
    # A feature that hardly varies: a tenth of the typical deviation.
    assert scale[2] == pytest.approx(0.1 * np.sqrt((X.var(axis=0)).mean()), rel=1e-4)
    plan = Plan("ewc", 0, 1)
    first = carried(plan, [0, 1, 0, 1])
    later = open_boundary(plan, first, Increment(increment([2, 3]).X * 50, np.array([2, 3])))
    assert later.center is first.center and later.scale is first.scale


def test_constant_and_enormous_features():
    varied = np.arange(6, dtype=np.float32)[:, None]
    for X in (np.full((6, 2), 3.5, np.float32), np.full((6, 2), 1e-42, np.float32) * varied):
        center, scale = fit_scaling(X)
        assert scale.tolist() == [1, 1]
        assert np.isfinite(standardize(X, center, scale)).all()
    X = np.array([[3e38, -3e38, 0], [-3e38, 3e38, 5]], np.float32)
    Z = standardize(X, np.float32([0, 3e38, 0]), np.float32([1e-10, 1, 1]))
    np.testing.assert_array_equal(Z, [[10, -10, 0], [-10, 0, 5]])


def test_summaries_pool_to_the_moments_of_all_rows_in_any_order():
    rng = np.random.default_rng(3)
    Z, y = (2 * rng.standard_normal((60, 3)) + 1).astype(np.float32), rng.integers(3, size=60)
    nothing = ClassSummaries(np.empty(0, np.int64), np.empty((0, 3), np.float32), np.empty((0, 3), np.float32))
    for parts in ((slice(0, 60),), (slice(0, 20), slice(20, 25), slice(25, 60)), (slice(25, 60), slice(0, 25))):
        summaries = nothing
        for part in parts:
            summaries = summaries.merged(Z[part], y[part], 3)
        assert summaries.count.tolist() == np.bincount(y).tolist()
        for code in range(3):
            np.testing.assert_allclose(summaries.mean[code], Z[y == code].mean(axis=0), atol=1e-6)
            np.testing.assert_allclose(summaries.variance[code], Z[y == code].var(axis=0), rtol=1e-5)


@pytest.mark.parametrize("seed", range(3))
def test_present_codes_are_what_numpy_calls_unique(seed):
    y = np.random.default_rng(seed).integers(0, 30, 40)
    assert present_codes(y).tolist() == np.unique(y).tolist() and present_codes(y).dtype == np.int64
