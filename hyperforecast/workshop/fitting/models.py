"""LightGBM models of outcomes, and direct regressors of settings."""

import lightgbm
import numpy as np

from hyperforecast.settings import SettingsBox
from hyperforecast.workshop.fitting.networks import train_networks

# Values chosen on folds of the training sources.
PARAMETERS = {
    "learning_rate": 0.08, "num_leaves": 31, "min_data_in_leaf": 40, "feature_fraction": 0.5, "lambda_l2": 1.0,
    "max_bin": 63, "deterministic": True, "force_col_wise": True, "num_threads": 1, "verbosity": -1,
}
ROUNDS = 180
SMALL = {"num_leaves": 15}
# What orders settings is a finer matter than what level to expect.
LARGE = {"num_leaves": 127, "min_data_in_leaf": 200}
SMALL_ROUNDS = 80
# Attempts within about this much of a boundary's best form the ridge, which weighs most in the fit.
RIDGE = 0.1
FAR_WEIGHT = 0.1
# Attempts farther behind the best than this are so many that every THINNED-th of them will do.
FAR = 0.15
THINNED = 3
# Networks need not tell shortfalls beyond this from each other.
FAR_BEHIND = 0.3
# Attempts whose later outcome is not known but imputed count for this much.
IMPUTED_WEIGHT = 0.2


def train(inputs, target, weights, *, objective="regression", size=None, seed):
    """Return a LightGBM Booster for inputs (n, F), target (n,) and weights (n,); `size` is None, SMALL or LARGE."""
    parameters = {**PARAMETERS, **(size or {}), "objective": objective, "seed": seed}
    data = lightgbm.Dataset(inputs, target, weight=weights, free_raw_data=True)
    return lightgbm.train(parameters, data, SMALL_ROUNDS if size is SMALL else ROUNDS)


def source_weights(sources):
    """Return a weight for each entry so that sources count by the square root of their entries; mean 1."""
    _, place, counts = np.unique(sources, return_inverse=True, return_counts=True)
    weights = 1 / np.sqrt(counts[place])
    return weights / weights.mean()


def attempt_weights(dataset, attempts):
    """Return the weight of each attempt in a fit: high on the ridge, sources evened out."""
    b = dataset.boundary[attempts]
    behind = dataset.best()[b] - dataset.all[attempts]
    stands_for = np.where(behind > FAR, THINNED, 1)
    return source_weights(dataset.sources[b]) * stands_for * (FAR_WEIGHT + np.exp(-behind / RIDGE))


def _taken(dataset):
    """Mask (N,) of the attempts that are fitted on: all near the ridge, every few far from it."""
    behind = dataset.best()[dataset.boundary] - dataset.all
    return (behind <= FAR) | (np.arange(len(behind)) % THINNED == 0)


def train_shortfall_networks(dataset, boundaries, *, seed):
    """Return a `NetworkEnsemble` of the shortfall, on the boundaries in a mask (B,) whose attempts can be compared."""
    attempts = np.flatnonzero((boundaries & dataset.compared)[dataset.boundary] & _taken(dataset))
    behind = (dataset.best()[dataset.boundary] - dataset.all)[attempts]
    return train_networks(dataset.inputs(attempts), -np.minimum(behind, FAR_BEHIND), attempt_weights(dataset, attempts),
                          seed=seed)


def train_outcomes(dataset, boundaries, *, seed):
    """Return Boosters of outcomes, by the names in `hyperforecast.forecasting`, on the boundaries in a mask (B,).

    That of the shortfall learns from boundaries whose attempts can be compared, the others from all.
    """
    attempts = np.flatnonzero(boundaries[dataset.boundary] & _taken(dataset))
    inputs, weights = dataset.inputs(attempts), attempt_weights(dataset, attempts)
    models = {name: train(inputs, getattr(dataset, name)[attempts], weights, seed=seed) for name in ("old", "new")}
    return {**models, "shortfall": train_shortfall(dataset, boundaries, seed=seed),
            "diverged": train_divergence(dataset, boundaries, seed=seed)}


def train_shortfall(dataset, boundaries, *, seed):
    """Return a Booster of how far attempts stay from the best of their boundary, on compared ones of a mask (B,)."""
    attempts = np.flatnonzero((boundaries & dataset.compared)[dataset.boundary] & _taken(dataset))
    shortfall = (dataset.all - dataset.best()[dataset.boundary])[attempts]
    return train(dataset.inputs(attempts), shortfall, attempt_weights(dataset, attempts), size=LARGE, seed=seed)


def train_divergence(dataset, boundaries, *, seed):
    """Return a Booster of the probability of divergence, on the boundaries in a mask (B,)."""
    attempts = np.flatnonzero(boundaries[dataset.boundary] & _taken(dataset))
    even = source_weights(dataset.sources[dataset.boundary[attempts]])
    return train(dataset.inputs(attempts), dataset.diverged[attempts].astype(float), even, objective="binary", size=SMALL,
                 seed=seed)


def train_later(dataset, boundaries, *, seed):
    """Return a Booster of what each settings brings later (see `later_advantage`), on the boundaries in a mask (B,).

    None if nothing was followed there, as in streams of two increments.
    """
    advantage = later_advantage(dataset)
    attempts = np.flatnonzero(boundaries[dataset.boundary] & _taken(dataset) & ~np.isnan(advantage))
    if not len(attempts):
        return None
    known = np.where(np.isnan(dataset.after[attempts]), IMPUTED_WEIGHT, 1.0)
    return train(dataset.inputs(attempts), advantage[attempts], known * attempt_weights(dataset, attempts), size=LARGE,
                 seed=seed)


def later_advantage(dataset):
    """Return the advantage of each attempt for the accuracy one and two boundaries later, (N,).

    Relative to the mean of the followed attempts of its boundary, so that what the future brings cancels; NaN where
    the boundary has none. An attempt that was not followed gets the share of its present advantage that usually lasts:
    the slope of the later advantage on the present one over all followed attempts.
    """
    known = ~np.isnan(dataset.after)
    b = dataset.boundary[known]
    with np.errstate(invalid="ignore"):
        now, later = (
            outcome - (np.bincount(b, outcome[known], minlength=dataset.n_boundaries)
                       / np.bincount(b, minlength=dataset.n_boundaries))[dataset.boundary]
            for outcome in (dataset.all, dataset.after))
    spread = (now[known] ** 2).sum()
    slope = (now[known] * later[known]).sum() / spread if spread > 0 else 1.0
    return np.where(known, later, slope * now)


def train_direct(dataset, boundaries, *, seed):
    """Return Boosters from descriptors to the best of compared attempts, as unit-cube coordinates, by setting."""
    rows = np.flatnonzero(boundaries & dataset.compared)
    best = best_attempts(dataset)[rows]
    unset = np.full((len(rows), dataset.coordinates.shape[1]), np.nan)
    inputs = np.hstack([dataset.descriptors[rows], unset])
    weights = source_weights(dataset.sources[rows])
    return {name: train(inputs, dataset.points[best, d], weights, size=SMALL, seed=seed)
            for d, name in enumerate(SettingsBox(dataset.method).names)}


def best_attempts(dataset):
    """Return the place of the best attempt of each boundary, shape (B,)."""
    order = np.lexsort((-dataset.all, dataset.boundary))
    return order[np.searchsorted(dataset.boundary[order], np.arange(dataset.n_boundaries))]
