"""The learners against closed forms, published examples and scikit-learn, through the real training loop."""

import itertools

import numpy as np
import pytest
from scipy.linalg import hadamard
from scipy.special import log_softmax, softmax
from sklearn.datasets import load_digits, load_iris, load_wine
from sklearn.linear_model import LogisticRegression

from hyperforecast.increments import Increment
from hyperforecast.learning import (
    HeadTrainer, Job, align_weights, close_boundary, distillation, herd, open_boundary, predict_codes, side_by_side,
    try_settings,
)
from hyperforecast.learning.head import HeadLayout, fisher_diagonal, head_logits, new_head, top_curvature
from hyperforecast.learning.objectives import Objective
from hyperforecast.learning.side_by_side import Regimen, train_side_by_side
from hyperforecast.settings import Plan, Settings

PARTS = ("hidden_weights", "hidden_bias", "output_weights", "output_bias")


def drawn_head(rng, n_features, hidden_units, n_classes):
    """A head with every part away from zero."""
    head = new_head(n_features, hidden_units, rng)
    width = hidden_units or n_features
    head["output_weights"] = rng.standard_normal((width, n_classes)).astype(np.float32)
    head["output_bias"] = rng.standard_normal((1, n_classes)).astype(np.float32)
    if hidden_units:
        head["hidden_bias"] = 0.3 * rng.standard_normal((1, hidden_units)).astype(np.float32)
    return {name: head[name] for name in PARTS if name in head}


def pack(parts):
    """Parts in one float64 vector, in the order of PARTS."""
    return np.concatenate([parts[name].ravel() for name in PARTS if name in parts]).astype(np.float64)


def unpack(theta, head):
    splits = np.cumsum([part.size for part in head.values()])[:-1]
    return {name: part.reshape(head[name].shape) for name, part in zip(head, np.split(theta, splits))}


def outputs(head, Z):
    if "hidden_weights" in head:
        Z = np.maximum(Z @ head["hidden_weights"] + head["hidden_bias"], 0)
    return Z @ head["output_weights"] + head["output_bias"]


def jacobian(head, Z, step=1e-6):
    """Derivative (N, C, P) of the outputs by central differences in float64."""
    theta = pack(head)
    columns = []
    for i in range(len(theta)):
        ahead, behind = theta.copy(), theta.copy()
        ahead[i] += step
        behind[i] -= step
        columns.append((outputs(unpack(ahead, head), Z) - outputs(unpack(behind, head), Z)) / (2 * step))
    return np.stack(columns, axis=-1)


# Curvature


def test_fisher_diagonal_of_a_linear_head_is_its_hessian_diagonal():
    # Kirkpatrick et al. 2017; that both agree for a softmax-linear head: Martens 2020, section 9 (from memory).
    rng = np.random.default_rng(0)
    head, Z = drawn_head(rng, 4, 0, 3), rng.standard_normal((20, 4)).astype(np.float32)
    y, rows = rng.integers(3, size=20), np.arange(20)

    def loss(theta):
        return -log_softmax(outputs(unpack(theta, head), Z.astype(np.float64)), axis=1)[rows, y].mean()

    theta, step = pack(head), 1e-4
    second = np.empty_like(theta)
    for i in range(len(theta)):
        ahead, behind = theta.copy(), theta.copy()
        ahead[i] += step
        behind[i] -= step
        second[i] = (loss(ahead) - 2 * loss(theta) + loss(behind)) / step**2
    np.testing.assert_allclose(pack(fisher_diagonal(head, Z)), second, rtol=1e-4, atol=1e-6)


@pytest.mark.parametrize("hidden_units", [0, 5])
def test_fisher_diagonal_is_the_expectation_over_labels(hidden_units):
    # Kirkpatrick et al. 2017: squared gradients of log p(label), labels from the model; here summed over every label.
    rng = np.random.default_rng(1)
    head, Z = drawn_head(rng, 4, hidden_units, 3), rng.standard_normal((25, 4)).astype(np.float32)
    J, p = jacobian(head, Z.astype(np.float64)), softmax(outputs(head, Z.astype(np.float64)), axis=1)
    expected = np.zeros(J.shape[2])
    for label in range(3):
        score = J[:, label] - np.einsum("nc,ncp->np", p, J)
        expected += (p[:, label, None] * score**2).mean(axis=0)
    np.testing.assert_allclose(pack(fisher_diagonal(head, Z)), expected, rtol=2e-5, atol=1e-7)


def hessians_at_outputs(method, logits, n_old, arrived):
    """Hessians (N, C, C) of the unanchored loss and of the anchor at the outputs; formulas as in the gradient tests."""
    n_rows, n_classes = logits.shape
    loss, anchor = np.zeros((2, n_rows, n_classes, n_classes))
    follows = np.setdiff1d(np.arange(n_old), arrived)
    for n in range(n_rows):
        if method == "icarl":
            p = 1 / (1 + np.exp(-logits[n]))
            loss[n] = np.diag(p * (1 - p))
            anchor[n, follows, follows] = loss[n, follows, follows]
            loss[n, follows, follows] = 0
            continue
        chosen = arrived if method == "lwf" else np.arange(n_classes)
        p = softmax(logits[n, chosen])
        loss[n][np.ix_(chosen, chosen)] = np.diag(p) - np.outer(p, p)
        q = softmax(logits[n, :n_old] / 2)  # temperature 2: T^2 of the loss and 1/T^2 of softening cancel
        anchor[n, :n_old, :n_old] = np.diag(q) - np.outer(q, q)
    return loss, anchor


@pytest.mark.parametrize("hidden_units", [0, 5])
@pytest.mark.parametrize("method", ["ewc", "lwf", "icarl", "wa"])
def test_top_curvature_is_the_largest_eigenvalue_of_the_gauss_newton_matrix(method, hidden_units):
    # Schraudolph 2002 (from memory): G = mean J' H J.
    rng = np.random.default_rng(2)
    head, Z = drawn_head(rng, 4, hidden_units, 5), rng.standard_normal((30, 4)).astype(np.float32)
    objective = Objective(method, n_classes=5, n_old=3, arrived=np.array([3, 4]))
    logits, J = head_logits(head, Z), jacobian(head, Z.astype(np.float64))
    wanted = hessians_at_outputs(method, logits.astype(np.float64), 3, np.array([3, 4]))
    curvatures = [objective.loss_curvature(logits)] + ([] if method == "ewc" else [objective.anchor_curvature(logits)])
    for curvature, hessian in zip(curvatures, wanted):
        gauss_newton = np.einsum("ncp,ncd,ndq->pq", J, hessian, J) / len(Z)
        largest = np.linalg.eigvalsh(gauss_newton)[-1]
        exact = top_curvature(head, Z, curvature, iterations=300, rng=np.random.default_rng(0))
        assert exact == pytest.approx(largest, rel=1e-4)
        quick = top_curvature(head, Z, curvature, rng=np.random.default_rng(0))
        assert 0.8 * largest < quick < 1.0001 * largest


def test_curvature_stays_below_bohnings_bound_and_reaches_a_share_of_it():
    # Bohning 1992, "Multinomial logistic regression algorithm" (form from memory): curvature <= lmax(X'X/n) / 2, and
    # exactly lmax / K where all K probabilities are equal. X with a column of ones for the bias.
    rng = np.random.default_rng(3)
    Z = rng.standard_normal((60, 6)).astype(np.float32) * np.arange(1, 7, dtype=np.float32)
    with_bias = np.column_stack([Z, np.ones(60)])
    top = np.linalg.eigvalsh(with_bias.T @ with_bias / 60)[-1]
    objective = Objective("ewc", n_classes=4, n_old=0, arrived=np.arange(4))

    def curvature(head):
        return top_curvature(head, Z, objective.loss_curvature(head_logits(head, Z)), iterations=200, rng=rng)

    zero = {"output_weights": np.zeros((6, 4), np.float32), "output_bias": np.zeros((1, 4), np.float32)}
    assert curvature(zero) == pytest.approx(top / 4, rel=1e-4)
    for scale in (0.1, 1, 3):
        head = {name: scale * part for name, part in drawn_head(rng, 6, 0, 4).items()}
        assert curvature(head) <= top / 2 * 1.0001


# Closed forms: a linear head and squared error through the real loop


class SquaredError:
    """Half the squared distance of the logits to wanted ones, and of the logits to the old ones, times the strength.

    `targets` holds both side by side; rows are scaled by `curvature`.
    """

    def __init__(self, curvature=1.0):
        self.curvature = np.float32(curvature)

    def output_gradient(self, logits, y, targets, strength):
        wanted, old = np.split(targets, 2, axis=-1)
        return self.curvature * (logits - wanted) + strength * (logits - old)


class WithoutAnchor(SquaredError):
    """The same without the distillation: what holds on is EWC's penalty in the loop."""

    def output_gradient(self, logits, y, targets, strength):
        return super().output_gradient(logits, y, targets, np.float32(0))


def descend(objective, X, wanted, *, rate, strength, start=None, importance=None, old=None, passes=400):
    """Train a linear head on full batches; return weights (D, C) and whether it diverged."""
    layout = HeadLayout(X.shape[1], 0, wanted.shape[1])
    start = np.zeros(layout.shapes["output_weights"]) if start is None else start

    def flat(weights):
        return layout.flatten({"output_weights": np.array(weights), "output_bias": np.zeros((1, wanted.shape[1]))})[0]

    targets = np.concatenate([wanted, np.zeros_like(wanted) if old is None else old], axis=1).astype(np.float32)
    regimen = Regimen(rate, strength, np.arange(len(X)), flat(start), None if importance is None else flat(importance))
    trained = train_side_by_side(layout, objective, [regimen], Z=X.astype(np.float32), y=np.zeros(len(X), np.int64),
                                 targets=targets, passes=passes, batch_size=len(X), seed=0)[0]
    parts = layout.parts(trained.flat[None])
    return parts["output_weights"][0].astype(np.float64), trained.diverged


def rows_of_curvature(h, n):
    """(n, 1) rows with mean square h and mean 0, so that the bias stays where it is."""
    return np.sqrt(h) * np.resize([1.0, -1.0], n)[:, None]


@pytest.mark.parametrize("strength, optimum", [(2.0, 0.0), (1.0, -1 / 3)])
def test_ewc_at_the_ratio_of_rows_is_joint_training(strength, optimum):
    # Own derivation from Kirkpatrick et al. 2017, eq. 3: curvatures 2 and 4, optima 1 and -1, 100 and 50 rows.
    X = rows_of_curvature(4, 50)
    weights, _ = descend(WithoutAnchor(), X, -X, rate=0.1, strength=strength, start=[[1.0]], importance=[[2.0]])
    assert weights[0, 0] == pytest.approx(optimum, abs=1e-6)


def test_ewc_is_joint_training_in_many_dimensions_where_the_old_hessian_is_diagonal():
    # The same derivation: (n_A H_A + n_B H_B)^-1 (n_A H_A w_A + n_B H_B w_B), by numpy's solver.
    rng = np.random.default_rng(4)
    X_A = hadamard(16)[:, 1:6] * np.sqrt([0.5, 1.0, 2.0, 3.0, 0.1])
    X_B = rng.standard_normal((40, 5))
    X_B -= X_B.mean(axis=0)
    w_A, w_B = rng.standard_normal((2, 5, 3))
    H_A, H_B = X_A.T @ X_A / 16, X_B.T @ X_B / 40
    np.testing.assert_allclose(H_A, np.diag(np.diag(H_A)), atol=1e-12)
    joint = np.linalg.solve(16 * H_A + 40 * H_B, 16 * H_A @ w_A + 40 * H_B @ w_B)
    importance = np.repeat(np.diag(H_A)[:, None], 3, axis=1)
    weights, _ = descend(WithoutAnchor(), X_B, X_B @ w_B, rate=0.2, strength=16 / 40, start=w_A, importance=importance)
    np.testing.assert_allclose(weights, joint, atol=1e-5)
    assert np.abs(joint - w_B).max() > 0.1


@pytest.mark.parametrize("momentum, limit", [(0.0, 2 / 8), (0.9, 2 * 1.9 / 8)])
def test_learning_rate_limit_of_ewc(momentum, limit, set_momentum):
    # Heavy ball is stable below 2 (1 + b) / curvature (Polyak 1964, from memory); here 4 of the loss and 2 * 2 of EWC.
    set_momentum(momentum)
    X = rows_of_curvature(4, 50)
    for share, diverges in ((0.96, False), (1.04, True)):
        weights, diverged = descend(WithoutAnchor(), X, -X, rate=share * limit, strength=2.0, start=[[1.0]],
                                    importance=[[2.0]], passes=1200)
        assert diverged == diverges
        assert diverges or weights[0, 0] == pytest.approx(0.0, abs=1e-5)


@pytest.fixture
def set_momentum(monkeypatch):
    return lambda value: monkeypatch.setattr(side_by_side, "MOMENTUM", np.float32(value))


def test_one_recentred_penalty_over_many_tasks_is_joint_training():
    # Schwarz et al. 2018, "Progress & Compress", and Huszar 2018, "Note on the quadratic penalties in EWC" (separate
    # penalties count twice and would give 1): equal curvatures and rows, optima 0, 6, 0 -> 2.
    X = rows_of_curvature(1.5, 20)
    weights = np.zeros((1, 1))
    for task, optimum in enumerate([0.0, 6.0, 0.0]):
        importance = [[1.5]] if task else [[0.0]]  # the mean over rows seen
        weights, _ = descend(WithoutAnchor(), X, optimum * X, rate=0.1, strength=float(task), start=weights,
                             importance=importance)
    assert weights[0, 0] == pytest.approx(2.0, abs=1e-5)


def test_distilling_squared_logits_is_a_weighted_mean():
    # Own derivation for LwF with squared logits: (w_B + l w_A) / (1 + l) wherever the rows lie.
    rng = np.random.default_rng(5)
    X = rng.standard_normal((30, 4))
    X -= X.mean(axis=0)
    w_A, w_B = rng.standard_normal((2, 4, 3))
    for strength in (0.25, 1.0, 4.0):
        weights, _ = descend(SquaredError(), X, X @ w_B, old=X @ w_A, rate=0.1, strength=strength, start=w_A,
                             passes=1500)
        np.testing.assert_allclose(weights, (w_B + strength * w_A) / (1 + strength), atol=1e-5)


@pytest.mark.parametrize("momentum", [0.0, 0.5, 0.9])
@pytest.mark.parametrize("batch_size", [1, 4])
def test_noise_floor_of_stochastic_descent(momentum, batch_size, set_momentum):
    """8000 biases, each its own noisy quadratic, curvature 2; every row is seen once.

    Steady variance of an AR(2) process with coefficients 1 + b - a h and -b (Box & Jenkins, from memory), own
    derivation: (1 + b) a s^2 / ((1 - b) h (2 (1 + b) - a h)); at b = 0 the known a s^2 / (h (2 - a h)).
    """
    set_momentum(momentum)
    rate, curvature, steps, replicas = 0.1, 2.0, 120, 8000
    rng = np.random.default_rng(6)
    rows = steps * batch_size
    noise = rng.standard_normal((rows, replicas), dtype=np.float32)
    layout = HeadLayout(1, 0, replicas)
    regimen = Regimen(rate, 0.0, np.arange(rows), np.zeros(layout.n_flat, np.float32))
    trained = train_side_by_side(
        layout, WithoutAnchor(curvature), [regimen], Z=np.zeros((rows, 1), np.float32), y=np.zeros(rows, np.int64),
        targets=np.concatenate([noise, noise], axis=1), passes=1, batch_size=batch_size, seed=0)[0]
    biases = layout.parts(trained.flat[None])["output_bias"]
    squared_noise = curvature**2 / batch_size
    b, a_h = momentum, rate * curvature
    expected = (1 + b) * rate * squared_noise / ((1 - b) * curvature * (2 * (1 + b) - a_h))
    # A variance of 8000 normal values has a relative deviation of 1.6%.
    assert biases.var() == pytest.approx(expected, rel=0.06)


@pytest.mark.parametrize("drift, best", [(0.0, 2.0), (0.01, 1.0)])
def test_the_more_an_optimum_drifts_the_less_regularization_is_best(drift, best):
    """8000 tasks of one weight: estimates of variance a = s^2 / n_B (new) and b = drift + s^2 / n_A (old).

    Own derivation: the mean squared error of (new + l old) / (1 + l) is (a + l^2 b) / (1 + l)^2, least at l = a / b.
    """
    rng = np.random.default_rng(8)
    a, b = 1 / 50, drift + 1 / 100
    new, old = (np.sqrt(variance) * rng.standard_normal((1, 8000)) for variance in (a, b))
    X = rows_of_curvature(1.0, 4)
    errors = {}
    for strength in (0.25, 0.5, 1.0, 2.0, 4.0, 8.0):
        weights, diverged = descend(WithoutAnchor(), X, X @ new, rate=0.1, strength=strength, start=old,
                                    importance=np.ones((1, 8000)))
        assert not diverged
        errors[strength] = (weights**2).mean()
        assert errors[strength] == pytest.approx((a + strength**2 * b) / (1 + strength) ** 2, rel=0.06)
    assert min(errors, key=errors.get) == best


@pytest.mark.parametrize("order", [(0, 1, 2), (2, 0, 1)])
def test_accumulated_curvatures_give_the_joint_least_squares_solution_in_any_order(order):
    """Features that are orthogonal within each task: X'X is diagonal, so that the penalties lose nothing."""
    rng = np.random.default_rng(9)
    signs = np.array([[1, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1]], float)
    tasks = [(np.tile(signs, (n // 4, 1)) * rng.uniform(0.5, 1.5, 3), rng.standard_normal((3, 2))) for n in (8, 24, 16)]
    joint = np.linalg.lstsq(np.concatenate([X for X, _ in tasks]), np.concatenate([X @ W for X, W in tasks]),
                            rcond=None)[0]
    learned, total = None, np.zeros((3, 1))
    for place in order:
        X, W = tasks[place]
        # The penalty is set against a mean over this task's rows.
        importance = None if learned is None else np.repeat(total / len(X), 2, axis=1)
        learned, _ = descend(WithoutAnchor(), X, X @ W, rate=0.02, strength=1.0, start=learned, importance=importance,
                             passes=1500)
        total = total + (X**2).sum(axis=0)[:, None]
    np.testing.assert_allclose(learned, joint, atol=1e-5)


@pytest.mark.parametrize("share", [0.7, 1.3])
def test_single_row_descent_is_mean_square_stable_below_its_limit(share, set_momentum):
    """Least mean squares on white Gaussian rows of d features, whose mean-square limit is 2 / (d + 2).

    Widrow & Stearns 1985, "Adaptive Signal Processing", from memory. With the head's bias, whose feature is always 1,
    the second moments k of each weight and m of the bias follow (own derivation)
    k' = (1 - 2 a + a^2 (d + 2)) k + a^2 m and m' = a^2 d k + (1 - 2 a + a^2) m.
    """
    set_momentum(0.0)
    n_features, steps, replicas = 4, 6, 6000
    rate = share * 2 / (n_features + 3)
    rng = np.random.default_rng(10)
    Z = rng.standard_normal((replicas * steps, n_features), dtype=np.float32)
    layout = HeadLayout(n_features, 0, 1)
    start = layout.flatten({"output_weights": np.ones((n_features, 1)), "output_bias": np.zeros((1, 1))})[0]
    regimens = [Regimen(rate, 0.0, np.arange(k * steps, (k + 1) * steps), start) for k in range(replicas)]
    trained = train_side_by_side(layout, WithoutAnchor(), regimens, Z=Z, y=np.zeros(len(Z), np.int64),
                                 targets=np.zeros((len(Z), 2), np.float32), passes=1, batch_size=1, seed=0)
    parts = layout.parts(np.stack([head.flat for head in trained]))
    reached = (parts["output_weights"] ** 2).sum(axis=1).mean() + (parts["output_bias"] ** 2).mean()
    step = np.array([[1 - 2 * rate + rate**2 * (n_features + 2), rate**2],
                     [rate**2 * n_features, 1 - 2 * rate + rate**2]])
    k, m = np.linalg.matrix_power(step, steps) @ [1.0, 0.0]
    assert reached == pytest.approx(n_features * k + m, rel=0.2)
    assert (reached < n_features) == (share < 1)


# Published examples


def test_distillation_example():
    # Hinton, Vinyals & Dean 2015, section 2.1, at T = 2; numbers recomputed here.
    teacher, student = np.array([[2.0, 0.0]], np.float32), np.zeros((1, 2), np.float32)
    p = np.exp(1) / (np.exp(1) + 1)
    assert p == pytest.approx(0.731059, abs=1e-6)
    divergence = p * np.log(2 * p) + (1 - p) * np.log(2 * (1 - p))
    assert 4 * divergence == pytest.approx(0.443776, abs=1e-6)
    assert distillation(student, teacher)[0] == pytest.approx(4 * divergence, abs=1e-6)
    for method in ("lwf", "wa"):
        objective = Objective(method, n_classes=3, n_old=2, arrived=np.array([2]))
        targets = objective.targets(teacher)
        np.testing.assert_allclose(targets, [[p, 1 - p]], atol=1e-6)
        gradient = [objective.output_gradient(np.zeros((1, 1, 3), np.float32), np.array([2]), targets,
                                              np.full((1, 1, 1), strength, np.float32)) for strength in (1, 0)]
        np.testing.assert_allclose((gradient[0] - gradient[1])[0, 0], [-0.462117, 0.462117, 0], atol=1e-6)


def test_herding_example():
    # Rebuffi et al. 2017, algorithm 4 (from memory), without scaling: {0, 1, 2, 5} has mean 2 -> 2, 1, 5, 0.
    points = np.array([0.0, 1.0, 2.0, 5.0], np.float32)
    assert points[herd(points[None, :, None], 4)[0]].tolist() == [2, 1, 5, 0]


def test_every_herding_pick_is_the_best_by_brute_force():
    # Rebuffi et al. 2017, algorithm 4 (from memory): argmin ||mu - (sum of picked + phi) / k||, no repeats.
    features = np.random.default_rng(7).standard_normal((5, 12, 3)).astype(np.float32)
    picked = herd(features, 12)
    for rows, order in zip(features.astype(np.float64), picked):
        assert sorted(order) == list(range(12))
        for k in range(1, 13):
            left = [i for i in range(12) if i not in order[:k - 1]]
            distance = [np.linalg.norm(rows.mean(axis=0) - rows[[*order[:k - 1], i]].mean(axis=0)) for i in left]
            assert left[int(np.argmin(distance))] == order[k - 1]
    for count in (1, 5):
        np.testing.assert_array_equal(herd(features, count), picked[:, :count])


def test_alignment_example():
    # Zhao et al. 2020 (from memory): old lengths 5 and 3, new 10 and 6 -> gamma = 4 / 8, new 5 and 3.
    head = {"output_weights": np.array([[3, 0, 6, 6], [4, 3, 8, 0]], np.float32),
            "output_bias": np.array([[1, 2, 3, 4]], np.float32)}
    aligned = align_weights(head, 2)
    np.testing.assert_allclose(np.linalg.norm(aligned["output_weights"], axis=0), [5, 3, 5, 3])
    np.testing.assert_allclose(aligned["output_weights"][:, 2:], head["output_weights"][:, 2:] / 2)
    np.testing.assert_allclose(aligned["output_bias"], [[1, 2, 1.5, 2]])


@pytest.mark.parametrize("hidden_units", [0, 12])
def test_icarl_classifies_by_the_nearest_mean_of_its_exemplars(hidden_units):
    # Rebuffi et al. 2017, eq. 2 (from memory), from the exemplars that are stored; class 1 comes again.
    data = load_digits()
    trainer, plan = HeadTrainer(), Plan("icarl", hidden_units, 4, 32, 90)
    carryover, settings = None, Settings(0.02, 1.0, 9)
    for t, classes in enumerate([(0, 1, 2), (3, 4), (1, 5)]):
        rows = np.flatnonzero(np.isin(data.target, classes))[t * 40:t * 40 + 120]
        boundary = open_boundary(plan, carryover, Increment(data.data[rows].astype(np.float32), data.target[rows]))
        attempt = try_settings(trainer, boundary, [settings], seed=0)[0]
        carryover = close_boundary(trainer, boundary, attempt, seed=0)
        kept = carryover.exemplars
        assert set(kept.y) == set(range(len(carryover.classes)))

        def features(Z):
            if hidden_units:
                Z = np.maximum(Z @ attempt.head["hidden_weights"] + attempt.head["hidden_bias"], 0)
            return Z / np.linalg.norm(Z, axis=1, keepdims=True)

        means = np.stack([features(kept.Z)[kept.y == code].mean(axis=0) for code in range(len(carryover.classes))])
        means /= np.linalg.norm(means, axis=1, keepdims=True)
        Z = carryover.standardized(data.data.astype(np.float32))
        distances = np.linalg.norm(features(Z)[:, None] - means, axis=2)
        np.testing.assert_array_equal(predict_codes(trainer, carryover.head, Z), distances.argmin(axis=1))


# scikit-learn


@pytest.mark.parametrize("load", [load_iris, load_wine, load_digits])
def test_cross_entropy_optimum_is_that_of_logistic_regression(load):
    """Full batches to the optimum; ridge through EWC's penalty: importance 1 of the weights, centred at 0."""
    X, y = load(return_X_y=True)
    X, y = X[:400], y[:400]
    X = ((X - X.mean(axis=0)) / np.maximum(X.std(axis=0), 1)).astype(np.float32)
    n_classes, strength = len(np.unique(y)), 0.05
    layout = HeadLayout(X.shape[1], 0, n_classes)
    ones = {"output_weights": np.ones(layout.shapes["output_weights"]), "output_bias": np.zeros((1, n_classes))}
    regimen = Regimen(0.3, strength, np.arange(len(y)), np.zeros(layout.n_flat, np.float32), layout.flatten(ones)[0])
    objective = Objective("ewc", n_classes=n_classes, n_old=0, arrived=np.arange(n_classes))
    trained = train_side_by_side(layout, objective, [regimen], Z=X, y=y, targets=None, passes=1000,
                                 batch_size=len(y), seed=0)[0]
    head = {name: part[0] for name, part in layout.parts(trained.flat[None]).items()}
    model = LogisticRegression(C=1 / (strength * len(y)), tol=1e-8, max_iter=5000).fit(X.astype(np.float64), y)
    np.testing.assert_allclose(softmax(outputs(head, X), axis=1), model.predict_proba(X.astype(np.float64)), atol=1e-4)


def test_first_increment_of_ewc_is_plain_logistic_regression():
    """Through the trainer's door, no penalty: two overlapping species and two features, so that an optimum exists."""
    data = load_iris()
    rows = data.target > 0
    increment = Increment(data.data[rows, :2].astype(np.float32), data.target[rows])
    boundary = open_boundary(Plan("ewc", 0, 3000, 84, 100), None, increment)
    assert len(boundary.y) == 84
    attempt = HeadTrainer().learn([Job(boundary, Settings(0.5, 1e6))], seed=0)[0]
    Z = boundary.Z.astype(np.float64)
    model = LogisticRegression(C=np.inf, tol=1e-10, max_iter=5000).fit(Z, boundary.y)
    np.testing.assert_allclose(softmax(outputs(attempt.head, Z), axis=1), model.predict_proba(Z), atol=1e-4)
