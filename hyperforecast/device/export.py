"""A device's history on its travels: what leaves the device in a file, and what base reads of it.

The file is one JSON document (`schemas/history.schema.json`):

    kind, version   "device history", 1
    device          the device's identity: random, made at its first update
    plan            as the first update fixed it, without the limits that may change
    updates         each with `number`, `classes_old`, `classes_new` (counts), `descriptors` by name (null: not to be
                    had), `kept`, whether the advice was `overruled`, and `tries`: the settings that were trained with,
                    in order, whether training `diverged`, the accuracies `achieved` (see
                    `hyperforecast.device.update`) and the `operations` spent

An update without descriptors, as a device's first, is left out, as are tries that the time limit stopped: nothing can
be learned from them. Nothing else leaves the device unless it is asked for: no rows, no times, no words, and labels
only as `class_names`.
"""

import re
from dataclasses import dataclass

from hyperforecast.checks import InputError, check_choice, check_number, check_whole
from hyperforecast.device.documents import check_descriptors, check_object
from hyperforecast.settings import Plan, Settings
from hyperforecast.storage import checksum, dump_json, read_json, write_atomically

KIND = "device history"
VERSION = 1
IDENTITY = re.compile(r"[0-9a-f]{32}")
ACHIEVED = ("old", "new", "all", "old_before")


@dataclass(frozen=True)
class Try:
    """Settings that were trained with, and what became of them; accuracies are None where no row could tell."""

    settings: Settings
    diverged: bool
    old: float | None
    new: float | None
    rows: int
    operations: float


@dataclass(frozen=True)
class ExportedUpdate:
    """An update as it left its device.

    `classes_old` and `classes_new` are counts; `descriptors` floats by name, NaN where one could not be had; `content`
    is the SHA-256 of all this and the plan.
    """

    number: int
    classes_old: int
    classes_new: int
    descriptors: dict
    tries: list
    kept: bool
    overruled: bool
    content: str


@dataclass(frozen=True)
class ExportedHistory:
    """A device's identity, its plan and its updates."""

    device: str
    plan: Plan
    updates: list


def export_history(path, generation, *, class_names=False):
    """Write the history of a `Generation` to a file; return how many updates it holds.

    Parameters
    ----------
    path : str or Path
    generation : Generation
    class_names : bool
        Whether the labels of an update's new and returning classes leave the device, too.

    Raises
    ------
    InputError
        If there is no update with descriptors, or the file cannot be written.
    """
    told = [(one, tries) for one in generation.history if one["descriptors"] is not None and one.get("device")
            if (tries := [each for each in (*one["earlier_tries"], one) if not each.get("stopped")])]
    if not told:
        raise InputError("history", "must tell of an update after the first", f"{len(generation.history)} updates",
                         "export after the next one")
    updates = []
    for one, tries in told:
        names = {"class_names": {"new": one["classes_new"], "again": one["classes_again"]}} if class_names else {}
        updates.append({
            "number": one["number"], "classes_old": one["classes_old"], "classes_new": len(one["classes_new"]),
            "descriptors": one["descriptors"], "kept": one["kept"], "overruled": bool(one["overruled"]), **names,
            "tries": [{"settings": each["settings"], "diverged": each["diverged"], "operations": each["operations"],
                       "achieved": {name: each["achieved"][name] for name in (*ACHIEVED, "rows")}}
                      for each in tries]})
    plan = generation.carryover.plan.without_limits().as_dict()
    write_atomically(path, dump_json({"kind": KIND, "version": VERSION, "device": told[-1][0]["device"], "plan": plan,
                                      "updates": updates}))
    return len(updates)


def read_export(path):
    """Return the `ExportedHistory` in a file of `export_history`, every part checked; labels are not looked at.

    Raises
    ------
    InputError
        If it is not such a file, of a newer version, or a part of it is missing or not proper.
    """
    try:
        return _checked(read_json(path))
    except InputError as error:
        if error.parameter == str(path):
            raise
        raise InputError(f"{path} ({error.parameter})", error.rule, error.received, error.remedy) from None


def _checked(document):
    check_object("document", document, ("kind", "version", "device", "plan", "updates"))
    check_choice("kind", document["kind"], (KIND,))
    check_whole("version", document["version"], low=1, high=VERSION, remedy="use the program's version that wrote it")
    if not isinstance(document["device"], str) or not IDENTITY.fullmatch(document["device"]):
        raise InputError("device", "must be an identity of 32 hexadecimal digits", repr(document["device"]))
    parts = check_object("plan", document["plan"], tuple(Plan().as_dict()), tuple(Plan.__dataclass_fields__))
    plan = Plan(**parts).checked()
    if not isinstance(document["updates"], list):
        raise InputError("updates", "must be a list of updates", type(document["updates"]).__name__)
    updates = [_update(f"update {place}", one, plan) for place, one in enumerate(document["updates"], 1)]
    return ExportedHistory(document["device"], plan, updates)


def _update(name, one, plan):
    check_object(name, one, ("number", "classes_old", "classes_new", "descriptors", "tries", "kept", "overruled"),
                 ("class_names",))
    if not isinstance(one["tries"], list) or not one["tries"]:
        raise InputError(f"{name}, tries", "must be a list of one at least", repr(one["tries"]))
    content = {key: value for key, value in one.items() if key != "class_names"}
    return ExportedUpdate(
        number=check_whole(f"{name}, number", one["number"], low=1, high=2**53),
        classes_old=check_whole(f"{name}, classes_old", one["classes_old"], low=1, high=2**31),
        classes_new=check_whole(f"{name}, classes_new", one["classes_new"], high=2**31),
        descriptors=check_descriptors(f"{name}, descriptors", one["descriptors"]),
        tries=[_try(f"{name}, try {place}", each, plan) for place, each in enumerate(one["tries"], 1)],
        kept=_truth(f"{name}, kept", one["kept"]), overruled=_truth(f"{name}, overruled", one["overruled"]),
        content=checksum(dump_json([plan.as_dict(), content])))


def _try(name, one, plan):
    check_object(name, one, ("settings", "diverged", "achieved", "operations"))
    settings = check_object(f"{name}, settings", one["settings"], ("learning_rate", "regularization"), ("kept_per_class",))
    achieved = check_object(f"{name}, achieved", one["achieved"], (*ACHIEVED, "rows"))
    accuracy = {key: value if value is None else check_number(f"{name}, {key}", value, low=0, high=1)
                for key, value in achieved.items() if key != "rows"}
    return Try(Settings(**settings).checked(plan.method), _truth(f"{name}, diverged", one["diverged"]),
               accuracy["old"], accuracy["new"], check_whole(f"{name}, rows", achieved["rows"], high=2**53),
               check_number(f"{name}, operations", one["operations"], low=0))


def _truth(name, value):
    if not isinstance(value, bool):
        raise InputError(name, "must be true or false", repr(value))
    return value
