"""What a search asks: train at a boundary with given settings, and score on rows that it may see."""

from dataclasses import dataclass

import numpy as np

from hyperforecast.learning import accuracies, try_settings


@dataclass(frozen=True)
class Outcome:
    """What an attempt achieved.

    Attributes
    ----------
    old, new, all : float
        Accuracy on classes that were seen before this boundary, on those that are new (on the classes of the
        increment, if none is new), and on all classes seen, every class alike; NaN where there are none.
    diverged : bool
    operations : float
    """

    old: float
    new: float
    all: float
    diverged: bool
    operations: float


class BoundarySearch:
    """Evaluates settings at one boundary on given rows.

    Parameters
    ----------
    trainer : Trainer
    boundary : Boundary
    Z, y : ndarrays of shape (n, d) and (n,)
        Standardized rows of all classes seen, and their codes.
    seed : int
        Of the training.
    """

    def __init__(self, trainer, boundary, Z, y, *, seed):
        self.trainer, self.boundary, self.Z, self.y, self.seed = trainer, boundary, Z, y, seed
        self.attempts, self.outcomes = [], []

    def evaluate(self, settings):
        """Try a list of `Settings` side by side; return their accuracy on all classes seen, shape (n,)."""
        attempts = try_settings(self.trainer, self.boundary, settings, seed=self.seed)
        outcomes = [self.outcome(attempt, self.Z, self.y) for attempt in attempts]
        self.attempts += attempts
        self.outcomes += outcomes
        return np.array([one.all for one in outcomes])

    def outcome(self, attempt, Z, y):
        """Return the `Outcome` of an attempt on rows Z with codes y."""
        boundary = self.boundary
        by_class = accuracies(self.trainer, attempt.head, Z, y, boundary.n_classes)
        fresh = boundary.n_old < boundary.n_classes
        new = np.arange(boundary.n_old, boundary.n_classes) if fresh else boundary.arrived
        return Outcome(_mean(by_class[:boundary.n_old]), _mean(by_class[new]), _mean(by_class),
                       attempt.diverged, attempt.operations)


def class_codes(boundary, labels):
    """Return the codes (n,) of labels in the boundary's classes."""
    order = np.argsort(boundary.classes)
    return order[np.searchsorted(boundary.classes, labels, sorter=order)]


def _mean(values):
    known = values[~np.isnan(values)]
    return float(known.mean()) if len(known) else float("nan")
