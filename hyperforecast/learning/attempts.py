"""Attempts at a boundary: try settings side by side, look at what came of them, keep one."""

from dataclasses import replace

import numpy as np

from hyperforecast.learning.boundary import Carryover, ClassSummaries, present_codes
from hyperforecast.learning.exemplars import Exemplars, choose_exemplars
from hyperforecast.learning.trainer import Job
from hyperforecast.metrics import class_accuracies
from hyperforecast.rows import chunks

# Rows scored at a time, so that large sets need little memory.
CHUNK_ROWS = 8192


def try_settings(trainer, boundary, settings, *, seed, stop=None):
    """Return one `Attempt` for each of a list of `Settings`, all from the same boundary; `stop` as in `Job`."""
    return trainer.learn([Job(boundary, one, stop) for one in settings], seed=seed)


def predict_codes(trainer, head, Z):
    """Return class codes (n,) for standardized rows Z (n, d); a head of non-finite numbers predicts code 0."""
    codes = np.empty(len(Z), np.int64)
    for start in range(0, len(Z), CHUNK_ROWS):
        scores = trainer.class_scores(head, Z[start:start + CHUNK_ROWS])
        # A NaN would win argmax: put it last.
        codes[start:start + CHUNK_ROWS] = np.where(np.isnan(scores), -np.inf, scores).argmax(axis=1)
    return codes


def class_probabilities(trainer, head, Z):
    """Return class probabilities (n, C), float64, for standardized rows Z (n, d): the softmax of the scores."""
    scores = np.nan_to_num(trainer.class_scores(head, Z).astype(np.float64), nan=-1e30)
    scores -= scores.max(axis=1, keepdims=True)
    exponentials = np.exp(scores)
    return exponentials / exponentials.sum(axis=1, keepdims=True)


def accuracies(trainer, head, Z, y, n_classes):
    """Return the accuracy on each class's rows, shape (n_classes,); NaN for a class without rows."""
    by_class = np.full(n_classes, np.nan)
    if len(y):
        by_class[present_codes(y)] = class_accuracies(y, predict_codes(trainer, head, Z))
    return by_class


def check_accuracies(trainer, boundary, attempts, *, old_weight=None):
    """Return the accuracy of each attempt on the rows held back from training, shape (n,); below 0 where one diverged.

    Parameters
    ----------
    trainer : Trainer
    boundary : Boundary
    attempts : list of Attempt
    old_weight : float in [0, 1], optional
        Weight of the old classes, new ones have the rest; by default every class counts alike. Classes without such
        rows do not count; without any row all attempts are alike, 0.
    """
    rows, n_old = boundary.check_set(), boundary.n_old
    held = np.bincount(rows.y, minlength=boundary.n_classes) > 0
    weight = held / max(held.sum(), 1)
    if old_weight is not None and held[:n_old].any() and held[n_old:].any():
        weight = np.concatenate([old_weight * held[:n_old] / held[:n_old].sum(),
                                 (1 - old_weight) * held[n_old:] / held[n_old:].sum()])

    def accuracy(attempt):
        by_class = accuracies(trainer, attempt.head, rows.Z, rows.y, boundary.n_classes)
        return float(weight @ np.nan_to_num(by_class))

    return np.array([-1.0 if attempt.diverged else accuracy(attempt) for attempt in attempts])


def close_boundary(trainer, boundary, attempt, *, seed):
    """Return the `Carryover` after keeping `attempt`: its head, exemplars cut and chosen, summaries brought up to date.

    Old exemplars are cut by prefix; a class that arrived again keeps its own and is topped up from the new rows.
    """
    before = boundary.carryover
    job = Job(boundary, attempt.settings)
    exemplars = Exemplars.none(boundary.n_features)
    if job.kept:
        held = np.bincount(job.exemplars.y, minlength=boundary.n_classes)
        Z, y = boundary.candidates()
        chosen = choose_exemplars(Z, y, np.nan_to_num(trainer.features(attempt.head, Z)), job.kept)
        chosen = replace(chosen, rank=chosen.rank + held[chosen.y])
        fits = chosen.rank < job.kept
        exemplars = job.exemplars.joined(Exemplars(chosen.Z[fits], chosen.y[fits], chosen.rank[fits]))
    check_rows = boundary.check_set()
    head = trainer.consolidated(boundary, attempt, seed=seed)
    now = accuracies(trainer, head, check_rows.Z, check_rows.y, boundary.n_classes)
    best = np.full(boundary.n_classes, np.nan)
    if before is None:
        summaries = ClassSummaries(np.empty(0, np.int64), *(np.empty((0, boundary.n_features), np.float32),) * 2)
    else:
        summaries = before.summaries
        best[:boundary.n_old] = before.best_check_accuracy
    for rows, Z in chunks(boundary.Z):
        summaries = summaries.merged(Z, boundary.y[rows], boundary.n_classes)
    return Carryover(
        plan=boundary.plan, classes=boundary.classes, center=boundary.center, scale=boundary.scale, head=head,
        exemplars=exemplars, check_rows=check_rows, summaries=summaries,
        best_check_accuracy=np.fmax(best, now), n_boundaries=boundary.number + 1,
    )
