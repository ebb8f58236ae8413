import itertools

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.forecasting.trees import TreeEnsemble
from hyperforecast.storage import Bundle, read_bundle_file, write_bundle_file


def leaf(value):
    return {"leaf_value": value}


def node(feature, threshold, left, right, *, missing="None", default_left=False, decision="<="):
    return {"split_feature": feature, "threshold": threshold, "decision_type": decision, "missing_type": missing,
            "default_left": default_left, "left_child": left, "right_child": right}


def dump(*trees, n_features=2):
    return {"max_feature_idx": n_features - 1, "num_tree_per_iteration": 1, "average_output": False,
            "tree_info": [{"tree_structure": tree} for tree in trees]}


def random_tree(rng, n_features, depth):
    if depth == 0 or rng.random() < 0.15:
        return leaf(rng.normal())
    return node(int(rng.integers(n_features)), float(rng.choice([-1.0, -0.5, 0.0, 0.25, 1.0])),
                random_tree(rng, n_features, depth - 1), random_tree(rng, n_features, depth - 1),
                missing=str(rng.choice(["None", "Zero", "NaN"])), default_left=bool(rng.random() < 0.5))


def random_rows(rng, n_rows, n_features):
    return rng.choice([-2.0, -1.0, -0.5, 0.0, 1e-36, 0.25, 0.7, 1.0, 3.0, np.nan], (n_rows, n_features))


def random_dump(rng, n_trees):
    return dump(*(node(0, 0.0, random_tree(rng, 4, 5), random_tree(rng, 4, 5)) for _ in range(n_trees)), n_features=4)


def walk_by_hand(tree, row):
    """One row through one dumped tree, node by node, from LightGBM's documented rules."""
    while "leaf_value" not in tree:
        value = row[tree["split_feature"]]
        if abs(value) <= 1e-35 or (np.isnan(value) and tree["missing_type"] != "NaN"):
            value = 0.0
        if np.isnan(value) or (tree["missing_type"] == "Zero" and value == 0):
            left = tree["default_left"]
        else:
            left = value <= tree["threshold"]
        tree = tree["left_child"] if left else tree["right_child"]
    return tree["leaf_value"]


@pytest.fixture
def ensemble():
    return TreeEnsemble.from_dump(random_dump(np.random.default_rng(3), 12))


@pytest.mark.parametrize("seed", range(5))
def test_agrees_with_a_walk_by_hand(seed):
    rng = np.random.default_rng(seed)
    dumped = random_dump(rng, 8)
    X = random_rows(rng, 50, 4)
    by_hand = np.zeros(50)
    for tree in dumped["tree_info"]:
        by_hand += [walk_by_hand(tree["tree_structure"], row) for row in X]
    assert np.array_equal(TreeEnsemble.from_dump(dumped).predict(X), by_hand)


def test_two_trees_worked_out():
    first = node(0, 1.5, leaf(1.0), node(1, -2.0, leaf(2.0), leaf(4.0)))
    ensemble = TreeEnsemble.from_dump(dump(first, leaf(10.0)))
    assert ensemble.n_trees == 2
    assert ensemble.predict([[1.5, 0.0], [1.6, -2.0], [1.6, -1.9]]).tolist() == [11.0, 12.0, 14.0]
    assert ensemble.predict(np.empty((0, 2))).shape == (0,)


def test_rows_in_several_chunks(ensemble):
    X = random_rows(np.random.default_rng(0), 1300, 4)
    rows = [ensemble.predict(X[i:i + 100]) for i in range(0, 1300, 100)]
    assert np.array_equal(ensemble.predict(X), np.concatenate(rows))


def test_restricted_equals_full_for_every_mask(ensemble):
    rng = np.random.default_rng(4)
    for mask in itertools.product([False, True], repeat=4):
        fixed = np.array(mask)
        X = random_rows(rng, 40, 4)
        X[:, fixed] = X[0, fixed]
        vector = np.where(fixed, X[0], np.nan)
        restricted = ensemble.restrict(vector, fixed)
        assert restricted.n_features == 4 - fixed.sum()
        assert restricted.n_trees == ensemble.n_trees
        assert np.array_equal(restricted.predict(X[:, ~fixed]), ensemble.predict(X))
        again = TreeEnsemble.from_arrays(restricted.to_arrays("r_"), "r_")
        assert np.array_equal(again.predict(X[:, ~fixed]), ensemble.predict(X))


def test_restricting_twice_is_restricting_once(ensemble):
    rng = np.random.default_rng(5)
    X = random_rows(rng, 30, 4)
    X[:, :3] = X[0, :3]
    once = ensemble.restrict(X[0], np.array([True, True, True, False]))
    twice = ensemble.restrict(X[0], np.array([False, True, False, False]))
    twice = twice.restrict(X[0, [0, 2, 3]], np.array([True, True, False]))
    assert np.array_equal(once.split, twice.split)
    assert np.array_equal(once.predict(X[:, 3:]), twice.predict(X[:, 3:]))


def test_restricting_leaves_fewer_nodes():
    tree = node(0, 0.0, node(1, 0.0, leaf(1.0), leaf(2.0)), node(1, 5.0, leaf(3.0), leaf(4.0)))
    restricted = TreeEnsemble.from_dump(dump(tree)).restrict([7.0, 0.0], np.array([True, False]))
    assert (restricted.split.tolist(), restricted.threshold.tolist()) == ([0, -1, -1], [5.0])


def test_round_trip_through_a_file(ensemble, tmp_path):
    write_bundle_file(tmp_path / "f", Bundle("trees", 1, {}, ensemble.to_arrays("old_")))
    bundle, _ = read_bundle_file(tmp_path / "f", "trees", newest=1)
    X = random_rows(np.random.default_rng(6), 60, 4)
    assert np.array_equal(TreeEnsemble.from_arrays(bundle.arrays, "old_").predict(X), ensemble.predict(X))


def test_round_trip_of_constant_trees():
    ensemble = TreeEnsemble.from_dump(dump(leaf(0.5), leaf(0.25)))
    again = TreeEnsemble.from_arrays(ensemble.to_arrays(""), "")
    assert again.predict(np.zeros((3, 2))).tolist() == [0.75] * 3


@pytest.mark.parametrize("n_splits", [127, 128, 129, 32767, 32769])
def test_compact_indices_hold_every_split(n_splits):
    chain = leaf(0.0)
    for i in range(min(n_splits, 200)):
        chain = node(0, float(i), leaf(float(i)), chain)
    ensemble = TreeEnsemble.from_dump(dump(chain))
    # The same tree with a table of splits that is longer than it needs.
    padded = TreeEnsemble(2, np.zeros(n_splits), np.arange(n_splits), np.zeros(n_splits), np.zeros(n_splits),
                          np.where(ensemble.split == 0, n_splits - 1, ensemble.split), ensemble.leaf_value)
    assert np.array_equal(TreeEnsemble.from_arrays(padded.to_arrays(""), "").split, padded.split)


def alter(name, change):
    def altered(arrays):
        arrays[name] = change(arrays[name])
    return altered


def put(position, value):
    def change(array):
        array = array.copy()
        array[position] = value
        return array
    return change


@pytest.mark.parametrize("damage, parameter", [
    (lambda arrays: arrays.pop("t_split"), "t_split"),
    (alter("t_n_features", lambda a: a - 1), "t_feature"),
    (alter("t_n_features", lambda a: a.astype(float)), "t_n_features"),
    (alter("t_feature", put(0, 4)), "t_feature"),
    (alter("t_feature", lambda a: a[:-1]), "t_feature"),
    (alter("t_threshold", put(1, np.nan)), "t_threshold"),
    (alter("t_missing", put(0, 3)), "t_missing"),
    (alter("t_default_left", lambda a: a.astype(np.uint8)), "t_default_left"),
    (alter("t_split", lambda a: a[:-1]), "t_split"),
    (alter("t_split", lambda a: np.append(a, a[:1])), "t_split"),
    (alter("t_split", lambda a: a[:0]), "t_split"),
    (alter("t_split", lambda a: a[::-1]), "t_split"),
    (alter("t_split", put(0, 120)), "t_split"),
    (alter("t_split", put(0, -2)), "t_split"),
    (alter("t_split", lambda a: a[:, None]), "t_split"),
    (alter("t_leaf_value", lambda a: a[:-1]), "t_leaf_value"),
    (alter("t_leaf_value", put(3, np.inf)), "t_leaf_value"),
])
def test_altered_arrays_are_refused(ensemble, damage, parameter):
    arrays = ensemble.to_arrays("t_")
    damage(arrays)
    with pytest.raises(InputError) as caught:
        TreeEnsemble.from_arrays(arrays, "t_")
    assert caught.value.parameter == parameter


def test_wrong_shapes_are_refused(ensemble):
    with pytest.raises(InputError, match="rows of 4 features"):
        ensemble.predict(np.zeros((3, 5)))
    with pytest.raises(InputError, match="rows of 4 features"):
        ensemble.predict(np.zeros(4))
    with pytest.raises(InputError, match="4 values"):
        ensemble.restrict(np.zeros(3), np.ones(4, bool))
    with pytest.raises(InputError, match="boolean"):
        ensemble.restrict(np.zeros(4), np.ones(4))


@pytest.mark.parametrize("changes, words", [
    ({"tree_info": []}, "one output"),
    ({"num_tree_per_iteration": 3}, "one output"),
    ({"average_output": True}, "averaged: True"),
    ({"tree_info": [{"tree_structure": node(0, "1||3", leaf(0.0), leaf(1.0), decision="==")}]}, "categorical"),
    ({"tree_info": [{"tree_structure": {"leaf_value": 0.0, "leaf_coeff": [1.0]}}]}, "linear_tree"),
])
def test_other_models_are_refused(changes, words):
    with pytest.raises(InputError, match=words):
        TreeEnsemble.from_dump({**dump(leaf(1.0)), **changes})
