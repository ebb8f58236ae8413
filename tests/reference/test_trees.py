"""The evaluator of trees against LightGBM itself: equal to the last bit."""

import re

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.forecasting.trees import TreeEnsemble

lightgbm = pytest.importorskip("lightgbm")

N_FEATURES = 9


def drawn_rows(rng, n_rows):
    """Rows with NaN, zeros, tiny numbers, ties and a constant feature."""
    X = rng.normal(size=(n_rows, N_FEATURES))
    X[:, 1] = rng.integers(-3, 4, n_rows)
    X[:, 2] = rng.random(n_rows) * 1e-35
    X[:, 3] *= 1e12
    X[:, 4] = 1.0
    X[:, :4][rng.random((n_rows, 4)) < 0.25] = np.nan
    X[:, 5:7][rng.random((n_rows, 2)) < 0.3] = 0.0
    return X


def fitted(X, y, **parameters):
    parameters = {"num_leaves": 31, "min_data_in_leaf": 5, "verbose": -1, "num_threads": 1, "seed": 0, **parameters}
    return lightgbm.train(parameters, lightgbm.Dataset(X, y), 30)


@pytest.fixture(scope="module")
def data():
    rng = np.random.default_rng(0)
    X = drawn_rows(rng, 1500)
    first, second = np.nan_to_num(X[:, 0], nan=0.7), np.nan_to_num(X[:, 1], nan=2)
    y = first * (X[:, 5] == 0) + np.abs(second) + X[:, 6] * X[:, 7] + 0.3 * rng.normal(size=len(X))
    unseen = drawn_rows(rng, 700)
    unseen[0], unseen[1], unseen[2] = np.nan, np.inf, -np.inf
    unseen[3:6, 5] = -0.0, 1e-35, -1e-35
    unseen[6:6 + N_FEATURES] = 0.0
    np.fill_diagonal(unseen[6:6 + N_FEATURES], np.inf)
    return X, y, unseen


MISSING = {
    "NaN": {},
    "Zero": {"zero_as_missing": True},
    "None": {"use_missing": False},
}


@pytest.mark.parametrize("missing", MISSING)
@pytest.mark.parametrize("objective", ["l2", "quantile", "binary", "huber"])
def test_raw_scores_equal_lightgbm(data, objective, missing):
    X, y, unseen = data
    y = (y > np.median(y)).astype(float) if objective == "binary" else y
    booster = fitted(X, y, objective=objective, **MISSING[missing])
    dump = booster.dump_model()
    ensemble = TreeEnsemble.from_dump(dump)
    assert missing in str(dump)
    assert ensemble.n_trees == booster.num_trees()
    for rows in (X, unseen):
        assert np.array_equal(ensemble.predict(rows), booster.predict(rows, raw_score=True))


def test_a_quantile_forecast_is_its_raw_score(data):
    X, y, unseen = data
    booster = fitted(X, y, objective="quantile", alpha=0.9)
    assert np.array_equal(TreeEnsemble.from_dump(booster.dump_model()).predict(unseen), booster.predict(unseen))


@pytest.mark.parametrize("seed", range(12))
def test_restricted_equals_lightgbm_for_random_masks(data, seed):
    X, y, unseen = data
    rng = np.random.default_rng(seed)
    booster = fitted(X[:600], y[:600], **list(MISSING.values())[seed % 3])
    ensemble = TreeEnsemble.from_dump(booster.dump_model())
    fixed = rng.random(N_FEATURES) < rng.random()
    rows = unseen[rng.permutation(len(unseen))[:200]]
    rows[:, fixed] = rows[0, fixed]
    restricted = ensemble.restrict(rows[0], fixed)
    assert np.array_equal(restricted.predict(rows[:, ~fixed]), booster.predict(rows, raw_score=True))


def test_float32_rows_are_compared_in_float64(data):
    X, y, unseen = data
    booster = fitted(X, y)
    rows = unseen.astype(np.float32)
    expected = booster.predict(rows.astype(np.float64), raw_score=True)
    assert np.array_equal(TreeEnsemble.from_dump(booster.dump_model()).predict(rows), expected)


def test_stored_trees_equal_lightgbm(data):
    X, y, unseen = data
    booster = fitted(X, y, num_leaves=200, min_data_in_leaf=2)
    arrays = TreeEnsemble.from_dump(booster.dump_model()).to_arrays("median_")
    assert np.array_equal(TreeEnsemble.from_arrays(arrays, "median_").predict(unseen),
                          booster.predict(unseen, raw_score=True))


@pytest.mark.parametrize("threshold", ["0", "-1.0000000180025095e-35", "5e-36"])
def test_tiny_numbers_are_zero_as_in_lightgbm(threshold):
    rng = np.random.default_rng(2)
    booster = fitted(rng.normal(size=(100, 1)), rng.normal(size=100), num_leaves=2)
    text = re.sub(r"(?m)^threshold=.*$", f"threshold={threshold}", booster.model_to_string())
    booster = lightgbm.Booster(model_str=re.sub(r"(?m)^tree_sizes=.*\n", "", text))  # they no longer hold
    X = np.array([[0], [1e-36], [-1e-36], [1e-35], [np.float32(-1e-35)], [2e-35], [-2e-35], [np.nan]])
    expected = booster.predict(X, raw_score=True)
    assert len(set(expected)) > 1
    assert np.array_equal(TreeEnsemble.from_dump(booster.dump_model()).predict(X), expected)


def test_trees_without_a_split_equal_lightgbm(data):
    X, y, unseen = data
    booster = fitted(X, y, min_data_in_leaf=1400)
    assert np.array_equal(TreeEnsemble.from_dump(booster.dump_model()).predict(unseen),
                          booster.predict(unseen, raw_score=True))


@pytest.mark.parametrize("parameters, words", [
    ({"linear_tree": True}, "linear"),
    ({"boosting": "rf", "bagging_freq": 1, "bagging_fraction": 0.5}, "averaged: True"),
    ({"objective": "multiclass", "num_class": 3}, "3 an iteration"),
    ({"categorical_feature": [1], "min_data_per_group": 5}, "categorical"),
])
def test_lightgbm_models_of_other_kinds_are_refused(parameters, words):
    rng = np.random.default_rng(1)
    X = rng.normal(size=(400, 2))
    X[:, 1] = rng.integers(0, 6, 400)
    y = X[:, 1] % 3
    dataset = lightgbm.Dataset(X, y, categorical_feature=parameters.pop("categorical_feature", "auto"))
    booster = lightgbm.train({"verbose": -1, "num_threads": 1, **parameters}, dataset, 3)
    with pytest.raises(InputError, match=words):
        TreeEnsemble.from_dump(booster.dump_model())
