"""A trainer of one's own, to copy from: scikit-learn's SGDClassifier, one logistic regression for each class."""

import numpy as np
from sklearn.linear_model import SGDClassifier

from hyperforecast.learning import Attempt, Trainer

# SGDClassifier keeps a row of coefficients for each class from three classes on.
FEWEST_ROWS = 3


class SgdTrainer(Trainer):
    """The learning rate is a constant eta0, the regularization is alpha; what is forgotten is rehearsed."""

    def learn(self, jobs, *, seed):
        return [_attempt(job, seed) for job in jobs]

    def class_scores(self, head, Z):
        return Z @ head["coef"].T + head["intercept"]


def _attempt(job, seed):
    boundary, settings = job.boundary, job.settings
    n_rows = max(boundary.n_classes, FEWEST_ROWS)
    coef, intercept = np.zeros((n_rows, boundary.n_features), np.float32), np.zeros(n_rows, np.float32)
    if boundary.carryover is not None:
        head = boundary.carryover.head
        coef[:boundary.n_old], intercept[:boundary.n_old] = head["coef"], head["intercept"]
    model = SGDClassifier(loss="log_loss", alpha=settings.regularization, learning_rate="constant",
                          eta0=settings.learning_rate, random_state=np.random.RandomState(seed))
    model.coef_, model.intercept_ = coef, intercept
    Z = np.concatenate([boundary.Z, job.exemplars.Z])
    y = np.concatenate([boundary.y, job.exemplars.y])
    for _ in range(boundary.plan.passes):
        model.partial_fit(Z, y, classes=np.arange(n_rows))
    head = {"coef": model.coef_[:boundary.n_classes], "intercept": model.intercept_[:boundary.n_classes]}
    return Attempt(settings, head, diverged=not all(np.isfinite(array).all() for array in head.values()),
                   operations=4.0 * boundary.plan.passes * Z.size * n_rows)
