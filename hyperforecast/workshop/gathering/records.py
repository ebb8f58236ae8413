"""The records file: every attempt of every gathered boundary, in SQLite.

A trajectory (one stream walked through with one plan) is stored in one transaction: it is there whole, or not at all.
"""

import json
import sqlite3
from contextlib import closing, contextmanager
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.settings import Settings
from hyperforecast.storage import parse_json

APPLICATION = 0x68666331
VERSION = 2
SCHEMA = """
CREATE TABLE trajectories (
    trajectory TEXT PRIMARY KEY, stream TEXT NOT NULL, source TEXT NOT NULL, seed INTEGER NOT NULL,
    method TEXT NOT NULL, plan TEXT NOT NULL, seconds REAL NOT NULL
) WITHOUT ROWID;
CREATE TABLE boundaries (
    trajectory TEXT NOT NULL REFERENCES trajectories, boundary INTEGER NOT NULL,
    classes_old INTEGER NOT NULL, classes_new INTEGER NOT NULL, most_kept INTEGER NOT NULL,
    outcome_rows INTEGER NOT NULL, descriptors TEXT NOT NULL,
    PRIMARY KEY (trajectory, boundary)
) WITHOUT ROWID;
CREATE TABLE attempts (
    trajectory TEXT NOT NULL, boundary INTEGER NOT NULL, attempt INTEGER NOT NULL, strategy TEXT NOT NULL,
    learning_rate REAL NOT NULL, regularization REAL NOT NULL, kept_per_class INTEGER,
    accuracy_old REAL NOT NULL, accuracy_new REAL NOT NULL, diverged INTEGER NOT NULL, operations REAL NOT NULL,
    after_one REAL, after_two REAL,
    PRIMARY KEY (trajectory, boundary, attempt),
    FOREIGN KEY (trajectory, boundary) REFERENCES boundaries
) WITHOUT ROWID;
"""


@dataclass(frozen=True)
class AttemptRecord:
    """Settings tried at a boundary and their outcome on selection rows.

    `after_one` and `after_two` are the accuracies on all classes seen one and two boundaries later, where the later
    settings come from the reference policy; None where that was not followed.
    """

    settings: Settings
    strategy: str
    accuracy_old: float
    accuracy_new: float
    diverged: bool
    operations: float
    after_one: float | None = None
    after_two: float | None = None


@dataclass(frozen=True)
class BoundaryRecord:
    """A boundary: its number, class counts, exemplars that the memory allows, descriptors, and attempts.

    `classes_new` counts the classes of the outcome `accuracy_new`, `classes_old` those of `accuracy_old`; outcomes are
    shares of `outcome_rows` rows.
    """

    number: int
    classes_old: int
    classes_new: int
    most_kept: int
    outcome_rows: int
    descriptors: dict
    attempts: list


@dataclass(frozen=True)
class Trajectory:
    """One stream walked through with one plan; `key` identifies it in every records file."""

    key: str
    stream: str
    source: str
    seed: int
    method: str
    plan: dict
    seconds: float
    boundaries: list


class RecordsFile:
    """A records file, opened or created.

    Parameters
    ----------
    path : str or Path
    create : bool
        Whether to create it if it does not exist.

    Raises
    ------
    InputError
        If it is missing, not a records file, damaged, or of another version.
    """

    def __init__(self, path, *, create=False):
        self.path = Path(path)
        exists = self.path.exists()
        if not exists and not create:
            raise InputError(self.path, "must be a records file that exists", "nothing of that name", "run gather first")
        if not exists and not self.path.absolute().parent.is_dir():
            raise InputError(self.path, "must lie in a folder that exists", str(self.path.parent))
        with self._connected() as connection:
            if not connection.execute("SELECT count(*) FROM sqlite_master").fetchone()[0] and create:
                connection.executescript(f"BEGIN; {SCHEMA} PRAGMA application_id = {APPLICATION};"
                                         f" PRAGMA user_version = {VERSION}; COMMIT;")
            if connection.execute("PRAGMA application_id").fetchone()[0] != APPLICATION:
                raise InputError(self.path, "must be a records file", "another SQLite database")
            version = connection.execute("PRAGMA user_version").fetchone()[0]
            if version != VERSION:
                raise InputError(self.path, f"must be of version {VERSION}", f"version {version}",
                                 "use the program's version that wrote it")

    @contextmanager
    def _connected(self):
        try:
            with closing(sqlite3.connect(self.path, timeout=60)) as connection, connection:
                yield connection
        except sqlite3.Error as error:
            raise InputError(self.path, "must be a readable, undamaged records file", error) from None

    def stored(self):
        """Return the keys of the trajectories in the file, as a set."""
        with self._connected() as connection:
            return {key for key, in connection.execute("SELECT trajectory FROM trajectories")}

    def store(self, trajectory):
        """Store a `Trajectory` in one transaction; one that is there already stays as it is."""
        with self._connected() as connection:
            new = connection.execute("INSERT OR IGNORE INTO trajectories VALUES (?, ?, ?, ?, ?, ?, ?)", (
                trajectory.key, trajectory.stream, trajectory.source, trajectory.seed, trajectory.method,
                json.dumps(trajectory.plan, sort_keys=True), trajectory.seconds)).rowcount
            if not new:
                return
            for boundary in trajectory.boundaries:
                described = {name: None if np.isnan(value) else value for name, value in boundary.descriptors.items()}
                connection.execute("INSERT INTO boundaries VALUES (?, ?, ?, ?, ?, ?, ?)", (
                    trajectory.key, boundary.number, boundary.classes_old, boundary.classes_new, boundary.most_kept,
                    boundary.outcome_rows, json.dumps(described)))
                connection.executemany("INSERT INTO attempts VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)", [(
                    trajectory.key, boundary.number, place, one.strategy, one.settings.learning_rate,
                    one.settings.regularization, one.settings.kept_per_class, one.accuracy_old, one.accuracy_new,
                    int(one.diverged), one.operations, one.after_one, one.after_two) for place, one in enumerate(boundary.attempts)])

    def trajectories(self, *, method=None):
        """Yield the stored `Trajectory` objects in order of their keys, of one method or of all."""
        with self._connected() as connection:
            chosen = connection.execute(
                "SELECT * FROM trajectories WHERE ? IS NULL OR method = ? ORDER BY trajectory", (method, method))
            for key, stream, source, seed, method_, plan, seconds in chosen.fetchall():
                boundaries = []
                for number, old, new, most_kept, rows, described in connection.execute(
                        "SELECT boundary, classes_old, classes_new, most_kept, outcome_rows, descriptors FROM boundaries"
                        " WHERE trajectory = ? ORDER BY boundary", (key,)).fetchall():
                    attempts = [
                        AttemptRecord(Settings(rate, strength, kept), strategy, acc_old, acc_new, bool(diverged), ops, *later)
                        for strategy, rate, strength, kept, acc_old, acc_new, diverged, ops, *later in connection.execute(
                            "SELECT strategy, learning_rate, regularization, kept_per_class, accuracy_old, accuracy_new,"
                            " diverged, operations, after_one, after_two FROM attempts WHERE trajectory = ? AND boundary = ? ORDER BY attempt",
                            (key, number))]
                    descriptors = {name: np.nan if value is None else value
                                   for name, value in self._mapping(described).items()}
                    boundaries.append(BoundaryRecord(number, old, new, most_kept, rows, descriptors, attempts))
                yield Trajectory(key, stream, source, seed, method_, self._mapping(plan), seconds, boundaries)

    def _mapping(self, text):
        document = parse_json(self.path, str(text).encode())
        if not isinstance(document, dict):
            raise InputError(self.path, "must hold plans and descriptors by name", text)
        return document

    def counts(self):
        """Return rows (method, source, trajectories, boundaries, attempts), sorted."""
        with self._connected() as connection:
            return connection.execute(
                "SELECT method, source, count(DISTINCT trajectory), count(DISTINCT trajectory || '#' || boundary),"
                " count(*) FROM attempts JOIN trajectories USING (trajectory) GROUP BY method, source"
                " ORDER BY method, source").fetchall()
