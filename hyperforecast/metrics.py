"""Accuracy of one model, and of a model that learned task after task.

In an accuracy matrix R of shape (T, T), R[i, j] is the accuracy on task j after learning task i. The
lower triangle must be measured; above the diagonal NaN means not measured. Accuracies lie in [0, 1].
"""

import numpy as np

from hyperforecast.checks import InputError


def class_accuracies(y, predicted):
    """Return the share of each class's rows that is predicted rightly.

    Parameters
    ----------
    y : array of shape (n,)
        True labels, n >= 1.
    predicted : array of shape (..., n)
        Predicted labels; leading axes hold several predictions of the same rows.

    Returns
    -------
    ndarray of shape (..., C)
        In the order of ``np.unique(y)``, the C classes present.
    """
    y, predicted = np.asarray(y), np.asarray(predicted)
    if y.ndim != 1 or len(y) == 0:
        raise InputError("y", "must hold one label for each of at least one row", f"shape {y.shape}")
    if predicted.ndim == 0 or predicted.shape[-1] != len(y):
        raise InputError("predicted", f"must hold {len(y)} labels in its last axis, as y does",
                         f"shape {predicted.shape}")
    if (y.dtype.kind in "US") != (predicted.dtype.kind in "US"):
        raise InputError("predicted", f"must hold labels of the same kind as y, {y.dtype}", predicted.dtype)
    order = np.argsort(y, kind="stable")
    _, starts, counts = np.unique(y[order], return_index=True, return_counts=True)
    hits = (predicted == y)[..., order]
    return np.add.reduceat(hits, starts, axis=-1, dtype=np.float64) / counts


def balanced_accuracy(y, predicted):
    """Return the mean of `class_accuracies`: an ndarray of shape predicted.shape[:-1], or a float for one prediction.

    Errors as `class_accuracies`.
    """
    balanced = class_accuracies(y, predicted).mean(axis=-1)
    return float(balanced) if balanced.ndim == 0 else balanced


def average_accuracy(R, *, test_sizes=None):
    """Return ACC, the mean accuracy over all tasks after the last one.

    Parameters
    ----------
    R : array of shape (T, T)
        Accuracy matrix.
    test_sizes : array of shape (T,), optional
        Weight of each task, such as its test rows, or its classes where R holds balanced accuracies.

    References
    ----------
    Lopez-Paz & Ranzato 2017, "Gradient Episodic Memory for Continual Learning" (formula from memory).
    """
    R = _check_matrix(R)
    return float(np.average(R[-1], weights=_check_sizes(test_sizes, len(R))))


def average_incremental_accuracy(R, *, test_sizes=None):
    """Return the mean, over all steps, of the accuracy on the tasks seen so far.

    Parameters are those of `average_accuracy`; weighted by test rows, each step's accuracy is that over
    all rows of the classes seen, as published.

    References
    ----------
    Rebuffi et al. 2017, "iCaRL: Incremental Classifier and Representation Learning" (from memory).
    """
    R = _check_matrix(R)
    sizes = _check_sizes(test_sizes, len(R))
    return float(np.mean([np.average(R[k, :k + 1], weights=sizes[:k + 1]) for k in range(len(R))]))


def backward_transfer(R):
    """Return BWT, the mean change of earlier tasks' accuracy since each was learned; negative is forgetting.

    Needs T >= 2 tasks.

    References
    ----------
    Lopez-Paz & Ranzato 2017, "Gradient Episodic Memory for Continual Learning" (formula from memory).
    """
    R = _check_matrix(R, fewest=2)
    return float(np.mean(R[-1, :-1] - np.diag(R)[:-1]))


def task_forgetting(R):
    """Return, for each task but the last, its best earlier accuracy minus its last one: shape (T - 1,), T >= 2.

    References
    ----------
    Chaudhry et al. 2018, "Riemannian Walk for Incremental Learning" (formula from memory).
    """
    R = _check_matrix(R, fewest=2)
    # fmax passes over what was not measured above the diagonal.
    return np.fmax.reduce(R[:-1, :-1], axis=0) - R[-1, :-1]


def forgetting(R):
    """Return the mean of `task_forgetting`; never less than the negated backward transfer."""
    return float(np.mean(task_forgetting(R)))


def intransigence(R, joint):
    """Return how much worse each task was learned than by joint training: shape (T,).

    Parameters
    ----------
    R : array of shape (T, T)
        Accuracy matrix.
    joint : array of shape (T,)
        Accuracy on task k of a model trained on tasks 0..k together; NaN, where not measured, gives NaN.

    References
    ----------
    Chaudhry et al. 2018, "Riemannian Walk for Incremental Learning" (formula from memory).
    """
    R = _check_matrix(R)
    joint = np.asarray(joint, dtype=np.float64)
    if joint.shape != (len(R),) or not np.all(np.isnan(joint) | ((joint >= 0) & (joint <= 1))):
        raise InputError("joint", f"must hold {len(R)} accuracies in [0, 1], or NaN", np.array2string(joint))
    return joint - np.diag(R)


def _check_matrix(R, fewest=1):
    R = np.asarray(R, dtype=np.float64)
    if R.ndim != 2 or R.shape[0] != R.shape[1] or len(R) < fewest:
        raise InputError("R", f"must be a square matrix over at least {fewest} tasks", f"shape {R.shape}")
    learned = np.tril(np.ones(R.shape, dtype=bool))
    wrong = ~((R >= 0) & (R <= 1)) & (learned | ~np.isnan(R))
    if wrong.any():
        i, j = np.argwhere(wrong)[0]
        raise InputError("R", "must hold accuracies in [0, 1], NaN only above the diagonal", f"{R[i, j]} at [{i}, {j}]")
    return R


def _check_sizes(sizes, n_tasks):
    if sizes is None:
        return np.ones(n_tasks)
    sizes = np.asarray(sizes, dtype=np.float64)
    if sizes.shape != (n_tasks,) or not np.all(np.isfinite(sizes) & (sizes > 0)):
        raise InputError("test_sizes", f"must hold {n_tasks} positive numbers", np.array2string(sizes))
    return sizes
