"""A boundary as descriptors see it: sampled rows and statistics that several of them share, each computed once."""

from functools import cached_property

import numpy as np

from hyperforecast.learning import accuracies

# Costly descriptors work on at most this many rows of the increment, and as many old ones.
MOST_ROWS = 500
# The leave-one-out probe inverts a matrix of this many rows.
MOST_PROBE_ROWS = 240


class BoundaryView:
    """Statistics of a boundary, lazily.

    Parameters
    ----------
    trainer : Trainer
    boundary : Boundary
    seed : int
        Draws the sampled rows.
    """

    def __init__(self, trainer, boundary, *, seed):
        self.trainer, self.boundary = trainer, boundary
        self.facts = trainer.facts(boundary, seed=seed)
        self._rng = np.random.default_rng([seed, 0x6465])

    def fact(self, name):
        """Return a fact about the model, NaN if the trainer does not supply it."""
        return np.float64(self.facts.get(name, np.nan))

    @property
    def summaries(self):
        """Class summaries of the old classes, or None at the first boundary."""
        return None if self.boundary.carryover is None else self.boundary.carryover.summaries

    @cached_property
    def check_accuracy(self):
        """Accuracy now on the check rows of each old class, (O,); NaN for a class without."""
        boundary = self.boundary
        if boundary.carryover is None:
            return np.empty(0)
        rows = boundary.old_check_rows
        return accuracies(self.trainer, boundary.carryover.head, rows.Z, rows.y, boundary.n_old)

    @cached_property
    def old_rows(self):
        """At most MOST_ROWS rows of old classes: exemplars, or check rows where the method keeps no exemplars."""
        boundary = self.boundary
        rows = boundary.old_exemplars if boundary.plan.rehearses else boundary.old_check_rows
        return rows if len(rows) <= MOST_ROWS else rows.cut(max(MOST_ROWS // max(boundary.n_old, 1), 1))

    @cached_property
    def sample(self):
        """(Z, y) of at most MOST_ROWS rows of the increment."""
        boundary = self.boundary
        if len(boundary.y) <= MOST_ROWS:
            return boundary.Z, boundary.y
        rows = np.sort(self._rng.permutation(len(boundary.y))[:MOST_ROWS])
        return boundary.Z[rows], boundary.y[rows]

    @cached_property
    def class_counts(self):
        """Training rows of each class in the increment, (A,) for its A classes."""
        return np.bincount(self.boundary.y, minlength=self.boundary.n_classes)[self.boundary.arrived]

    @cached_property
    def arrived(self):
        """Codes of the classes in the sample, sorted."""
        return np.unique(self.sample[1])

    @cached_property
    def sample_counts(self):
        """Sampled rows of each class in `arrived`."""
        return np.bincount(self.sample[1], minlength=self.boundary.n_classes)[self.arrived]

    @cached_property
    def means(self):
        """Mean (A, d) of each class in `arrived`, over the sample."""
        Z, y = self.sample
        one_hot = (y[:, None] == self.arrived).astype(np.float32)
        return one_hot.T @ Z / self.sample_counts[:, None].astype(np.float32)

    @cached_property
    def own_place(self):
        """For each sampled row the place of its class in `arrived`."""
        return np.searchsorted(self.arrived, self.sample[1])

    @cached_property
    def within(self):
        """Variance (d,) of the sampled rows around their class means."""
        return ((self.sample[0] - self.means[self.own_place]) ** 2).mean(axis=0)

    @cached_property
    def between(self):
        """Variance (d,) of the class means around their common mean, weighted by rows."""
        weight = self.sample_counts / self.sample_counts.sum()
        center = weight @ self.means
        return weight @ (self.means - center) ** 2

    @cached_property
    def own_distances(self):
        """Squared distance (n,) of each sampled row to the mean of its class's other rows; inf for a class of one."""
        count = self.sample_counts[self.own_place].astype(np.float64)
        distance = ((self.sample[0] - self.means[self.own_place]) ** 2).sum(axis=1)
        # Leaving the row out moves the mean away from it by n / (n - 1).
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(count > 1, distance * (count / (count - 1)) ** 2, np.inf)

    @cached_property
    def nearest_other(self):
        """Squared distance (n,) of each sampled row to the nearest mean of another class of the increment."""
        distances = squared_distances(self.sample[0], self.means)
        distances[np.arange(len(distances)), self.own_place] = np.inf
        return distances.min(axis=1)

    @cached_property
    def old_means(self):
        """Means (O, d) of the old classes that did not come again."""
        stays = np.setdiff1d(np.arange(self.boundary.n_old), self.arrived)
        return self.summaries.mean[stays]

    @cached_property
    def nearest_old(self):
        """Squared distance (n,) of each sampled row to the nearest mean of an old class that did not come again."""
        if not len(self.old_means):
            return np.full(len(self.sample[1]), np.inf)
        return squared_distances(self.sample[0], self.old_means).min(axis=1)

    @cached_property
    def probe(self):
        """Leave-one-out hits of a ridge classifier on sampled and old rows: (hits (m,), is_old (m,)).

        Ridge regression on one-hot labels has leave-one-out residuals r_i / (1 - h_ii), h the hat matrix; both kinds of
        rows are drawn to half of MOST_PROBE_ROWS and weigh alike. Hastie, Tibshirani & Friedman 2009, section 7.10,
        from memory.
        """
        old = self.old_rows
        Z, y = self.sample
        half = MOST_PROBE_ROWS // 2 if len(old) else MOST_PROBE_ROWS
        new_rows = self._rng.permutation(len(y))[:half]
        old_rows = self._rng.permutation(len(old))[:half]
        rows = np.concatenate([Z[new_rows], old.Z[old_rows]])
        labels = np.concatenate([y[new_rows], old.y[old_rows]])
        codes, place = np.unique(labels, return_inverse=True)
        wanted = (place[:, None] == np.arange(len(codes))) * np.float32(2) - np.float32(1)
        gram = rows @ rows.T
        gram += np.float32(1e-6) + gram.mean()
        penalty = np.float32(0.1 * np.trace(gram) / len(rows))
        hat = gram @ np.linalg.inv(gram + penalty * np.eye(len(rows), dtype=np.float32))
        leverage = np.clip(np.diag(hat), 0, 0.999)[:, None]
        left_out = wanted - (wanted - hat @ wanted) / (1 - leverage)
        return left_out.argmax(axis=1) == place, np.arange(len(rows)) >= len(new_rows)


def squared_distances(A, B):
    """Return squared Euclidean distances (n, m) between rows of A (n, d) and B (m, d)."""
    products = A @ B.T
    distances = (A**2).sum(axis=1)[:, None] + (B**2).sum(axis=1) - 2 * products
    return np.maximum(distances, 0)
