"""Whether the features of an increment come from the extractor that the device has learned with.

A device learns the features that a frozen network, or whatever else extracts them, hands to it; those of another
network mean nothing to it. Two things tell them apart: the name that the user gives the extractor, and a *sketch*, the
covariance within classes of up to 32 features at the first increment.
"""

from dataclasses import dataclass

import numpy as np

from hyperforecast.checks import InputError

MOST_FEATURES = 32
MOST_ROWS = 1000
# Rows beyond one for each class that are needed for a covariance, and for each feature of a sketch.
FEWEST_FREEDOMS = 5
FREEDOMS_PER_FEATURE = 2
# Of the mean variance, added to every variance.
RIDGE = 0.1
SHUFFLES = 30
# What the sketch must tell about itself to tell anything about other rows: this, and this many times its noise.
LEAST_TOLD = 0.5
NOISES = 3
# Measured on open sets: bench_streams/bench_extractor.py.
LEAST_SHIFT, TOLD_BASE, TOLD_BY_SHIFT, MOST_TOLD = 2.0, 0.1, 0.02, 0.4
MOST_LOG_SPREAD = 2.3


@dataclass(frozen=True)
class Sketch:
    """What an extractor's features look like.

    Attributes
    ----------
    covariance : ndarray of shape (k, k), float32
        Within classes, of k features.
    freedoms : int
        Rows less classes that it was computed from.
    """

    covariance: np.ndarray
    freedoms: int


def check_extractor_name(known, given, *, another):
    """Return the extractor's name from now on; `InputError` if `given` is not `known`, unless `another` is meant."""
    if given is not None and (not isinstance(given, str) or not given.strip() or len(given) > 1000):
        raise InputError("extractor", "must be a name of 1 to 1000 characters", repr(given))
    if given is not None and known is not None and given != known and not another:
        raise InputError("extractor", f"must be the device's, {known}", given,
                         "extract the features with that one, or say --another-extractor if it is meant")
    return known if given is None else given


def sampled(boundary):
    """Return (Z, y) of at most 1000 training rows of a `Boundary`, evenly spread."""
    rows = np.arange(0, len(boundary.y), -(-len(boundary.y) // MOST_ROWS))
    return boundary.Z[rows], boundary.y[rows]


def sketch_of(Z, y):
    """Return the `Sketch` of standardized rows Z (n, d) of classes y; None if they are too few."""
    places, freedoms = _places(Z.shape[1]), len(y) - len(np.flatnonzero(np.bincount(y)))
    if freedoms < max(FEWEST_FREEDOMS, FREEDOMS_PER_FEATURE * len(places)):
        return None
    return Sketch(_within(Z[:, places], y).astype(np.float32), freedoms)


def looks_foreign(sketch, summaries, Z, y):
    """Return whether standardized rows Z (n, d) of classes y look like those of another extractor.

    Let S be the sketch and T the same covariance of these rows, scaled to the trace of S. The Gaussian log-likelihood
    of T under S, less that under S with its features shuffled, is what the order of the features tells; over the same
    for S itself, less k (k + 1) / f for the noise of f freedoms, it is `told`, near 1 for the same extractor and near 0 for
    another. `shift` is the squared distance between
    the mean of these rows' class means and that of the carried ones over the variance of the carried ones, feature by
    feature. Rows look foreign if shift > 2 and told < min(0.1 + 0.02 shift, 0.4), or if the scaling is by a factor
    beyond e^2.3. Own derivation. Where the sketch tells nothing, as of round classes, nothing looks foreign.

    Parameters
    ----------
    sketch : Sketch
    summaries : ClassSummaries
    """
    places = _places(Z.shape[1])
    if len(y) - len(np.flatnonzero(np.bincount(y))) < FEWEST_FREEDOMS or len(summaries.count) < 2:
        return False
    covariance = _within(Z[:, places], y)
    own, other = np.trace(sketch.covariance), np.trace(covariance)
    if not own > 0 or not other > 0:
        return False
    ridge = RIDGE * own / len(places) * np.eye(len(places))
    S, T = sketch.covariance + ridge, covariance * (own / other) + ridge
    rng = np.random.default_rng(len(places))
    shuffled = [S[np.ix_(order, order)] for order in (rng.permutation(len(S)) for _ in range(SHUFFLES))]
    # The determinant is that of S in every order.
    inverse, inverses = np.linalg.inv(S), np.linalg.inv(shuffled)
    about_itself, about_these = (np.mean([(one * R).sum() for one in inverses]) - (inverse * R).sum() for R in (S, T))
    means = np.array([Z[y == code].mean(axis=0) for code in np.flatnonzero(np.bincount(y))])
    between = summaries.mean.var(axis=0).mean()
    shift = ((means.mean(axis=0) - summaries.mean.mean(axis=0)) ** 2).mean() / max(between, 1e-9)
    noise = len(S) * (len(S) + 1) / sketch.freedoms
    told = about_these / max(about_itself - noise, 1e-9)
    if about_itself > LEAST_TOLD + NOISES * noise and shift > LEAST_SHIFT:
        if told < min(TOLD_BASE + TOLD_BY_SHIFT * shift, MOST_TOLD):
            return True
    return abs(np.log(own / other)) > MOST_LOG_SPREAD


def _places(n_features):
    """The features of a sketch: the same for every device of as many features."""
    return np.random.default_rng(n_features).permutation(n_features)[:MOST_FEATURES]


def _within(Z, y):
    """Covariance within classes, float64."""
    classes = np.flatnonzero(np.bincount(y))
    rest = Z.astype(np.float64)
    for code in classes:
        rest[y == code] -= rest[y == code].mean(axis=0)
    return rest.T @ rest / (len(y) - len(classes))
