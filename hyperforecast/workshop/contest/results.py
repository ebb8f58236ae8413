"""Result files of contests: JSON that holds enough to recompute every table, checked when it is read."""

from dataclasses import dataclass, field
from pathlib import Path

from hyperforecast.checks import InputError, check_choice, check_number, check_whole
from hyperforecast.settings import METHODS, Plan, Settings
from hyperforecast.storage import dump_json, read_json, write_atomically
from hyperforecast.workshop.contest import one_step, whole_stream

KIND = "contest"
VERSION = 1
CONTESTS = (one_step.KIND, whole_stream.KIND)
LARGEST_RESULT = 2**30

_HEADER = ("kind", "version", "contest", "plan", "seed", "pieces")
_PIECE = ("stream", "source", "method", "definition", "forecaster", "versions", "seconds", "outcome")
_CHOICE = ("settings", "selection", "scoring", "attempts", "operations", "seconds", "diverged")


@dataclass
class Contest:
    """A contest's results.

    Attributes
    ----------
    kind : {"one_step", "whole_stream"}
    plan : dict
        What all pieces share, the method aside.
    seed : int
    pieces : list of dict
        In order of stream and method: "stream" (its key), "source", "method", "definition", "forecaster" (checksum),
        "versions", "seconds" (wall clock) and "outcome" (see `run_one_step`, `run_whole_stream`).
    """

    kind: str
    plan: dict
    seed: int
    pieces: list = field(default_factory=list)

    def forecaster_of(self):
        """Return {(stream, method): checksum of the forecaster} of the pieces."""
        return {_key(piece): piece["forecaster"] for piece in self.pieces}

    def add(self, piece):
        """Add a piece in its place."""
        self.pieces = sorted([*self.pieces, piece], key=_key)

    def write(self, path):
        """Write the result file in one rename."""
        write_atomically(path, dump_json({"kind": KIND, "version": VERSION, "contest": self.kind, "plan": self.plan,
                                          "seed": self.seed, "pieces": self.pieces}))


def open_contest(path, *, kind, plan, seed):
    """Return the `Contest` in a result file, which must be of this kind, plan and seed; or store one without pieces.

    Raises
    ------
    InputError
        If the file holds another contest, or cannot be created there.
    """
    path = Path(path)
    new = Contest(kind, plan, seed)
    if path.exists():
        stored = load_contest(path)
        for name in ("kind", "plan", "seed"):
            if getattr(stored, name) != getattr(new, name):
                raise InputError(path, f"must hold a contest of the {name} {getattr(new, name)}", getattr(stored, name),
                                 "use another result file, or the same arguments")
        return stored
    if not path.absolute().parent.is_dir():
        raise InputError(path, "must lie in a folder that exists", path.parent)
    new.write(path)
    return new


def load_contest(path):
    """Return the `Contest` in a result file.

    Raises
    ------
    InputError
        If the file is missing, incomplete, of another kind or version, or holds numbers that cannot be.
    """
    document = read_json(path, largest=LARGEST_RESULT)
    if not isinstance(document, dict) or document.get("kind") != KIND:
        raise InputError(path, "must be a contest's result file", "other content")
    if document.get("version") != VERSION:
        raise InputError(path, f"must be of version {VERSION}", f"version {document.get('version')!r}",
                         "use the program's version that wrote it")
    try:
        _require(document, _HEADER)
        check_choice("contest", document["contest"], CONTESTS)
        check_whole("seed", document["seed"])
        Plan(**document["plan"]).checked()
        if not isinstance(document["pieces"], list):
            raise TypeError("pieces is not a list")
        for piece in document["pieces"]:
            _check_piece(piece, document["contest"])
        contest = Contest(document["contest"], document["plan"], document["seed"], document["pieces"])
        if len({_key(piece) for piece in contest.pieces}) < len(contest.pieces):
            raise InputError("pieces", "must differ in stream or method", "two alike")
        return contest
    except (KeyError, TypeError, AttributeError, ValueError) as error:
        raise InputError(path, "must be a complete contest result", error, "copy it again from the source") from None


def _key(piece):
    return piece["stream"], piece["method"]


def _require(given, names):
    if set(given) != set(names):
        raise ValueError(f"the keys {', '.join(sorted(given))} instead of {', '.join(sorted(names))}")


def _check_piece(piece, kind):
    _require(piece, _PIECE)
    check_choice("method", piece["method"], METHODS)
    for name in ("stream", "source", "forecaster"):
        if not isinstance(piece[name], str):
            raise TypeError(f"{name} is not a text")
    if not piece["outcome"]:
        raise ValueError("a piece without outcome")
    if kind == one_step.KIND:
        for boundary in piece["outcome"]:
            _check_boundary(boundary, piece["method"])
    else:
        _require(piece["outcome"], whole_stream.ENTRANTS)
        for way in piece["outcome"].values():
            _check_way(way, piece["method"])


def _check_boundary(boundary, method):
    _require(boundary, ("boundary", "classes_old", "classes_new", "policies", "noise", "expected", "advice_seconds"))
    _require(boundary["policies"], one_step.ENTRANTS)
    for name in ("classes_old", "classes_new"):
        check_whole(name, boundary[name])
    check_number("advice_seconds", boundary["advice_seconds"], low=0)
    for choice in boundary["policies"].values():
        _require(choice, _CHOICE)
        _require(choice["scoring"], ("old", "new", "all"))
        _check_choice(choice, method)
        _check_shares(choice["scoring"].values())
    _require(boundary["expected"], ("old", "new", "all"))
    for expected in boundary["expected"].values():
        _require(expected, ("value", "low", "high"))
        _check_shares(expected.values())
    if len(boundary["noise"]) != one_step.NOISE_SEEDS:
        raise ValueError(f"{len(boundary['noise'])} repetitions instead of {one_step.NOISE_SEEDS}")
    _check_shares(boundary["noise"])


def _check_way(way, method):
    _require(way, ("matrix", "task_classes", "boundaries"))
    if [len(row) for row in way["matrix"]] != list(range(1, len(way["task_classes"]) + 1)) or len(way["matrix"]) < 2:
        raise ValueError("a matrix that is not a lower triangle over at least two tasks")
    for row in way["matrix"]:
        _check_shares(row)
    for count in way["task_classes"]:
        check_whole("task_classes", count, low=1)
    if not way["boundaries"]:
        raise ValueError("a way without boundaries")
    for choice in way["boundaries"]:
        _require(choice, (*_CHOICE, "boundary", "exemplars"))
        _check_choice(choice, method)
        _check_shares([choice["scoring"]])
        check_whole("exemplars", choice["exemplars"])


def _check_choice(choice, method):
    Settings(**choice["settings"]).checked(method)
    _check_shares([choice["selection"]])
    check_whole("attempts", choice["attempts"])
    check_number("operations", choice["operations"], low=0)
    check_number("seconds", choice["seconds"], low=0)


def _check_shares(values):
    for value in values:
        check_number("an accuracy", value, low=0, high=1)
