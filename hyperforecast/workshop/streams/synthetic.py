"""Synthetic families: each seed draws the kind of classes anew, widely enough to surround real data.

A family makes rows of classes; what all families share (how many classes, features,
rows and increments, how much noise) is drawn first. Every family is a source of its own.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from hyperforecast.workshop.streams.dealing import FIRST_CLASSES, LATER_CLASSES, deal_classes, most_classes
from hyperforecast.workshop.streams.stream import Collection, generator

# Enough rows for 150 training, 50 selection and 50 scoring rows of a class.
POOL_ROWS = 250
INCREMENTS = (3, 10)
CLASSES = (6, 60)
DIMENSIONS = (4, 512)
ROWS_PER_CLASS = (10, 100)
SEPARATIONS = (1.0, 24.0)
NOISES = (0.01, 1.0)
MOST_LATENT = 128
FEWEST_TRAINING = 2


@dataclass(frozen=True)
class SyntheticDraw:
    """What a family drew from a seed: all that a `Stream` needs.

    Attributes
    ----------
    collection : Collection
    increments : list of lists of int
    rows_per_class : dict of int to int
        Most training rows of each class in one increment.
    sensor : callable or None
        See `Stream`.
    """

    collection: Collection
    increments: list
    rows_per_class: dict
    sensor: Callable | None = None


def draw_synthetic(family, seed, *, increments=None, classes=None, raw_dimension=None, rows_per_class=None,
                   separation=None, noise=None, recurring=None, largest_increment=None):
    """Draw a stream's content from a family; what is not given is drawn from the seed.

    Parameters
    ----------
    family : str
        One of `FAMILIES`.
    seed : int, 0 or more
    increments : int, 2 or more
    classes : int
        From one more than the increments to what they can hold (`dealing.most_classes`).
    raw_dimension : int, 2 or more
        Number of features before any treatment.
    rows_per_class : int, 1 to 150
        Training rows of a class in one increment (of the largest class where a family is imbalanced).
    separation : float, 0 or more
        Root mean square distance of two classes in units of the spread within a class: below 1
        hopeless, above 10 trivial.
    noise : float, 0 or more
        Spread of the noise on each feature in units of the features' mean spread; in bags of words the odds
        that a word is any word.
    recurring : float in [0, 1]
        Probability that an increment also brings back old classes.
    largest_increment : int, 1 or more
        Most new classes of an increment after the first (12).

    Returns
    -------
    SyntheticDraw
    """
    rng = generator(seed, family)
    # All draws are made whether used or not, so that overriding one leaves the others alone.
    drawn_increments = int(rng.integers(INCREMENTS[0], INCREMENTS[1] + 1))
    drawn_classes, drawn_dimension, drawn_rows = (_log_uniform(rng, *span) for span in
                                                  (CLASSES, DIMENSIONS, ROWS_PER_CLASS))
    drawn_separation, drawn_noise = _log_uniform(rng, *SEPARATIONS), _log_uniform(rng, *NOISES)
    drawn_recurring = rng.uniform(0.2, 0.6) * (rng.random() < 0.3)
    if increments is None and classes is None:
        increments = drawn_increments
    elif increments is None:
        fewest = 1 + max(1, -(-(classes - FIRST_CLASSES[1]) // (largest_increment or LATER_CLASSES[1])))
        increments = int(np.clip(drawn_increments, fewest, max(fewest, classes - 1)))
    if classes is None:
        classes = int(np.clip(round(drawn_classes), increments + 1, most_classes(increments, largest_increment)))
    shape = _Shape(
        classes=classes,
        dimension=round(drawn_dimension) if raw_dimension is None else raw_dimension,
        separation=drawn_separation if separation is None else separation,
        noise=drawn_noise if noise is None else noise)
    dealt = deal_classes(list(range(classes)), increments, rng,
                         recurring=drawn_recurring if recurring is None else recurring, largest=largest_increment)
    made = FAMILIES[family](shape, generator(seed, family, "rows"))
    most_rows = round(drawn_rows) if rows_per_class is None else rows_per_class
    rows = np.maximum(FEWEST_TRAINING, np.round(most_rows * made.share_of_rows)).astype(int)
    y = np.repeat(np.arange(classes), POOL_ROWS)
    return SyntheticDraw(Collection(made.X, y), dealt, dict(enumerate(rows.tolist())), made.sensor)


@dataclass(frozen=True)
class _Shape:
    classes: int
    dimension: int
    separation: float
    noise: float


class _Made:
    """Rows of each class in turn, the share of training rows that each class gets, and perhaps a sensor."""

    def __init__(self, X, *, share_of_rows=1.0, sensor=None):
        self.X = X
        self.share_of_rows = np.broadcast_to(share_of_rows, len(X) // POOL_ROWS)
        self.sensor = sensor


def _log_uniform(rng, low, high):
    return float(np.exp(rng.uniform(np.log(low), np.log(high))))


def _normal(rng, shape):
    return rng.standard_normal(shape, dtype=np.float32)


def _axes(rng, n_latent, n_features):
    """Return orthonormal rows (n_latent, n_features), in a random direction."""
    q, _ = np.linalg.qr(_normal(rng, (n_features, n_latent)))
    return q.T


def _latent(rng, dimension):
    """Return the spreads of a random number of latent directions, falling as a power law."""
    most = min(dimension, MOST_LATENT)
    n_latent = max(2, round(most ** rng.uniform(0.5, 1)))
    return (np.arange(1, n_latent + 1) ** -rng.uniform(0, 0.9)).astype(np.float32)


def _means(rng, n_classes, spreads, separation):
    """Return class means whose root mean square distance, in units of the spreads, is the separation."""
    scaled = _normal(rng, (n_classes, len(spreads)))
    # Classes lie apart along all directions alike, or more along those of large spread.
    scaled *= spreads ** rng.uniform(0, 1)
    return _rescaled(scaled, separation) * spreads


def _rescaled(scaled, separation):
    """Scale points so that their root mean square distance is the separation."""
    # The mean squared distance of two of K points is 2K/(K-1) times their variance.
    square = 2 * len(scaled) / (len(scaled) - 1) * scaled.var(axis=0).sum()
    return scaled * np.float32(separation / np.sqrt(square))


def _clouds(rng, means, spreads, tails=None):
    """Return POOL_ROWS rows about each mean, normal or with Student's tails."""
    rows = _normal(rng, (len(means), POOL_ROWS, len(spreads))) * spreads
    if tails is not None:
        rows /= np.sqrt(rng.chisquare(tails, (len(means), POOL_ROWS, 1)) / tails).astype(np.float32)
    return rows + means[:, None]


def _gaussian(shape, rng):
    """Gaussian classes of one covariance; one stream in four has heavy tails."""
    spreads = _latent(rng, shape.dimension)
    tails = 4 if rng.random() < 0.25 else None
    latent = _clouds(rng, _means(rng, shape.classes, spreads, shape.separation), spreads, tails)
    return _Made(_mixed(latent, _axes(rng, len(spreads), shape.dimension), shape.noise, rng))


def _mixed(latent, axes, noise, rng):
    X = latent.reshape(-1, latent.shape[-1]) @ axes
    X += np.float32(noise * X.std(axis=0).mean()) * _normal(rng, X.shape)
    return X


def _own_covariance(shape, rng):
    """Gaussian classes, each with its own size, spectrum and directions."""
    spreads = _latent(rng, shape.dimension)
    means = _means(rng, shape.classes, spreads, shape.separation)
    variety = rng.uniform(0.3, 1.0)
    latent = _normal(rng, (shape.classes, POOL_ROWS, len(spreads)))
    for at in range(shape.classes):
        own = spreads * np.exp(variety * _normal(rng, len(spreads)) + variety * _normal(rng, 1))
        latent[at] = means[at] + (latent[at] * own) @ _axes(rng, len(spreads), len(spreads))
    return _Made(_mixed(latent, _axes(rng, len(spreads), shape.dimension), shape.noise, rng))


def _modes(shape, rng):
    """Classes of two to five clumps, the clumps of all classes strewn over one another."""
    spreads = _latent(rng, shape.dimension)
    n_modes = int(rng.integers(2, 6))
    # Shares of the distance that separate classes, and clumps within a class.
    within = rng.uniform(0.3, 1.0)
    centres = _means(rng, shape.classes, spreads, shape.separation)
    clumps = np.stack([_means(rng, shape.classes, spreads, shape.separation * within) for _ in range(n_modes)])
    clump = rng.choice(n_modes, (shape.classes, POOL_ROWS), p=rng.dirichlet(np.full(n_modes, 3.0)))
    latent = _clouds(rng, centres, spreads) + clumps[clump, np.arange(shape.classes)[:, None]]
    return _Made(_mixed(latent, _axes(rng, len(spreads), shape.dimension), shape.noise, rng))


def _manifold(shape, rng):
    """Curved sheets: one random smooth map of a few hidden numbers, displaced by class."""
    n_hidden = int(rng.integers(1, 7))
    n_class = int(rng.integers(2, 9))
    width = int(rng.integers(16, 65))
    bend = rng.uniform(0.5, 2.0)
    places = _rescaled(_normal(rng, (shape.classes, n_class)), shape.separation / 3)
    inner = bend * _normal(rng, (n_hidden, width)) / np.float32(np.sqrt(n_hidden))
    outer = _normal(rng, (n_class, width)) / np.float32(np.sqrt(n_class))
    hidden = _normal(rng, (shape.classes, POOL_ROWS, n_hidden)) @ inner + (places @ outer)[:, None]
    latent = np.tanh(hidden + _normal(rng, width))
    return _Made(_mixed(latent, _normal(rng, (width, shape.dimension)) / np.float32(np.sqrt(width)), shape.noise, rng))


def _sparse(shape, rng):
    """Bags of words: counts or bits, the words hashed into fewer features in one stream of two."""
    n_words = shape.dimension * (4 if rng.random() < 0.5 else 1)
    feature_of_word = rng.permutation(n_words) % shape.dimension
    common = np.arange(1, n_words + 1) ** -rng.uniform(0.0, 1.2)
    # Each class prefers its own words: a larger exponent sets the classes further apart.
    liking = _normal(rng, (shape.classes, n_words)) * np.float32(0.15 * shape.separation)
    chances = np.exp(liking - liking.max(axis=1, keepdims=True)) * common
    cumulated = np.cumsum(chances, axis=1)
    cumulated /= cumulated[:, -1:]
    mean_length = _log_uniform(rng, 4, 100)
    lengths = rng.poisson(mean_length, (shape.classes, POOL_ROWS)) + 1
    counts = np.zeros((shape.classes * POOL_ROWS, shape.dimension), dtype=np.float32)
    for at in range(shape.classes):
        row = np.repeat(np.arange(POOL_ROWS), lengths[at])
        word = np.searchsorted(cumulated[at, :-1], rng.random(len(row)))
        any_word = rng.random(len(row)) < shape.noise / (1 + shape.noise)
        feature = feature_of_word[np.where(any_word, rng.integers(n_words, size=len(row)), word)]
        flat = np.bincount(row * shape.dimension + feature, minlength=POOL_ROWS * shape.dimension)
        counts[at * POOL_ROWS:(at + 1) * POOL_ROWS] = flat.reshape(POOL_ROWS, -1)
    if rng.random() < 0.5:
        counts = np.minimum(counts, 1)
    return _Made(counts)


def _imbalanced(shape, rng):
    """Gaussian classes whose rows fall off in a long tail, the largest with up to 40 times the smallest's."""
    ratio = _log_uniform(rng, 4, 40)
    tail = np.linspace(0, 1, shape.classes) ** rng.uniform(0.4, 1.5)
    return _Made(_gaussian(shape, rng).X, share_of_rows=ratio ** -rng.permutation(tail))


def _drifting(shape, rng):
    """Gaussian classes seen by a sensor whose gain, offset, rotation and noise change from boundary to boundary."""
    X = _gaussian(shape, rng).X
    strength = _log_uniform(rng, 0.02, 0.3)
    kinds = rng.random(4) < 0.6
    kinds[rng.integers(4)] = True
    gain, offset, turn, noise = strength * kinds
    scale = X.std(axis=0)
    return _Made(X, sensor=DriftingSensor(
        gain=gain * _normal(rng, shape.dimension), offset=offset * scale * _normal(rng, shape.dimension),
        angle=turn * _normal(rng, shape.dimension // 2), pairs=rng.permutation(shape.dimension),
        noise=noise * scale))


@dataclass(frozen=True)
class DriftingSensor:
    """A sensor that drifts by the same step at each boundary; at boundary 0 it is as new.

    Attributes
    ----------
    gain : ndarray of shape (d,)
        Logarithm of the gain's factor per boundary.
    offset : ndarray of shape (d,)
        Shift per boundary.
    angle : ndarray of shape (d // 2,)
        Turn per boundary, in radians, of pairs of features.
    pairs : ndarray of shape (d,)
        Order of the features; neighbours turn together.
    noise : ndarray of shape (d,)
        Spread of the noise per boundary.
    """

    gain: np.ndarray
    offset: np.ndarray
    angle: np.ndarray
    pairs: np.ndarray
    noise: np.ndarray

    def __call__(self, X, t, rng):
        """Return rows X as the sensor of boundary t shows them."""
        X = X.copy()
        first, second = self.pairs[0:2 * len(self.angle):2], self.pairs[1:2 * len(self.angle):2]
        cos, sin = np.cos(t * self.angle), np.sin(t * self.angle)
        X[:, first], X[:, second] = X[:, first] * cos - X[:, second] * sin, X[:, first] * sin + X[:, second] * cos
        return X * np.exp(t * self.gain) + t * self.offset + t * self.noise * _normal(rng, X.shape)


def _hierarchy(shape, rng):
    """Gaussian classes in a few broad kinds, so that some classes are easily taken for one another."""
    spreads = _latent(rng, shape.dimension)
    n_kinds = int(rng.integers(2, max(3, shape.classes // 3) + 1))
    kinds = _means(rng, n_kinds, spreads, 2 * shape.separation)
    kind = rng.permutation(np.arange(shape.classes) % n_kinds)
    means = kinds[kind] + _means(rng, shape.classes, spreads, shape.separation * rng.uniform(0.2, 0.8))
    return _Made(_mixed(_clouds(rng, means, spreads), _axes(rng, len(spreads), shape.dimension), shape.noise, rng))


def _rectified(shape, rng):
    """What a layer with ReLU gives: many zeros, the rest positive."""
    spreads = _latent(rng, shape.dimension)
    latent = _clouds(rng, _means(rng, shape.classes, spreads, shape.separation), spreads)
    latent = latent.reshape(-1, len(spreads))
    latent = latent / latent.std(axis=0)
    weights = _normal(rng, (len(spreads), shape.dimension)) / np.float32(np.sqrt(len(spreads)))
    bias = np.float32(rng.uniform(-1.0, 0.5)) + np.float32(0.3) * _normal(rng, shape.dimension)
    return _Made(np.maximum(_mixed(latent, weights, shape.noise, rng) + bias, 0))


FAMILIES = {
    "synthetic_gaussian": _gaussian,
    "synthetic_own_covariance": _own_covariance,
    "synthetic_modes": _modes,
    "synthetic_manifold": _manifold,
    "synthetic_sparse": _sparse,
    "synthetic_imbalanced": _imbalanced,
    "synthetic_drifting": _drifting,
    "synthetic_hierarchy": _hierarchy,
    "synthetic_rectified": _rectified,
}
