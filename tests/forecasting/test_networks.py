"""Networks: what scikit-learn trained is what numpy evaluates, at a boundary too; files that make no sense are refused."""

import numpy as np
import pytest
from sklearn.neural_network import MLPRegressor

from hyperforecast.checks import InputError
from hyperforecast.forecasting import NETWORK_LAYERS, NetworkEnsemble

N, F, Q = 200, 5, 9


@pytest.fixture(scope="module")
def fitted():
    """(ensemble, scikit-learn's networks, features): straight knots, so that inputs are the features themselves."""
    rng = np.random.default_rng(0)
    X = rng.uniform(-1, 1, (N, F))
    networks = [MLPRegressor(hidden_layer_sizes=(7, 4), max_iter=3000, random_state=k).fit(X, np.abs(X[:, 0]) + X[:, 1])
                for k in range(2)]
    parts = [(*(part for pair in zip(one.coefs_, one.intercepts_) for part in pair),) for one in networks]
    stacked = {name: np.array([part[place] for part in parts]) for place, name in enumerate(NETWORK_LAYERS)}
    stacked["weights_3"], stacked["bias_3"] = stacked["weights_3"][:, :, 0], stacked["bias_3"][:, 0]
    knots = np.tile(np.linspace(-1, 1, Q), (F, 1))
    return NetworkEnsemble(knots, knots, np.empty(0, int), stacked), networks, X


def test_outputs_are_those_of_scikit_learn(fitted):
    ensemble, networks, X = fitted
    expected = np.mean([one.predict(X) for one in networks], axis=0)
    np.testing.assert_allclose(ensemble.predict(X), expected, rtol=1e-9, atol=1e-12)
    assert np.corrcoef(ensemble.predict(X), np.abs(X[:, 0]) + X[:, 1])[0, 1] > 0.9


def some_ensemble(seed=0):
    """Features 1 and 3 may be missing."""
    rng = np.random.default_rng(seed)
    shapes = {"weights_1": (3, F + 2, 6), "bias_1": (3, 6), "weights_2": (3, 6, 4), "bias_2": (3, 4),
              "weights_3": (3, 4), "bias_3": (3,)}
    layers = {name: rng.standard_normal(shape).astype(np.float32) for name, shape in shapes.items()}
    knots = np.sort(rng.standard_normal((F, Q)), axis=1).astype(np.float32)
    return NetworkEnsemble(knots, np.sort(rng.standard_normal((F, Q)), axis=1).astype(np.float32), np.array([1, 3]),
                           layers)


def test_at_a_boundary_only_what_is_open_is_read():
    ensemble, rng = some_ensemble(), np.random.default_rng(1)
    fixed = np.array([True, True, False, True, False])
    for missing in ((), (1,), (0, 3), (0, 1, 3)):
        vector = rng.standard_normal(F)
        vector[list(missing)] = np.nan
        free = rng.standard_normal((20, 2))
        free[3, 1] = np.nan
        whole = np.tile(vector, (20, 1))
        whole[:, ~fixed] = free
        np.testing.assert_allclose(ensemble.restrict(vector, fixed).predict(free), ensemble.predict(whole), rtol=1e-9)


def test_a_missing_feature_is_neither_its_middle_nor_an_end_where_records_lacked_it():
    ensemble = some_ensemble()
    X = np.zeros((1, F))
    missing = X.copy()
    missing[0, 1] = np.nan
    inputs = ensemble.inputs(missing)
    assert inputs[0, 1] == 0 and inputs[0, F:].tolist() == [1, 0]
    assert ensemble.predict(missing) != ensemble.predict(X)
    far = np.full((1, F), 1e300)
    np.testing.assert_array_equal(ensemble.inputs(far)[0, :F], ensemble.scores[:, -1])


def test_an_ensemble_comes_back_from_its_arrays_bit_by_bit():
    ensemble, X = some_ensemble(), np.random.default_rng(2).standard_normal((30, F))
    back = NetworkEnsemble.from_arrays(ensemble.to_arrays("n_"), "n_")
    np.testing.assert_array_equal(back.predict(X), ensemble.predict(X))


@pytest.mark.parametrize("name, value, rule", [
    ("knots", np.arange(F * Q, dtype=np.float32)[::-1].reshape(F, Q), "must ascend"),
    ("scores", np.zeros((F, Q + 1), np.float32), "must have the shape"),
    ("gaps", np.array([1, F], np.int32), "must be features below 5"), ("gaps", np.array([-1, 2], np.int32), "must be"),
    ("weights_1", np.zeros((3, F, 6), np.float32), "must have the shape"),
    ("weights_2", np.full((3, 6, 4), np.nan, np.float32), "must be finite"),
    ("bias_3", np.zeros(2, np.float32), "must have the shape"), ("weights_3", np.zeros((3, 4), int), "dtype kind f"),
], ids=str)
def test_arrays_that_make_no_sense_are_refused(name, value, rule):
    with pytest.raises(InputError, match=rule):
        NetworkEnsemble.from_arrays({**some_ensemble().to_arrays("n_"), f"n_{name}": value}, "n_")
