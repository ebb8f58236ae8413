"""Training many heads side by side: the inner loop of every attempt.

K attempts at one boundary differ in settings, in how many exemplars they rehearse, perhaps in the head they start
from. They advance together, one minibatch each per step, through products of stacked matrices. Each head's
products keep their own shapes and its minibatches depend only on the seed and its own rows, so that results do not
depend on how many neighbours it has, nor on their order.
"""

from dataclasses import dataclass

import numpy as np

MOMENTUM = np.float32(0.9)
# A logit beyond this, on standardized features, is a divergence, not a model.
LARGEST_LOGIT = 1e3
# Steps between looks for diverged heads; they are finite until then, or harmless.
LOOK_EVERY = 8
# Bytes of parameters that one block of heads may have, so that they stay in the processor's cache.
BLOCK_BYTES = 2**21
FEWEST_IN_BLOCK = 8


@dataclass(frozen=True)
class Regimen:
    """One attempt's part in the loop.

    Attributes
    ----------
    learning_rate, regularization : float
    rows : ndarray of int
        Rows of the pool it trains on; regimens that train on the same rows share the array.
    start, importance : ndarrays of shape (P,), float32
        Flat parameters to start from; importance of each for the EWC penalty, or None.
    """

    learning_rate: float
    regularization: float
    rows: np.ndarray
    start: np.ndarray
    importance: np.ndarray | None = None


@dataclass(frozen=True)
class TrainedHead:
    """Flat parameters (P,) after training, whether it diverged, the steps it took, and whether it was stopped early."""

    flat: np.ndarray
    diverged: bool
    steps: int
    stopped: bool


def train_side_by_side(layout, objective, regimens, *, Z, y, targets, passes, batch_size, seed, stop=None):
    """Train one head per regimen; return a list of `TrainedHead` in the same order.

    Parameters
    ----------
    layout : HeadLayout
    objective : Objective
        Or anything with `output_gradient(logits, y, targets, strength)`.
    regimens : sequence of Regimen
    Z : ndarray of shape (R, D), float32
        Pool of rows.
    y : ndarray of shape (R,), int64
    targets : ndarray of shape (R, n_old), or None
        What the objective wants of the old outputs.
    passes, batch_size, seed : int
    stop : callable, optional
        Asked every few steps; all heads are left as they are once it returns True.

    Notes
    -----
    Stochastic gradient descent with momentum 0.9 on L + (regularization / 2) sum F_i (theta_i - theta*_i)^2, the
    second term where there is an importance (Kirkpatrick et al. 2017, eq. 3). The last minibatch of a pass is
    smaller, its gradient a mean over its own rows.
    """
    # Longest first: the heads still in training are always the first ones of a block.
    order = sorted(range(len(regimens)), key=lambda k: -len(regimens[k].rows))
    size = max(FEWEST_IN_BLOCK, BLOCK_BYTES // (4 * layout.n_flat))
    trained = [None] * len(regimens)
    with np.errstate(all="ignore"):
        for at in range(0, len(order), size):
            members = order[at:at + size]
            block = _Block(layout, objective, [regimens[k] for k in members], Z, y, targets, passes, batch_size, seed)
            for k, head in zip(members, block.train(stop)):
                trained[k] = head
    return trained


class _Minibatches:
    """Shuffled minibatches of each distinct set of rows, every set at its own pace."""

    def __init__(self, row_sets, batch_size, seed):
        self.row_sets, self.batch_size, self.seed = row_sets, batch_size, seed
        self.steps_per_pass = np.array([-(-len(rows) // batch_size) for rows in row_sets])
        width = int(self.steps_per_pass.max()) * batch_size
        # Places after the last row of a set stay at its first row, with weight 0.
        self.order = np.empty((len(row_sets), width), np.int64)
        self.weight = np.zeros((len(row_sets), width), np.float32)
        for s, rows in enumerate(row_sets):
            self.order[s] = rows[0]
            full = len(rows) // batch_size * batch_size
            self.weight[s, :full] = 1 / batch_size
            self.weight[s, full:len(rows)] = 1 / max(len(rows) - full, 1)

    def shuffle(self, step, sets):
        """Start a new pass for those of `sets` whose pass ends before `step`."""
        for s in sets[step % self.steps_per_pass[sets] == 0]:
            rows = self.row_sets[s]
            # Sets of equal length see equal shuffles: attempts differ by their settings alone.
            keys = np.random.default_rng([self.seed, step // self.steps_per_pass[s]]).random(len(rows))
            self.order[s, :len(rows)] = rows[np.argsort(keys)]

    def window(self, step):
        """Return first places (S,) of each set's minibatch at `step`."""
        return step % self.steps_per_pass * self.batch_size


class _Block:
    def __init__(self, layout, objective, regimens, Z, y, targets, passes, batch_size, seed):
        self.layout, self.objective, self.Z, self.y, self.targets = layout, objective, Z, y, targets
        distinct = {id(one.rows): one.rows for one in regimens}
        place = {key: s for s, key in enumerate(distinct)}
        self.set_of = np.array([place[id(one.rows)] for one in regimens])
        self.batches = _Minibatches(list(distinct.values()), batch_size, seed)
        self.steps = self.batches.steps_per_pass[self.set_of] * passes
        self.member = np.arange(len(regimens))
        self.flat = np.stack([one.start for one in regimens])
        self.velocity = np.zeros_like(self.flat)
        self.rate = np.array([[one.learning_rate] for one in regimens], np.float32)
        self.strength = np.array([[one.regularization] for one in regimens], np.float32)
        self.anchored = regimens[0].importance is not None
        if self.anchored:
            self.stiffness = self.strength * np.stack([one.importance for one in regimens])
            self.origin = self.flat.copy()
        self.trained = [None] * len(regimens)

    def train(self, stop):
        self._lay_out()
        step = 0
        while len(self.member):
            self._leave(self.steps == step, diverged=False, steps=step)
            if stop is not None and step % LOOK_EVERY == 0 and len(self.member) and stop():
                self._leave(np.ones(len(self.member), bool), diverged=False, steps=step, stopped=True)
            if not len(self.member):
                break
            largest = self._advance(step)
            step += 1
            if largest is not None:
                self._leave(~(largest < LARGEST_LOGIT), diverged=True, steps=step)
        return self.trained

    def _leave(self, leaves, *, diverged, steps, stopped=False):
        """Store the heads in the mask `leaves` and go on with the others."""
        if not leaves.any():
            return
        for k in np.flatnonzero(leaves):
            flat = self.flat[k].copy()
            gone = diverged or not np.isfinite(flat).all()
            self.trained[self.member[k]] = TrainedHead(flat, bool(gone), steps, stopped)
        stays = ~leaves
        names = ["member", "set_of", "steps", "flat", "velocity", "rate", "strength"]
        for name in names + (["stiffness", "origin"] if self.anchored else []):
            setattr(self, name, getattr(self, name)[stays])
        self._lay_out()

    def _lay_out(self):
        """Views and buffers for the heads still in training."""
        n_heads, n_rows = len(self.flat), self.batches.batch_size
        layout = self.layout
        self.parts = layout.parts(self.flat)
        self.gradient = np.zeros_like(self.flat)
        self.gradient_parts = layout.parts(self.gradient)
        self.ones = np.ones((1, n_rows), np.float32)
        self.logits = np.empty((n_heads, n_rows, layout.n_classes), np.float32)
        self.sets = np.unique(self.set_of)
        if layout.hidden_units:
            self.hidden = np.empty((n_heads, n_rows, layout.hidden_units), np.float32)
            self.inner = np.empty_like(self.hidden)
            # A maximum with an array is several times faster than with a number.
            self.zeros = np.zeros((n_rows, layout.hidden_units), np.float32)
        self.head_strength = self.strength[:, :, None]

    def _advance(self, step):
        """Take one step with every head; now and then return their largest absolute logits, else None."""
        batches = self.batches
        batches.shuffle(step, self.sets)
        first = batches.window(step)
        n_rows = batches.batch_size
        if len(self.sets) == 1:
            s = self.sets[0]
            window = slice(first[s], first[s] + n_rows)
            places, weight = batches.order[s, window], batches.weight[s, window, None]
        else:
            within = first[self.set_of][:, None] + np.arange(n_rows)
            places = batches.order[self.set_of[:, None], within]
            weight = batches.weight[self.set_of[:, None], within][:, :, None]
        X, y = self.Z.take(places, axis=0), self.y.take(places)
        targets = None if self.targets is None else self.targets.take(places, axis=0)
        parts, gradient = self.parts, self.gradient_parts
        features = X
        if self.layout.hidden_units:
            features = self.hidden
            np.matmul(X, parts["hidden_weights"], out=features)
            features += parts["hidden_bias"]
            np.maximum(features, self.zeros, out=features)
        np.matmul(features, parts["output_weights"], out=self.logits)
        self.logits += parts["output_bias"]
        looks = step % LOOK_EVERY == LOOK_EVERY - 1
        largest = np.abs(self.logits).max(axis=(1, 2)) if looks else None
        error = self.objective.output_gradient(self.logits, y, targets, self.head_strength)
        error *= weight
        np.matmul(np.swapaxes(features, -1, -2), error, out=gradient["output_weights"])
        np.matmul(self.ones, error, out=gradient["output_bias"])
        if self.layout.hidden_units:
            np.matmul(error, parts["output_weights"].transpose(0, 2, 1), out=self.inner)
            self.inner *= features > 0
            np.matmul(np.swapaxes(X, -1, -2), self.inner, out=gradient["hidden_weights"])
            np.matmul(self.ones, self.inner, out=gradient["hidden_bias"])
        if self.anchored:
            pull = self.flat - self.origin
            pull *= self.stiffness
            self.gradient += pull
        self.gradient *= self.rate
        self.velocity *= MOMENTUM
        self.velocity -= self.gradient
        self.flat += self.velocity
        return largest
