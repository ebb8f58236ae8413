"""GrowingClassifier: a classifier that keeps learning; one call of `partial_fit` is one boundary."""

import inspect
import sys
import warnings

import numpy as np

from hyperforecast.checks import InputError, check_whole
from hyperforecast.describing import describe
from hyperforecast.forecasting import (
    UNFAMILIAR, Forecaster, Preferences, advise_settings, load_forecaster, opening_settings,
)
from hyperforecast.increments import Increment, check_features, check_labels
from hyperforecast.learning import (
    HeadTrainer, boundary_seed, check_accuracies, class_probabilities, close_boundary, open_boundary, predict_codes, try_settings,
)
from hyperforecast.settings import Plan, Settings, SettingsBox

ADVISED = "advised"


class GrowingClassifier:
    """Learns new classes as they arrive, without losing the old ones, with settings advised at every boundary.

    Parameters
    ----------
    method : {"ewc", "lwf", "icarl", "wa"}
    hidden_units : int
        Width of the head's hidden layer; 0 is a linear head.
    passes, batch_size : int
        Passes over the training rows at each boundary, and rows of a minibatch.
    memory_limit : int or str
        Most rows held in all, exemplars and check rows together; or bytes, as "2 MB".
    settings : "advised" or Settings
        Settings of each boundary: advised, or these.
    forecaster : None, path or Forecaster
        What advises; None is the one that ships for the method.
    old_weight : None or float in [0, 1]
        What advice cares for: weight of the accuracy on old classes, new ones having the rest; None is by class count.
    now_weight : float in [0, 1]
        Weight of the outcome at the boundary itself; the rest is that of the two boundaries that follow.
    tolerance : float in [0, 1]
        Accuracy that may be given away for fewer exemplars per class.
    unfamiliar : "constant", "warn", or "try 4" with another number from 2 to 16
        What to do at a boundary unlike the records: learn with the best constant; go on, with a `UserWarning`; or try so
        many of the ranked settings and keep what does best on rows held back from training.
    random_state : int, numpy RandomState or None
        Fixes every draw; None draws a new seed at the first increment.

    Attributes
    ----------
    classes_ : ndarray of shape (C,)
        Labels in order of arrival.
    n_features_in_ : int
    feature_names_in_ : ndarray of str
        Where the first increment had column names.
    advice_ : Advice or None
        That of the last boundary; None at the first increment, or where settings were given.
    history_ : list of dict
        What happened at each boundary.
    carryover_ : Carryover
        Everything that is kept between boundaries.

    Examples
    --------
    >>> import numpy as np
    >>> from hyperforecast import GrowingClassifier, Settings
    >>> rng = np.random.default_rng(0)
    >>> clf = GrowingClassifier(settings=Settings(learning_rate=0.02, regularization=0.1, kept_per_class=20))
    >>> X, y = rng.normal(size=(60, 4)), np.repeat(["nut", "bolt", "hook"], 20)
    >>> clf.partial_fit(X[:40], y[:40]).partial_fit(X[40:], y[40:]).classes_.tolist()
    ['bolt', 'nut', 'hook']
    """

    def __init__(self, method="wa", *, hidden_units=64, passes=10, batch_size=32, memory_limit=2000, settings=ADVISED,
                 forecaster=None, old_weight=None, now_weight=1 / 3, tolerance=0.005, unfamiliar=UNFAMILIAR,
                 random_state=0):
        self.method = method
        self.hidden_units = hidden_units
        self.passes = passes
        self.batch_size = batch_size
        self.memory_limit = memory_limit
        self.settings = settings
        self.forecaster = forecaster
        self.old_weight = old_weight
        self.now_weight = now_weight
        self.tolerance = tolerance
        self.unfamiliar = unfamiliar
        self.random_state = random_state

    def fit(self, X, y):
        """Forget everything and learn (X, y) as a first increment; return self."""
        for name in [name for name in vars(self) if name.endswith("_")]:
            delattr(self, name)
        return self.partial_fit(X, y)

    def partial_fit(self, X, y, classes=None):
        """Learn an increment; return self.

        Parameters
        ----------
        X : array-like of shape (n, d)
        y : array-like of shape (n,)
            Labels, text or whole numbers; new ones are welcome.
        classes : array-like, optional
            Accepted for agreement with other classifiers: labels of y must be among them.

        Raises
        ------
        InputError
            If data or parameters break a rule; nothing is changed then.
        """
        increment = self._increment(X, y)
        if classes is not None and not np.isin(increment.y, np.asarray(classes)).all():
            raise InputError("classes", "must hold every label of y", np.setdiff1d(increment.y, classes))
        seed = self._seed()
        boundary, given, advice = self._boundary(increment, seed), self._given_settings(), None
        if given is None and boundary.carryover is not None:
            advice = self._advice_at(boundary, seed)
        if advice is not None and advice.unfamiliar == "warn":
            warnings.warn(f"A boundary unlike the records: {'; '.join(advice.familiarity.why)}.", stacklevel=2)
        candidates = [given or opening_settings(boundary.plan)] if advice is None else advice.to_try
        trainer = HeadTrainer()
        attempts = try_settings(trainer, boundary, candidates, seed=boundary_seed(seed, boundary.carryover))
        scores = check_accuracies(trainer, boundary, attempts, old_weight=self.old_weight)
        attempt = attempts[int(np.argmax(scores))]
        carryover = close_boundary(trainer, boundary, attempt, seed=boundary_seed(seed, boundary.carryover))
        if boundary.carryover is None:
            self.seed_, self.history_, self.n_features_in_ = seed, [], increment.n_features
            names = _column_names(X)
            if names is not None:
                self.feature_names_in_ = names
        self.carryover_, self.advice_ = carryover, advice
        self.history_ = [*self.history_, {
            "boundary": boundary.number, "rows": len(increment), "classes": len(carryover.classes),
            "new_classes": boundary.n_classes - boundary.n_old, "settings": attempt.settings.as_dict(),
            "advised": advice is not None, "unfamiliar": advice and advice.unfamiliar, "diverged": attempt.diverged, "operations": attempt.operations,
        }]
        return self

    def predict(self, X):
        """Return the predicted labels (n,) of rows X (n, d)."""
        carryover, Z = self._standardized(X)
        return carryover.classes[predict_codes(HeadTrainer(), carryover.head, Z)]

    def predict_proba(self, X):
        """Return class probabilities (n, C) of rows X (n, d), columns in the order of `classes_`."""
        carryover, Z = self._standardized(X)
        return class_probabilities(HeadTrainer(), carryover.head, Z)

    def score(self, X, y, sample_weight=None):
        """Return the accuracy of `predict(X)` against labels y (n,), rows weighted by `sample_weight`."""
        hits = self.predict(X) == check_labels(y, len(X))
        return float(np.average(hits, weights=sample_weight))

    @property
    def classes_(self):
        """Labels seen, in order of arrival, shape (C,)."""
        return self._fitted().classes

    def get_params(self, deep=True):
        """Return the constructor's arguments by name; `deep` changes nothing."""
        return {name: getattr(self, name) for name in _parameter_names()}

    def set_params(self, **params):
        """Set constructor arguments, between boundaries too; return self."""
        for name, value in params.items():
            if name not in _parameter_names():
                raise InputError(name, f"must be one of the parameters {', '.join(_parameter_names())}", repr(value))
            setattr(self, name, value)
        return self

    def __repr__(self):
        given = ", ".join(f"{name}={value!r}" for name, value in self.get_params().items()
                          if repr(value) != repr(_defaults()[name]))
        return f"{type(self).__name__}({given})"

    def __sklearn_tags__(self):
        return _estimator_tags()

    def __sklearn_is_fitted__(self):
        return hasattr(self, "carryover_")

    def _plan(self):
        plan = Plan(self.method, self.hidden_units, self.passes, self.batch_size, self.memory_limit).checked()
        carryover = getattr(self, "carryover_", None)
        if carryover is not None:
            for name in ("method", "hidden_units"):
                if getattr(plan, name) != getattr(carryover.plan, name):
                    raise InputError(name, f"must stay {getattr(carryover.plan, name)!r} once learning has begun",
                                     repr(getattr(plan, name)), "call fit to start anew")
        return plan

    def _seed(self):
        if hasattr(self, "seed_"):
            return self.seed_
        if self.random_state is None:
            return int(np.random.default_rng().integers(2**31))
        if isinstance(self.random_state, np.random.RandomState):
            return int(self.random_state.randint(2**31 - 1))
        return check_whole("random_state", self.random_state, high=2**32 - 1)

    def _increment(self, X, y):
        features = self._features(X)
        if y is None:
            raise InputError("y", "must be one label for each row", "None",
                             f"{type(self).__name__} requires y to be passed, but the target y is None")
        if getattr(y, "ndim", 1) == 2 and y.shape[1] == 1:
            _warn_of_column()
            y = np.asarray(y)[:, 0]
        return Increment(features, check_labels(y, len(features)))

    def _features(self, X):
        """Return checked features (n, d); their number and names must be those of the first increment."""
        expected, names = getattr(self, "feature_names_in_", None), _column_names(X)
        if expected is not None and names is not None and list(names) != list(expected):
            raise InputError("X", "must have the columns of the first increment, in their order",
                             ", ".join(map(str, names)))
        features = check_features(X)
        known = getattr(self, "n_features_in_", features.shape[1])
        if features.shape[1] != known:
            raise InputError("X", f"must have {known} features as before",
                             f"X has {features.shape[1]} features, but {type(self).__name__} is expecting {known} "
                             "features as input")
        return features

    def _boundary(self, increment, seed):
        carryover = getattr(self, "carryover_", None)
        self._preferences()
        return open_boundary(self._plan(), carryover, increment, seed=boundary_seed(seed, carryover))

    def _advice_at(self, boundary, seed):
        forecaster = self.forecaster
        if not isinstance(forecaster, Forecaster):
            forecaster = load_forecaster(self.method if forecaster is None else forecaster)
        if forecaster.method != self.method:
            raise InputError("forecaster", f"must be fitted for the method {self.method}", forecaster.method)
        descriptors = describe(HeadTrainer(), boundary, seed=boundary_seed(seed, boundary.carryover))
        last = getattr(self, "advice_", None)
        return advise_settings(forecaster, descriptors, SettingsBox(self.method, boundary.most_kept),
                               before=last and last.descriptors, **self._preferences().as_dict())

    def _preferences(self):
        return Preferences(self.old_weight, self.now_weight, self.tolerance, self.unfamiliar).checked()

    def _given_settings(self):
        """Return the user's own `Settings`, checked; None where they are to be advised."""
        if isinstance(self.settings, Settings):
            return self.settings.checked(self.method)
        if not isinstance(self.settings, str) or self.settings != ADVISED:
            raise InputError("settings", f'must be "{ADVISED}" or a Settings', repr(self.settings))
        return None

    def _fitted(self):
        if not hasattr(self, "carryover_"):
            raise _not_fitted(f"This {type(self).__name__} has learned nothing yet; call partial_fit or fit first.")
        return self.carryover_

    def _standardized(self, X):
        carryover = self._fitted()
        return carryover, carryover.standardized(self._features(X))


def advise(classifier, X, y):
    """Return the `Advice` that a `GrowingClassifier` would follow if (X, y) arrived now; nothing is trained.

    Raises
    ------
    InputError
        If the classifier has seen no increment yet (its first settings are fixed), or the data break a rule.
    """
    classifier._fitted()
    increment = classifier._increment(X, y)
    seed = classifier._seed()
    return classifier._advice_at(classifier._boundary(increment, seed), seed)


def _parameter_names():
    return list(_defaults())


def _defaults():
    parameters = inspect.signature(GrowingClassifier.__init__).parameters
    return {name: one.default for name, one in parameters.items() if name != "self"}


def _column_names(X):
    """Column names of a data frame, if they are all text; else None."""
    columns = getattr(X, "columns", None)
    if columns is None:
        return None
    names = np.asarray(columns, dtype=object)
    return names if all(isinstance(name, str) for name in names) else None


def _warn_of_column():
    """Warn as scikit-learn does where it is loaded."""
    category = UserWarning
    if "sklearn" in sys.modules:
        from sklearn.exceptions import DataConversionWarning as category
    warnings.warn("A column-vector y was passed when a 1d array was expected.", category, stacklevel=4)


def _not_fitted(message):
    """scikit-learn's exception where it is loaded; it too is a ValueError."""
    if "sklearn" in sys.modules:
        from sklearn.exceptions import NotFittedError

        return NotFittedError(message)
    return ValueError(message)


def _estimator_tags():
    """scikit-learn asks for these, so that it is installed."""
    from sklearn.utils import ClassifierTags, InputTags, Tags, TargetTags

    return Tags(estimator_type="classifier", target_tags=TargetTags(required=True),
                classifier_tags=ClassifierTags(), input_tags=InputTags())
