"""A boundary as descriptors see it: sampled rows and statistics that several of them share, each computed once."""

from functools import cached_property

import numpy as np

from hyperforecast.learning import accuracies, present_codes

# Costly descriptors work on at most this many rows of the increment, and as many old ones.
MOST_ROWS = 500
# Leave-one-out probes see at most this many features, or this many that bend.
MOST_PROBE_FEATURES = 192
FOURIER_FEATURES = 128
# Rows drawn from class summaries.
SIMULATED = 400
# A class's variance is shrunk to the mean variance of all classes as if so many of its rows had that.
SHRUNK_ROWS = 3
# Of how many classes that lie nearest the chance is computed.
NEAREST_CLASSES = 3
# Ridge penalty, over the mean squared length of a feature.
PROBE_PENALTY = 0.05


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
    def check_probability(self):
        """Probability now of the right class, mean over the check rows of each old class, (O,); NaN without."""
        boundary = self.boundary
        if boundary.carryover is None:
            return np.empty(0)
        rows = boundary.old_check_rows
        scores = self.trainer.class_scores(boundary.carryover.head, rows.Z)
        scores = np.exp(scores - scores.max(axis=1, keepdims=True, initial=-np.inf))
        right = scores[np.arange(len(rows)), rows.y] / scores.sum(axis=1)
        return np.bincount(rows.y, right, boundary.n_old) / np.bincount(rows.y, minlength=boundary.n_old)

    @cached_property
    def exemplar_accuracy(self):
        """Accuracy now on (at most MOST_ROWS) exemplars of each old class, (O,); NaN for a class without."""
        boundary = self.boundary
        if boundary.carryover is None or not boundary.plan.rehearses:
            return np.empty(0)
        return accuracies(self.trainer, boundary.carryover.head, self.old_rows.Z, self.old_rows.y, boundary.n_old)

    @cached_property
    def simulated_accuracy(self):
        """Accuracy now on SIMULATED rows drawn from the class summaries, every old class alike."""
        if self.summaries is None:
            return np.nan
        n_old = self.boundary.n_old
        y = np.arange(SIMULATED) % n_old
        noise = self._rng.standard_normal((len(y), self.boundary.n_features), dtype=np.float32)
        Z = self.summaries.mean[y] + np.sqrt(self.summaries.variance[y]) * noise
        return np.nanmean(accuracies(self.trainer, self.boundary.carryover.head, Z, y, n_old))

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
            return boundary.Z[:], boundary.y
        rows = np.sort(self._rng.permutation(len(boundary.y))[:MOST_ROWS])
        return boundary.Z[rows], boundary.y[rows]

    @cached_property
    def class_counts(self):
        """Training rows of each class in the increment, (A,) for its A classes."""
        return np.bincount(self.boundary.y, minlength=self.boundary.n_classes)[self.boundary.arrived]

    @cached_property
    def arrived(self):
        """Codes of the classes in the sample, sorted."""
        return present_codes(self.sample[1])

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
        stays = np.setdiff1d(np.arange(self.boundary.n_old), self.arrived, assume_unique=True)
        return self.summaries.mean[stays]

    @cached_property
    def nearest_old(self):
        """Squared distance (n,) of each sampled row to the nearest mean of an old class that did not come again."""
        if not len(self.old_means):
            return np.full(len(self.sample[1]), np.inf)
        return squared_distances(self.sample[0], self.old_means).min(axis=1)

    @cached_property
    def closest_pair(self):
        """Least squared distance of a class mean of the increment to another class mean, over what chance would make it.

        Mean over features of (m_a - m_b)^2 / (v_a / n_a + v_b / n_b), where the means of n rows of one class differ by
        1 on average (the squared t of Welch 1947, "The generalization of 'Student's' problem when several different
        population variances are involved"). Old classes that came again do not count. NaN with one row in each class.
        """
        counts = self.sample_counts
        inside = np.zeros((len(counts), self.boundary.n_features), np.float32)
        np.add.at(inside, self.own_place, (self.sample[0] - self.means[self.own_place]) ** 2)
        means = self.means
        if self.summaries is not None:
            stays = np.setdiff1d(np.arange(self.boundary.n_old), self.arrived, assume_unique=True)
            old = self.summaries
            counts = np.concatenate([counts, old.count[stays]])
            inside = np.concatenate([inside, old.variance[stays] * old.count[stays, None]]).astype(np.float32)
            means = np.concatenate([means, self.old_means])
        common = inside.sum(axis=0) / counts.sum()
        if len(counts) < 2 or counts.max() < 2 or not common.any():
            return np.nan
        common = np.maximum(common, 0.01 * common.mean())
        counts = counts[:, None]
        chance = (inside + SHRUNK_ROWS * common) / (counts - 1 + SHRUNK_ROWS) / counts
        apart = squared_distances(self.means / np.sqrt(common), means / np.sqrt(common))
        places = np.arange(len(apart))
        apart[places, places] = np.inf
        nearest = np.argsort(apart, axis=1)[:, :min(NEAREST_CLASSES, len(counts) - 1)]
        difference = (self.means[:, None] - means[nearest]) ** 2
        return (difference / (chance[places, None] + chance[nearest])).mean(axis=2).min()

    @cached_property
    def probe_rows(self):
        """(rows (m, d), place of each row's class (m,), whether it is an old row (m,)): the sample and the old rows."""
        old, (Z, y) = self.old_rows, self.sample
        place = np.unique(np.concatenate([y, old.y]), return_inverse=True)[1]
        return np.concatenate([Z, old.Z]), place, np.arange(len(place)) >= len(y)

    @cached_property
    def linear_probe(self):
        """Leave-one-out accuracy of a linear ridge classifier, see `_ridge_hits`: (on new rows, on old rows)."""
        rows, place, is_old = self.probe_rows
        if rows.shape[1] > MOST_PROBE_FEATURES:
            # A random projection keeps distances (Johnson & Lindenstrauss 1984).
            rows = rows @ self._directions(rows.shape[1], MOST_PROBE_FEATURES) / np.float32(np.sqrt(rows.shape[1]))
        return _mean_hits(_ridge_hits(rows, place), place, is_old)

    @cached_property
    def kernel_probe(self):
        """The same in random Fourier features of the Gaussian kernel: what a head that bends boundaries can reach.

        Rahimi & Recht 2007, "Random features for large-scale kernel machines", from memory: sqrt(2 / D) cos(w x + b),
        w normal with the inverse of the kernel's width, b uniform. The width is that of the rows around their mean.
        """
        rows, place, is_old = self.probe_rows
        width = np.sqrt(rows.var(axis=0).sum()) + np.float32(1e-6)
        directions = self._directions(rows.shape[1], FOURIER_FEATURES) / width
        phase = self._rng.uniform(0, 2 * np.pi, FOURIER_FEATURES).astype(np.float32)
        return _mean_hits(_ridge_hits(np.cos(rows @ directions + phase), place), place, is_old)

    def _directions(self, n_features, count):
        return self._rng.standard_normal((n_features, count), dtype=np.float32)


def _ridge_hits(rows, place):
    """Return whether a ridge classifier that was fitted without a row gets its class, for each row (m,).

    Ridge regression on one-hot labels, every class weighing alike, has leave-one-out residuals r_i / (1 - h_ii), h the
    hat matrix of the weighted rows. Hastie, Tibshirani & Friedman 2009, section 7.10, from memory.
    """
    count = np.bincount(place)
    weight = np.sqrt(len(place) / (len(count) * count[place])).astype(np.float32)[:, None]
    wanted = (place[:, None] == np.arange(len(count))) * np.float32(2) - np.float32(1)
    design = np.hstack([rows - rows.mean(axis=0), np.ones((len(rows), 1), np.float32)]) * weight
    gram = design.T @ design
    penalty = np.float32(PROBE_PENALTY * np.trace(gram) / len(gram) + 1e-6)
    spread = design @ np.linalg.inv(gram + penalty * np.eye(len(gram), dtype=np.float32))
    leverage = np.clip((spread * design).sum(axis=1), 0, 0.999)[:, None]
    fitted = spread @ (design.T @ (wanted * weight))
    # Residuals of the weighted rows; the weight of a row does not change which output is largest.
    left_out = wanted * weight - (wanted * weight - fitted) / (1 - leverage)
    return left_out.argmax(axis=1) == place


def _mean_hits(hits, place, is_old):
    """Return the share of hits among new rows and among old ones, every class alike; NaN where there are no rows."""
    def mean(rows):
        count = np.bincount(place[rows])
        return (np.bincount(place[rows], hits[rows])[count > 0] / count[count > 0]).mean() if rows.any() else np.nan

    return mean(~is_old), mean(is_old)


def median(values):
    """Return the median of values (n,), n > 0, none of them NaN: np.median, which would import numpy.ma, bit for bit."""
    low, high = (len(values) - 1) // 2, len(values) // 2
    return np.partition(values, (low, high))[low:high + 1].mean()


def squared_distances(A, B):
    """Return squared Euclidean distances (n, m) between rows of A (n, d) and B (m, d)."""
    products = A @ B.T
    distances = (A**2).sum(axis=1)[:, None] + (B**2).sum(axis=1) - 2 * products
    return np.maximum(distances, 0)
