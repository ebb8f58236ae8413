"""How far a boundary lies from the records a forecaster was fitted on, and what looks wrong with its increment."""

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.storage import stored_array

RANGE = (0.005, 0.995)  # quantiles of the records between which a descriptor is in range
REFERENCE_ROWS = 400
NEIGHBOURS = 5
FAMILIAR_SHARE = 0.05  # a boundary is familiar if at least this share of the records lies as far out
NORMAL_IQR = 1.349  # interquartile range of the standard normal distribution
FAR = 1.0  # so many widths of its range (or spreads) beyond it, one descriptor alone makes a boundary unfamiliar
# Signs that an increment is not what it is taken for, whatever the records know. Held-out open streams show one of them
# in 1 boundary of 12, streams with such faults in 4 of 5 (bench_streams/bench_familiarity.py).
LIKE_CHANCE = 1.2  # squared distance of two class means over what chance would make it; 1 where they are the same
TOLD_APART = 0.8  # share of new rows that a probe gets right where classes differ in more than their means
MOST_CUT = 0.75  # share of a feature's values beyond 10 standard deviations of the first increment
FEWEST_ROWS = 2
ROUNDING = 1e-9  # a descriptor that varies by a smaller share of its size is constant


class OutOfRange(NamedTuple):
    """A descriptor that lies outside the records' range (their 0.5% and 99.5% quantiles)."""

    name: str
    value: float
    low: float
    high: float


@dataclass(frozen=True)
class FamiliarityVerdict:
    """How familiar a boundary is.

    Attributes
    ----------
    score : float in [0, 1]
        Share of the reference records that were at least as far from records of another source as this
        boundary is from all of them; 1 is utterly typical.
    familiar : bool
        Whether there is nothing in `why`.
    why : list of str
        What makes it unfamiliar, in words: a score below `FAMILIAR_SHARE`, a descriptor that lies more than the width
        of its range beyond it, or signs that something is wrong with the increment (see `signs_of_faults`).
    out_of_range : list of OutOfRange
        The descriptors outside their range, the farthest from its centre (in spreads) first.
    distance : float
        Mean distance to the `NEIGHBOURS` nearest reference records.
    """

    score: float
    why: list
    out_of_range: list
    distance: float

    @property
    def familiar(self):
        """Whether the records know such boundaries."""
        return not self.why

    def as_dict(self):
        """Return a JSON-able dict."""
        return {"score": self.score, "familiar": self.familiar, "why": self.why, "distance": self.distance,
                "out_of_range": [{"descriptor": one.name, "value": one.value, "low": one.low, "high": one.high}
                                 for one in self.out_of_range]}


def signs_of_faults(descriptors):
    """Yield what looks wrong with an increment, in words, from a dict of its descriptors.

    Two classes whose means lie no farther apart than chance would put those of two samples of one class, while no probe
    tells the rows apart: one class under two names, or labels mixed up, or too few rows to tell; a feature that leaves
    its scale in most rows; single rows of a class.
    """
    def known(name):
        return descriptors.get(name, np.nan)

    if known("closest_classes") < LIKE_CHANCE and not known("kernel_accuracy_new") > TOLD_APART:
        yield (f"two classes lie {known('closest_classes'):.2g} times as far apart as chance would put one and the same: "
               "a class under two names, labels mixed up, or too few rows to tell")
    if known("cut_feature") > MOST_CUT:
        yield (f"a feature lies beyond 10 standard deviations in {known('cut_feature'):.0%} of the rows: "
               "another unit, or another sensor")
    if known("rows_per_class") < FEWEST_ROWS:
        yield "classes come with a single row each: nothing can be held back to check on"


@dataclass(frozen=True, eq=False)
class Familiarity:
    """What is needed to judge how familiar a boundary's descriptors are.

    Distances are root mean squares over the descriptors, each centred on its median, divided by its
    spread and passed through arcsinh, so that one wild descriptor tells without drowning the others.
    A missing descriptor is imputed with the centre, and differs by one more spread from a known one.
    A descriptor that no record knows is left out. Calibration distances are from each reference record
    to those of other sources, since a new boundary is of another source than all records.

    Attributes
    ----------
    names : ndarray of shape (F,), text
        Descriptors.
    low, high, centre, scale : ndarray of shape (F,), float64
        Range, median and spread of each descriptor; NaN where no record knows it.
    reference : ndarray of shape (R, F), float32
        Standardized descriptors of some records, as many of each source as there are; NaN where missing.
    distances : ndarray of shape (R,), float32
        Calibration distances, ascending.
    """

    names: np.ndarray
    low: np.ndarray
    high: np.ndarray
    centre: np.ndarray
    scale: np.ndarray
    reference: np.ndarray
    distances: np.ndarray

    @classmethod
    def fit(cls, D, names, sources, *, seed):
        """Return the familiarity of records.

        Parameters
        ----------
        D : array-like of shape (n, F)
            Descriptors, NaN where missing.
        names : sequence of F str
        sources : array-like of shape (n,)
            The source of each record; at least two sources.
        seed : int
            Chooses the reference records.
        """
        D, names, sources = np.asarray(D, np.float64), np.asarray(names, np.str_), np.asarray(sources)
        if D.ndim != 2 or D.shape[1:] != names.shape or 0 in D.shape or np.isinf(D).any():
            raise InputError("D", f"must be rows of {len(names)} descriptors, finite or NaN", f"shape {D.shape}")
        if sources.shape != D.shape[:1] or len(np.unique(sources)) < 2:
            raise InputError("sources", "must name each record's source, two at least", f"shape {sources.shape}")
        low, high, centre, scale = np.full((4, D.shape[1]), np.nan)
        for f, column in enumerate(D.T):
            known = column[~np.isnan(column)]
            if len(known):
                low[f], lower, centre[f], upper, high[f] = np.quantile(known, (RANGE[0], .25, .5, .75, RANGE[1]))
                # A descriptor that is nearly always the same has no quartiles apart.
                spread = (upper - lower) / NORMAL_IQR or known.std()
                scale[f] = spread if spread > ROUNDING * abs(centre[f]) else 1.0
        chosen = _balanced_choice(sources, np.random.default_rng(seed))
        reference = _standardize(D[chosen], centre, scale)
        own = sources[chosen]
        distances = _neighbour_distances(reference, reference, allowed=own[:, None] != own)
        return cls(names, low, high, centre, scale, reference, np.sort(distances))

    def assess(self, descriptors):
        """Return the `FamiliarityVerdict` of a dict of descriptors; NaN, or no entry, is missing."""
        vector = np.array([descriptors.get(name, np.nan) for name in self.names.tolist()], np.float64)
        if np.isinf(vector).any():
            raise InputError("descriptors", "must be finite or NaN", self.names[np.isinf(vector)][0])
        row = _standardize(vector[None], self.centre, self.scale)
        distance = _neighbour_distances(row, self.reference)[0]
        score = float(np.mean(self.distances >= distance))
        outside = np.flatnonzero((vector < self.low) | (vector > self.high))
        outside = outside[np.argsort(-np.abs(row[0, outside]), kind="stable")]
        out_of_range = [OutOfRange(str(self.names[f]), float(vector[f]), float(self.low[f]), float(self.high[f]))
                        for f in outside]
        why = [f"{score:.1%} of the records lie this far out"] if score < FAMILIAR_SHARE else []
        # Halves, so that the largest numbers do not overflow.
        beyond = np.maximum(vector / 2 - self.high / 2, self.low / 2 - vector / 2)
        is_far = beyond > FAR / 2 * np.maximum(self.high - self.low, self.scale)
        why += [f"{one.name} {one.value:.4g} lies far beyond the records, {one.low:.4g} to {one.high:.4g}"
                for one, f in zip(out_of_range, outside) if is_far[f]]
        return FamiliarityVerdict(score, [*why, *signs_of_faults(descriptors)], out_of_range, float(distance))

    def to_arrays(self, prefix):
        """Return the parts as a dict of arrays whose names begin with `prefix`."""
        return {f"{prefix}{name}": getattr(self, name) for name in self.__dataclass_fields__}

    @classmethod
    def from_arrays(cls, arrays, prefix):
        """Return the familiarity in arrays of `to_arrays`; `InputError` if they hold none."""
        def read(name, kinds, *shape):
            return stored_array(arrays, prefix + name, kinds=kinds, shape=shape)

        def require(name, proper, rule):
            if not np.all(proper):
                raise InputError(prefix + name, rule, "other values")

        names = read("names", "U", None)
        low, high, centre, scale = (read(name, "f", len(names)) for name in ("low", "high", "centre", "scale"))
        reference = read("reference", "f", None, len(names))
        distances = read("distances", "f", len(reference))
        unknown = np.isnan(centre)
        for name, values in (("low", low), ("high", high), ("centre", centre), ("scale", scale)):
            proper = np.where(unknown, np.isnan(values), np.isfinite(values))
            require(name, proper, "must be finite, or NaN where the centre is")
        require("high", unknown | (low <= high), "must not be below low")
        require("scale", unknown | (scale > 0), "must be above 0")
        require("reference", len(reference) > 0 and not np.isinf(reference).any(), "must hold rows, finite or NaN")
        require("distances", np.isfinite(distances) & (distances >= 0), "must be finite, at least 0")
        return cls(names, low, high, centre, scale, reference, distances)


def _balanced_choice(sources, rng):
    """Return the indices of at most `REFERENCE_ROWS` random records, as evenly from the sources as can be."""
    shuffled = rng.permutation(len(sources))
    turn = np.empty(len(sources))
    for source in np.unique(sources):
        own = shuffled[sources[shuffled] == source]
        turn[own] = np.arange(len(own))
    return np.sort(shuffled[np.argsort(turn[shuffled], kind="stable")[:REFERENCE_ROWS]])


def _standardize(D, centre, scale):
    with np.errstate(over="ignore"):
        spreads = np.clip((D - centre) / scale, -1e300, 1e300)
    return np.arcsinh(spreads).astype(np.float32)


def _neighbour_distances(rows, reference, allowed=True):
    """Return the mean distance from each row (n, F) to its nearest allowed (n, R) reference rows (R, F)."""
    def embed(Z):
        missing = np.isnan(Z)
        return np.hstack([np.where(missing, np.float32(0), Z), missing.astype(np.float32)])

    a, b = embed(rows), embed(reference)
    squares = (a * a).sum(axis=1)[:, None] + (b * b).sum(axis=1) - 2 * a @ b.T
    apart = np.where(allowed, np.sqrt(np.maximum(squares, 0) / rows.shape[1]), np.inf)
    nearest = np.sort(apart, axis=1)[:, :NEIGHBOURS]
    near = np.isfinite(nearest)
    return (np.where(near, nearest, 0).sum(axis=1) / near.sum(axis=1)).astype(np.float32)
