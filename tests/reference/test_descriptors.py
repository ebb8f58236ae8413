"""Descriptors against scipy, scikit-learn, closed forms and brute force."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.linalg import sqrtm
from scipy.special import log_softmax, softmax
from scipy.stats import kurtosis, ttest_ind
from sklearn.datasets import load_digits, make_circles
from sklearn.feature_selection import f_classif
from sklearn.kernel_ridge import KernelRidge
from sklearn.linear_model import Ridge
from sklearn.neighbors import NearestCentroid

from hyperforecast.describing import DESCRIPTORS, describe, view
from hyperforecast.describing.view import BoundaryView
from hyperforecast.increments import Increment
from hyperforecast.learning import (
    Boundary, Carryover, ClassSummaries, Exemplars, HeadTrainer, close_boundary, open_boundary, try_settings,
)
from hyperforecast.settings import Plan, Settings


class Silent:
    """A trainer that tells nothing about its model."""

    def facts(self, boundary, *, seed):
        return {}


def boundary_of(Z, y, *, old_mean=None, old_variance=None, exemplars=None):
    """A boundary made by hand: rows as they are, class summaries of the old classes, codes as given."""
    Z, y = np.asarray(Z, np.float32), np.asarray(y)
    d = Z.shape[1]
    n_old = 0 if old_mean is None else len(old_mean)
    n_classes = max(n_old, y.max() + 1)
    center, scale = np.zeros(d, np.float32), np.ones(d, np.float32)
    plan, carryover = Plan("wa", 0, 1), None
    if n_old:
        summaries = ClassSummaries(np.full(n_old, 10), np.asarray(old_mean, np.float32),
                                   np.asarray(old_variance, np.float32))
        carryover = Carryover(plan, np.arange(n_old), center, scale, {}, exemplars or Exemplars.none(d),
                              Exemplars.none(d), summaries, np.full(n_old, np.nan), 1)
    return Boundary(plan, carryover, np.arange(n_classes), n_old, center, scale, Z, y, Exemplars.none(d), 8, 80)


def value(name, boundary):
    return float(DESCRIPTORS[name].compute(BoundaryView(Silent(), boundary, seed=0)))


def clusters(seed, n_classes=4, rows=15, n_features=6, spread=1.0):
    rng = np.random.default_rng(seed)
    y = np.repeat(np.arange(n_classes), rows)
    return spread * rng.standard_normal((n_classes, n_features))[y] + rng.standard_normal((len(y), n_features)), y


def test_frechet_distance_of_two_known_gaussians():
    # Dowson & Landau 1982: N(0, 1) against N(1, 4) is 2; rows of -1 and 3 have mean 1 and variance 4.
    assert value("frechet_distance", boundary_of([[-1], [3]], [1, 1], old_mean=[[0]], old_variance=[[1]])) == 2.0


def test_frechet_distance_is_that_of_diagonal_gaussians():
    # Dowson & Landau 1982 with scipy's matrix root; the old side pools its classes, every one alike.
    rng = np.random.default_rng(0)
    Z, y = clusters(1)
    means, variances = rng.standard_normal((3, 6)), rng.random((3, 6)) + 0.5
    old = np.diag(variances.mean(axis=0) + means.var(axis=0))
    new = np.diag(Z.var(axis=0))
    distance = (((means.mean(axis=0) - Z.mean(axis=0)) ** 2).sum()
                + np.trace(old + new - 2 * sqrtm(old @ new).real))
    found = value("frechet_distance", boundary_of(Z, y + 3, old_mean=means, old_variance=variances))
    assert found == pytest.approx(distance / 6, rel=1e-4)


def test_fisher_ratios_example():
    # Lorena et al. 2019 (from memory): {0, 2} and {4, 6} have r = 4, F1 = 1 / (1 + r) = .2.
    boundary = boundary_of([[0], [2], [4], [6]], [0, 0, 1, 1])
    assert value("class_separability", boundary) == value("largest_fisher_ratio", boundary) == 4.0


def test_fisher_ratios_against_the_analysis_of_variance():
    # r = F (K - 1) / (n - K) for every feature, with scikit-learn's F.
    Z, y = clusters(2)
    Z, y = Z[5:], y[5:]
    ratio = f_classif(Z, y)[0] * (4 - 1) / (len(y) - 4)
    within = Z.var(axis=0) / (1 + ratio)
    boundary = boundary_of(Z, y)
    assert value("largest_fisher_ratio", boundary) == pytest.approx(ratio.max(), rel=1e-4)
    assert value("class_separability", boundary) == pytest.approx((ratio * within).sum() / within.sum(), rel=1e-4)


@pytest.mark.parametrize("rows, n_features", [(40, 6), (5, 30)])
def test_effective_rank_is_the_participation_ratio_of_eigenvalues(rows, n_features):
    rng = np.random.default_rng(3)
    Z = rng.standard_normal((rows, n_features)) * np.linspace(0.1, 3, n_features)
    eigenvalues = np.linalg.eigvalsh(np.cov(Z.T))
    assert value("effective_rank", boundary_of(Z, np.arange(rows) % 2)) == pytest.approx(
        eigenvalues.sum() ** 2 / (eigenvalues**2).sum(), rel=1e-4)


def test_effective_rank_where_it_is_known():
    for Z, rank in ((np.vstack([np.eye(4), -np.eye(4)]), 4), (np.outer(np.arange(5), [1, 2, 3]), 1)):
        assert value("effective_rank", boundary_of(Z, np.arange(len(Z)) % 2)) == pytest.approx(rank)


def test_tail_weight_is_the_median_kurtosis():
    Z = np.random.default_rng(4).standard_t(5, size=(200, 5))
    found = value("tail_weight", boundary_of(np.column_stack([Z, np.ones(200)]), np.arange(200) % 2))
    assert found == pytest.approx(np.median(kurtosis(Z.astype(np.float32), fisher=False)), rel=1e-4)


def test_nearest_mean_accuracy_is_leave_one_out():
    Z, y = clusters(5, spread=0.7)
    hits = [NearestCentroid().fit(np.delete(Z, i, axis=0), np.delete(y, i)).predict(Z[i:i + 1])[0] == y[i]
            for i in range(len(y))]
    assert 0.3 < np.mean(hits) < 0.9
    assert value("nearest_mean_accuracy", boundary_of(Z, y)) == pytest.approx(np.mean(hits))


def test_distances_to_old_classes_by_brute_force():
    """Four classes arrive; code 1 came before, codes 0 and 2 stay at home."""
    Z, y = clusters(6, spread=0.7)
    y = np.array([1, 3, 4, 5])[y]
    rng = np.random.default_rng(7)
    old_mean, old_variance = 0.7 * rng.standard_normal((3, 6)), rng.random((3, 6)) + 0.5
    boundary = boundary_of(Z, y, old_mean=old_mean, old_variance=old_variance)
    means = {code: Z[y == code].mean(axis=0) for code in (1, 3, 4, 5)}
    within = sum(((Z[y == code] - means[code]) ** 2).sum() for code in means) / len(Z)
    confused, right = [], []
    for i, (row, code) in enumerate(zip(Z, y)):
        own = np.linalg.norm(row - np.delete(Z, i, axis=0)[np.delete(y, i) == code].mean(axis=0))
        old = min(np.linalg.norm(row - old_mean[k]) for k in (0, 2))
        others = min(np.linalg.norm(row - means[k]) for k in means if k != code)
        confused.append(old < own)
        right.append(own < min(old, others))
    assert value("confusion_with_old", boundary) == pytest.approx(np.mean(confused))
    assert value("nearest_mean_accuracy_all", boundary) == pytest.approx(np.mean(right))
    nearest = np.mean([min(((mean - old_mean[k]) ** 2).sum() for k in (0, 2)) for mean in means.values()])
    assert value("nearest_old_class", boundary) == pytest.approx(nearest / within, rel=1e-4)
    assert value("variance_ratio", boundary) == pytest.approx(within / old_variance.mean(axis=0).sum(), rel=1e-4)
    shift = ((means[1] - old_mean[1]) ** 2).sum()
    assert value("shift_of_returning", boundary) == pytest.approx(shift / within, rel=1e-4)


def test_the_closest_classes_by_welchs_test(monkeypatch):
    # Without shrinkage: scipy's t test of two samples that do not share a variance, squared, mean over features.
    monkeypatch.setattr(view, "SHRUNK_ROWS", 0)
    Z, y = clusters(3, n_classes=5, rows=20)
    Z = (Z * (1 + 0.2 * y[:, None])).astype(np.float32)
    t2 = [np.mean(ttest_ind(Z[y == a], Z[y == b], equal_var=False)[0] ** 2) for a in range(5) for b in range(a)]
    assert value("closest_classes", boundary_of(Z, y)) == pytest.approx(min(t2), rel=1e-4)
    # Three of them old, of whom only moments are carried: pairs of old classes do not count.
    old, new = y < 3, y >= 3
    moments = [np.stack([Z[y == c].mean(axis=0) for c in range(3)]), np.stack([Z[y == c].var(axis=0) for c in range(3)])]
    boundary = boundary_of(Z[new], y[new], old_mean=moments[0], old_variance=moments[1])
    boundary = replace(boundary, carryover=replace(boundary.carryover, summaries=ClassSummaries(
        np.full(3, 20), *(moment.astype(np.float32) for moment in moments))))
    t2 = [np.mean(ttest_ind(Z[y == a], Z[y == b], equal_var=False)[0] ** 2) for a in (3, 4) for b in range(a)]
    assert value("closest_classes", boundary) == pytest.approx(min(t2), rel=1e-4)


def test_the_closest_classes_are_one_apart_where_they_are_the_same():
    # By the definition of a t statistic: mean of its square near 1, here over 40 draws and 6 features.
    twins = [value("closest_classes", boundary_of(*clusters(seed, n_classes=2, rows=30, spread=0))) for seed in range(40)]
    assert 0.8 < np.mean(twins) < 1.2
    assert value("closest_classes", boundary_of(*clusters(0, n_classes=2, rows=30))) > 5
    assert np.isnan(value("closest_classes", boundary_of([[0.0], [1.0]], [0, 1])))


def test_the_feature_that_is_cut_most():
    Z = np.zeros((4, 5))
    Z[:3, 2], Z[0, 1] = -10, 10
    assert value("cut_feature", boundary_of(Z, [0, 0, 1, 1])) == 0.75
    assert value("cut_share", boundary_of(Z, [0, 0, 1, 1])) == 0.2


def test_nearest_mean_accuracy_of_old_rows_by_brute_force():
    Z, y = clusters(8, spread=0.7)
    rng = np.random.default_rng(9)
    kept = rng.permutation(30)
    exemplars = Exemplars(Z[kept].astype(np.float32), y[kept], np.zeros(30, np.int64))
    old_mean = np.stack([Z[y == code].mean(axis=0) for code in (0, 1)])
    arrives = y >= 2
    found = value("nearest_mean_accuracy_old", boundary_of(
        Z[arrives], y[arrives], old_mean=old_mean, old_variance=np.ones((2, 6)), exemplars=exemplars))
    model = NearestCentroid().fit(Z, y)
    assert found == pytest.approx(model.score(Z[kept], y[kept]))
    assert 0.3 < found < 1


@pytest.mark.parametrize("old_classes", [0, 3])
def test_ridge_probe_by_refitting_without_each_row(old_classes):
    """Own closed form against scikit-learn's Ridge, refitted for every row; the bias is a constant feature."""
    Z, y = load_digits(return_X_y=True)
    Z, y = ((Z - Z.mean(axis=0)) / np.maximum(Z.std(axis=0), 1))[:200], y[:200]
    old = y < old_classes
    exemplars = Exemplars(Z[old].astype(np.float32), y[old], np.zeros(old.sum(), np.int64))
    boundary = boundary_of(Z[~old], y[~old], old_mean=np.zeros((3, 64)) if old_classes else None,
                           old_variance=np.ones((3, 64)), exemplars=exemplars)
    rows, labels = np.concatenate([Z[~old], Z[old]]), np.concatenate([y[~old], y[old]])
    codes, place, count = np.unique(labels, return_inverse=True, return_counts=True)
    # Every class weighs alike, in the mean of the rows that are taken off as they come.
    weight = len(labels) / (len(codes) * count[place])
    rows = np.column_stack([rows - rows.mean(axis=0), np.ones(len(rows))])
    penalty = 0.05 * np.einsum("n,nd->", weight, rows**2) / rows.shape[1] + 1e-6
    wanted = np.where(labels[:, None] == codes, 1.0, -1.0)
    hits = np.empty(len(rows))
    for i in range(len(rows)):
        rest = np.arange(len(rows)) != i
        model = Ridge(alpha=penalty, fit_intercept=False).fit(rows[rest], wanted[rest], sample_weight=weight[rest])
        hits[i] = codes[model.predict(rows[i:i + 1]).argmax()] == labels[i]

    def by_class(which):
        return np.mean([hits[labels == code].mean() for code in np.unique(labels[which])])

    is_old = labels < old_classes
    assert 0.7 < hits.mean() < 1
    assert value("ridge_accuracy_new", boundary) == pytest.approx(by_class(~is_old))
    if old_classes:
        assert value("ridge_accuracy_old", boundary) == pytest.approx(by_class(is_old))
    else:
        assert np.isnan(value("ridge_accuracy_old", boundary))


def test_fourier_probe_sees_what_is_not_linear():
    """Rings: no line parts them, a Gaussian kernel does (scikit-learn's kernel ridge agrees)."""
    Z, y = make_circles(300, noise=0.05, factor=0.4, random_state=0)
    boundary = boundary_of(Z * 1.5, y)
    assert value("ridge_accuracy_new", boundary) < 0.65
    kernel = KernelRidge(alpha=1.0, kernel="rbf", gamma=1.0).fit(Z[:150], 2 * y[:150] - 1)
    assert value("kernel_accuracy_new", boundary) > 0.95 and ((kernel.predict(Z[150:]) > 0) == y[150:]).mean() > 0.95


@pytest.mark.parametrize("hidden_units", [0, 5])
def test_facts_about_the_model_against_differences_in_float64(hidden_units):
    """WA: gradients and curvature of the cross-entropy over all classes, outputs of the new ones added at zero."""
    plan, trainer, rng = Plan("wa", hidden_units, 3, 16, 60), HeadTrainer(), np.random.default_rng(10)
    Z, y = clusters(11, n_classes=5, rows=20, n_features=4)
    first, second = (Increment(Z[rows].astype(np.float32), y[rows]) for rows in (y < 3, y >= 3))
    opening = open_boundary(plan, None, first)
    attempt = try_settings(trainer, opening, [Settings(0.1, 1.0, 6)], seed=0)[0]
    boundary = open_boundary(plan, close_boundary(trainer, opening, attempt, seed=0), second)
    found = describe(trainer, boundary)
    names = [name for name in attempt.head]
    head = {name: np.pad(part, ((0, 0), (0, 2 if name.startswith("output") else 0))).astype(np.float64)
            for name, part in attempt.head.items()}
    shapes = [head[name].shape for name in names]
    splits = np.cumsum([head[name].size for name in names])[:-1]
    theta = np.concatenate([head[name].ravel() for name in names])

    def outputs(theta, Z):
        parts = {name: part.reshape(shape) for name, part, shape in zip(names, np.split(theta, splits), shapes)}
        if hidden_units:
            Z = np.maximum(Z @ parts["hidden_weights"] + parts["hidden_bias"], 0)
        return Z @ parts["output_weights"] + parts["output_bias"]

    def jacobian(Z):
        steps = 1e-6 * np.eye(len(theta))
        return np.stack([(outputs(theta + step, Z) - outputs(theta - step, Z)) / 2e-6 for step in steps], axis=-1)

    gradients, curvatures = [], []
    for rows, codes in ((boundary.Z, boundary.y), (boundary.old_exemplars.Z, boundary.old_exemplars.y)):
        J, p = jacobian(rows.astype(np.float64)), softmax(outputs(theta, rows), axis=1)
        error = p - np.eye(5)[codes]
        gradients.append(np.einsum("nc,ncp->p", error, J) / len(rows))
        hessian = p[:, :, None] * (np.eye(5) - p[:, None, :])
        curvatures.append(np.linalg.eigvalsh(np.einsum("ncp,ncd,ndq->pq", J, hessian, J) / len(rows))[-1])
    norms = [np.linalg.norm(one) for one in gradients]
    assert found["gradient_norm_new"] == pytest.approx(norms[0], rel=1e-4)
    assert found["gradient_norm_exemplars"] == pytest.approx(norms[1], rel=1e-4)
    # Lopez-Paz & Ranzato 2017 (from memory): the cosine tells interference.
    assert found["gradient_cosine"] == pytest.approx(gradients[0] @ gradients[1] / np.prod(norms), abs=1e-4)
    # Six rounds of power iteration approach the largest eigenvalue from below.
    for name, largest in zip(("curvature_new", "curvature_exemplars"), curvatures):
        assert 0.7 * largest < found[name] < 1.0001 * largest
    assert found["log_curvature_ratio"] == pytest.approx(
        np.log10(found["curvature_exemplars"] / found["curvature_new"]))
    kept = boundary.old_exemplars
    losses = -log_softmax(outputs(theta, kept.Z), axis=1)[np.arange(len(kept)), kept.y]
    assert found["loss_exemplars"] == pytest.approx(losses.mean(), rel=1e-4)
    p = softmax(outputs(theta, boundary.Z)[:, :3], axis=1)
    assert found["confidence_new"] == pytest.approx(p.max(axis=1).mean(), rel=1e-4)
    assert found["entropy_new"] == pytest.approx(-(p * np.log(p)).sum(axis=1).mean() / np.log(3), rel=1e-4)


def test_forgetting_of_old_classes():
    # Chaudhry et al. 2018 (from memory): best accuracy so far minus the accuracy now, mean over classes.
    plan, trainer = Plan("ewc", 0, 10, 8, 80), HeadTrainer()
    Z, y = clusters(12, n_classes=5, rows=40, n_features=6, spread=2.0)
    carryover = None
    for classes in ((0, 1), (2, 3)):
        rows = np.isin(y, classes)
        boundary = open_boundary(plan, carryover, Increment(Z[rows].astype(np.float32), y[rows]))
        attempt = try_settings(trainer, boundary, [Settings(0.05, 1e-2)], seed=0)[0]
        carryover = close_boundary(trainer, boundary, attempt, seed=0)
    boundary = open_boundary(plan, carryover, Increment(Z[y == 4].astype(np.float32), y[y == 4]))
    check, head = carryover.check_rows, attempt.head
    predicted = (check.Z @ head["output_weights"] + head["output_bias"]).argmax(axis=1)
    now = np.array([(predicted == code)[check.y == code].mean() for code in range(4)])
    best = carryover.best_check_accuracy
    assert (best >= now).all() and (best - now).max() > 0.2
    found = describe(trainer, boundary)
    assert found["check_accuracy_old"] == pytest.approx(now.mean())
    assert found["forgetting"] == pytest.approx((best - now).mean())
    raised = replace(boundary, carryover=replace(carryover, best_check_accuracy=np.array([1, 1, 1, np.nan])))
    assert describe(trainer, raised)["forgetting"] == pytest.approx((1 - now)[:3].mean())
