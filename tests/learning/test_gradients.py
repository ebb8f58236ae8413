"""Six steps of the real training loop against finite differences of each method's loss, written anew in float64."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.special import log_expit, log_softmax, softmax

from hyperforecast.increments import Increment
from hyperforecast.learning import Exemplars, HeadTrainer, Job, close_boundary, open_boundary, try_settings
from hyperforecast.settings import METHODS, REHEARSAL_METHODS, Plan, Settings

D, FIRST = 5, (0, 1, 2)
PARTS = ("hidden_weights", "hidden_bias", "output_weights", "output_bias")
STEPS, MOMENTUM = 6, 0.9
RATE, STRENGTH = 0.2, {"ewc": 20.0, "lwf": 3.0, "icarl": 3.0, "wa": 3.0}


def drawn(rng, classes, rows):
    y = np.repeat(classes, rows)
    return Increment((rng.standard_normal((len(y), D)) + y[:, None] * 0.3).astype(np.float32), y)


def boundary_with(method, hidden_units, classes, *, exemplars=True):
    """A boundary at which `classes` arrive after FIRST, all rows in one minibatch."""
    rng = np.random.default_rng(3)
    plan, trainer = Plan(method, hidden_units, STEPS, 64, 60), HeadTrainer()
    kept = 4 if method in REHEARSAL_METHODS else None
    opening = open_boundary(plan, None, drawn(rng, FIRST, 9), seed=0)
    attempt = trainer.learn([Job(opening, Settings(0.1, 1.0, kept))], seed=0)[0]
    carryover = close_boundary(trainer, opening, attempt, seed=0)
    if not exemplars:
        carryover = replace(carryover, exemplars=Exemplars.none(D))
    return open_boundary(plan, carryover, drawn(rng, classes, 7), seed=1)


def mean_loss(theta, unpack, method, Z, y, old_head, arrived, n_old, strength):
    """The unanchored loss and the anchor of the methods that distil, as published (formulas from memory)."""
    logits = outputs(unpack(theta), Z)
    rows = np.arange(len(y))
    if method == "icarl":
        # Rebuffi et al. 2017: logistic losses, the old model's outputs as targets for classes without new rows.
        follows = np.setdiff1d(np.arange(n_old), arrived)
        wanted = (y[:, None] == np.arange(logits.shape[1])).astype(float)
        weight = np.ones(logits.shape[1])
        if old_head:
            wanted[:, follows] = 1 / (1 + np.exp(-outputs(old_head, Z)[:, follows]))
            weight[follows] = strength
        losses = -(wanted * log_expit(logits) + (1 - wanted) * log_expit(-logits))
        return (losses * weight).sum() / len(y)
    chosen = np.arange(logits.shape[1])
    if method == "lwf" and 1 < len(arrived):
        chosen = arrived  # Li & Hoiem 2016: the new task's own outputs
    loss = -log_softmax(logits[:, chosen], axis=1)[rows, np.searchsorted(chosen, y)].sum()
    if method != "ewc" and old_head:
        # Hinton, Vinyals & Dean 2015, section 2.1, at temperature 2.
        p = softmax(outputs(old_head, Z)[:, :n_old] / 2, axis=1)
        loss += strength * 4 * (p * (np.log(p) - log_softmax(logits[:, :n_old] / 2, axis=1))).sum()
    return loss / len(y)


def outputs(head, Z):
    if "hidden_weights" in head:
        Z = np.maximum(Z @ head["hidden_weights"] + head["hidden_bias"], 0)
    return Z @ head["output_weights"] + head["output_bias"]


def differences(function, theta, step=1e-7):
    """Central differences, error about 1e-8."""
    gradient = np.empty_like(theta)
    for i in range(len(theta)):
        ahead, behind = theta.copy(), theta.copy()
        ahead[i] += step
        behind[i] -= step
        gradient[i] = (function(ahead) - function(behind)) / (2 * step)
    return gradient


def grown(part, columns):
    """A part in float64, columns of zeros added for new classes."""
    return np.pad(part.astype(np.float64), ((0, 0), (0, columns - part.shape[1])))


def check_steps(boundary, method):
    carried = boundary.carryover
    names = [name for name in PARTS if name in carried.head]
    columns = {name: boundary.n_classes if name.startswith("output") else carried.head[name].shape[1] for name in names}
    start = {name: grown(carried.head[name], columns[name]) for name in names}
    shapes = [start[name].shape for name in names]
    splits = np.cumsum([np.prod(shape) for shape in shapes])[:-1]

    def unpack(theta):
        return {name: part.reshape(shape) for name, part, shape in zip(names, np.split(theta, splits), shapes)}

    def pack(parts):
        return np.concatenate([parts[name].ravel() for name in names])

    kept = boundary.old_exemplars
    Z = np.concatenate([boundary.Z, kept.Z]).astype(np.float64)
    y = np.concatenate([boundary.y, kept.y])
    anchor = pack(start)
    stiffness = np.zeros_like(anchor)
    if method == "ewc":
        stiffness = pack({name: grown(carried.head[f"importance_{name}"], columns[name]) for name in names})

    def walked(strength):
        def loss(theta):
            penalty = strength / 2 * (stiffness * (theta - anchor) ** 2).sum()  # Kirkpatrick et al. 2017, eq. 3
            return penalty + mean_loss(theta, unpack, method, Z, y, start, boundary.arrived, boundary.n_old, strength)

        theta, velocity = anchor.copy(), 0.0
        for _ in range(STEPS):
            velocity = MOMENTUM * velocity - RATE * differences(loss, theta)
            theta = theta + velocity
        return theta

    theta = walked(STRENGTH[method])
    expected = unpack(theta)
    if method == "wa" and boundary.n_old < boundary.n_classes:
        # Zhao et al. 2020: the new classes' outputs times the ratio of mean weight lengths.
        lengths = np.linalg.norm(expected["output_weights"], axis=0)
        gamma = lengths[:boundary.n_old].mean() / lengths[boundary.n_old:].mean()
        for name in ("output_weights", "output_bias"):
            expected[name][:, boundary.n_old:] *= gamma
    settings = Settings(RATE, STRENGTH[method], 4 if method in REHEARSAL_METHODS else None)
    trained = try_settings(HeadTrainer(), boundary, [settings], seed=0)[0]
    assert not trained.diverged
    for name in names:
        np.testing.assert_allclose(trained.head[name], expected[name], rtol=2e-5, atol=2e-6, err_msg=name)
    # The steps are long enough for a wrong term to show, and the anchor has its part in them, where it can: alone,
    # nothing moves the old outputs of LwF's and iCaRL's linear heads; iCaRL follows only classes without new rows.
    assert np.abs(theta - anchor).max() > 0.1
    follows = np.setdiff1d(np.arange(boundary.n_old), boundary.arrived)
    idle = (method in ("lwf", "icarl") and len(names) == 2) or (method == "icarl" and not len(follows))
    assert (np.abs(theta - walked(0.0)).max() < 1e-3) == idle


@pytest.mark.parametrize("hidden_units", [0, 6])
@pytest.mark.parametrize("method, exemplars", [(method, False) for method in METHODS]
                         + [(method, True) for method in REHEARSAL_METHODS])
def test_steps_of_every_method(method, exemplars, hidden_units):
    boundary = boundary_with(method, hidden_units, [3, 4], exemplars=exemplars)
    assert len(boundary.old_exemplars) == (12 if exemplars else 0)
    check_steps(boundary, method)


@pytest.mark.parametrize("classes", [[3], [1], [1, 3], [0, 1, 2]], ids=str)
@pytest.mark.parametrize("method", METHODS)
def test_steps_where_classes_come_alone_or_again(method, classes):
    check_steps(boundary_with(method, 6, classes), method)
