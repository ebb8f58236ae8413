"""Metrics against their published formulas, on an example worked by hand, and against scikit-learn."""

import numpy as np
import pytest
from sklearn.metrics import balanced_accuracy_score, recall_score

from hyperforecast import metrics

# Worked by hand for this project.
R = np.array([[0.9, 0.2, 0.1], [0.95, 0.8, 0.3], [0.6, 0.5, 0.7]])


def test_average_accuracy_and_backward_transfer():
    # Lopez-Paz & Ranzato 2017, "Gradient Episodic Memory" (formulas from memory).
    assert metrics.average_accuracy(R) == pytest.approx((0.6 + 0.5 + 0.7) / 3)
    assert metrics.backward_transfer(R) == pytest.approx(((0.6 - 0.9) + (0.5 - 0.8)) / 2)


def test_forgetting_and_intransigence():
    # Chaudhry et al. 2018, "Riemannian Walk" (formulas from memory).
    np.testing.assert_allclose(metrics.task_forgetting(R), [0.95 - 0.6, 0.8 - 0.5])
    assert metrics.forgetting(R) == pytest.approx(0.325)
    measured = metrics.intransigence(R, [np.nan, np.nan, 0.85])
    assert measured[2] == pytest.approx(0.15)
    assert np.isnan(measured[:2]).all()


def test_average_incremental_accuracy():
    # Rebuffi et al. 2017, "iCaRL" (from memory): .9; (.95+.8)/2; (.6+.5+.7)/3, or by rows (60+50+140)/400.
    assert metrics.average_incremental_accuracy(R) == pytest.approx((0.9 + 0.875 + 0.6) / 3)
    weighted = metrics.average_incremental_accuracy(R, test_sizes=[100, 100, 200])
    assert weighted == pytest.approx((0.9 + 0.875 + 250 / 400) / 3) == pytest.approx(0.8)


@pytest.mark.parametrize("seed", range(20))
def test_forgetting_is_at_least_the_negated_backward_transfer(seed):
    # Follows from the definitions: the best earlier accuracy is no less than the one on the diagonal.
    matrix = np.random.default_rng(seed).random((5, 5))
    assert metrics.forgetting(matrix) >= -metrics.backward_transfer(matrix)


@pytest.mark.parametrize("seed", range(5))
def test_balanced_accuracy_agrees_with_scikit_learn(seed):
    rng = np.random.default_rng(seed)
    y = np.concatenate([np.arange(7), rng.choice(7, size=200, p=np.arange(1, 8) / 28)])
    predicted = np.where(rng.random(len(y)) < 0.6, y, rng.integers(7, size=len(y)))
    np.testing.assert_allclose(metrics.class_accuracies(y, predicted), recall_score(y, predicted, average=None))
    assert metrics.balanced_accuracy(y, predicted) == pytest.approx(balanced_accuracy_score(y, predicted))
