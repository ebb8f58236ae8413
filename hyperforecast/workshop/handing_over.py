"""Heads trained with scikit-learn, as arrays for `numpy.savez` that a device adopts.

    np.savez("head.npz", **arrays_of_estimator(estimator))
    hyperforecast adopt --weights head.npz --exemplars rows.npz --device cell-3

A PyTorch head of one or two linear layers needs no help: np.savez("head.npz", **{name: value.numpy() for name, value in
head.state_dict().items()}) has names that `hyperforecast.device.adopt` reads, in the order of the layers.
"""

import numpy as np
from sklearn.linear_model import LogisticRegression
from sklearn.neural_network import MLPClassifier
from sklearn.pipeline import Pipeline
from sklearn.preprocessing import StandardScaler

from hyperforecast.checks import InputError


def arrays_of_estimator(estimator):
    """Return the arrays (see `hyperforecast.device.adopt`) of a fitted classifier.

    Parameters
    ----------
    estimator : LogisticRegression, MLPClassifier or Pipeline
        The network with one hidden layer of rectified units; the pipeline of a StandardScaler and one of these.

    Raises
    ------
    InputError
        If it is something else.
    """
    if isinstance(estimator, Pipeline):
        steps = [step for _, step in estimator.steps]
        scales = isinstance(steps[0], StandardScaler) and steps[0].with_mean and steps[0].with_std
        if len(steps) != 2 or not scales:
            raise InputError("estimator", "must be a pipeline of a StandardScaler and a classifier", estimator)
        return {"center": steps[0].mean_, "scale": steps[0].scale_, **arrays_of_estimator(steps[1])}
    classes = getattr(estimator, "classes_", None)
    if isinstance(estimator, LogisticRegression) and classes is not None:
        return {"output_weights": estimator.coef_.T, "output_bias": estimator.intercept_, "classes": classes}
    if isinstance(estimator, MLPClassifier) and classes is not None:
        if len(estimator.coefs_) != 2 or estimator.activation != "relu":
            raise InputError("estimator", "must have one hidden layer of rectified units",
                             f"{len(estimator.coefs_) - 1}, {estimator.activation}")
        names = ("hidden_weights", "output_weights", "hidden_bias", "output_bias")
        return dict(zip(names, (*estimator.coefs_, *estimator.intercepts_)), classes=classes)
    raise InputError("estimator", "must be a fitted LogisticRegression or MLPClassifier", type(estimator).__name__)
