"""The choice among candidate settings by what a forecast expects of them."""

from dataclasses import replace

import numpy as np

from hyperforecast.forecasting.forecaster import old_share
from hyperforecast.settings import KEPT_PER_CLASS

# Candidates that are weighed over the whole box, and around the best of them.
SPREAD_OUT = 256
CENTERS, AROUND_EACH = 6, 16
# Width of the neighbourhood, in unit-cube distance, over which expected outcomes are averaged: the edge of the good
# region is steep, and a candidate among good neighbours is the safer one.
NEIGHBOURHOOD = 0.05
# What the probability of divergence costs, in accuracy: the advice keeps a margin from the cliff.
DIVERGENCE_PRICE = 0.3
ALTERNATIVES = 8
# Alternatives differ from better ranked ones by at least this much, in unit-cube distance.
FEWEST_APART = 0.08


def choose(forecast, box, preferences):
    """Return the `Settings` with the best expected outcome, in the sense of `Preferences`."""
    settings, scores = weighed(forecast, box, preferences)
    return fewest_kept(forecast, settings[int(np.argmax(scores))], box, preferences)


def lattice(n, n_dimensions):
    """Return n points that fill the unit cube evenly, shape (n, n_dimensions), always the same.

    The additive recurrence with the powers of 1/g, where g^(D+1) = g + 1 (Roberts 2018, "The Unreasonable
    Effectiveness of Quasirandom Sequences", from memory).
    """
    g = 1.5
    for _ in range(40):
        g = (1 + g) ** (1 / (n_dimensions + 1))
    return (0.5 + np.arange(1, n + 1)[:, None] * g ** -np.arange(1.0, n_dimensions + 1)) % 1.0


def weighed(forecast, box, preferences):
    """Return candidate settings and their scores: over the whole box, then around the best."""
    points = lattice(SPREAD_OUT, box.n_dimensions)
    scores = _scores(forecast, box.from_unit(points), box, preferences)
    centers = points[np.argsort(-_smooth(points, scores), kind="stable")[:CENTERS]]
    offsets = (lattice(AROUND_EACH, box.n_dimensions) - 0.5) * 4 * NEIGHBOURHOOD
    around = np.clip((centers[:, None] + offsets).reshape(-1, box.n_dimensions), 0, 1)
    scores = np.concatenate([scores, _scores(forecast, box.from_unit(around), box, preferences)])
    points = np.concatenate([points, around])
    return box.from_unit(points), _smooth(points, scores)


def _scores(forecast, settings, box, preferences):
    """Return what candidates are ranked by, shape (n,)."""
    # Direct forecasts know nothing of weights.
    if forecast.forecaster.ranking == "direct" and preferences.old_weight is None:
        return -np.linalg.norm(box.to_unit(settings) - forecast.direct(box), axis=1)
    return objective(forecast, settings, preferences)


def objective(forecast, settings, preferences):
    """Return the expected outcome (n,), now and later, from the best, less the price of perhaps diverging."""
    now = preferences.now_weight
    value = now * forecast.shortfall(settings)
    if now < 1:
        value = value + (1 - now) * forecast.later(settings)
    if preferences.old_weight is not None:
        # w old + (1 - w) new lies (w - share) (old - new) above the accuracy that counts every class alike. Between
        # old and new classes, what is won now is taken to last.
        outcome = forecast.outcome(settings)
        value = value + (preferences.old_weight - old_share(forecast.descriptors)) * (outcome["old"] - outcome["new"])
    return value - DIVERGENCE_PRICE * forecast.divergence(settings)


def _smooth(points, scores):
    """Return scores averaged over each point's neighbourhood."""
    lengths = (points**2).sum(axis=1)
    squares = lengths[:, None] + lengths - 2 * points @ points.T
    weights = np.exp(squares * (-0.5 / NEIGHBOURHOOD**2))
    # Rounded, so that ties are ties, and the first of them wins.
    return np.round(weights @ scores / weights.sum(axis=1), 9)


def fewest_kept(forecast, best, box, preferences):
    """Return `best` with the fewest exemplars per class whose expected outcome is within tolerance of the best."""
    if best.kept_per_class is None:
        return best
    kept = np.flatnonzero(np.bincount(np.round(np.geomspace(KEPT_PER_CLASS[0], box.most_kept, 24)).astype(int)))
    candidates = [replace(best, kept_per_class=int(k)) for k in kept]
    values = objective(forecast, candidates, preferences)
    return candidates[int(np.argmax(values >= values.max() - preferences.tolerance))]


def apart(box, best, settings, scores):
    """Return ranked alternatives that differ from `best` and from each other."""
    chosen = [best]
    points = box.to_unit(settings)
    taken = box.to_unit([best])
    for place in np.argsort(-scores, kind="stable"):
        if len(chosen) > ALTERNATIVES:
            break
        if np.linalg.norm(taken - points[place], axis=1).min() >= FEWEST_APART:
            chosen.append(settings[place])
            taken = np.concatenate([taken, points[place:place + 1]])
    return chosen[1:]
