"""The best fixed choice over training records: the bar that advice has to clear."""

import numpy as np

from hyperforecast.forecasting import Constant
from hyperforecast.settings import LEARNING_RATES, REGULARIZATIONS

CANDIDATES = 256
# Attempts near a candidate tell its outcome: widths, in natural logarithms, of learning rate, strength, exemplars.
WIDTHS = np.array([0.5, 1.0, 0.5])


def fit_constants(dataset, boundaries, *, seed):
    """Return (raw `Constant`, scale-free `Constant`, kind of the better one) over the boundaries in a mask (B,).

    A candidate's outcome at a boundary is the mean over attempts there, weighted by nearness (a Nadaraya-Watson
    estimate); every source counts alike, and boundaries with too few attempts to compare do not count.
    """
    boundaries = boundaries & dataset.compared
    constants, values, scales = {}, {}, _scales(dataset)
    for kind in ("raw", "scale_free"):
        candidates = _candidates(dataset, boundaries, kind, np.random.default_rng(seed))
        outcome = np.zeros(len(candidates))
        names, counts = np.unique(dataset.sources[boundaries], return_counts=True)
        share = dict(zip(names, 1 / (len(names) * counts)))
        for b, attempts in _boundary_slices(dataset, boundaries):
            places = _placed(dataset, b, kind, candidates, scales)
            outcome += share[dataset.sources[b]] * _estimate(dataset.logs[attempts], dataset.all[attempts], places)
        best = int(np.argmax(outcome))
        numbers = np.exp(candidates[best])
        kept = max(int(round(numbers[2])), 1) if len(numbers) == 3 else None
        constants[kind] = Constant(kind, float(numbers[0]), float(numbers[1]), kept)
        values[kind] = outcome[best]
    return constants["raw"], constants["scale_free"], max(values, key=values.get)


def constant_outcome(dataset, boundaries, constant):
    """Return the estimated outcome of a constant at each boundary in the mask, shape (n,)."""
    numbers = [constant.learning_rate, constant.regularization]
    if constant.kept_per_class is not None:
        numbers.append(constant.kept_per_class)
    candidate, scales = np.log(numbers)[None], _scales(dataset)
    return np.array([
        _estimate(dataset.logs[attempts], dataset.all[attempts], _placed(dataset, b, constant.kind, candidate, scales))[0]
        for b, attempts in _boundary_slices(dataset, boundaries)])


def _boundary_slices(dataset, boundaries):
    """Yield (boundary, slice of its attempts): attempts are stored boundary by boundary."""
    starts = np.searchsorted(dataset.boundary, np.arange(dataset.n_boundaries + 1))
    for b in np.flatnonzero(boundaries):
        yield b, slice(starts[b], starts[b + 1])


def _scales(dataset):
    """Logarithms of what turns relative learning rate and strength into settings, (B, 2)."""
    with np.errstate(divide="ignore", invalid="ignore"):
        new, anchor = np.log(dataset.column("curvature_new")), np.log(dataset.column("anchor_curvature"))
        scales = np.stack([-new, new - anchor], axis=1)
    return np.where(np.isfinite(scales), scales, 0.0)


def _candidates(dataset, boundaries, kind, rng):
    """Settings, or relative settings, near those that did best somewhere; logarithms (n, D)."""
    best = dataset.best()
    near = np.flatnonzero((dataset.all >= best[dataset.boundary] - 0.01) & boundaries[dataset.boundary])
    chosen = dataset.logs[rng.choice(near, CANDIDATES)].copy()
    if kind == "scale_free":
        rows = rng.choice(near, CANDIDATES)
        chosen = dataset.logs[rows].copy()
        chosen[:, :2] -= _scales(dataset)[dataset.boundary[rows]]
    # Medians of what did best are good guesses too.
    middle = np.median(chosen, axis=0)
    spread = chosen.std(axis=0)
    around = middle + rng.standard_normal((CANDIDATES // 2, chosen.shape[1])) * spread * 0.5
    return np.concatenate([chosen, around])


def _placed(dataset, b, kind, candidates, scales):
    """Candidates as logarithms of settings at boundary b, cut to its box."""
    places = candidates.copy()
    if kind == "scale_free":
        places[:, :2] += scales[b]
    places[:, 0] = np.clip(places[:, 0], *np.log(LEARNING_RATES))
    places[:, 1] = np.clip(places[:, 1], *np.log(REGULARIZATIONS[dataset.method]))
    if places.shape[1] == 3:
        places[:, 2] = np.clip(places[:, 2], 0, np.log(dataset.most_kept[b]))
    return places


def _estimate(logs, outcome, places):
    squares = (((places[:, None] - logs) / WIDTHS[:logs.shape[1]]) ** 2).sum(axis=2)
    weights = np.exp(-0.5 * (squares - squares.min(axis=1, keepdims=True)))
    return weights @ outcome / weights.sum(axis=1)
