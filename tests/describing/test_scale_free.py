"""Scale-free coordinates on real boundaries: what they claim about steps and stability holds in training."""

import numpy as np
import pytest

from hyperforecast.describing import describe
from hyperforecast.increments import Increment
from hyperforecast.learning import HeadTrainer, close_boundary, open_boundary, try_settings
from hyperforecast.learning.head import HeadLayout
from hyperforecast.settings import COORDINATES, METHODS, SCALES, Plan, Settings, scale_free

D = 6


def second_boundary(plan, rows=40):
    rng = np.random.default_rng(0)
    centers, carryover, boundary = 2 * rng.standard_normal((6, D)), None, None
    for t, classes in enumerate(((0, 1, 2), (3, 4))):
        if boundary is not None:
            settings = Settings(0.05, 1.0, 12 if plan.rehearses else None)
            attempt = try_settings(HeadTrainer(), boundary, [settings], seed=0)[0]
            carryover = close_boundary(HeadTrainer(), boundary, attempt, seed=0)
        y = np.repeat(classes, rows)
        increment = Increment((centers[y] + rng.standard_normal((len(y), D))).astype(np.float32), y)
        boundary = open_boundary(plan, carryover, increment, seed=t)
    return boundary


def coordinates(boundary, settings):
    scales = describe(HeadTrainer(), boundary)
    return scales, dict(zip(COORDINATES, scale_free([settings], scales)[0]))


@pytest.mark.parametrize("method", METHODS)
def test_coordinates_of_a_real_boundary_by_hand(method):
    boundary = second_boundary(Plan(method, 5, 7, 16, 200))
    kept = 9 if boundary.plan.rehearses else 0
    settings = Settings(0.03, 5.0, kept or None)
    scales, found = coordinates(boundary, settings)
    new, anchor = scales["curvature_new"], scales["anchor_curvature"]
    steps = 7 * np.ceil((len(boundary.y) + 3 * kept) / 16)
    expected = {
        "log_learning_rate": 0.03, "log_regularization": 5, "log_kept_per_class": kept or np.nan, "log_steps": steps,
        "step_on_new": 0.03 * new, "step_on_exemplars": 0.03 * scales["curvature_exemplars"], "travel": 0.03 * steps,
        "travel_on_new": 0.03 * steps * new, "anchor_step": 0.03 * 5 * anchor, "anchor_balance": 5 * anchor / new,
        "anchor_travel": 0.03 * steps * 5 * anchor, "stability": 0.03 * (new + 5 * anchor),
    }
    for name, value in expected.items():
        assert found[name] == pytest.approx(np.log10(value), nan_ok=True), name
    assert found["exemplar_share"] == pytest.approx(3 * kept / (len(boundary.y) + 3 * kept))
    assert set(expected) | {"exemplar_share"} == set(COORDINATES)


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("hidden_units", [0, 5])
def test_steps_are_those_that_training_takes(method, hidden_units):
    boundary = second_boundary(Plan(method, hidden_units, 7, 16, 200))
    settings = Settings(1e-3, 0.1, 9 if boundary.plan.rehearses else None)
    _, found = coordinates(boundary, settings)
    attempt = try_settings(HeadTrainer(), boundary, [settings], seed=0)[0]
    per_step = 16 * HeadLayout(D, hidden_units, 5).operations_per_row
    assert 10 ** found["log_steps"] == pytest.approx(attempt.operations / per_step)


@pytest.mark.parametrize("scale", SCALES)
def test_coordinates_that_need_a_missing_scale_are_missing(scale):
    scales = dict.fromkeys(SCALES, 2.0)
    settings = [Settings(0.1, 3.0, 4)]
    absent = {name for name, value in zip(COORDINATES, scale_free(settings, {**scales, scale: np.nan})[0])
              if np.isnan(value)}
    steps = {"log_steps", "travel", "travel_on_new", "anchor_travel"}
    assert absent == {
        "curvature_new": {"step_on_new", "travel_on_new", "anchor_balance", "stability"},
        "curvature_exemplars": {"step_on_exemplars"},
        "anchor_curvature": {"anchor_step", "anchor_balance", "anchor_travel", "stability"},
        "rows": steps | {"exemplar_share"}, "classes_old": steps | {"exemplar_share"}, "passes": steps,
        "batch_size": steps,
    }[scale]


def test_training_diverges_beyond_the_stability_limit():
    """EWC with a penalty that dwarfs the loss, full batches: heavy ball is stable below 2 (1 + .9) (Polyak 1964)."""
    plan = Plan("ewc", 0, 400, 64, 200)
    boundary = second_boundary(plan)
    assert len(boundary.y) == 64
    strength, limit = 1e5, np.log10(2 * 1.9)
    scales = describe(HeadTrainer(), boundary)
    rate = 3.8 / (scales["curvature_new"] + strength * scales["anchor_curvature"])
    settings = [Settings(rate * share, strength) for share in (0.9, 1.1)]
    stability = scale_free(settings, scales)[:, COORDINATES.index("stability")]
    assert stability[0] < limit < stability[1]
    assert [one.diverged for one in try_settings(HeadTrainer(), boundary, settings, seed=0)] == [False, True]
