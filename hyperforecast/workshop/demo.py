"""The demo: six deliveries to the sorting cell of a salvage yard, learned with advice and with the best constant."""

import io
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from sklearn.linear_model import LogisticRegression
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import StandardScaler

from hyperforecast.classifier import GrowingClassifier, advise
from hyperforecast.forecasting import load_forecaster
from hyperforecast.metrics import class_accuracies
from hyperforecast.storage import write_atomically
from hyperforecast.workshop.handing_over import arrays_of_estimator
from hyperforecast.workshop.streams.salvage_yard import DELIVERIES, FAMILIES, salvage_yard_stream

METHOD = "wa"
# The cell's controller has room for this many parts.
MEMORY_LIMIT = 400


@dataclass(frozen=True)
class Delivery:
    """One delivery, learned in both ways.

    Attributes
    ----------
    number : int
        From 1.
    families : tuple of str
        New part families.
    advice : Advice or None
        None at the first delivery, where nothing can be forgotten.
    advised, constant : ndarrays of shape (18,)
        Accuracy afterwards on unseen parts of every family, with advice and with the best constant settings; NaN
        for families that are still to come.
    constant_settings : Settings
    """

    number: int
    families: tuple
    advice: object
    advised: np.ndarray
    constant: np.ndarray
    constant_settings: object


def run_demo(*, seed=0, progress=None):
    """Go through the deliveries; return the list of `Delivery`.

    Parameters
    ----------
    seed : int
        Of pictures and training.
    progress : callable, optional
        Called with each `Delivery`.
    """
    stream = salvage_yard_stream(seed)
    forecaster = load_forecaster(METHOD)
    options = {"method": METHOD, "memory_limit": MEMORY_LIMIT, "forecaster": forecaster, "random_state": seed}
    with_advice, with_constant = GrowingClassifier(**options), GrowingClassifier(**options)
    deliveries = []
    for t, families in enumerate(DELIVERIES):
        arrived = stream.training(t)
        if t:
            # The constant may be relative to the boundary's scales: it is asked for at each.
            with_constant.set_params(settings=advise(with_constant, arrived.X, arrived.y).constant)
        for classifier in (with_advice, with_constant):
            classifier.partial_fit(arrived.X, arrived.y)
        unseen = stream.scoring(t)
        deliveries.append(Delivery(
            t + 1, families, with_advice.advice_, _by_family(with_advice, unseen), _by_family(with_constant, unseen),
            with_constant.settings))
        if progress:
            progress(deliveries[-1])
    return deliveries


def _by_family(classifier, unseen):
    seen = np.unique(unseen.y)
    by_family = np.full(len(FAMILIES), np.nan)
    by_family[[FAMILIES.index(family) for family in seen]] = class_accuracies(unseen.y, classifier.predict(unseen.X))
    return by_family


def write_trained_head(folder, *, seed):
    """Write head.npz, a linear head that scikit-learn trained on the first delivery at base; return its path.

    With the deliveries of the same seed beside it (`write_deliveries`) a device can start from it.
    """
    first = salvage_yard_stream(seed).training(0)
    trained = make_pipeline(StandardScaler(), LogisticRegression(max_iter=1000)).fit(first.X, first.y)
    written, path = io.BytesIO(), Path(folder) / "head.npz"
    np.savez(written, **arrays_of_estimator(trained))
    write_atomically(path, written.getvalue())
    return path
