"""Gathering: the same records whatever the workers, whole trajectories or none, and no doubtful records file."""

import hashlib
import json
import pathlib
import re
import signal
import sqlite3
import subprocess
import sys
from dataclasses import replace

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.describing import DESCRIPTORS
from hyperforecast.learning import HeadTrainer, Job, open_boundary
from hyperforecast.settings import METHODS, Settings
from hyperforecast.workshop.gathering import (
    AttemptRecord, BoundaryRecord, RecordsFile, Trajectory, derived_seed, gather, opening_settings, run_trajectory,
    trajectories,
)

DEMO_SMALL = pathlib.Path(__file__).parents[2] / "bench_streams" / "demo_small.toml"
SPACE_FILLED, PROPOSED = 6, 3
FEW = {"attempts": (SPACE_FILLED, 0, PROPOSED)}


def content(path):
    """All that a records file says, seconds aside."""
    return [repr(replace(one, seconds=0.0)) for one in RecordsFile(path).trajectories()]


@pytest.fixture(scope="module")
def gathered(demo_small, tmp_path_factory):
    path = tmp_path_factory.mktemp("gathering") / "a.sqlite"
    seen = []
    n_run = gather(demo_small, path, methods=METHODS, **FEW, progress=seen.append)
    assert n_run == len(seen) == 2 * len(METHODS)
    assert [one.stored for one in seen] == list(range(1, 9)) and seen[-1].seconds_left == 0
    line = r"8 of 8 trajectories, about 0 min left; last: small \w+ \w+, [23] boundaries in .* s"
    assert re.fullmatch(line, str(seen[-1]))
    return path


def test_every_stream_is_walked_with_every_method_and_every_boundary_recorded(gathered):
    records = RecordsFile(gathered)
    found = {(one.stream, one.method): one for one in records.trajectories()}
    assert found.keys() == {(stream, method) for stream in ("small clouds", "small drift") for method in METHODS}
    for (stream, method), one in found.items():
        # The first increment has nothing to forget and is not searched.
        assert [boundary.number for boundary in one.boundaries] == ([1, 2] if stream == "small clouds" else [1, 2, 3])
        assert one.source == {"small clouds": "synthetic_gaussian", "small drift": "synthetic_drifting"}[stream]
        assert one.plan["method"] == method and one.seconds > 0
        for boundary in one.boundaries:
            assert boundary.descriptors.keys() == DESCRIPTORS.keys()
            assert boundary.descriptors["classes_old"] == boundary.classes_old
            assert [one.strategy for one in boundary.attempts] == ["space_filling"] * SPACE_FILLED + ["tpe"] * PROPOSED
            for attempt in boundary.attempts:
                assert attempt.settings.checked(method) == attempt.settings
                assert (attempt.settings.kept_per_class or 0) <= boundary.most_kept
                assert 0 <= attempt.accuracy_old <= 1 and 0 <= attempt.accuracy_new <= 1 and attempt.operations > 0
    assert [row[:4] for row in records.counts()] == [
        (method, source, 1, boundaries) for method in sorted(METHODS)
        for source, boundaries in (("synthetic_drifting", 3), ("synthetic_gaussian", 2))]
    assert sum(row[4] for row in records.counts()) == 4 * (3 + 2) * (SPACE_FILLED + PROPOSED)
    assert [one.method for one in records.trajectories(method="ewc")] == ["ewc", "ewc"]


def test_later_outcomes_are_known_where_an_attempt_was_followed_and_the_stream_goes_on(gathered):
    for one in RecordsFile(gathered).trajectories():
        last = one.boundaries[-1].number
        for boundary in one.boundaries:
            one_later = [attempt.after_one is not None for attempt in boundary.attempts]
            two_later = [attempt.after_two is not None for attempt in boundary.attempts]
            # Of 9 attempts the 4 best are followed; that is the better half.
            expected = 4 if boundary.number < last else 0
            assert sum(one_later) == expected
            assert two_later == (one_later if boundary.number < last - 1 else [False] * len(two_later))
            if expected:
                n_old, n_new = boundary.classes_old, boundary.classes_new
                total = np.array([n_old * attempt.accuracy_old + n_new * attempt.accuracy_new
                                  for attempt in boundary.attempts])
                assert total[one_later].min() >= np.delete(total, np.flatnonzero(one_later)).max() - 1e-9
                later = [attempt.after_one for attempt, known in zip(boundary.attempts, one_later) if known]
                assert all(0 <= accuracy <= 1 for accuracy in later)


def test_records_do_not_depend_on_the_number_of_workers(gathered, demo_small, tmp_path):
    gather(demo_small, tmp_path / "b.sqlite", methods=METHODS[::-1], workers=2, **FEW)
    assert content(tmp_path / "b.sqlite") == content(gathered)


def test_a_seed_changes_the_records_and_names_other_trajectories(gathered, demo_small, tmp_path):
    gather(demo_small[:1], tmp_path / "b.sqlite", methods=["ewc"], seed=1, **FEW)
    other, = RecordsFile(tmp_path / "b.sqlite").trajectories()
    same, = (one for one in RecordsFile(gathered).trajectories() if (one.stream, one.method) == ("small clouds", "ewc"))
    assert other.key != same.key and other.boundaries != same.boundaries


def test_what_is_stored_is_not_run_again(gathered, demo_small):
    before = gathered.read_bytes()
    assert gather(demo_small, gathered, methods=METHODS) == 0
    assert gathered.read_bytes() == before


GATHER = """
import json, sys, time, types
from hyperforecast.workshop.gathering import gather, records
from hyperforecast.workshop.streams import load_streams

written = []

def dumps(*arguments, **options):
    written.append(arguments)
    if len(written) == 6:  # the plan and each boundary of a trajectory are one document: the second is half stored
        print("in the middle of a transaction", flush=True)
        time.sleep(600)
    return json.dumps(*arguments, **options)

records.json = types.SimpleNamespace(dumps=dumps)
gather(load_streams(sys.argv[1]), sys.argv[2], methods={methods}, attempts={attempts})
""".format(methods=METHODS, **FEW)


def test_a_gathering_that_is_killed_goes_on_where_it_was(gathered, demo_small, tmp_path):
    path = tmp_path / "b.sqlite"
    command = [sys.executable, "-c", GATHER, str(DEMO_SMALL), str(path)]
    process = subprocess.Popen(command, stdout=subprocess.PIPE, text=True)
    with process:
        assert process.stdout.readline() == "in the middle of a transaction\n"
        process.send_signal(signal.SIGKILL)
    assert process.returncode == -signal.SIGKILL
    assert len(RecordsFile(path).stored()) == len(content(path)) == 1
    assert gather(demo_small, path, methods=METHODS, **FEW) == 7
    assert content(path) == content(gathered)


# What is recorded.


def test_descriptors_are_known_before_any_attempt(demo_small):
    """The attempts made at a boundary leave no trace in its descriptors."""
    few, many = (run_trajectory(demo_small[0], "lwf", seed=0, attempts=(n, 0, 0)).boundaries[0] for n in (2, 7))
    assert (len(few.attempts), len(many.attempts)) == (2, 7)
    np.testing.assert_equal(few.descriptors, many.descriptors)


def test_a_trainer_of_ones_own_does_the_training(demo_small):
    class Noted(HeadTrainer):
        jobs = 0

        def learn(self, jobs, *, seed):
            self.jobs += len(jobs)
            return super().learn(jobs, seed=seed)

    trainer = Noted()
    run_trajectory(demo_small[0], "ewc", seed=0, attempts=(3, 0, 2), trainer=trainer)
    # The first increment, five attempts at each of two boundaries, and two of the first followed over one more.
    assert trainer.jobs == 1 + 5 + 5 + 4


def some_trajectory(**changes):
    boundary = BoundaryRecord(1, 2, 1, 10, 30, {"rows": 5.0, "missing": np.nan}, [
        AttemptRecord(Settings(0.1, 1.0, 3), "tpe", 0.5, 0.25, False, 1e6, 0.75, None),
        AttemptRecord(Settings(0.2, 2.0, 4), "tpe", 0.0, 1.0, True, 1e6)])
    return Trajectory(**{"key": "a", "stream": "s", "source": "o", "seed": 3, "method": "wa", "plan": {"passes": 2},
                         "seconds": 0.5, "boundaries": [boundary], **changes})


def test_a_trajectory_comes_back_as_it_was_stored_and_missing_descriptors_are_null(tmp_path):
    records = RecordsFile(tmp_path / "a.sqlite", create=True)
    records.store(some_trajectory())
    back, = RecordsFile(tmp_path / "a.sqlite").trajectories()
    np.testing.assert_equal(vars(back.boundaries[0]), vars(some_trajectory().boundaries[0]))
    assert replace(back, boundaries=[]) == some_trajectory(boundaries=[])
    with sqlite3.connect(tmp_path / "a.sqlite") as connection:
        stored, = connection.execute("SELECT descriptors FROM boundaries").fetchone()
    connection.close()
    assert json.loads(stored) == {"rows": 5.0, "missing": None}


def test_a_trajectory_is_stored_once_and_whole_or_not_at_all(tmp_path):
    records = RecordsFile(tmp_path / "a.sqlite", create=True)
    records.store(some_trajectory())
    records.store(some_trajectory(stream="another"))
    assert [one.stream for one in records.trajectories()] == ["s"]
    boundary = some_trajectory().boundaries[0]
    with pytest.raises(InputError, match="must be a readable, undamaged records file; received UNIQUE constraint"):
        records.store(some_trajectory(key="b", boundaries=[boundary, boundary]))
    assert records.stored() == {"a"}


# Plans.


def drawn_plans(stream, n=300):
    return [trajectories.draw_plan("wa", stream, np.random.default_rng(seed)).checked() for seed in range(n)]


def test_plans_are_of_many_kinds(demo_small):
    stream = demo_small[1].build()
    plans = drawn_plans(stream)
    assert {one.hidden_units for one in plans} == {0, 16, 32, 64, 128}
    assert {one.batch_size for one in plans} == {16, 32, 64}
    passes = np.array([one.passes for one in plans])
    assert passes.min() == 3 and passes.max() == 25 and len(np.unique(passes)) == 23
    # Rows per class are even on a logarithmic scale from 4 to 100: the median is their geometric mean, 20.
    per_class = np.array([one.memory_limit / 8 for one in plans])
    assert per_class.min() == 4 and per_class.max() >= 95 and 17 < np.median(per_class) < 23
    assert drawn_plans(stream) == plans


@pytest.mark.parametrize("most", [1e6, 1e7])
def test_costly_plans_get_fewer_passes(most, demo_small, monkeypatch):
    monkeypatch.setattr(trajectories, "MOST_OPERATIONS", most)
    stream = demo_small[0].build()
    largest = max((stream.training(t) for t in range(stream.n_boundaries)), key=len)
    plans = drawn_plans(stream, 40)
    assert any(one.passes == 2 for one in plans) == (most < 1e7) and any(3 <= one.passes < 10 for one in plans)
    for plan in plans:
        # The largest increment alone, trained as a first one, with the classes that it has.
        boundary = open_boundary(plan, None, largest)
        attempt, = HeadTrainer().learn([Job(boundary, opening_settings(plan))], seed=0)
        assert attempt.operations <= 1.3 * most or plan.passes == 2


def test_derived_seeds_are_the_same_everywhere_and_differ_by_every_part():
    # SHA-256 of "('a', 1)", first four bytes, halved.
    assert derived_seed("a", 1) == int(hashlib.sha256(b"('a', 1)").hexdigest()[:8], 16) // 2
    seeds = [derived_seed(*parts) for parts in (("a", 1), ("a", 2), ("b", 1), ("a",), ("a", "1"), (1, "a"))]
    assert len(set(seeds)) == 6 and all(0 <= seed < 2**31 for seed in seeds)


# Files that are no records.


def foreign_sqlite(path):
    with sqlite3.connect(path) as connection:
        connection.execute("CREATE TABLE trajectories (a)")
    connection.close()


def other_version(path):
    RecordsFile(path, create=True)
    with sqlite3.connect(path) as connection:
        connection.execute("PRAGMA user_version = 1")
    connection.close()


def truncated(path):
    records = RecordsFile(path, create=True)
    for key in range(40):
        records.store(some_trajectory(key=f"{key}" * 200))
    data = path.read_bytes()
    path.write_bytes(data[:len(data) // 2])


@pytest.mark.parametrize("make, rule", [
    (lambda path: None, "must be a records file that exists; received nothing of that name; run gather first"),
    (foreign_sqlite, "must be a records file; received another SQLite database"),
    (lambda path: path.write_bytes(b""), "must be a records file; received another SQLite database"),
    (lambda path: path.write_text("method,source\nwa,digits\n" * 99), "must be a readable, undamaged records file"),
    (lambda path: path.write_bytes(b"SQLite format 3\0" + b"\xff" * 5000), "must be a readable, undamaged records"),
    (lambda path: path.mkdir(), "must be a readable, undamaged records file"), (truncated, "undamaged records file"),
    (other_version, "must be of version 2; received version 1; use the program's version that wrote it"),
], ids=["missing", "foreign", "empty", "text", "header only", "folder", "truncated", "version"])
def test_other_files_are_refused(make, rule, tmp_path):
    path = tmp_path / "a.sqlite"
    make(path)
    with pytest.raises(InputError, match=rule) as caught:
        list(RecordsFile(path).trajectories())
    assert str(caught.value).startswith(str(path)) and str(caught.value).isprintable()
    if path.is_file() and path.stat().st_size:
        before = path.read_bytes()
        with pytest.raises(InputError):
            list(RecordsFile(path, create=True).trajectories())
        assert path.read_bytes() == before


def test_a_records_file_is_made_only_in_a_folder_that_exists(tmp_path):
    with pytest.raises(InputError, match="must lie in a folder that exists; received .*nowhere"):
        RecordsFile(tmp_path / "nowhere" / "a.sqlite", create=True)
    assert not list(tmp_path.iterdir())


def test_damaged_records_are_refused_when_read(tmp_path):
    """A flipped byte in stored JSON is no crash: the file has no checksums, its documents have a form."""
    records = RecordsFile(tmp_path / "a.sqlite", create=True)
    records.store(some_trajectory())
    whole = records.path.read_bytes()
    for part in (b'{"passes": 2}', b'{"rows": 5.0, "missing": null}'):
        assert whole.count(part) == 1
        for damage in (b"[" + part[1:], part[:-1] + b"\xff", part.replace(b":", b"\0"), b"7" * len(part)):
            records.path.write_bytes(whole.replace(part, damage))
            with pytest.raises(InputError, match="a.sqlite"):
                list(RecordsFile(records.path).trajectories())
