"""Prediction intervals with a known coverage: split conformal thresholds of errors that come from several sources.

Vovk, Gammerman & Shafer 2005, "Algorithmic Learning in a Random World", from memory; with errors divided by a forecast
spread as in Lei et al. 2018, "Distribution-Free Predictive Inference for Regression", section 5.2, from memory.
"""

import itertools
import math

import numpy as np

from hyperforecast.checks import InputError, check_number


def grouped_conformal_threshold(scores, groups, alpha):
    """Return the threshold that a score of a new group exceeds with probability at most alpha.

    Every group counts alike: of m groups, one with n_i scores gives each the weight 1/((m + 1) n_i), and
    the new score, put at infinity, has 1/(m + 1). The threshold is the smallest score at or below which
    lies a weight of at least 1 - alpha; infinite if there is none, as when m < 1/alpha - 1.

    Assumes that the groups (sources, say), the new one among them, are exchangeable, and that the scores
    (boundaries) within each group are; scores of one group may depend on each other. With one score per
    group it is the split conformal threshold, the ceil((n + 1)(1 - alpha))-th smallest of n. Lee, Barber &
    Willett 2023, "Distribution-free inference with hierarchical data", from memory.

    Parameters
    ----------
    scores : array-like of shape (n,)
        Finite calibration scores; may be empty.
    groups : array-like of shape (n,)
        The group of each score: numbers or text.
    alpha : float in [1e-9, 1 - 1e-9]
        Probability of a miss. Read as the simplest fraction within its rounding, so that 0.18 is 18/100.
    """
    scores, groups = _checked_scores(scores), np.asarray(groups)
    if groups.shape != scores.shape:
        raise InputError("groups", "must name the group of each score", f"shape {groups.shape}, not {scores.shape}")
    _, group, sizes = np.unique(groups, return_inverse=True, return_counts=True)
    # Weights as whole numbers, so that sums are exact: a group weighs `unit`, a score its group's share.
    unit = math.lcm(*sizes.tolist())
    shares = [unit // size for size in sizes.tolist()]
    needed = (len(sizes) + 1) * unit * (1 - _checked_alpha(alpha))
    order = np.argsort(scores, kind="stable")
    for place, weight in zip(order, itertools.accumulate(shares[i] for i in group[order])):
        if weight >= needed:
            return float(scores[place])
    return math.inf


def _checked_scores(scores):
    scores = np.asarray(scores, np.float64)
    if scores.ndim != 1 or not np.isfinite(scores).all():
        raise InputError("scores", "must be a list of finite numbers", f"shape {scores.shape}, or NaN or infinity")
    return scores


def _checked_alpha(alpha):
    # Only fitting needs it, and it takes long to import.
    from fractions import Fraction

    return Fraction(check_number("alpha", alpha, low=1e-9, high=1 - 1e-9)).limit_denominator(10**9)
