"""Scoring of attempts, whatever numbers a trainer gives."""

import numpy as np

from hyperforecast.learning import accuracies, attempts, predict_codes


class Echo:
    """A trainer whose scores are the rows themselves."""

    def class_scores(self, head, Z):
        return Z


def test_scores_that_are_not_numbers_never_win():
    nan, inf = np.nan, np.inf
    scores = np.array([[nan, 1, 2], [nan, nan, -5], [nan, nan, nan], [1, inf, nan], [-inf, nan, -inf], [0, 0, 0]])
    assert predict_codes(Echo(), {}, scores).tolist() == [2, 2, 0, 1, 0, 0]


def test_rows_are_scored_in_chunks(monkeypatch):
    scores = np.random.default_rng(0).standard_normal((10, 3))
    monkeypatch.setattr(attempts, "CHUNK_ROWS", 4)
    assert predict_codes(Echo(), {}, scores).tolist() == scores.argmax(axis=1).tolist()
    assert predict_codes(Echo(), {}, scores[:0]).tolist() == []


def test_accuracy_of_each_class_and_nan_where_there_are_no_rows():
    scores = np.eye(4)[[0, 0, 1, 3]]
    found = accuracies(Echo(), {}, scores, np.array([0, 1, 1, 3]), 5)
    np.testing.assert_array_equal(found, [1, 0.5, np.nan, 1, np.nan])
    assert np.isnan(accuracies(Echo(), {}, scores[:0], np.empty(0, int), 2)).all()
