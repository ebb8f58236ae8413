"""Increments whose rows are not held in memory are learned like those that are, a chunk at a time."""

import numpy as np
import pytest

from hyperforecast import rows
from hyperforecast.describing import describe
from hyperforecast.increments import Increment
from hyperforecast.learning import HeadTrainer, Job, boundary, close_boundary, open_boundary, try_settings
from hyperforecast.learning.boundary import StandardizedRows, fit_scaling
from hyperforecast.rows import FileRows
from hyperforecast.settings import METHODS, Plan, Settings

D = 7
ARRIVALS = [{0: 60, 1: 40, 2: 50}, {3: 60, 4: 30, 1: 20}, {5: 70}]


def drawn(counts, seed):
    rng = np.random.default_rng(seed)
    y = rng.permutation(np.repeat(list(counts), list(counts.values())))
    centers = 2 * np.random.default_rng(0).standard_normal((6, D))
    # Units and places of their own, as in life.
    X = (centers[y] + rng.standard_normal((len(y), D))) * np.geomspace(0.1, 1000, D) + 50
    return Increment(X.astype(np.float32), y)


@pytest.fixture
def in_file(tmp_path, monkeypatch):
    """A function that lets an increment's rows stay in a file; chunks are of ten rows."""
    monkeypatch.setattr(rows, "CHUNK_BYTES", 4 * D * 10)
    monkeypatch.setattr(rows.chunks, "__kwdefaults__", {"n_bytes": 4 * D * 10})
    monkeypatch.setattr(rows, "SUMMED_BYTES", 4 * D * 16)

    def put(increment, dtype=np.float32):
        path = tmp_path / f"{len(list(tmp_path.iterdir()))}.bin"
        path.write_bytes(increment.X.astype(dtype).tobytes())
        return Increment(FileRows(open(path, "rb"), path, offset=0, shape=increment.X.shape, dtype=dtype), increment.y)
    return put


@pytest.mark.parametrize("hidden_units", [0, 6])
@pytest.mark.parametrize("method", METHODS)
def test_a_stream_from_files_is_learned_like_one_in_memory(in_file, method, hidden_units):
    plan, trainer = Plan(method, hidden_units, 5, 16, 200), HeadTrainer()
    settings = Settings(0.02, 0.5, 8 if plan.rehearses else None)
    held = lazy = None
    for t, counts in enumerate(ARRIVALS):
        increment = drawn(counts, t)
        here = open_boundary(plan, held, increment, seed=t)
        there = open_boundary(plan, lazy, in_file(increment), seed=t)
        assert isinstance(here.Z, np.ndarray) and isinstance(there.Z, StandardizedRows)
        np.testing.assert_allclose(there.scale, here.scale, rtol=1e-5)
        np.testing.assert_allclose(np.asarray(there.Z), here.Z, rtol=1e-4, atol=1e-5)
        np.testing.assert_array_equal(there.y, here.y)
        np.testing.assert_allclose(there.held_back.Z, here.held_back.Z, rtol=1e-4, atol=1e-5)
        described = describe(trainer, here, seed=t)
        for name, value in describe(trainer, there, seed=t).items():
            np.testing.assert_allclose(value, described[name], rtol=0.01, atol=0.02, err_msg=name)
        held, lazy = (close_boundary(trainer, one, try_settings(trainer, one, [settings], seed=t)[0], seed=t)
                      for one in (here, there))
        for name, part in held.head.items():
            np.testing.assert_allclose(lazy.head[name], part, rtol=5e-3, atol=5e-3 * np.abs(part).max(), err_msg=name)
        np.testing.assert_array_equal(lazy.exemplars.y, held.exemplars.y)
        np.testing.assert_array_equal(lazy.summaries.count, held.summaries.count)
        np.testing.assert_allclose(lazy.summaries.mean, held.summaries.mean, atol=1e-4)
        np.testing.assert_allclose(lazy.summaries.variance, held.summaries.variance, rtol=1e-3, atol=1e-4)


@pytest.mark.parametrize("dtype", [np.float64, np.int16])
def test_other_types_are_converted_as_they_are_read(in_file, dtype):
    increment = drawn(ARRIVALS[0], 3)
    increment = Increment(np.round(increment.X / 1000).astype(dtype).astype(np.float32), increment.y)
    here, there = (open_boundary(Plan("wa"), None, one) for one in (increment, in_file(increment, dtype)))
    np.testing.assert_allclose(there.Z[:], here.Z, atol=1e-4)


def test_rows_in_memory_need_not_be_held_twice():
    increment = drawn(ARRIVALS[0], 4)
    here, there = (open_boundary(Plan("wa"), None, increment, held=held) for held in (True, False))
    assert isinstance(there.Z, StandardizedRows) and there.Z.X is increment.X
    np.testing.assert_allclose(np.asarray(there.Z), here.Z, atol=1e-4)


def test_a_large_mapping_is_not_held(tmp_path, monkeypatch):
    increment = drawn(ARRIVALS[0], 5)
    np.save(tmp_path / "X.npy", increment.X)
    mapped = Increment(np.load(tmp_path / "X.npy", mmap_mode="r", allow_pickle=False), increment.y)
    assert isinstance(open_boundary(Plan("wa"), None, mapped).Z, np.ndarray)
    monkeypatch.setattr(boundary, "HELD_BYTES", 100)
    assert isinstance(open_boundary(Plan("wa"), None, mapped).Z, StandardizedRows)


def test_few_rows_of_a_class_are_candidates_where_rows_are_not_held(in_file, monkeypatch):
    increment = drawn({0: 400, 1: 20}, 6)
    plan = Plan("wa", memory_limit=32)
    there = open_boundary(plan, None, in_file(increment))
    Z, y = there.candidates()
    assert len(y) == len(there.y)
    # Room for 60 rows, 30 of each class; at least twice what may be kept.
    monkeypatch.setattr(boundary, "CANDIDATE_BYTES", 4 * D * 60)
    Z, y = there.candidates()
    assert np.bincount(y).tolist() == [30, 16] and there.most_kept == 12
    of_first = np.flatnonzero((there.Z[:][:, None] == Z[y == 0]).all(axis=2).any(axis=1))
    gaps = np.diff(np.searchsorted(np.flatnonzero(there.y == 0), of_first))
    assert gaps.min() >= 12 and gaps.max() <= 14
    monkeypatch.setattr(boundary, "CANDIDATE_BYTES", 1)
    assert np.bincount(there.candidates()[1]).tolist() == [24, 16]


def test_scaling_of_rows_that_are_not_held(in_file):
    X = drawn(ARRIVALS[0], 7).X
    for one in (X, in_file(Increment(X, None)).X):
        center, scale = fit_scaling(one, held=False)
        np.testing.assert_allclose(center, X.astype(np.float64).mean(axis=0), rtol=1e-5)
        np.testing.assert_allclose(scale, fit_scaling(X)[1], rtol=1e-5)


def test_a_trainer_that_is_not_ours_may_make_one_array_of_them(in_file):
    from sgd_trainer import SgdTrainer

    plan, trainer, settings = Plan("wa", 0, 3, 16, 60), SgdTrainer(), Settings(0.01, 0.001, 5)
    increment = drawn(ARRIVALS[0], 8)
    held, lazy = (close_boundary(trainer, one, try_settings(trainer, one, [settings], seed=0)[0], seed=0)
                  for one in (open_boundary(plan, None, increment), open_boundary(plan, None, in_file(increment))))
    np.testing.assert_allclose(lazy.head["coef"], held.head["coef"], rtol=0.01, atol=0.01)
    there = open_boundary(plan, lazy, in_file(drawn(ARRIVALS[1], 9)))
    # Until a trainer says otherwise, its operations are counted as a linear model's.
    job = Job(there, settings)
    assert trainer.operations_of(job) == 4 * 3 * (len(there.y) + 15) * D * 5
    assert try_settings(trainer, there, [settings], seed=0)[0].operations == trainer.operations_of(job)
