"""Prediction intervals with guaranteed coverage: split conformal and conformalized quantiles.

Score records that were not used for fitting (`interval_scores`), take a threshold from the scores
(`conformal_threshold`, or `grouped_conformal_threshold` where they come from several sources), and
widen a forecast by it (`interval`).

Romano, Patterson & Candes 2019, "Conformalized Quantile Regression".
"""

import itertools
import math
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from hyperforecast.checks import InputError, check_number


@dataclass(frozen=True)
class Interval:
    """Where accuracies are expected to lie.

    Attributes
    ----------
    low, high : ndarray, or float
        Ends, 0 <= low <= high <= 1.
    """

    low: np.ndarray
    high: np.ndarray


def interval_scores(low, high, truth):
    """Return how far each truth lies outside its forecast [low, high]; negative inside (arrays of one shape).

    With low = high = a point forecast the score is the absolute error, which gives split conformal intervals.
    """
    low, high, truth = (np.asarray(values, np.float64) for values in (low, high, truth))
    return np.maximum(low - truth, truth - high)


def conformal_threshold(scores, alpha):
    """Return the threshold that a new score exceeds with probability at most alpha.

    It is the k-th smallest score with k = ceil((n + 1)(1 - alpha)), infinite if k > n. Assumes that the
    calibration scores and the new one are exchangeable; without ties the coverage is at most
    1 - alpha + 1/(n + 1).

    Parameters
    ----------
    scores : array-like of shape (n,)
        Finite calibration scores; may be empty.
    alpha : float in [1e-9, 1 - 1e-9]
        Probability of a miss. Read as the simplest fraction within its rounding, so that 0.18 is 18/100.
    """
    scores = _checked_scores(scores)
    rank = math.ceil((len(scores) + 1) * (1 - _checked_alpha(alpha)))
    return float(np.sort(scores)[rank - 1]) if rank <= len(scores) else math.inf


def grouped_conformal_threshold(scores, groups, alpha):
    """Return the threshold that a score of a new group exceeds with probability at most alpha.

    Every group counts alike: of m groups, one with n_i scores gives each the weight 1/((m + 1) n_i), and
    the new score, put at infinity, has 1/(m + 1). The threshold is the smallest score at or below which
    lies a weight of at least 1 - alpha; infinite if there is none, as when m < 1/alpha - 1.

    Assumes that the groups (sources, say), the new one among them, are exchangeable, and that the scores
    (boundaries) within each group are; scores of one group may depend on each other. With one score per
    group it equals `conformal_threshold`. Lee, Barber & Willett 2023, "Distribution-free inference with
    hierarchical data".

    Parameters
    ----------
    scores : array-like of shape (n,)
        Finite calibration scores; may be empty.
    groups : array-like of shape (n,)
        The group of each score: numbers or text.
    alpha : float in [1e-9, 1 - 1e-9]
        As in `conformal_threshold`.
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


def interval(low, high, threshold):
    """Return the forecast [low, high] widened by the threshold on both sides and clipped to [0, 1].

    A negative threshold narrows; ends that would cross meet halfway.

    Parameters
    ----------
    low, high : array-like of one shape
        Ends of the forecast, e.g. two quantiles of an accuracy.
    threshold : float
        Of `conformal_threshold` or `grouped_conformal_threshold`; infinity gives [0, 1].
    """
    if math.isnan(threshold) or threshold == -math.inf:
        raise InputError("threshold", "must be a number or infinity", threshold)
    low, high = np.asarray(low, np.float64), np.asarray(high, np.float64)
    middle = (low + high) / 2
    return Interval(np.clip(np.minimum(low - threshold, middle), 0.0, 1.0)[()],
                    np.clip(np.maximum(high + threshold, middle), 0.0, 1.0)[()])


def _checked_scores(scores):
    scores = np.asarray(scores, np.float64)
    if scores.ndim != 1 or not np.isfinite(scores).all():
        raise InputError("scores", "must be a list of finite numbers", f"shape {scores.shape}, or NaN or infinity")
    return scores


def _checked_alpha(alpha):
    return Fraction(check_number("alpha", alpha, low=1e-9, high=1 - 1e-9)).limit_denominator(10**9)
