"""Descriptors of how the increment lies to what was learned before."""

import numpy as np

from hyperforecast.describing.registry import descriptor
from hyperforecast.describing.view import squared_distances
from hyperforecast.learning.boundary import LARGEST_Z


@descriptor("drift")
def frechet_distance(view):
    """Frechet distance between the Gaussians of new rows and of all old rows, with diagonal covariances, over d.

    Mean over features of (m1 - m2)^2 + (s1 - s2)^2; the old side from the carried class summaries, every class alike.
    Unit: squared standard deviations. Dowson & Landau 1982, "The Frechet distance between multivariate normal
    distributions".
    """
    old = view.summaries
    if old is None:
        return np.nan
    mean_old = old.mean.mean(axis=0)
    variance_old = old.variance.mean(axis=0) + old.mean.var(axis=0)
    mean_new, variance_new = view.sample[0].mean(axis=0), view.sample[0].var(axis=0)
    return ((mean_new - mean_old) ** 2 + (np.sqrt(variance_new) - np.sqrt(variance_old)) ** 2).mean()


@descriptor("drift")
def nearest_old_class(view):
    """Mean over the increment's classes of the squared distance to the nearest old mean, over the variance within.

    Old classes that came again do not count. Unit: ratio (Mahalanobis distance with one common variance). Common
    practice.
    """
    if view.summaries is None or not len(view.old_means):
        return np.nan
    return squared_distances(view.means, view.old_means).min(axis=1).mean() / view.within.sum()


@descriptor("drift")
def variance_ratio(view):
    """Variance within the increment's classes over the carried variance within old classes. Unit: ratio."""
    return np.nan if view.summaries is None else view.within.sum() / view.summaries.variance.mean(axis=0).sum()


@descriptor("drift")
def confusion_with_old(view):
    """Share of new rows nearer to an old class mean than to the mean of their class's other rows. Unit: share."""
    return np.nan if view.summaries is None else (view.nearest_old < view.own_distances).mean()


@descriptor("drift")
def nearest_mean_accuracy_all(view):
    """Share of new rows nearer to the mean of their class's other rows than to any other mean, old ones included.

    Unit: share. Leave-one-out nearest-class-mean accuracy. Common practice.
    """
    if view.summaries is None:
        return np.nan
    return (view.own_distances < np.minimum(view.nearest_other, view.nearest_old)).mean()


@descriptor("drift")
def nearest_mean_accuracy_old(view):
    """Share of old rows (exemplars or check rows) whose nearest class mean, old or new, is their own. Unit: share."""
    old = view.old_rows
    if not len(old):
        return np.nan
    means = view.summaries.merged(*view.sample, view.boundary.n_classes).mean
    return (squared_distances(old.Z, means).argmin(axis=1) == old.y).mean()


@descriptor("drift")
def ridge_accuracy_new(view):
    """Leave-one-out accuracy on new rows of a ridge classifier over new rows and old rows, every class alike.

    Unit: share. A linear forecast of what can be had with both at hand. Source: see `BoundaryView.linear_probe`.
    """
    return view.linear_probe[0]


@descriptor("drift")
def ridge_accuracy_old(view):
    """The same ridge classifier's leave-one-out accuracy on old rows (exemplars or check rows). Unit: share."""
    return view.linear_probe[1]


@descriptor("drift")
def kernel_accuracy_new(view):
    """The same on new rows in random Fourier features of a Gaussian kernel. Unit: share.

    Above the linear one where classes are not linearly separable. Source: see `BoundaryView.kernel_probe`.
    """
    return view.kernel_probe[0]


@descriptor("drift")
def kernel_accuracy_old(view):
    """The same on old rows (exemplars or check rows). Unit: share."""
    return view.kernel_probe[1]


@descriptor("drift")
def ridge_accuracy_all(view):
    """The linear probe's accuracy on old and new classes, every class alike. Unit: share."""
    return _over_all(view, *reversed(view.linear_probe))


@descriptor("drift")
def kernel_accuracy_all(view):
    """The bent probe's accuracy on old and new classes, every class alike. Unit: share."""
    return _over_all(view, *reversed(view.kernel_probe))


@descriptor("drift")
def accuracy_in_reach(view):
    """Accuracy now on old check rows and the bent probe's on new rows, every class alike. Unit: share.

    What would be had if nothing were forgotten.
    """
    known = view.check_accuracy[np.isfinite(view.check_accuracy)]
    return _over_all(view, known.mean() if len(known) else np.nan, view.kernel_probe[0])


def _over_all(view, old, new):
    boundary = view.boundary
    return (boundary.n_old * old + (boundary.n_classes - boundary.n_old) * new) / boundary.n_classes


@descriptor("drift")
def shift_of_returning(view):
    """Mean squared distance of returning classes' new means from their carried ones, over the variance within.

    Unit: ratio.
    """
    if view.summaries is None:
        return np.nan
    returning = view.arrived < view.boundary.n_old
    if not returning.any():
        return np.nan
    carried = view.summaries.mean[view.arrived[returning]]
    return ((view.means[returning] - carried) ** 2).sum(axis=1).mean() / view.within.sum()


@descriptor("drift")
def cut_share(view):
    """Share of standardized values that were cut at 10 standard deviations. Unit: share."""
    return (np.abs(view.sample[0]) >= LARGEST_Z).mean()


@descriptor("drift")
def cut_feature(view):
    """The same share of the feature that was cut most: near 1 where one comes in another unit. Unit: share."""
    return (np.abs(view.sample[0]) >= LARGEST_Z).mean(axis=0).max()


@descriptor("drift")
def closest_classes(view):
    """Least distance of a class of the increment to another class, new or old, in units of chance; see `closest_pair`.

    Near 1 where two classes are the same, or labels are shuffled. Unit: ratio.
    """
    return view.closest_pair
