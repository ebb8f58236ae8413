"""Records of one method as arrays. Letters: B boundaries, F descriptors, N attempts, G coordinates, D settings."""

from dataclasses import dataclass

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.describing import DESCRIPTORS
from hyperforecast.settings import COORDINATES, SCALES, SettingsBox, scale_free

# A search makes dozens of attempts at a boundary, a device's update one or two: too few to tell what is best there.
FEWEST_COMPARED = 8


@dataclass(frozen=True)
class Dataset:
    """Boundaries and their attempts.

    Attributes
    ----------
    method : str
    descriptors : ndarray of shape (B, F)
        In the order of `hyperforecast.describing.DESCRIPTORS`, NaN where missing.
    sources, trajectories : ndarrays of shape (B,), text
    most_kept : ndarray of shape (B,), int
    boundary : ndarray of shape (N,), int
        Of each attempt.
    coordinates : ndarray of shape (N, G)
    points : ndarray of shape (N, D)
        Settings in the unit cube of each boundary's box.
    logs : ndarray of shape (N, D)
        Natural logarithms of the settings.
    old, new, all, after : ndarrays of shape (N,)
        Outcomes; `after` is the mean accuracy one and two boundaries later, NaN where that was not followed.
    diverged : ndarray of shape (N,), bool
    """

    method: str
    descriptors: np.ndarray
    sources: np.ndarray
    trajectories: np.ndarray
    most_kept: np.ndarray
    boundary: np.ndarray
    coordinates: np.ndarray
    points: np.ndarray
    logs: np.ndarray
    old: np.ndarray
    new: np.ndarray
    all: np.ndarray
    after: np.ndarray
    diverged: np.ndarray

    @property
    def n_boundaries(self):
        """Number of boundaries B."""
        return len(self.sources)

    @property
    def compared(self):
        """Mask (B,) of the boundaries with attempts enough to be compared with each other.

        The others, updates of devices, tell what outcome to expect, not which settings are best.
        """
        return np.bincount(self.boundary, minlength=self.n_boundaries) >= FEWEST_COMPARED

    def column(self, name):
        """Return one descriptor over the boundaries, shape (B,)."""
        return self.descriptors[:, list(DESCRIPTORS).index(name)]

    def inputs(self, attempts=slice(None)):
        """Return what outcome models read of some attempts: descriptors and coordinates, (n, F + G)."""
        return np.hstack([self.descriptors[self.boundary[attempts]], self.coordinates[attempts]])

    def best(self):
        """Return the best accuracy on all classes at each boundary, shape (B,)."""
        best = np.full(self.n_boundaries, -np.inf)
        np.maximum.at(best, self.boundary, self.all)
        return best

    def without(self, source):
        """Return the mask (B,) of the boundaries of other sources."""
        return self.sources != source


def load_dataset(records, method, *, without=(), only=None):
    """Return the `Dataset` of one method in a `RecordsFile`.

    Parameters
    ----------
    records : RecordsFile
    method : str
    without : sequence of str
        Sources to leave out; the records must know them.
    only : set of str, optional
        Keys of the trajectories to read; all by default.

    Raises
    ------
    InputError
        If a source to leave out is not there, or fewer than two sources remain whose boundaries were searched; records of
        devices alone will not do.
    """
    names = list(DESCRIPTORS)
    descriptors, sources, trajectories, most_kept = [], [], [], []
    parts = {name: [] for name in ("boundary", "coordinates", "points", "logs", "old", "new", "all", "after", "diverged")}
    known = set()
    for trajectory in records.trajectories(method=method):
        if only is not None and trajectory.key not in only:
            continue
        known.add(trajectory.source)
        if trajectory.source in without:
            continue
        for one in trajectory.boundaries:
            settings = [attempt.settings for attempt in one.attempts]
            box = SettingsBox(method, one.most_kept)
            old = np.array([attempt.accuracy_old for attempt in one.attempts])
            new = np.array([attempt.accuracy_new for attempt in one.attempts])
            after = np.array([[attempt.after_one, attempt.after_two] for attempt in one.attempts], dtype=np.float64)
            followed = ~np.isnan(after)
            parts["boundary"].append(np.full(len(settings), len(sources)))
            parts["coordinates"].append(scale_free(settings, {name: one.descriptors[name] for name in SCALES}))
            parts["points"].append(box.to_unit(settings))
            parts["logs"].append(np.log([[getattr(one_, name) for name in box.names] for one_ in settings]))
            parts["old"].append(old)
            parts["new"].append(new)
            parts["all"].append((one.classes_old * old + one.classes_new * new) / (one.classes_old + one.classes_new))
            with np.errstate(invalid="ignore"):
                parts["after"].append(np.where(followed, after, 0).sum(axis=1) / followed.sum(axis=1))
            parts["diverged"].append(np.array([attempt.diverged for attempt in one.attempts]))
            descriptors.append([one.descriptors.get(name, np.nan) for name in names])
            sources.append(trajectory.source)
            trajectories.append(trajectory.key)
            most_kept.append(one.most_kept)
    if not set(without) <= known:
        raise InputError("without", f"must name sources of the {method} records: {', '.join(sorted(known))}",
                         ", ".join(sorted(set(without) - known)))
    searched = {source for source, one in zip(sources, parts["all"]) if len(one) >= FEWEST_COMPARED}
    if len(searched) < 2:
        raise InputError(records.path, f"must hold searched {method} boundaries of at least two sources",
                         ", ".join(sorted(searched)) or "none", "gather more")
    return Dataset(method, np.array(descriptors, dtype=np.float64), np.array(sources), np.array(trajectories),
                   np.array(most_kept), **{name: np.concatenate(arrays) for name, arrays in parts.items()})
