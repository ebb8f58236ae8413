"""Points in the unit cube that no outcome steers."""

import numpy as np
from scipy.stats import qmc


def space_filling(n, n_dimensions, *, seed):
    """Return the first n >= 1 points of a scrambled Sobol sequence, shape (n, n_dimensions), in [0, 1)."""
    sequence = qmc.Sobol(n_dimensions, scramble=True, seed=np.random.default_rng(seed))
    return sequence.random_base2(max(n - 1, 0).bit_length())[:n]


def uniform_draws(n, n_dimensions, *, seed):
    """Return the first n of a sequence of independent uniform points, shape (n, n_dimensions), in [0, 1)."""
    return np.random.default_rng(seed).random((n, n_dimensions))
