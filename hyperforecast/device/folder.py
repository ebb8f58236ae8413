"""The device folder: what a device carries, in generations that appear whole or not at all.

    DIR/lock                      held by the update that is at work
    DIR/generation-000007/        the one before
    DIR/generation-000008/        the current one: manifest.json and one .npy file for each array

A generation is a bundle (`hyperforecast.storage`) of kind "carryover": plan, classes, the history of updates and what
has been laid down (`hyperforecast.device.care`) are facts in its manifest, readable with any tool; everything else is
plain arrays, with checksums. Version 1 had no care. A new generation is
written under the name generation-000009.partial and appears in one rename. Nothing in the folder names a path, so
that a copy of it works anywhere.
"""

import fcntl
import json
import os
import re
import shutil
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from hyperforecast.checks import InputError, check_whole
from hyperforecast.device.care import Care, care_from, care_parts
from hyperforecast.device.status import FolderBusy, FolderDamaged, FolderNotWritable
from hyperforecast.learning import Carryover, ClassSummaries, Exemplars
from hyperforecast.settings import UPDATE_LIMITS, Plan
from hyperforecast.storage import (
    Bundle, VersionError, read_bundle_folder, stored_array, sync_folder, write_bundle_folder,
)

KIND = "carryover"
VERSION = 2
LOCK = "lock"
GENERATION = re.compile(r"generation-(\d{6,})")
PARTIAL = re.compile(r"generation-\d{6,}\.partial")
# The current generation and the one before.
GENERATIONS_KEPT = 2
# Bytes of JSON; older entries are dropped beyond, which their numbers tell.
LARGEST_HISTORY = 2 * 2**20
HEAD = "head_"


@dataclass(frozen=True)
class Generation:
    """A complete generation.

    Attributes
    ----------
    number : int
        From 1.
    carryover : Carryover
    history : list of dict
        The last updates, oldest first; see `hyperforecast.device.cycle`.
    care : Care
    checksum : str
        SHA-256 of its content.
    """

    number: int
    carryover: Carryover
    history: list
    care: Care
    checksum: str


class DeviceFolder:
    """A device folder, which may not exist yet.

    Parameters
    ----------
    path : str or Path

    Raises
    ------
    InputError
        If there is something else of that name: a file, or a folder with other content.
    """

    def __init__(self, path):
        self.path = Path(path)
        try:
            names = os.listdir(self.path)
        except FileNotFoundError:
            return
        except OSError as error:
            raise InputError(self.path, "must be a device folder", error.strerror) from None
        own = [name for name in names if name == LOCK or GENERATION.fullmatch(name) or PARTIAL.fullmatch(name)]
        if names and not own:
            raise InputError(self.path, "must be a device folder, an empty one or a new name",
                             f"a folder with other content ({min(names)})", "name another folder")

    def numbers(self):
        """Return the numbers of the complete generations, ascending."""
        try:
            names = os.listdir(self.path)
        except FileNotFoundError:
            return []
        matches = [match for match in map(GENERATION.fullmatch, names) if match]
        return sorted(int(match[1]) for match in matches if match[0] == _name(int(match[1])))

    def read(self):
        """Return the current `Generation`, the one of the highest number.

        Raises
        ------
        InputError
            If there is none, or a newer version of the program wrote it.
        FolderDamaged
            If it is damaged; the line says whether the one before is intact. Damaged data are never used.
        """
        numbers = self.numbers()
        if not numbers:
            raise self._nothing()
        try:
            return self._read(numbers[-1])
        except VersionError:
            raise
        except InputError as error:
            raise FolderDamaged(self.path / _name(numbers[-1]), "must be an undamaged generation",
                                self._without_path(error), self._way_back(numbers)) from None

    def before(self):
        """Return the newest intact `Generation` before the current one, or None."""
        return self._intact_before(self.numbers())

    def store(self, carryover, history, care=Care(), *, in_place=False, alone=False):
        """Store a new generation; return its number. Call it within `locked`.

        Afterwards the one before is still there, older ones are not. With `in_place`, for a generation that carries
        what the current one does, the current one goes instead, so that there is still something to go back to. With
        `alone` no other stays.

        Raises
        ------
        FolderNotWritable
            If it cannot be written; the current generation is still current then.
        """
        before = self.numbers()
        number = max(before, default=0) + 1
        final = self.path / _name(number)
        partial = _partial(final)
        bundle = carryover_bundle(carryover, history, care)
        try:
            try:
                partial.mkdir()
                write_bundle_folder(partial, bundle)
                os.rename(partial, final)
                try:
                    sync_folder(self.path)
                except OSError:
                    os.rename(final, partial)
                    raise
            except BaseException:
                shutil.rmtree(partial, ignore_errors=True)
                raise
        except OSError as error:
            raise FolderNotWritable(self.path, "must take a new generation", error.strerror or error,
                                    "nothing has changed: make room or mend the disk, then update again") from None
        if in_place:
            before = before[:-1]
        stays = [] if alone else before[-(GENERATIONS_KEPT - 1):]
        for old in self.numbers()[:-1]:
            if old not in stays:
                _remove(self.path / _name(old))
        return number

    def revert(self):
        """Go back to the newest intact generation before the current one; return its number.

        The current one is removed, and damaged ones in between.

        Raises
        ------
        InputError
            If there is no intact generation to go back to.
        """
        with self.locked():
            numbers = self.numbers()
            intact = self._intact_before(numbers)
            if intact is None:
                raise InputError(self.path, "must hold an intact generation before the current one", "none before it")
            intact = intact.number
            for number in reversed(numbers[numbers.index(intact) + 1:]):
                _remove(self.path / _name(number))
            if self.numbers()[-1] != intact:
                raise FolderNotWritable(self.path, "must let go of its newest generation", _name(self.numbers()[-1]))
            return intact

    @contextmanager
    def locked(self, *, create=False):
        """Context in which no other process changes the folder; with `create` it is made if need be.

        The lock goes with the process that holds it, however that ends. Left-overs of an update that died are removed.

        Raises
        ------
        InputError
            If there is no generation, and none is about to be created.
        FolderBusy
            If another process, or another context in this one, holds the lock.
        FolderNotWritable
            If the folder cannot be made or written to.
        """
        if not create and not self.numbers():
            raise self._nothing()
        made = not self.path.exists()
        try:
            if made:
                self.path.mkdir(exist_ok=True)
                sync_folder(self.path.absolute().parent)
            handle = os.open(self.path / LOCK, os.O_RDWR | os.O_CREAT, 0o666)
        except OSError as error:
            if made:
                with suppress(OSError):
                    self.path.rmdir()
            raise FolderNotWritable(self.path, "must be a folder that can be written to", error.strerror) from None
        try:
            try:
                fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except BlockingIOError:
                raise FolderBusy(self.path, "must not be in use", "a folder that another update is at work in",
                                 "try again when that has ended") from None
            except OSError as error:
                raise FolderNotWritable(self.path, "must lie where files can be locked", error.strerror) from None
            for name in os.listdir(self.path):
                if PARTIAL.fullmatch(name):
                    shutil.rmtree(self.path / name, ignore_errors=True)
            try:
                yield
            finally:
                if made and not self.numbers():
                    # Nothing came of it: leave nothing behind.
                    shutil.rmtree(self.path, ignore_errors=True)
        finally:
            os.close(handle)

    def _read(self, number):
        bundle, checksum = read_bundle_folder(self.path / _name(number), KIND, newest=VERSION)
        carryover, history, care = carryover_from(bundle)
        return Generation(number, carryover, history, care, checksum)

    def _intact_before(self, numbers):
        """Return the newest intact `Generation` before the current one, or None."""
        for number in reversed(numbers[:-1]):
            try:
                return self._read(number)
            except InputError:
                continue
        return None

    def _way_back(self, numbers):
        intact = self._intact_before(numbers)
        if intact is None:
            return "no other generation is intact: copy the folder again from where it was saved"
        return f"generation {intact.number} is intact: revert to it with rollback"

    def _without_path(self, error):
        return str(error).replace(f"{self.path}{os.sep}", "")

    def _nothing(self):
        return InputError(self.path, "must be a device folder with a generation in it",
                          "no generation" if self.path.exists() else "nothing of that name",
                          "make a first update, with a plan")


def carryover_bundle(carryover, history, care=Care()):
    """Return a `Carryover`, the history of updates (list of JSON-able dicts) and a `Care` as a `Bundle`."""
    summaries = carryover.summaries
    care_facts, care_arrays = care_parts(care)
    arrays = {
        "center": carryover.center, "scale": carryover.scale, "best_check_accuracy": carryover.best_check_accuracy,
        "class_count": summaries.count, "class_mean": summaries.mean, "class_variance": summaries.variance,
        **_row_arrays("exemplar", carryover.exemplars), **_row_arrays("check", carryover.check_rows),
        **{HEAD + name: array for name, array in carryover.head.items()}, **care_arrays,
    }
    facts = {"plan": carryover.plan.as_dict(), "classes": carryover.classes.tolist(),
             "n_boundaries": carryover.n_boundaries, "history": _latest(history), "care": care_facts}
    return Bundle(KIND, VERSION, facts, arrays)


def carryover_from(bundle):
    """Return (carryover, history, care) from a bundle of `carryover_bundle`, every part checked.

    Raises
    ------
    InputError
        If a part is missing, or does not fit the others.
    """
    facts, arrays = bundle.facts, bundle.arrays
    if bundle.version == 1 and isinstance(facts, dict):
        facts = {**facts, "care": care_parts(Care())[0]}
    if not isinstance(facts, dict) or set(facts) != {"plan", "classes", "n_boundaries", "history", "care"}:
        raise InputError("facts", "must be plan, classes, n_boundaries, history and care", "others")
    classes = _classes(facts["classes"])
    n_features, n_classes = len(stored_array(arrays, "center", kinds="f", shape=(None,))), len(classes)

    def read(name, kinds, *shape, proper=np.isfinite):
        array = stored_array(arrays, name, kinds=kinds, shape=shape)
        if not proper(array).all():
            raise InputError(name, "must hold proper values", "others")
        return array

    def read_rows(name):
        y = read(f"{name}_y", "i", None, proper=lambda codes: (codes >= 0) & (codes < n_classes))
        rank = read(f"{name}_rank", "i", len(y), proper=lambda ranks: (ranks >= 0) & (np.diff(ranks, prepend=0) >= 0))
        return Exemplars(read(f"{name}_Z", "f", len(y), n_features), y, rank)

    per_class = (n_classes, n_features)
    carryover = Carryover(
        plan=_plan(facts["plan"]), classes=classes, center=read("center", "f", n_features),
        scale=read("scale", "f", n_features, proper=lambda scale: np.isfinite(scale) & (scale > 0)),
        head={name[len(HEAD):]: array for name, array in arrays.items() if name.startswith(HEAD)},
        exemplars=read_rows("exemplar"), check_rows=read_rows("check"),
        summaries=ClassSummaries(read("class_count", "i", n_classes, proper=lambda count: count > 0),
                                 read("class_mean", "f", *per_class),
                                 read("class_variance", "f", *per_class, proper=lambda v: np.isfinite(v) & (v >= 0))),
        best_check_accuracy=read("best_check_accuracy", "f", n_classes,
                                 proper=lambda best: np.isnan(best) | ((best >= 0) & (best <= 1))),
        n_boundaries=check_whole("n_boundaries", facts["n_boundaries"], low=1),
    )
    history = facts["history"]
    if not isinstance(history, list) or not all(isinstance(entry, dict) for entry in history):
        raise InputError("history", "must be a list of updates", "other content")
    for entry in history:
        check_whole("history number", entry.get("number"), low=1)
    return carryover, history, care_from(facts["care"], arrays, n_features=n_features)


def _latest(history):
    sizes = np.cumsum([len(json.dumps(entry)) for entry in reversed(history)], dtype=np.int64)
    return history[len(history) - max(np.searchsorted(sizes, LARGEST_HISTORY, side="right"), 1):]


def _row_arrays(name, rows):
    return {f"{name}_Z": rows.Z, f"{name}_y": rows.y, f"{name}_rank": rows.rank}


def _classes(listed):
    kinds = {type(label) for label in listed} if isinstance(listed, list) else set()
    if kinds in ({int}, {str}) and len(set(listed)) == len(listed):
        try:
            return np.array(listed, np.str_ if kinds == {str} else np.int64)
        except OverflowError:
            pass
    raise InputError("classes", "must be a list of distinct labels, all text or all whole numbers of 64 bits", "others")


def _plan(listed):
    needed = set(Plan().as_dict())
    if not isinstance(listed, dict) or not needed <= set(listed) <= needed | set(UPDATE_LIMITS):
        raise InputError("plan", f"must hold {', '.join(Plan().as_dict())}", "others")
    return Plan(**listed).checked()


def _name(number):
    return f"generation-{number:06d}"


def _partial(folder):
    return folder.with_name(f"{folder.name}.partial")


def _remove(folder):
    """Remove a generation if that can be done; what is left of one never bears a generation's name."""
    try:
        os.rename(folder, _partial(folder))
    except OSError:
        return
    shutil.rmtree(_partial(folder), ignore_errors=True)
