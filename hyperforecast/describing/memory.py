"""Descriptors of what the device remembers, on rows held back from training."""

import numpy as np

from hyperforecast.describing.registry import descriptor


@descriptor("memory")
def check_accuracy_old(view):
    """Accuracy now on the check rows of old classes, every class alike. Unit: share. NaN without check rows."""
    return _mean(view.check_accuracy)


@descriptor("memory")
def check_probability_old(view):
    """Mean probability now of the right class on check rows of old classes, every class alike. Unit: probability.

    It varies less from row to row than the accuracy does, and check rows are few.
    """
    return _mean(view.check_probability)


@descriptor("memory")
def exemplar_accuracy_old(view):
    """Accuracy now on exemplars of old classes, every class alike; they were trained on. Unit: share."""
    return _mean(view.exemplar_accuracy)


@descriptor("memory")
def simulated_accuracy_old(view):
    """Accuracy now on rows drawn from Gaussians with the carried class means and variances. Unit: share.

    As many rows as one likes, at the price of features that vary independently.
    """
    return view.simulated_accuracy


@descriptor("memory")
def forgetting(view):
    """Best accuracy ever on the check rows of each old class minus the accuracy now, mean over classes. Unit: share.

    Chaudhry et al. 2018, "Riemannian Walk for Incremental Learning", from memory.
    """
    if view.boundary.carryover is None:
        return np.nan
    return _mean(view.boundary.carryover.best_check_accuracy - view.check_accuracy)


@descriptor("memory")
def check_rows_per_class(view):
    """Check rows held per old class. Unit: rows."""
    boundary = view.boundary
    return len(boundary.old_check_rows) / boundary.n_old if boundary.n_old else np.nan


@descriptor("memory")
def exemplars_per_class(view):
    """Exemplars held per old class; missing for the methods without rehearsal. Unit: rows."""
    boundary = view.boundary
    return len(boundary.old_exemplars) / boundary.n_old if boundary.n_old and boundary.plan.rehearses else np.nan


@descriptor("memory")
def most_kept(view):
    """Exemplars per class that the memory allows from now on; missing for the methods without rehearsal. Unit: rows."""
    return view.boundary.most_kept if view.boundary.plan.rehearses else np.nan


@descriptor("memory")
def boundary_number(view):
    """Boundaries learned before this one. Unit: boundaries."""
    return view.boundary.number


def _mean(values):
    known = values[np.isfinite(values)]
    return known.mean() if len(known) else np.nan
