import numpy as np
import pytest

from hyperforecast import metrics
from hyperforecast.checks import InputError

R = np.array([[0.9, 0.2, 0.1], [0.95, 0.8, 0.3], [0.6, 0.5, 0.7]])


def test_class_accuracies_follow_sorted_classes():
    y = np.array(["nut", "bolt", "nut", "cog", "bolt"])
    predicted = np.array(["nut", "bolt", "cog", "nut", "bolt"])
    np.testing.assert_array_equal(metrics.class_accuracies(y, predicted), [1.0, 0.0, 0.5])
    assert metrics.balanced_accuracy(y, predicted) == 0.5


def test_balanced_accuracy_ignores_how_many_rows_a_class_has():
    y = np.array([3] * 90 + [7] * 10)
    assert metrics.balanced_accuracy(y, np.full(100, 3)) == 0.5


def test_several_predictions_equal_each_alone():
    rng = np.random.default_rng(0)
    y, predicted = rng.integers(5, size=60), rng.integers(6, size=(4, 60))
    together = metrics.balanced_accuracy(y, predicted)
    assert together.shape == (4,)
    np.testing.assert_array_equal(together, [metrics.balanced_accuracy(y, one) for one in predicted])


@pytest.mark.parametrize("y, predicted, match", [
    ([], [], "^y: "),
    ([1, 2], [1], "^predicted: .*2 labels"),
    ([1, 2], ["1", "2"], "^predicted: .*same kind"),
])
def test_labels_that_do_not_fit_are_refused(y, predicted, match):
    with pytest.raises(InputError, match=match):
        metrics.balanced_accuracy(y, predicted)


def test_unmeasured_entries_above_the_diagonal_are_passed_over():
    partly = R.copy()
    partly[np.triu_indices(3, 1)] = np.nan
    for measure in (metrics.average_accuracy, metrics.average_incremental_accuracy, metrics.backward_transfer,
                    metrics.forgetting):
        assert measure(partly) == measure(R)
    np.testing.assert_array_equal(metrics.task_forgetting(partly), metrics.task_forgetting(R))


def test_one_task_has_accuracy_but_no_transfer():
    assert metrics.average_accuracy([[0.7]]) == metrics.average_incremental_accuracy([[0.7]]) == 0.7
    for measure in (metrics.backward_transfer, metrics.task_forgetting, metrics.forgetting):
        with pytest.raises(InputError, match="at least 2 tasks"):
            measure([[0.7]])


@pytest.mark.parametrize("wrong, match", [
    (np.ones((2, 3)), "square"),
    ([[0.5, 0.1], [np.nan, 0.5]], r"nan at \[1, 0\]"),
    ([[0.5, 1.5], [0.5, 0.5]], r"1.5 at \[0, 1\]"),
])
def test_a_wrong_matrix_is_refused(wrong, match):
    with pytest.raises(InputError, match=match):
        metrics.average_accuracy(wrong)


def test_wrong_sizes_and_joint_accuracies_are_refused():
    for sizes in ([1, 2], [1, 0, 1], [1, np.inf, 1]):
        with pytest.raises(InputError, match="^test_sizes: "):
            metrics.average_incremental_accuracy(R, test_sizes=sizes)
    for joint in ([0.5], [0.5, 0.5, 2.0]):
        with pytest.raises(InputError, match="^joint: "):
            metrics.intransigence(R, joint)
