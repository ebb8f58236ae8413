"""What a device remembers from boundary to boundary: exemplars, check rows, summaries, importance."""

from dataclasses import replace

import numpy as np
import pytest

from hyperforecast.increments import Increment
from hyperforecast.learning import (
    Exemplars, HeadTrainer, Job, accuracies, choose_exemplars, close_boundary, herd, open_boundary, try_settings,
    unit_rows,
)
from hyperforecast.learning.head import fisher_diagonal
from hyperforecast.settings import METHODS, REHEARSAL_METHODS, Plan, Settings

D = 10
CENTERS = 2 * np.random.default_rng(0).standard_normal((12, D))
# Several classes, one class, none that is new, old and new ones together, a single row.
ARRIVALS = [{0: 30, 1: 30, 2: 8}, {3: 30, 4: 3}, {5: 30}, {4: 40, 0: 12}, {2: 30, 6: 6, 7: 30}, {8: 1}]


def drawn(counts, seed):
    rng = np.random.default_rng(seed)
    y = rng.permutation(np.repeat(list(counts), list(counts.values())))
    return Increment((CENTERS[y] + rng.standard_normal((len(y), D))).astype(np.float32), y)


def settings_for(plan, kept):
    return Settings(0.02, 0.5, kept if plan.rehearses else None)


def walk(plan, kept_by_boundary):
    """Yield (boundary, attempt, carryover after it) along ARRIVALS."""
    carryover, trainer = None, HeadTrainer()
    for t, (counts, kept) in enumerate(zip(ARRIVALS, kept_by_boundary)):
        boundary = open_boundary(plan, carryover, drawn(counts, t), seed=t)
        attempt = try_settings(trainer, boundary, [settings_for(plan, kept)], seed=t)[0]
        carryover = close_boundary(trainer, boundary, attempt, seed=t)
        yield boundary, attempt, carryover


def in_order(memory, code):
    return memory.Z[memory.y == code].tolist()


@pytest.mark.parametrize("limit", [40, 100, "2.5 KB", 2000])
@pytest.mark.parametrize("method", METHODS)
def test_memory_after_every_boundary(method, limit):
    plan = Plan(method, 6, 2, 16, limit)
    before, trained_on = Exemplars.none(D), set()
    kept_by_boundary = (20, 80, 12, 12, 30, 5)
    for (boundary, _, after), wanted in zip(walk(plan, kept_by_boundary), kept_by_boundary):
        kept, check = after.exemplars, after.check_rows
        most = plan.memory_rows(D)
        assert len(kept) + len(check) <= most
        if isinstance(limit, str):
            assert sum(one.Z.nbytes + one.y.nbytes for one in (kept, check)) <= 2500
        per_class = min(wanted, boundary.most_kept) if plan.rehearses else 0
        trained_on |= {row.tobytes() for row in np.concatenate([boundary.Z, boundary.old_exemplars.Z])}
        for memory in (kept, check):
            assert (np.diff(memory.rank) >= 0).all()
        assert not trained_on & {row.tobytes() for row in check.Z}
        assert {row.tobytes() for row in kept.Z} <= trained_on
        for code in range(boundary.n_classes):
            ranks = kept.rank[kept.y == code]
            assert ranks.tolist() == list(range(len(ranks)))
            old, rows = in_order(before, code)[:per_class], in_order(kept, code)
            # Old exemplars are cut by prefix; a class that came again is topped up.
            assert rows[:len(old)] == old
            assert len(rows) == min(per_class, len(old) + (boundary.y == code).sum())
            assert (check.y == code).sum() <= boundary.check_per_class
        before = kept
    assert after.n_boundaries == len(ARRIVALS)
    assert after.classes.tolist() == [0, 1, 2, 3, 4, 5, 6, 7, 8]
    assert after.summaries.count.sum() == len(trained_on)


@pytest.mark.parametrize("method", REHEARSAL_METHODS)
def test_exemplars_are_herded_in_the_trained_features(method):
    boundary, attempt, after = list(walk(Plan(method, 6, 2, 16, 400), (7, 7, 7, 7, 7, 7)))[4]
    for code in (6, 7):
        rows = boundary.Z[boundary.y == code]
        features = np.maximum(rows @ attempt.head["hidden_weights"] + attempt.head["hidden_bias"], 0)
        order = herd(unit_rows(features)[None], min(7, len(rows)))[0]
        np.testing.assert_array_equal(after.exemplars.Z[after.exemplars.y == code], rows[order])


@pytest.mark.parametrize("method", REHEARSAL_METHODS)
def test_exemplars_in_training_are_those_of_the_settings(method):
    """Training with few is training on a memory cut beforehand, and the number of steps counts them."""
    *_, (_, _, carryover) = walk(Plan(method, 6, 2, 16, 600), (20,) * 6)
    boundary = open_boundary(carryover.plan, carryover, drawn({9: 30, 10: 30}, 9))
    few, many = try_settings(HeadTrainer(), boundary, [settings_for(carryover.plan, kept) for kept in (2, 20)], seed=0)
    memory = boundary.old_exemplars
    per_step = few.operations / (2 * -(-(len(boundary.y) + len(memory.cut(2))) // 16))
    assert many.operations == per_step * 2 * -(-(len(boundary.y) + len(memory)) // 16)
    smaller = replace(boundary, carryover=replace(carryover, exemplars=memory.cut(2)))
    again = try_settings(HeadTrainer(), smaller, [few.settings], seed=0)[0]
    assert {name: part.tobytes() for name, part in again.head.items()} == {
        name: part.tobytes() for name, part in few.head.items()}


def test_cut_join_and_without():
    Z = np.arange(6, dtype=np.float32)[:, None]
    memory = Exemplars(Z, np.array([0, 1, 2, 0, 1, 0]), np.array([0, 0, 0, 1, 1, 2]))
    assert memory.cut(1).Z.ravel().tolist() == [0, 1, 2]
    assert memory.cut(2).Z.ravel().tolist() == [0, 1, 2, 3, 4]
    assert memory.cut(9).y.tolist() == memory.y.tolist()
    assert memory.cut(0).y.tolist() == []
    assert memory.without([0, 2]).Z.ravel().tolist() == [1, 4]
    joined = memory.without([1]).joined(memory.without([0, 2]))
    assert joined.rank.tolist() == [0, 0, 0, 1, 1, 2]
    assert joined.y.tolist() == [0, 2, 1, 0, 1, 0]


def test_choice_takes_what_there_is():
    rng = np.random.default_rng(1)
    Z, y = rng.standard_normal((9, 2)).astype(np.float32), np.array([4, 4, 4, 4, 4, 4, 7, 7, 9])
    chosen = choose_exemplars(Z, y, Z, 3)
    assert np.bincount(chosen.y).tolist() == [0, 0, 0, 0, 3, 0, 0, 2, 0, 1]
    assert chosen.rank.tolist() == [0, 0, 0, 1, 1, 2]


def test_importance_is_the_mean_over_all_rows_seen():
    # Schwarz et al. 2018 (from memory), with rows as weights: one running penalty.
    seen, total = 0, {}
    for boundary, attempt, after in walk(Plan("ewc", 6, 3, 16, 200), (None,) * 6):
        fresh = fisher_diagonal(attempt.head, boundary.Z)
        for name, part in fresh.items():
            before = total.get(name, np.zeros((part.shape[0], 0)))
            before = np.pad(before, ((0, 0), (0, part.shape[1] - before.shape[1])))
            total[name] = before + len(boundary.y) * part.astype(np.float64)
        seen += len(boundary.y)
        for name, part in total.items():
            np.testing.assert_allclose(after.head[f"importance_{name}"], part / seen, rtol=1e-4, atol=1e-9)


@pytest.mark.parametrize("method", METHODS)
def test_best_check_accuracy_never_falls(method):
    best = np.empty(0)
    for boundary, attempt, after in walk(Plan(method, 6, 2, 16, 300), (10,) * 6):
        now = accuracies(HeadTrainer(), after.head, after.check_rows.Z, after.check_rows.y, boundary.n_classes)
        known = ~np.isnan(now)
        assert (after.best_check_accuracy[known] >= now[known]).all()
        assert (after.best_check_accuracy[:len(best)][~np.isnan(best)] >= best[~np.isnan(best)]).all()
        best = after.best_check_accuracy
    # The last class came with a single row, which was trained on.
    assert np.isnan(best).tolist() == [False] * 8 + [True]


@pytest.mark.parametrize("method", METHODS)
def test_nothing_of_a_boundary_changes_by_attempts_or_by_closing(method):
    boundary, attempt, _ = list(walk(Plan(method, 6, 2, 16, 300), (10,) * 6))[4]

    def held():
        return [boundary.Z.tobytes(), boundary.old_exemplars.Z.tobytes(), boundary.old_check_rows.Z.tobytes(),
                *(part.tobytes() for part in boundary.carryover.head.values())]

    before = held()
    again = try_settings(HeadTrainer(), boundary, [attempt.settings], seed=0)[0]
    close_boundary(HeadTrainer(), boundary, again, seed=0)
    assert held() == before


def test_job_keeps_no_more_than_the_memory_allows():
    boundary = open_boundary(Plan("wa", 0, 1, memory_limit=30), None, drawn({0: 30, 1: 30}, 0))
    assert boundary.most_kept == 12
    assert [Job(boundary, Settings(0.1, 1.0, kept)).kept for kept in (1, 12, 80)] == [1, 12, 12]
    assert Job(open_boundary(Plan("lwf", 0, 1), None, drawn({0: 30, 1: 30}, 0)), Settings(0.1, 1.0)).kept == 0
