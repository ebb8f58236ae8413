"""Rows that stay in their file: what is read, moments, tables one after the other, files that are damaged."""

import numpy as np
import pytest

from hyperforecast import increments, rows
from hyperforecast.checks import InputError
from hyperforecast.increments import check_increment, read_features, read_increment
from hyperforecast.rows import FileRows, JoinedRows, chunks, column_moments, joined


def stored(tmp_path, X):
    path = tmp_path / "X.bin"
    path.write_bytes(b"head" + np.ascontiguousarray(X).tobytes())
    return FileRows(open(path, "rb"), path, offset=4, shape=X.shape, dtype=X.dtype)


@pytest.mark.parametrize("dtype", ["<f4", ">f8", "<i2", "|u1", "|b1"])
def test_rows_are_those_of_the_array(tmp_path, dtype):
    X = np.random.default_rng(0).integers(0, 2, (50, 3)).astype(dtype)
    lazy = stored(tmp_path, X)
    assert (len(lazy), lazy.shape, lazy.dtype, lazy.ndim) == (50, (50, 3), X.dtype, 2)
    for wanted in (slice(None), slice(7, 20), slice(45, 99), slice(9, 9), np.array([3, 4, 5, 7]), np.array([49, 0, 20]),
                   np.array([[1, 1], [30, 2]]), np.array([], np.int64), np.array(8), np.arange(50) % 7 == 2):
        np.testing.assert_array_equal(lazy[wanted], X[wanted])
        assert lazy[wanted].dtype == X.dtype
    np.testing.assert_array_equal(np.asarray(lazy), X)
    assert lazy.nbytes == X.nbytes
    np.testing.assert_array_equal(np.concatenate([lazy, X[:2]]), np.concatenate([X, X[:2]]))
    for wrong in (np.array([50]), np.array([-1]), slice(0, 9, 2)):
        with pytest.raises(IndexError):
            lazy[wrong]


def test_what_is_read_is_small(tmp_path, monkeypatch):
    lazy, read = stored(tmp_path, np.arange(8000.0).reshape(1000, 8)), []
    true = rows.os.preadv
    monkeypatch.setattr(rows.os, "preadv", lambda *given: read.append(true(*given)) or read[-1])
    lazy[np.array([1, 999])]
    assert read == [64, 64]
    read.clear()
    # Near neighbours come in one go.
    lazy[np.array([10, 11, 13, 14])]
    assert read == [5 * 64]


def test_moments_in_one_reading_against_numpy(tmp_path, monkeypatch):
    monkeypatch.setattr(rows, "SUMMED_BYTES", 4 * 5 * 64)
    rng = np.random.default_rng(1)
    # Far from zero, constant, large, tiny, plain.
    X = (rng.normal(size=(1000, 5)) * [1, 0, 1e18, 1e-12, 1] + [1e4, 7, 0, 0, 0]).astype(np.float32)
    exact = X.astype(np.float64)
    for table in (stored(tmp_path, X), X):
        mean, variance = column_moments(table)
        np.testing.assert_allclose(mean, exact.mean(axis=0), rtol=1e-6, atol=1e-6 * exact.std(axis=0).max() * 1e-12)
        np.testing.assert_allclose(variance, exact.var(axis=0), rtol=1e-4)
    assert variance[1] == 0
    # Squares that do not fit float32.
    X[3] = [1e38, -1e38, 3e38, 1, 1]
    np.testing.assert_allclose(stored(tmp_path, X).moments[1], X.astype(np.float64).var(axis=0), rtol=1e-4)
    X[999, 4] = np.inf
    assert not np.isfinite(stored(tmp_path, X).moments).all()


def test_a_file_that_becomes_shorter_is_one_clear_line(tmp_path):
    lazy = stored(tmp_path, np.ones((100, 4)))
    (tmp_path / "X.bin").write_bytes(b"head" + bytes(64))
    with pytest.raises(InputError, match="must not change while it is read; received a file that has become shorter"):
        lazy[:]


def test_tables_one_after_the_other(tmp_path):
    X = np.arange(40, dtype=np.float32).reshape(10, 4)
    lazy = stored(tmp_path, X[:6])
    assert joined([X]) is X and isinstance(joined([X[:6], X[6:]]), np.ndarray)
    both = joined([lazy, X[6:6], X[6:]])
    assert isinstance(both, JoinedRows) and both.shape == (10, 4)
    for places in (np.arange(10), np.array([9, 0, 5, 6]), np.array([[1, 9], [6, 5]])):
        np.testing.assert_array_equal(both.take(places, axis=0), X[places])
    assert [(one.start, one.stop) for one, _ in chunks(both, n_bytes=4 * 4 * 4)] == [(0, 4), (4, 8), (8, 10)]
    np.testing.assert_array_equal(np.concatenate([part for _, part in chunks(both, n_bytes=1)]), X)
    assert [part is X for _, part in chunks(X, n_bytes=1)] == [False] and next(chunks(X))[1].base is X.base


# --- files of increments --------------------------------------------------------------------------------------------

@pytest.fixture
def large(monkeypatch):
    """Whatever takes more than a kilobyte is large."""
    monkeypatch.setattr(increments, "HELD_BYTES", 1000)
    rng = np.random.default_rng(2)
    return rng.normal(size=(100, 6)).astype(np.float32), np.arange(100) % 4


def written(folder, X, y, kind):
    if kind == ".npy":
        np.save(folder / "a.npy", X)
        np.save(folder / "a.labels.npy", y)
    else:
        (np.savez if kind == ".npz" else np.savez_compressed)(folder / "a.npz", y=y, X=X)
    return folder / ("a.npy" if kind == ".npy" else "a.npz")


KINDS = (".npy", ".npz", "deflated .npz")


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("dtype", [np.float32, np.float64, np.int16])
def test_large_increments_stay_in_their_file(tmp_path, large, kind, dtype):
    X, y = (10 * large[0]).astype(dtype), large[1]
    read = read_increment(written(tmp_path, X, y, kind))
    assert isinstance(read.X, FileRows) and read.n_features == 6 and len(read) == 100
    np.testing.assert_array_equal(read.X[:], X)
    np.testing.assert_array_equal(read.y, y)
    assert isinstance(read_features(written(tmp_path, X, y, kind)), FileRows)
    assert isinstance(read_increment(written(tmp_path, X[:20], y[:20], kind)).X, np.ndarray)
    # Column after column cannot be read row by row.
    assert isinstance(read_increment(written(tmp_path, np.asfortranarray(X), y, kind)).X, np.ndarray)
    assert check_increment(read.X, y).X is read.X
    with pytest.raises(InputError, match="must have 5 features as before"):
        read_increment(written(tmp_path, X, y, kind), n_features=5)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf, 1e300])
def test_a_value_that_is_not_finite_is_found_in_a_large_file(tmp_path, large, kind, value):
    X, y = large[0].astype(np.float64), large[1]
    X[77, 2] = value
    with pytest.raises(InputError, match="must hold finite numbers that fit float32; received .* in row 77, column 2"):
        read_increment(written(tmp_path, X, y, kind))


def test_values_at_the_end_of_float32_are_finite(tmp_path, large):
    X, y = large
    X[5] = [3e38, -3e38, 3e38, 1, 1, 1]
    X[6] = -X[5]
    assert len(read_increment(written(tmp_path, X, y, ".npy"))) == 100


@pytest.mark.parametrize("kind", [".npz", "deflated .npz"])
def test_damage_in_a_large_archive_is_detected(tmp_path, large, kind):
    path = written(tmp_path, *large, kind)
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 0x55
    path.write_bytes(data)
    with pytest.raises(InputError, match="must be a complete .npz file"):
        read_increment(path)


def test_no_room_to_unpack_is_one_clear_line(tmp_path, large, monkeypatch):
    path = written(tmp_path, *large, "deflated .npz")
    monkeypatch.setattr(increments.shutil, "disk_usage", lambda folder: increments.shutil._ntuple_diskusage(9, 0, 9))
    with pytest.raises(InputError, match="must find room in .* to be unpacked; received 2528 bytes; set TMPDIR"):
        read_increment(path)
