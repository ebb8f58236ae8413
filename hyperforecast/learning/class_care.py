"""Classes taken out of a carryover, merged or renamed by hand, between boundaries."""

from dataclasses import replace

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.learning.attempts import accuracies
from hyperforecast.learning.boundary import MOST_CHECK_ROWS, ClassSummaries
from hyperforecast.learning.exemplars import Exemplars


def without_class(trainer, carryover, code):
    """Return the `Carryover` without class `code`: outputs, exemplars, check rows, summary; later codes move down.

    What the hidden layer and the feature scaling have learned from all rows together stays. The memory that its
    exemplars took is free for the other classes from the next boundary on, and the class may come again as a new one.

    Raises
    ------
    InputError
        If it is the only class, or the trainer cannot do it.
    """
    if len(carryover.classes) == 1:
        raise InputError("class", "must not be the only one", repr(carryover.classes[code].item()))

    def others(rows):
        rows = rows.without([code])
        return replace(rows, y=rows.y - (rows.y > code))

    summaries = carryover.summaries
    return replace(
        carryover, classes=np.delete(carryover.classes, code), head=trainer.without_class(carryover.head, code),
        exemplars=others(carryover.exemplars), check_rows=others(carryover.check_rows),
        summaries=ClassSummaries(*(np.delete(one, code, axis=0) for one in (summaries.count, summaries.mean,
                                                                            summaries.variance))),
        best_check_accuracy=np.delete(carryover.best_check_accuracy, code))


def merge_classes(trainer, carryover, code, into, *, seed=0):
    """Return the `Carryover` in which class `into` holds what class `code` did, and `code` is gone.

    Exemplars and check rows take turns, those of `into` first, and are cut to what a class held at most before, so that
    every prefix is half of either. Counts, means and variances pool exactly. What becomes of the outputs is the
    trainer's to say.

    Raises
    ------
    InputError
        If the trainer cannot do it.
    """
    head = trainer.merged_classes(carryover, code, into, seed=seed)
    most_kept = int(carryover.exemplars.rank.max(initial=-1)) + 1
    merged = replace(
        carryover, exemplars=_taking_turns(carryover.exemplars, code, into, most_kept),
        check_rows=_taking_turns(carryover.check_rows, code, into, MOST_CHECK_ROWS),
        summaries=_pooled(carryover.summaries, code, into))
    merged = replace(without_class(trainer, merged, code), head=head)
    rows, place = merged.check_rows, into - (code < into)
    # What either class once reached says nothing about both as one.
    best = merged.best_check_accuracy.copy()
    best[place] = accuracies(trainer, head, rows.Z, rows.y, len(merged.classes))[place]
    return replace(merged, best_check_accuracy=best)


def rename_class(carryover, code, label):
    """Return the `Carryover` in which class `code` is called `label`, text or a whole number as the others are."""
    labels = carryover.classes.tolist()
    labels[code] = label
    return replace(carryover, classes=np.array(labels, carryover.classes.dtype.kind))


def _taking_turns(rows, code, into, most):
    both = np.flatnonzero((rows.y == code) | (rows.y == into))
    order = both[np.argsort(2 * rows.rank[both] + (rows.y[both] == code), kind="stable")][:most]
    merged = Exemplars(rows.Z[order], np.full(len(order), into), np.arange(len(order)))
    return rows.without([code, into]).joined(merged)


def _pooled(summaries, code, into):
    count, mean, variance = (one.copy() for one in (summaries.count, summaries.mean, summaries.variance))
    total = count[into] + count[code]
    share = count[code] / total
    shift = summaries.mean[code].astype(np.float64) - summaries.mean[into]
    variance[into] = (1 - share) * summaries.variance[into] + share * summaries.variance[code] \
        + share * (1 - share) * shift**2
    mean[into] += share * shift
    count[into] = total
    return ClassSummaries(count, mean, variance)
