"""All descriptors at once: documented, numbers at every boundary however odd, blind to what comes after it."""

import inspect
from dataclasses import replace

import numpy as np
import pytest

from hyperforecast.describing import DESCRIPTORS, GROUPS, describe
from hyperforecast.describing.view import median
from hyperforecast.increments import Increment
from hyperforecast.learning import Exemplars, HeadTrainer, close_boundary, open_boundary, try_settings
from hyperforecast.settings import METHODS, SCALES, Plan, Settings

D = 8
CENTERS = 1.5 * np.random.default_rng(0).standard_normal((9, D))
NEEDS_OLD_MODEL = {name for name, one in DESCRIPTORS.items() if one.group == "model"}


def drawn(classes, rows=20, seed=0, n_features=D):
    rng = np.random.default_rng(seed)
    y = rng.permutation(np.repeat(classes, rows))
    return Increment((CENTERS[y, :n_features] + rng.standard_normal((len(y), n_features))).astype(np.float32), y)


def after(plan, *increments, rate=0.02):
    """The carryover after learning increments one by one."""
    carryover, trainer = None, HeadTrainer()
    for t, increment in enumerate(increments):
        boundary = open_boundary(plan, carryover, increment, seed=t)
        settings = Settings(rate, 1.0, 10 if plan.rehearses else None)
        carryover = close_boundary(trainer, boundary, try_settings(trainer, boundary, [settings], seed=t)[0], seed=t)
    return carryover


def plain_boundary(method, hidden_units=6):
    plan = Plan(method, hidden_units, 3, 16, 200)
    return open_boundary(plan, after(plan, drawn([0, 1, 2]), drawn([3, 4], seed=1)), drawn([5, 6], seed=2), seed=2)


def missing(described):
    assert list(described) == list(DESCRIPTORS)
    assert all(type(value) is float and (np.isfinite(value) or np.isnan(value)) for value in described.values())
    return {name for name, value in described.items() if np.isnan(value)}


def test_every_descriptor_is_documented():
    assert len(DESCRIPTORS) >= 25
    groups = [one.group for one in DESCRIPTORS.values()]
    assert list(dict.fromkeys(groups)) == list(GROUPS)
    assert groups == sorted(groups, key=GROUPS.index)
    for name, one in DESCRIPTORS.items():
        assert one.name == name and "Unit" in inspect.getdoc(one.compute)
        assert one.explanation and one.explanation in one.compute.__doc__
    assert set(SCALES) <= set(DESCRIPTORS)


@pytest.mark.parametrize("method, hidden_units, absent", [
    ("ewc", 6, {"exemplars_per_class", "most_kept", "exemplar_accuracy_old"}),
    ("lwf", 6, {"exemplars_per_class", "most_kept", "exemplar_accuracy_old", "importance_mean"}),
    ("icarl", 6, {"importance_mean"}),
    ("wa", 6, {"importance_mean"}),
    ("wa", 0, {"importance_mean", "hidden_weight_norm", "active_share_new"}),
])
def test_what_is_missing_at_a_plain_boundary(method, hidden_units, absent):
    described = describe(HeadTrainer(), plain_boundary(method, hidden_units))
    assert missing(described) == absent | {"shift_of_returning"}


@pytest.mark.parametrize("method", METHODS)
def test_what_is_missing_at_the_first_boundary(method):
    boundary = open_boundary(Plan(method, 6, 3, 16, 200), None, drawn([0, 1, 2]))
    known = {name for name, one in DESCRIPTORS.items() if one.group in ("data", "plan")}
    known |= {"ridge_accuracy_new", "kernel_accuracy_new", "cut_share", "cut_feature", "closest_classes",
              "boundary_number"}
    if boundary.plan.rehearses:
        known.add("most_kept")
    assert missing(describe(HeadTrainer(), boundary)) == set(DESCRIPTORS) - known


def test_numbers_that_can_be_counted():
    plan = Plan("wa", 6, 3, 16, 200)
    boundary = open_boundary(plan, after(plan, drawn([0, 1, 2]), drawn([3], seed=1)), drawn([5, 6, 1], rows=25, seed=2))
    described = describe(HeadTrainer(), boundary)
    expected = {
        "classes_old": 4, "classes_new": 2, "classes_returning": 1, "rows": 60, "rows_per_class": 20, "imbalance": 1,
        "features": D, "check_rows_per_class": 4, "exemplars_per_class": 10, "most_kept": 200 // 6 - 8,
        "boundary_number": 2, "hidden_units": 6, "passes": 3, "batch_size": 16, "steps_without_exemplars": 12,
    }
    assert {name: described[name] for name in expected} == expected


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("hidden_units", [0, 5])
@pytest.mark.parametrize("second", [
    drawn([3]), drawn([1]), drawn([0, 1, 2]), drawn([3, 4, 5], rows=1), drawn([7], rows=1), drawn([3, 4], rows=300),
    Increment(np.full((12, D), 2.5, np.float32), np.repeat([3, 4], 6)),
    Increment(np.full((12, D), 3e38, np.float32), np.repeat([3, 4], 6)),
], ids=["one class", "one old class", "old classes", "one row each", "one row", "many rows", "constant", "enormous"])
def test_odd_increments_give_numbers_or_nothing(method, hidden_units, second):
    plan = Plan(method, hidden_units, 2, 16, 200)
    described = describe(HeadTrainer(), open_boundary(plan, after(plan, drawn([0, 1, 2])), second))
    assert missing(described) != set(DESCRIPTORS)
    assert described["rows"] > 0


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("first", [
    drawn([0, 1], rows=1), drawn([0]), drawn([0, 1, 2], n_features=1),
    Increment(np.full((12, D), -1.0, np.float32), np.repeat([0, 1], 6)),
], ids=["one row each", "one class", "one feature", "constant"])
def test_odd_first_increments_and_what_follows(method, first):
    plan = Plan(method, 5, 2, 16, 200)
    missing(describe(HeadTrainer(), open_boundary(plan, None, first)))
    second = drawn([3, 4], n_features=first.n_features)
    missing(describe(HeadTrainer(), open_boundary(plan, after(plan, first), second)))


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("taken", ["exemplars", "check_rows", "both"])
def test_memories_without_rows(method, taken):
    boundary = plain_boundary(method)
    nothing = {name: Exemplars.none(D) for name in (("exemplars", "check_rows") if taken == "both" else (taken,))}
    emptied = replace(boundary, carryover=replace(boundary.carryover, **nothing))
    absent = missing(describe(HeadTrainer(), emptied))
    if taken == "both":
        assert {"curvature_exemplars", "loss_exemplars", "gradient_cosine", "ridge_accuracy_old",
                "nearest_mean_accuracy_old", "check_accuracy_old", "forgetting"} <= absent
    assert "curvature_new" not in absent


@pytest.mark.parametrize("method", METHODS)
def test_a_diverged_model_leaves_the_data_described(method):
    plan = Plan(method, 6, 40, 4, 200)
    carryover = after(plan, drawn([0, 1, 2]))
    wild = {name: np.full_like(part, np.nan) for name, part in carryover.head.items()}
    absent = missing(describe(HeadTrainer(), open_boundary(plan, replace(carryover, head=wild), drawn([3, 4]))))
    assert absent & NEEDS_OLD_MODEL and not absent & {"rows", "class_separability", "frechet_distance"}


def test_descriptors_know_nothing_of_what_comes_after():
    """No settings, no attempt: a trainer that refuses to train suffices, and attempts leave no trace."""
    class Untrained(HeadTrainer):
        def learn(self, jobs, *, seed):
            raise AssertionError("trained")

        consolidated = learn

    assert set(inspect.signature(describe).parameters) == {"trainer", "boundary", "seed"}
    for method in METHODS:
        boundary = plain_boundary(method)
        before = describe(Untrained(), boundary)
        settings = [Settings(rate, 1.0, 5 if boundary.plan.rehearses else None) for rate in (1e-3, 1e-1)]
        attempt = try_settings(HeadTrainer(), boundary, settings, seed=99)[1]
        close_boundary(HeadTrainer(), boundary, attempt, seed=98)
        np.testing.assert_equal(describe(HeadTrainer(), boundary), before)


def test_rows_held_back_do_not_enter():
    """What is held back for checks of the attempt must not steer the advice on it."""
    boundary = plain_boundary("wa")
    held = boundary.held_back
    other = replace(boundary, held_back=Exemplars(held.Z + 5, held.y[::-1], held.rank))
    np.testing.assert_equal(describe(HeadTrainer(), other), describe(HeadTrainer(), boundary))


def test_the_units_of_features_do_not_matter():
    """Powers of two change no digit; within a factor of ten no floor under small deviations sets in."""
    plan, described = Plan("wa", 6, 3, 16, 200), []
    for scale in (np.ones(D, np.float32), np.float32([1, 2, 1, 4, 0.5, 2, 1, 1])):
        first, second = (Increment(one.X * scale, one.y) for one in (drawn([0, 1, 2]), drawn([3, 4], seed=1)))
        described.append(describe(HeadTrainer(), open_boundary(plan, after(plan, first), second)))
    np.testing.assert_equal(*described)


def test_the_seed_matters_only_where_rows_are_drawn():
    plan = Plan("wa", 6, 3, 16, 200)
    carryover = after(plan, drawn([0, 1, 2]))
    few, many = (open_boundary(plan, carryover, drawn([3, 4], rows=rows)) for rows in (40, 400))
    one, again, other = (describe(HeadTrainer(), many, seed=seed) for seed in (0, 0, 1))
    np.testing.assert_equal(one, again)
    assert one["effective_rank"] != other["effective_rank"]
    assert one["effective_rank"] == pytest.approx(other["effective_rank"], rel=0.1)
    one, other = (describe(HeadTrainer(), few, seed=seed) for seed in (0, 1))
    drawing = {name for name in one if one[name] != other[name] and not np.isnan(one[name])}
    # The rounds of power iteration start at random; directions and rows of Gaussians are drawn.
    drawn_at_random = {
        "kernel_accuracy_new", "kernel_accuracy_old", "kernel_accuracy_all", "accuracy_in_reach", "simulated_accuracy_old",
        "curvature_new", "curvature_exemplars", "anchor_curvature", "log_curvature_ratio"}
    assert drawing <= drawn_at_random | {
        name for name in one if one[name] == pytest.approx(other[name], rel=1e-5)}


@pytest.mark.parametrize("dtype", [np.int64, np.float32])
@pytest.mark.parametrize("n", [1, 2, 3, 50, 51])
def test_medians_are_numpys_bit_for_bit(n, dtype):
    values = (np.random.default_rng(n).standard_normal(n) * 100).astype(dtype)
    ours, theirs = median(values), np.median(values)
    assert ours.dtype == theirs.dtype and ours.tobytes() == theirs.tobytes()
