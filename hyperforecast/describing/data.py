"""Descriptors of the increment itself."""

import numpy as np

from hyperforecast.describing.registry import descriptor
from hyperforecast.describing.view import median


@descriptor("data")
def classes_old(view):
    """Classes seen before this boundary. Unit: classes."""
    return view.boundary.n_old


@descriptor("data")
def classes_new(view):
    """Classes of the increment that were never seen before. Unit: classes."""
    return view.boundary.n_classes - view.boundary.n_old


@descriptor("data")
def classes_returning(view):
    """Classes of the increment that were seen before. Unit: classes."""
    return (view.boundary.arrived < view.boundary.n_old).sum()


@descriptor("data")
def rows(view):
    """Rows of the increment to train on. Unit: rows."""
    return len(view.boundary.y)


@descriptor("data")
def rows_per_class(view):
    """Median over the increment's classes of their training rows. Unit: rows."""
    return median(view.class_counts)


@descriptor("data")
def imbalance(view):
    """Rows of the largest class of the increment over rows of its smallest. Unit: ratio, from 1. Common practice."""
    return view.class_counts.max() / view.class_counts.min()


@descriptor("data")
def features(view):
    """Number of features d. Unit: features."""
    return view.boundary.n_features


@descriptor("data")
def effective_rank(view):
    """Participation ratio of the covariance's eigenvalues, (sum l)^2 / sum l^2. Unit: dimensions. Common practice.

    Through traces: tr(C)^2 / tr(C C), on the smaller of the two Gram matrices.
    """
    centered = view.sample[0] - view.sample[0].mean(axis=0)
    gram = centered @ centered.T if len(centered) < centered.shape[1] else centered.T @ centered
    return np.trace(gram) ** 2 / (gram**2).sum()


@descriptor("data")
def energy(view):
    """Mean squared length of standardized rows over d. Unit: squared standard deviations of the first increment."""
    return (view.sample[0] ** 2).mean()


@descriptor("data")
def tail_weight(view):
    """Mean fourth moment of the features around their mean over their squared variance (kurtosis). Unit: ratio.

    Features that do not vary are left out; the median over the others is taken. Common practice.
    """
    centered = view.sample[0] - view.sample[0].mean(axis=0)
    variance = (centered**2).mean(axis=0)
    varies = variance > 1e-6
    return median((centered[:, varies] ** 4).mean(axis=0) / variance[varies] ** 2) if varies.any() else np.nan


@descriptor("data")
def class_separability(view):
    """Variance between class means over variance within classes, summed over features. Unit: ratio.

    The trace form of Fisher's discriminant ratio; Lorena et al. 2019, "How Complex Is Your Classification
    Problem?", F1, from memory, takes the largest ratio over single features instead.
    """
    return view.between.sum() / view.within.sum() if len(view.arrived) > 1 else np.nan


@descriptor("data")
def largest_fisher_ratio(view):
    """Largest ratio over features of variance between class means to variance within. Unit: ratio.

    r of Lorena et al. 2019, "How Complex Is Your Classification Problem?", F1 = 1 / (1 + max r), from memory.
    """
    if len(view.arrived) < 2:
        return np.nan
    return (view.between / np.maximum(view.within, 1e-6)).max()


@descriptor("data")
def nearest_mean_accuracy(view):
    """Share of rows nearer to the mean of their class's other rows than to any other of the increment. Unit: share.

    Leave-one-out accuracy of the nearest-class-mean classifier. Common practice.
    """
    return (view.own_distances < view.nearest_other).mean() if len(view.arrived) > 1 else np.nan
