"""Heads trained elsewhere predict the same on a device: scikit-learn's own predictions, PyTorch's layout by hand."""

import numpy as np
import pytest
from sklearn.datasets import load_digits, load_iris
from sklearn.linear_model import LogisticRegression
from sklearn.neural_network import MLPClassifier
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import StandardScaler

from hyperforecast.checks import InputError
from hyperforecast.cli import main
from hyperforecast.device import DeviceFolder, adopt_head, predict, read_weights, update
from hyperforecast.increments import check_increment
from hyperforecast.learning import HeadTrainer
from hyperforecast.learning.head import fisher_diagonal
from hyperforecast.settings import METHODS, Plan, Settings
from hyperforecast.workshop.handing_over import arrays_of_estimator

X, Y = load_iris(return_X_y=True)
NAMES = np.array(["setosa", "versicolor", "virginica"])[Y]
ESTIMATORS = {
    "logistic": LogisticRegression(max_iter=2000),
    "logistic of two": LogisticRegression(max_iter=2000),
    "scaled logistic": make_pipeline(StandardScaler(), LogisticRegression(max_iter=2000)),
    "network": MLPClassifier(16, solver="lbfgs", max_iter=3000, max_fun=60_000, random_state=0),
    "scaled network": make_pipeline(StandardScaler(), MLPClassifier(16, solver="lbfgs", max_iter=3000, random_state=0)),
    "network of two": make_pipeline(StandardScaler(), MLPClassifier(8, solver="lbfgs", max_iter=3000, random_state=0)),
}


def fitted(name):
    rows = NAMES != "setosa" if name.endswith("of two") else np.ones(len(Y), bool)
    return ESTIMATORS[name].fit(X[rows], NAMES[rows]), X[rows], NAMES[rows]


def adopted(tmp_path, arrays, increment, plan=None, **options):
    np.savez(tmp_path / "head.npz", **arrays)
    weights = read_weights(tmp_path / "head.npz")
    folder = DeviceFolder(tmp_path / "arm")
    adopt_head(folder, weights, increment, plan=plan or Plan("wa", weights.hidden_units, 5, 16, 120), **options)
    return folder


@pytest.mark.parametrize("name", ESTIMATORS)
def test_a_device_predicts_as_the_estimator_did(tmp_path, name):
    estimator, rows, labels = fitted(name)
    # Some rows only, in another order than the estimator's classes.
    some = np.random.default_rng(0).permutation(len(rows))[:60]
    folder = adopted(tmp_path, arrays_of_estimator(estimator), check_increment(rows[some], labels[some]))
    prediction = predict(folder.read().carryover, rows.astype(np.float32))
    assert (prediction.labels == estimator.predict(rows)).all()
    np.testing.assert_allclose(prediction.probabilities, estimator.predict_proba(rows), atol=2e-4)


def relu(values):
    return np.maximum(values, 0)


def test_a_state_dict_is_read_as_torch_lays_it_out(tmp_path):
    rng = np.random.default_rng(0)
    # torch.nn.Linear computes x @ weight.T + bias, weight (outputs, inputs): from memory of its documentation.
    state = {"0.weight": rng.normal(size=(5, 4)), "0.bias": rng.normal(size=5), "2.weight": rng.normal(size=(3, 5)),
             "2.bias": rng.normal(size=3)}
    scores = relu(X @ state["0.weight"].T + state["0.bias"]) @ state["2.weight"].T + state["2.bias"]
    folder = adopted(tmp_path, state, check_increment(X, NAMES))
    predicted = predict(folder.read().carryover, X.astype(np.float32)).labels
    assert (predicted == np.unique(NAMES)[scores.argmax(axis=1)]).all()


def test_a_linear_state_dict_with_classes_in_another_order(tmp_path):
    rng = np.random.default_rng(1)
    arrays = {"head.weight": rng.normal(size=(3, 4)), "head.bias": rng.normal(size=3),
              "classes": np.array(["virginica", "setosa", "versicolor"])}
    scores = X @ arrays["head.weight"].T + arrays["head.bias"]
    folder = adopted(tmp_path, arrays, check_increment(X, NAMES))
    assert (predict(folder.read().carryover, X.astype(np.float32)).labels
            == arrays["classes"][scores.argmax(axis=1)]).all()


@pytest.mark.parametrize("method", METHODS)
def test_an_adopted_device_learns_on_with_exemplars_summaries_and_importances(tmp_path, method):
    X, y = load_digits(return_X_y=True)
    known = y < 6
    estimator = make_pipeline(StandardScaler(), MLPClassifier(24, max_iter=100, tol=1e-3, random_state=0))
    estimator.fit(X[known], y[known])
    some = np.flatnonzero(known)[:300]
    increment = check_increment(X[some], y[some])
    plan = Plan(method, 24, 5, 32, 200)
    folder = adopted(tmp_path, arrays_of_estimator(estimator), increment, plan, extractor="pixels")
    generation = folder.read()
    carryover = generation.carryover
    assert generation.care.extractor == "pixels" and generation.care.steps[0]["step"] == "adopted"
    assert len(carryover.check_rows) >= 6 * 4 and carryover.summaries.count.sum() + len(carryover.check_rows) == 300
    assert len(carryover.exemplars) + len(carryover.check_rows) <= 200
    assert bool(len(carryover.exemplars)) == carryover.plan.rehearses
    assert (predict(carryover, X[known].astype(np.float32)).labels == estimator.predict(X[known])).mean() > 0.995
    if method == "ewc":
        held = {tuple(row) for row in carryover.check_rows.Z}
        Z = carryover.standardized(increment.X)
        rest = np.array([tuple(row) not in held for row in Z])
        expected = fisher_diagonal({name: carryover.head[name] for name in carryover.head if "importance" not in name},
                                   Z[rest])
        np.testing.assert_allclose(carryover.head["importance_output_weights"], expected["output_weights"], rtol=1e-3,
                                   atol=1e-7)
    new = (y == 6) | (y == 7)
    settings = Settings(0.01, 100.0 if method == "ewc" else 1.0, 20 if carryover.plan.rehearses else None)
    report = update(folder, check_increment(X[new], y[new]), settings=settings, most_lost=1, most_lost_by_class=1)
    assert report.entry["number"] == 1 and report.entry["classes_old"] == 6
    assert report.entry["achieved"]["new"] is not None and HeadTrainer().class_scores(
        folder.read().carryover.head, carryover.check_rows.Z).shape[1] in (6, 8)


def state(**changed):
    arrays = {"hidden_weights": np.ones((4, 5)), "hidden_bias": np.ones(5), "output_weights": np.ones((5, 3)),
              "output_bias": np.ones(3)}
    return {name: value for name, value in {**arrays, **changed}.items() if value is not None}


@pytest.mark.parametrize("arrays, rule", [
    ({}, "must hold hidden_weights"), (state(extra=np.ones(2)), "extra"), (state(output_bias=None), "output layer"),
    (state(hidden_bias=None), "output layer"), (state(hidden_weights=np.ones((4, 6))), "must have the shape"),
    (state(output_weights=np.ones((6, 3))), "must have the shape"), (state(center=np.ones(4)), "both center and scale"),
    (state(center=np.ones(4), scale=np.zeros(4)), "above zero"), (state(center=np.ones(3), scale=np.ones(3)), "shape"),
    (state(hidden_bias=np.full(5, np.nan)), "finite"), (state(output_bias=np.array(["a", "b", "c"])), "numbers"),
    (state(classes=np.array(["a", "b"])), "one label for each"), (state(classes=np.array(["a", "b", "a"])), "once"),
    ({"0.weight": np.ones((5, 4)), "2.weight": np.ones((3, 5)), "2.bias": np.ones(3)}, "weight and bias"),
    ({**state(), "0.weight": np.ones((5, 4))}, "must hold"), (state(output_bias=np.ones((3, 3, 3))), "table or list")])
def test_weights_that_do_not_fit_are_refused(tmp_path, arrays, rule):
    np.savez(tmp_path / "head.npz", **arrays)
    with pytest.raises(InputError, match=rule):
        read_weights(tmp_path / "head.npz")


def test_rows_plan_and_folder_must_fit_the_weights(tmp_path):
    arrays, good = arrays_of_estimator(fitted("logistic")[0]), check_increment(X, NAMES)
    for increment, plan, rule in (
            (check_increment(X[:, :3], NAMES), Plan("wa", 0), "4 features"),
            (check_increment(X[:60], NAMES[:60]), Plan("wa", 0), "each of the 3 classes"),
            (check_increment(X, Y), Plan("wa", 0), "must hold text"), (good, Plan("wa", 8), "must be 0")):
        with pytest.raises(InputError, match=rule):
            adopted(tmp_path, arrays, increment, plan)
        assert not (tmp_path / "arm").exists()
    adopted(tmp_path, arrays, good)
    with pytest.raises(InputError, match="must be a new name"):
        adopted(tmp_path, arrays, good)


@pytest.mark.parametrize("estimator", [
    LogisticRegression(), make_pipeline(LogisticRegression()), MLPClassifier((4, 4), max_iter=5000, solver="lbfgs"),
    MLPClassifier(4, activation="tanh", solver="lbfgs", max_iter=5000), StandardScaler()],
    ids=["not fitted", "no scaler", "two layers", "tanh", "no classifier"])
def test_estimators_that_are_no_such_head_are_refused(estimator):
    if isinstance(estimator, MLPClassifier):
        estimator.fit(X[:100:5], Y[:100:5])
    with pytest.raises(InputError, match="estimator"):
        arrays_of_estimator(estimator)


def test_adopting_from_the_command_line(tmp_path, capsys):
    np.savez(tmp_path / "head.npz", **arrays_of_estimator(fitted("scaled network")[0]))
    np.savez(tmp_path / "rows.npz", X=X, y=NAMES)
    command = ["adopt", "--weights", str(tmp_path / "head.npz"), "--exemplars", str(tmp_path / "rows.npz"),
               "--device", str(tmp_path / "arm"), "--method", "icarl", "--memory-limit", "60"]
    assert main(command) == 0
    assert "4 features, 16 hidden units and 3 classes" in capsys.readouterr().out
    assert main(["evaluate", "--device", str(tmp_path / "arm"), "--rows", str(tmp_path / "rows.npz")]) == 0
    assert main(command) == 2
