"""Networks that order settings, trained by scikit-learn on the same attempts as the trees."""

import warnings

import numpy as np
from scipy.stats import norm
from sklearn.exceptions import ConvergenceWarning
from sklearn.neural_network import MLPRegressor

from hyperforecast.forecasting import NETWORK_LAYERS, NetworkEnsemble, bend
from hyperforecast.settings import COORDINATES

# Values chosen on folds of the synthetic sources.
NETWORKS = 3
HIDDEN = (128, 64)
BATCH = 256
STEPS = 10_000
# Few records are not learned by heart.
MOST_EPOCHS = 60
RATE = 2e-3
PENALTY = 3e-2
KNOTS = 33
# Targets are brought to a spread of about one.
SCALE = 6.0


def train_networks(inputs, target, weights, *, seed):
    """Return a `NetworkEnsemble` for inputs (n, F), target (n,) and weights (n,).

    Descriptors become normal scores by their quantiles, coordinates of settings are only centred and scaled.
    """
    knots, scores = _knots(inputs)
    gaps = np.flatnonzero(np.isnan(inputs).any(axis=0))
    seen = bend(inputs, knots, scores, gaps).astype(np.float32)
    wanted, weights = (SCALE * target).astype(np.float32), weights / weights.mean()
    epochs = min(max(1, round(STEPS * BATCH / len(target))), MOST_EPOCHS)
    layers = {name: [] for name in NETWORK_LAYERS}
    for k in range(NETWORKS):
        network = MLPRegressor(hidden_layer_sizes=HIDDEN, alpha=PENALTY, batch_size=min(BATCH, len(target)),
                               learning_rate_init=RATE, max_iter=epochs, n_iter_no_change=epochs, tol=0,
                               random_state=seed + k)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", ConvergenceWarning)
            network.fit(seen, wanted, sample_weight=weights)
        (first, second, last), (bias_1, bias_2, bias_3) = network.coefs_, network.intercepts_
        parts = (first, bias_1, second, bias_2, last[:, 0] / SCALE, bias_3[0] / SCALE)
        for name, part in zip(NETWORK_LAYERS, parts):
            layers[name].append(part)
    return NetworkEnsemble(knots, scores, gaps, {name: np.array(parts) for name, parts in layers.items()})


def _knots(inputs):
    """Return (knots, scores) (F, Q) of descriptors, then of coordinates."""
    shares = np.linspace(0, 1, KNOTS)
    normal = norm.ppf(np.clip(shares, 0.5 / KNOTS, 1 - 0.5 / KNOTS))
    known = [column[np.isfinite(column)] for column in inputs.T]
    knots = np.array([np.quantile(column, shares) if len(column) else np.arange(KNOTS) for column in known])
    scores = np.repeat(normal[None], len(knots), axis=0)
    for place in range(len(known) - len(COORDINATES), len(known)):
        column = known[place]
        if len(column):
            scores[place] = (knots[place] - column.mean()) / max(column.std(), 1e-9)
    return knots.astype(np.float32), scores.astype(np.float32)
