"""The front door: one call is one boundary, nothing changes on bad input, and scikit-learn's conventions hold."""

import copy
import dataclasses
import doctest
import json
import warnings

import numpy as np
import pandas as pd
import pytest
from sklearn.base import clone, is_classifier
from sklearn.exceptions import DataConversionWarning, NotFittedError
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import StandardScaler
from sklearn.utils.estimator_checks import parametrize_with_checks

import hyperforecast
from hyperforecast import GrowingClassifier, Settings, advise
from hyperforecast.checks import InputError
from hyperforecast.forecasting import opening_settings, save_forecaster
from hyperforecast.learning import HeadTrainer
from hyperforecast.settings import METHODS

FEATURES = 6
NAMES = np.array(["anchor", "bolt", "clamp", "dowel", "eyelet", "fitting", "gasket", "hook"])
# Far apart on a sphere of their own, so that every method can tell them from each other.
CENTRES = 4 * np.random.default_rng(7).normal(size=(len(NAMES), FEATURES))


def parts(codes, per_class=20, seed=0, text=True):
    """Return rows (n, 6) and labels of some classes, in random order."""
    rng = np.random.default_rng([seed, *codes])
    y = rng.permutation(np.repeat(codes, per_class))
    return CENTRES[y] + rng.normal(size=(len(y), FEATURES)), NAMES[y] if text else y


def fixed(method):
    """Settings that suit the parts."""
    return Settings(0.02, 1.0 if method != "ewc" else 100.0, 10 if method in ("icarl", "wa") else None)


def classifier(method="wa", **options):
    return GrowingClassifier(method, **{"hidden_units": 16, "passes": 5, "settings": fixed(method), **options})


def bits(value):
    """Return what a value holds in a form that compares bit by bit."""
    if isinstance(value, np.ndarray):
        return value.dtype.str, value.shape, value.tolist() if value.dtype == object else value.tobytes()
    if isinstance(value, dict) or dataclasses.is_dataclass(value):
        return {name: bits(part) for name, part in (value if isinstance(value, dict) else vars(value)).items()}
    return [bits(one) for one in value] if isinstance(value, (list, tuple)) else repr(value)


def state(clf):
    """All that a classifier holds."""
    return bits(vars(clf))


# Boundaries.


@pytest.mark.parametrize("text", [True, False], ids=["text", "whole numbers"])
@pytest.mark.parametrize("method", METHODS)
def test_classes_are_learned_as_they_arrive(method, text):
    clf = classifier(method)
    for codes, seen in (([3, 1], [1, 3]), ([0], [1, 3, 0]), ([5, 2], [1, 3, 0, 2, 5]), ([1, 5], [1, 3, 0, 2, 5])):
        assert clf.partial_fit(*parts(codes, seed=len(seen), text=text)) is clf
        # New labels in sorted order behind the old ones, whatever came again.
        assert clf.classes_.tolist() == (NAMES[seen] if text else np.array(seen)).tolist()
        X, y = parts(seen, per_class=10, seed=9, text=text)
        predicted, shares = clf.predict(X), clf.predict_proba(X)
        assert set(predicted) <= set(clf.classes_) and predicted.dtype.kind == clf.classes_.dtype.kind
        assert shares.shape == (len(X), len(seen)) and (shares >= 0).all()
        np.testing.assert_allclose(shares.sum(axis=1), 1, rtol=1e-12)
        np.testing.assert_array_equal(clf.classes_[shares.argmax(axis=1)], predicted)
        assert clf.score(X, y) == np.mean(predicted == y)
        weights = np.arange(len(y))
        weighted = np.sum(weights * (predicted == y)) / np.sum(weights)
        assert clf.score(X, y, sample_weight=weights) == pytest.approx(weighted, rel=1e-12)
    assert clf.advice_ is None and clf.n_features_in_ == FEATURES
    if method in ("icarl", "wa"):
        assert clf.score(X, y) > 0.85
    history = json.loads(json.dumps(clf.history_))
    assert [one["boundary"] for one in history] == [0, 1, 2, 3]
    assert [one["classes"] for one in history] == [2, 3, 5, 5]
    assert [one["new_classes"] for one in history] == [2, 1, 2, 0]
    assert [one["rows"] for one in history] == [40, 20, 40, 40]
    for one in history:
        assert one["settings"] == fixed(method).as_dict() and one["operations"] > 0
        assert not one["advised"] and not one["diverged"]


@pytest.mark.parametrize("method", METHODS)
def test_an_increment_may_be_of_one_class_even_the_first(method):
    clf = classifier(method)
    for code, seen in ((4, [4]), (2, [4, 2]), (2, [4, 2]), (6, [4, 2, 6])):
        clf.partial_fit(*parts([code]))
        assert clf.classes_.tolist() == NAMES[seen].tolist()
    X, _ = parts([4], per_class=3)
    assert clf.predict_proba(X).shape == (3, 3)


@pytest.mark.parametrize("method", METHODS)
def test_a_class_may_come_as_a_single_row(method):
    X, y = parts([0, 1])
    clf = classifier(method).partial_fit(X, y)
    clf.partial_fit(CENTRES[[2, 3]], NAMES[[2, 3]]).partial_fit(CENTRES[[4]], NAMES[[4]])
    assert len(clf.classes_) == 5 and np.isfinite(clf.predict_proba(X)).all()


def test_settings_may_change_between_boundaries():
    clf = classifier("wa", settings="advised")
    clf.partial_fit(*parts([0, 1]))
    assert clf.history_[0]["settings"] == opening_settings(clf.carryover_.plan).as_dict()
    own = Settings(0.05, 2.0, 3)
    assert clf.set_params(settings=own) is clf
    clf.partial_fit(*parts([2]))
    assert clf.history_[1]["settings"] == own.as_dict() and clf.advice_ is None
    # From this boundary on every class holds three exemplars at most.
    assert np.bincount(clf.carryover_.exemplars.y).tolist() == [3, 3, 3]
    clf.set_params(passes=2, batch_size=64, memory_limit=12, settings=fixed("wa"))
    clf.partial_fit(*parts([3]))
    assert (clf.carryover_.plan.passes, clf.carryover_.plan.memory_limit) == (2, 12)
    # Twelve rows for four classes are three each, none to check with.
    assert np.bincount(clf.carryover_.exemplars.y).tolist() == [3, 3, 3, 3] and not len(clf.carryover_.check_rows)


@pytest.mark.parametrize("name, value", [("method", "icarl"), ("hidden_units", 32)])
def test_what_the_head_is_made_of_cannot_change_once_learning_has_begun(name, value):
    clf = classifier("wa").partial_fit(*parts([0, 1]))
    given = clf.get_params()[name]
    with pytest.raises(InputError, match=f"^{name}: must stay {given!r} once learning has begun; received {value!r}; "
                                         "call fit to start anew$"):
        clf.set_params(**{name: value}).partial_fit(*parts([2]))
    clf.set_params(**{name: given}).partial_fit(*parts([2]))
    assert clf.set_params(**{name: value}).fit(*parts([2, 3])).classes_.tolist() == NAMES[[2, 3]].tolist()


def test_fit_forgets_everything():
    clf = classifier().partial_fit(*parts([0, 1])).partial_fit(*parts([2]))
    fresh = classifier().fit(*parts([3, 4]))
    assert state(clf.fit(*parts([3, 4]))) == state(fresh) and len(clf.history_) == 1


@pytest.mark.parametrize("limit, rows", [(60, 60), (np.int64(60), 60), ("2 kB", 62), ("1 KiB", 32), (7, 7)])
def test_no_more_rows_are_held_than_the_memory_takes(limit, rows):
    """A row of six float32 features with its label is 32 bytes."""
    for method in METHODS:
        clf = classifier(method, memory_limit=limit)
        for codes in ([0, 1], [2], [3, 4], [5, 6]):
            clf.partial_fit(*parts(codes))
            held = len(clf.carryover_.exemplars) + len(clf.carryover_.check_rows)
            assert 0 < held <= rows
            assert method in ("icarl", "wa") or not len(clf.carryover_.exemplars)


@pytest.mark.parametrize("limit", [2, "95 B"])
def test_memory_for_less_than_a_row_of_each_class_is_refused(limit):
    clf = classifier(memory_limit=limit).partial_fit(*parts([0, 1]))
    before = state(clf)
    with pytest.raises(InputError, match="^memory_limit: must hold at least one exemplar for each of 3 classes; "
                                         f"received {limit!r}; raise it$"):
        clf.partial_fit(*parts([2]))
    assert state(clf) == before


# Bad input changes nothing.


def bad_inputs():
    X, y = parts([2, 3])
    nan = X.copy()
    nan[3, 2] = np.nan
    yield {}, (X, y[:-1]), "y: must be one label for each of the 40 rows"
    yield {}, (nan, y), "X: must hold finite numbers that fit float32; received NaN in row 3, column 2"
    yield {}, (X[:, :5], y), "X: must have 6 features as before"
    yield {}, (X[:0], y[:0]), "X: must hold at least one row"
    yield {}, (X, None), "y: must be one label for each row; received None"
    ragged = [[label] * (1 + (label == y[0])) for label in y]
    yield {}, (X, ragged), "y: must be one label for each row; received ragged"
    yield {}, (X, np.ma.array([2, 3] * 20, mask=[0, 1] * 20)), "y: must hold no masked values"
    yield {}, (X, parts([2, 3], text=False)[1]), "y: must hold text as before; received whole numbers"
    yield {}, (X, [f" {'' if label else ''}" for label in y]), "y: must name a class in every row"
    yield {}, (X, y, NAMES[:3]), "classes: must hold every label of y"
    yield {"passes": 0}, (X, y), "passes: must be a whole number from 1 to 10000"
    yield {"batch_size": 2.5}, (X, y), "batch_size: must be a whole number"
    yield {"memory_limit": "2 elephants"}, (X, y), "memory_limit: must be a number of exemplars, or of bytes"
    yield {"memory_limit": 3}, (X, y), "memory_limit: must hold at least one exemplar for each of 4 classes"
    yield {"method": "best"}, (X, y), "method: must be one of ewc, lwf, icarl, wa; received 'best'"
    yield {"settings": Settings(2.0, 1.0, 3)}, (X, y), "learning_rate: must be a number from 1e-05 to 1; received 2.0"
    yield {"settings": Settings(0.1, 1.0)}, (X, y), "kept_per_class: must be a whole number from 1 to 80; received None"
    yield {"settings": Settings(0.1, 1.0, 81)}, (X, y), "kept_per_class: must be a whole number from 1 to 80"
    yield {"settings": "advice"}, (X, y), "settings: must be \"advised\" or a Settings; received 'advice'"
    yield {"settings": {"learning_rate": 0.1}}, (X, y), "settings: must be \"advised\" or a Settings"
    yield {"settings": None}, (X, y), "settings: must be \"advised\" or a Settings; received None"
    yield {"settings": "advised", "forecaster": 3}, (X, y), "forecaster: must be a method or the path of a forecaster"
    yield {"settings": "advised", "forecaster": "no/file"}, (X, y), "no/file: must be a readable file"


@pytest.mark.parametrize("params, arguments, line", list(bad_inputs()),
                         ids=lambda value: value if isinstance(value, str) else "")
def test_bad_input_is_told_in_a_line_and_changes_nothing(params, arguments, line):
    clf = classifier().partial_fit(*parts([0, 1]))
    fresh = classifier(**params)
    clf.set_params(**params)
    before = state(clf)
    with pytest.raises(InputError) as caught:
        clf.partial_fit(*arguments)
    assert str(caught.value).startswith(line) and str(caught.value).isprintable()
    assert state(clf) == before
    # What does not need a boundary before is refused at the first as well, and leaves nothing learned.
    if "as before" not in line and "4 classes" not in line and "forecaster" not in params:
        with pytest.raises(InputError):
            fresh.partial_fit(*arguments)
        with pytest.raises(NotFittedError):
            fresh.predict(parts([0])[0])


def test_rows_to_predict_are_checked():
    clf = classifier().partial_fit(*parts([0, 1]))
    for ask in (clf.predict, clf.predict_proba, lambda X: clf.score(X, NAMES[:len(X)])):
        with pytest.raises(InputError, match="^X: must have 6 features as before"):
            ask(np.zeros((2, 5)))
        with pytest.raises(InputError, match="^X: must hold finite numbers"):
            ask(np.full((2, 6), np.inf))
    with pytest.raises(InputError, match="^y: must be one label for each of the 3 rows"):
        clf.score(np.zeros((3, 6)), ["bolt"])


@pytest.mark.parametrize("seed", [-1, 2**32, 1.5, "0"])
def test_a_seed_is_a_whole_number(seed):
    with pytest.raises(InputError, match="^random_state: must be a whole number from 0 to 4294967295; received "):
        classifier(random_state=seed).partial_fit(*parts([0, 1]))


@pytest.mark.parametrize("method", METHODS)
def test_settings_that_make_it_diverge_are_told_and_do_no_harm(method):
    strongest = {"ewc": 1e6}.get(method, 1e3)
    wild = Settings(1.0, strongest, 5 if method in ("icarl", "wa") else None)
    clf = classifier(method, passes=20)
    X, y = parts([0, 1])
    clf.partial_fit(X, y).set_params(settings=wild).partial_fit(1e3 * parts([2])[0], parts([2])[1])
    assert clf.history_[1]["diverged"]
    assert clf.predict(X).shape == (40,)
    np.testing.assert_allclose(clf.predict_proba(X).sum(axis=1), 1, rtol=1e-12)
    # Life goes on from there.
    clf.set_params(settings=fixed(method)).partial_fit(*parts([3]))
    assert np.isfinite(clf.predict_proba(X)).all()


# Repeatability.


def course(clf, steps=(([0, 1], 0), ([2], 1), ([3, 0], 2))):
    for codes, seed in steps:
        clf.partial_fit(*parts(codes, seed=seed))
    return clf


@pytest.mark.parametrize("method", METHODS)
def test_the_same_seed_gives_the_same_bits(method):
    X, _ = parts(range(4))
    one, same, other = (course(classifier(method, random_state=seed)) for seed in (5, 5, 6))
    assert one.predict_proba(X).tobytes() == same.predict_proba(X).tobytes() != other.predict_proba(X).tobytes()
    assert state(one) == state(same)


def test_seeds_may_come_from_a_generator_or_be_drawn():
    X, _ = parts(range(4))
    one, same = (course(classifier(random_state=np.random.RandomState(3))) for _ in range(2))
    assert one.predict_proba(X).tobytes() == same.predict_proba(X).tobytes()
    drawn = [course(classifier(random_state=None)) for _ in range(2)]
    assert drawn[0].seed_ != drawn[1].seed_
    same = course(classifier(random_state=drawn[0].seed_))
    assert drawn[0].predict_proba(X).tobytes() == same.predict_proba(X).tobytes()


@pytest.mark.parametrize("method", METHODS)
def test_a_copy_goes_on_as_the_original_and_apart_from_it(method):
    clf = course(classifier(method))
    before = state(clf)
    copied = copy.deepcopy(clf)
    copied.partial_fit(*parts([4]))
    assert state(clf) == before
    clf.partial_fit(*parts([4]))
    assert state(clf) == state(copied)
    X, _ = parts(range(5))
    assert clf.predict_proba(X).tobytes() == copied.predict_proba(X).tobytes()


def test_the_caller_s_arrays_are_left_alone():
    X, y = parts([0, 1])
    X.setflags(write=False)
    y.setflags(write=False)
    clf = classifier().partial_fit(X, y).partial_fit(*parts([2]))
    kept = clf.carryover_.exemplars.Z.copy()
    X = np.array(X)
    X[:] = 0
    np.testing.assert_array_equal(clf.carryover_.exemplars.Z, kept)


# Advice.


@pytest.fixture(params=["wa", "ewc"])
def advised(request, forecasters):
    clf = classifier(request.param, settings="advised", forecaster=forecasters[request.param])
    return clf.partial_fit(*parts([0, 1])).partial_fit(*parts([2]))


def test_the_advice_is_what_partial_fit_then_follows_and_trains_nothing(advised, monkeypatch):
    X, y = parts([3, 4])
    before = state(advised)
    with monkeypatch.context() as patch:
        patch.setattr(HeadTrainer, "learn", None)
        found, again = advise(advised, X, y), advise(advised, X, y)
    assert state(advised) == before
    assert found.as_dict() == again.as_dict()
    advised.partial_fit(X, y)
    assert advised.advice_.as_dict() == found.as_dict()
    # The advised settings, or one of those to try where the boundary is unlike the few records of these tests.
    assert Settings(**advised.history_[-1]["settings"]) in found.to_try and advised.history_[-1]["advised"]
    assert found.settings.checked(advised.method)


def test_advice_can_be_asked_for_while_settings_are_given(advised):
    X, y = parts([3, 4])
    expected = advise(advised, X, y).as_dict()
    advised.set_params(settings=fixed(advised.method))
    assert advise(advised, X, y).as_dict() == expected
    assert advised.partial_fit(X, y).advice_ is None and not advised.history_[-1]["advised"]


def test_advice_keeps_to_the_memory_at_hand(forecasters):
    clf = classifier(settings="advised", forecaster=forecasters["wa"], memory_limit=12).partial_fit(*parts([0, 1]))
    found = advise(clf, *parts([2, 3]))
    assert all(one.kept_per_class <= 3 for one in (*found.ranked, found.constant))


def test_advice_cares_for_what_the_classifier_was_told(forecasters):
    told = {"old_weight": 0.9, "now_weight": 0.5, "tolerance": 0.01, "unfamiliar": "constant"}
    clf = classifier("wa", settings="advised", forecaster=forecasters["wa"], **told)
    clf.partial_fit(*parts([0, 1])).partial_fit(*parts([2], seed=1))
    assert clf.advice_.preferences.as_dict() == told
    clf.set_params(now_weight=2)
    with pytest.raises(InputError, match="^now_weight: must be a number from 0 to 1; received 2"):
        clf.partial_fit(*parts([3], seed=2))


@pytest.mark.parametrize("policy", ["constant", "warn", "try 3"])
def test_what_is_done_at_a_boundary_unlike_the_records_is_the_users_choice(policy, forecasters):
    clf = classifier("wa", settings="advised", forecaster=forecasters["wa"], unfamiliar=policy).partial_fit(*parts([0, 1]))
    X, y = parts([2], seed=1)
    if policy == "warn":
        with pytest.warns(UserWarning, match="^A boundary unlike the records: .*another unit"):
            clf.partial_fit(X * 1000, y)
    else:
        clf.partial_fit(X * 1000, y)
    found = clf.advice_
    assert not found.familiarity.familiar and found.unfamiliar == clf.history_[-1]["unfamiliar"] == policy
    learned = Settings(**clf.history_[-1]["settings"])
    if policy == "try 3":
        assert found.to_try == found.ranked[:3] and learned in found.to_try
    else:
        assert learned == found.settings == found.to_try[0] and len(found.to_try) == 1
    assert (found.settings == found.constant) == (policy == "constant")
    assert found.ranked.count(found.constant) == (policy == "constant")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        clf.partial_fit(*parts([3], seed=2))


@pytest.mark.parametrize("policy", ["try", "try 1", "try 17", "try 04 ", "constantly", 4, None])
def test_a_policy_that_there_is_not_is_refused(policy):
    with pytest.raises(InputError, match='^unfamiliar: must be "constant", "warn", or "try N" with N from 2 to 16; '):
        classifier("wa", unfamiliar=policy).partial_fit(*parts([0, 1]))


def test_there_is_no_advice_before_the_first_increment(advised):
    with pytest.raises(NotFittedError, match="has learned nothing yet"):
        advise(classifier(settings="advised"), *parts([0, 1]))
    with pytest.raises(InputError, match="^X: must have 6 features"):
        advise(advised, np.zeros((4, 5)), NAMES[:4])


def test_a_forecaster_may_be_a_file_and_must_be_of_the_method(forecasters, tmp_path):
    path = tmp_path / "small.forecaster"
    save_forecaster(path, forecasters["wa"])
    clf = classifier(settings="advised", forecaster=str(path)).partial_fit(*parts([0, 1]))
    held = classifier(settings="advised", forecaster=forecasters["wa"]).partial_fit(*parts([0, 1]))
    assert advise(clf, *parts([2])).as_dict() == advise(held, *parts([2])).as_dict()
    clf = classifier("lwf", settings="advised", forecaster=path).partial_fit(*parts([0, 1]))
    with pytest.raises(InputError, match="^forecaster: must be fitted for the method lwf; received wa$"):
        clf.partial_fit(*parts([2]))
    path.write_bytes(path.read_bytes()[:-9])
    with pytest.raises(InputError, match="small.forecaster: must be a complete forecaster file"):
        clf.partial_fit(*parts([2]))
    assert len(clf.history_) == 1


# Conventions.


def test_the_front_door_has_these_names_and_no_others():
    assert hyperforecast.__all__ == ["GrowingClassifier", "Settings", "advise", "load_forecaster"]
    assert set(hyperforecast.__all__) <= set(dir(hyperforecast))
    with pytest.raises(AttributeError, match="has no attribute 'Forecast'"):
        hyperforecast.Forecast
    assert clone(GrowingClassifier()).get_params() == {
        "method": "wa", "hidden_units": 64, "passes": 10, "batch_size": 32, "memory_limit": 2000, "settings": "advised",
        "forecaster": None, "old_weight": None, "now_weight": 1 / 3, "tolerance": 0.005,
        "unfamiliar": "try 4", "random_state": 0}


def test_the_examples_in_the_docstrings_run():
    from hyperforecast import classifier as module

    results = doctest.testmod(module)
    assert results.attempted >= 4 and not results.failed


def test_parameters_are_stored_as_given_and_shown_where_they_differ():
    limit = "2 MB"
    clf = GrowingClassifier("ewc", memory_limit=limit)
    assert clf.memory_limit is limit and repr(clf) == "GrowingClassifier(method='ewc', memory_limit='2 MB')"
    with pytest.raises(InputError, match="^units: must be one of the parameters method, hidden_units, .*; received 3$"):
        clf.set_params(units=3)
    with pytest.raises(TypeError):
        GrowingClassifier("ewc", 64)


def test_clones_know_the_parameters_and_nothing_learned():
    clf = course(classifier(settings=fixed("wa"), memory_limit="9 kB"))
    copied = clone(clf)
    assert copied.get_params() == clf.get_params() and is_classifier(copied)
    with pytest.raises(NotFittedError):
        copied.predict(parts([0])[0])
    assert state(course(copied)) == state(clf)


def test_it_works_at_the_end_of_a_pipeline():
    X, y = parts([0, 1, 2])
    pipeline = make_pipeline(StandardScaler(), classifier(passes=20)).fit(X, y)
    assert pipeline.score(X, y) > 0.9 and pipeline.predict_proba(X).shape == (60, 3)
    assert pipeline.set_params(growingclassifier__passes=3).get_params()["growingclassifier__passes"] == 3
    assert "GrowingClassifier" in repr(pipeline)


def test_data_frames_bring_their_column_names():
    def frame(codes, columns="abcdef"):
        X, y = parts(codes)
        return pd.DataFrame(X, columns=list(columns)), pd.Series(y)

    clf = classifier().partial_fit(*frame([0, 1])).partial_fit(*frame([2]))
    assert clf.feature_names_in_.tolist() == list("abcdef") and clf.feature_names_in_.dtype == object
    X, _ = frame([0, 1, 2])
    np.testing.assert_array_equal(clf.predict(X), clf.predict(X.to_numpy()))
    for ask in (clf.predict, lambda X: clf.partial_fit(X, parts([3])[1]), lambda X: advise(clf, X, parts([3])[1])):
        with pytest.raises(InputError, match="^X: must have the columns of the first increment, in their order; "
                                             "received b, a, c, d, e, f$"):
            ask(frame([3], "bacdef")[0])
    # Plain arrays have no names to compare; names that come later are no longer asked for.
    assert not hasattr(classifier().partial_fit(*parts([0, 1])).partial_fit(*frame([2])), "feature_names_in_")
    assert not hasattr(clf.fit(*parts([0, 1])), "feature_names_in_")


def test_labels_in_a_column_are_taken_with_a_warning():
    X, y = parts([0, 1])
    for column in (y[:, None], pd.DataFrame({"part": y})):
        with pytest.warns(DataConversionWarning, match="A column-vector y was passed") as told:
            clf = classifier().partial_fit(X, column)
        plain = classifier().partial_fit(X, y)
        assert clf.predict(X).tolist() == plain.predict(X).tolist() and told[0].filename == __file__
        assert clf.predict_proba(X).tobytes() == plain.predict_proba(X).tobytes()


def test_classes_told_beforehand_change_nothing():
    X, y = parts([0, 1])
    assert state(classifier().partial_fit(X, y, classes=NAMES)) == state(classifier().partial_fit(X, y))


with warnings.catch_warnings():
    # By intention: the base install has no scikit-learn to inherit from.
    warnings.filterwarnings("ignore", "Estimator GrowingClassifier does not inherit from `sklearn.base.BaseEstimator`")
    scikit_learn_checks = parametrize_with_checks(
        [GrowingClassifier()], expected_failed_checks=lambda _: {
            "check_dtype_object": "wants a TypeError for a dict among numbers; InputError is a ValueError"})


@scikit_learn_checks
def test_scikit_learn_is_content(estimator, check, forecasters, monkeypatch):
    monkeypatch.setattr("hyperforecast.classifier.load_forecaster", forecasters.get)
    check(estimator)
