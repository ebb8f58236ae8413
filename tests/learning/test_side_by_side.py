"""Attempts side by side: the same bits whatever the company, and divergence that stays where it is."""

from dataclasses import replace

import joblib
import numpy as np
import pytest

from hyperforecast.increments import Increment
from hyperforecast.learning import (
    HeadTrainer, Job, accuracies, close_boundary, open_boundary, side_by_side, try_settings,
)
from hyperforecast.learning.head import HeadLayout
from hyperforecast.learning.objectives import Objective
from hyperforecast.learning.side_by_side import Regimen, train_side_by_side
from hyperforecast.settings import METHODS, Plan, Settings, SettingsBox

D = 12
CENTERS = 1.5 * np.random.default_rng(0).standard_normal((8, D))


def drawn(seed, classes, rows=20):
    rng = np.random.default_rng(seed)
    y = rng.permutation(np.repeat(classes, rows))
    return Increment((CENTERS[y] + rng.standard_normal((len(y), D))).astype(np.float32), y)


def second_boundary(method, hidden_units=24, classes=(3, 4, 5)):
    plan, trainer = Plan(method, hidden_units, 3, 16, 120), HeadTrainer()
    opening = open_boundary(plan, None, drawn(1, (0, 1, 2)), seed=0)
    attempt = trainer.learn([Job(opening, Settings(0.05, 1.0, 16 if plan.rehearses else None))], seed=0)[0]
    return open_boundary(plan, close_boundary(trainer, opening, attempt, seed=0), drawn(2, classes), seed=1)


def drawn_settings(boundary, count):
    """Settings over the whole box, the ones that diverge included."""
    box = SettingsBox(boundary.plan.method, boundary.most_kept)
    return box.from_unit(np.random.default_rng(3).random((count, box.n_dimensions)) ** 0.5)


def bits(attempt):
    head = {name: part.tobytes() for name, part in attempt.head.items()}
    return attempt.settings, head, attempt.diverged, attempt.operations


def alone(jobs):
    return [bits(HeadTrainer().learn([job], seed=0)[0]) for job in jobs]


@pytest.mark.parametrize("method", METHODS)
def test_bits_do_not_depend_on_company(method, monkeypatch):
    boundary = second_boundary(method)
    jobs = [Job(boundary, one) for one in drawn_settings(boundary, 64)]
    wanted = alone(jobs)
    assert {True, False} == {diverged for _, _, diverged, _ in wanted}
    if boundary.plan.rehearses:
        assert len({job.kept for job in jobs}) > 5
    for size in (7, 64):
        chunks = [HeadTrainer().learn(jobs[at:at + size], seed=0) for at in range(0, 64, size)]
        assert [bits(one) for chunk in chunks for one in chunk] == wanted
    order = np.random.default_rng(4).permutation(64)
    assert [bits(one) for one in HeadTrainer().learn([jobs[k] for k in order], seed=0)] == [wanted[k] for k in order]
    monkeypatch.setattr(side_by_side, "BLOCK_BYTES", 1)
    assert [bits(one) for one in HeadTrainer().learn(jobs, seed=0)] == wanted


@pytest.mark.parametrize("n_features, hidden_units, batch_size, classes", [
    (1, 0, 1, (2,)), (33, 0, 50, (2, 3, 4)), (64, 64, 32, tuple(range(2, 26))), (257, 16, 7, (2, 3)),
    (100, 128, 64, (0, 2)),
])
def test_bits_do_not_depend_on_company_in_any_shape(n_features, hidden_units, batch_size, classes):
    rng = np.random.default_rng(8)
    plan, trainer = Plan("wa", hidden_units, 2, batch_size, 400), HeadTrainer()
    increments = []
    for labels in ((0, 1), classes):
        y = np.repeat(labels, 13)
        increments.append(Increment(rng.standard_normal((len(y), n_features)).astype(np.float32) + y[:, None] % 5, y))
    opening = open_boundary(plan, None, increments[0])
    attempt = trainer.learn([Job(opening, Settings(0.02, 1.0, 10))], seed=0)[0]
    boundary = open_boundary(plan, close_boundary(trainer, opening, attempt, seed=0), increments[1])
    jobs = [Job(boundary, one) for one in drawn_settings(boundary, 9)]
    assert [bits(one) for one in trainer.learn(jobs, seed=0)] == alone(jobs)


@pytest.mark.parametrize("method", METHODS)
def test_bits_do_not_depend_on_company_with_other_carryovers(method):
    """As where later outcomes are followed: heads and exemplars differ, the new rows do not."""
    first = second_boundary(method)
    attempts = try_settings(HeadTrainer(), first, drawn_settings(first, 9), seed=0)
    carried = [close_boundary(HeadTrainer(), first, one, seed=0) for one in attempts]
    boundaries = [open_boundary(first.plan, one, drawn(5, (6, 7, 0)), seed=2) for one in carried]
    jobs = [Job(boundary, one) for boundary, one in zip(boundaries, drawn_settings(boundaries[0], 9))]
    wanted = alone(jobs)
    assert [bits(one) for one in HeadTrainer().learn(jobs, seed=0)] == wanted
    assert [bits(one) for one in HeadTrainer().learn(jobs[::-1], seed=0)] == wanted[::-1]


@pytest.mark.parametrize("workers", [1, 2])
def test_bits_do_not_depend_on_workers(workers):
    boundary = second_boundary("wa")
    settings = drawn_settings(boundary, 8)
    wanted = alone([Job(boundary, one) for one in settings])
    chunks = joblib.Parallel(n_jobs=workers)(
        joblib.delayed(try_settings)(HeadTrainer(), boundary, settings[at:at + 4], seed=0) for at in (0, 4))
    assert [bits(one) for chunk in chunks for one in chunk] == wanted


def test_another_seed_gives_other_bits_and_the_same_seed_the_same():
    boundary = second_boundary("wa")
    settings = [Settings(0.02, 0.1, 10)]
    first, again, other = (try_settings(HeadTrainer(), boundary, settings, seed=seed)[0] for seed in (0, 0, 1))
    assert bits(first) == bits(again)
    assert bits(first)[1] != bits(other)[1]


def test_each_row_is_seen_once_in_a_pass_and_the_last_minibatch_is_a_mean_over_its_own():
    """A gradient that does not depend on the weights adds up: bias moves by the sum over steps of minibatch means."""
    seen = []

    class Recorder:
        def output_gradient(self, logits, y, targets, strength):
            seen.append(y.copy())
            return np.broadcast_to(y[None, :, None].astype(np.float32), logits.shape).copy()

    layout = HeadLayout(1, 0, 1)
    regimen = Regimen(1.0, 0.0, np.arange(1, 12), np.zeros(layout.n_flat, np.float32))
    trained = train_side_by_side(
        layout, Recorder(), [regimen], Z=np.zeros((20, 1), np.float32), y=np.arange(20) ** 2, targets=None, passes=1,
        batch_size=4, seed=0)[0]
    batches = [seen[0], seen[1], seen[2][:3]]
    assert sorted(np.concatenate(batches).tolist()) == [k**2 for k in range(1, 12)]
    velocity = moved = 0.0
    for batch in batches:
        velocity = 0.9 * velocity - batch.mean()
        moved += velocity
    assert trained.steps == 3
    assert layout.parts(trained.flat[None])["output_bias"][0, 0, 0] == pytest.approx(moved, rel=1e-6)


def test_rows_outside_its_set_cannot_make_a_head_diverge():
    layout, rng = HeadLayout(3, 4, 2), np.random.default_rng(9)
    Z = rng.standard_normal((30, 3)).astype(np.float32)
    Z[0] = 1e7
    start = rng.standard_normal(layout.n_flat).astype(np.float32)
    regimen = Regimen(0.01, 0.0, np.arange(1, 30), start)
    trained = train_side_by_side(layout, Objective("ewc", n_classes=2, n_old=0, arrived=np.arange(2)), [regimen], Z=Z,
                                 y=np.arange(30) % 2, targets=None, passes=8, batch_size=8, seed=0)[0]
    assert not trained.diverged and trained.steps == 32


@pytest.mark.parametrize("method", METHODS)
def test_divergence_is_an_outcome(method):
    """Flagged, cheaper, scored, without a warning, and a carryover can be made of it, descriptors aside."""
    boundary = second_boundary(method)
    wild = replace(drawn_settings(boundary, 1)[0], learning_rate=1.0, regularization=1e6 if method == "ewc" else 1e3)
    tame = replace(wild, learning_rate=1e-3, regularization=0.1)
    diverged, trained = try_settings(HeadTrainer(), boundary, [wild, tame], seed=0)
    assert diverged.diverged and not trained.diverged
    assert diverged.operations < trained.operations
    scores = accuracies(HeadTrainer(), diverged.head, boundary.Z, boundary.y, boundary.n_classes)
    assert ((scores[3:] >= 0) & (scores[3:] <= 1)).all() and np.isnan(scores[:3]).all()
    carryover = close_boundary(HeadTrainer(), boundary, diverged, seed=0)
    after = open_boundary(boundary.plan, carryover, drawn(6, (6, 7)), seed=0)
    assert all(np.isfinite(value) for value in HeadTrainer().facts(after, seed=0).values())
    assert len(try_settings(HeadTrainer(), after, [tame], seed=0)) == 1


def test_a_head_that_ends_with_non_finite_weights_is_flagged_without_a_look():
    class Blast:
        def output_gradient(self, logits, y, targets, strength):
            return np.full_like(logits, np.inf)

    layout = HeadLayout(1, 0, 1)
    regimen = Regimen(1.0, 0.0, np.arange(4), np.zeros(layout.n_flat, np.float32))
    trained = train_side_by_side(layout, Blast(), [regimen], Z=np.zeros((4, 1), np.float32), y=np.zeros(4, np.int64),
                                 targets=None, passes=1, batch_size=4, seed=0)[0]
    assert trained.diverged and trained.steps == 1
