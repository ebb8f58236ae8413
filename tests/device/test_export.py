"""Histories on their travels: what leaves the device and what does not; whatever else is in a file is refused."""

import copy
import json
import math
import re

import jsonschema
import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.cli import main
from hyperforecast.describing import DESCRIPTORS
from hyperforecast.device import DeviceFolder, update
from hyperforecast.device.documents import schema
from hyperforecast.device.export import export_history, read_export
from hyperforecast.increments import check_increment
from hyperforecast.settings import Plan, Settings

VALIDATOR = jsonschema.Draft202012Validator(schema("history"))


def clouds(labels, *, seed=0, rows=30):
    rng = np.random.default_rng(seed)
    X = np.concatenate([rng.normal(code, 1, (rows, 5)) for code in range(len(labels))])
    return check_increment(X, np.repeat(labels, rows))


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """A device of four updates: the first, an advised one, one of settings that diverge, and one with old classes alone."""
    folder, lenient = DeviceFolder(tmp_path_factory.mktemp("device") / "arm"), {"most_lost": 1, "most_lost_by_class": 1}
    update(folder, clouds(["nut", "bolt"]), plan=Plan("wa", 0, 4, 16, 100))
    update(folder, clouds(["hook", "nut"], seed=1), **lenient)
    update(folder, clouds(["secret"], seed=2), settings=Settings(1.0, 1e3, 5), by="Kim", because="a try", **lenient)
    update(folder, clouds(["bolt"], seed=3), **lenient)
    return folder


@pytest.fixture
def document(folder, tmp_path):
    export_history(tmp_path / "a.json", folder.read())
    return json.loads((tmp_path / "a.json").read_text())


def test_every_update_of_a_device_bears_its_identity_and_another_device_has_another(folder, tmp_path):
    identities = {one["device"] for one in folder.read().history}
    assert len(folder.read().history) == 4 and len(identities) == 1 and re.fullmatch("[0-9a-f]{32}", *identities)
    other = update(tmp_path / "other", clouds(["nut", "bolt"]), plan=Plan("wa", 0, 4, 16, 100))
    assert other.entry["device"] not in identities


def test_descriptors_settings_and_outcomes_leave_the_device_and_nothing_else(folder, document):
    VALIDATOR.validate(document)
    history = folder.read().history
    assert [one["number"] for one in document["updates"]] == [2, 3, 4]
    assert [one["overruled"] for one in document["updates"]] == [False, True, False]
    assert document["plan"] == folder.read().carryover.plan.as_dict() and document["device"] == history[0]["device"]
    for told, entry in zip(document["updates"], history[1:]):
        assert set(told) == {"number", "classes_old", "classes_new", "descriptors", "kept", "overruled", "tries"}
        assert told["descriptors"] == entry["descriptors"] and told["kept"] == entry["kept"]
        assert told["classes_old"] == entry["classes_old"] and told["classes_new"] == len(entry["classes_new"])
        tries = [*entry["earlier_tries"], entry]
        assert [one["settings"] for one in told["tries"]] == [one["settings"] for one in tries]
        assert [one["achieved"] for one in told["tries"]] == [one["achieved"] for one in tries]
        assert all(set(one) == {"settings", "diverged", "operations", "achieved"} for one in told["tries"])
    text = json.dumps(document)
    for word in ("nut", "bolt", "hook", "secret", "Kim", "a try", "reasons", history[0]["time"][:10]):
        assert word not in text


def test_class_names_leave_the_device_only_if_asked_for(folder, tmp_path, capsys):
    path = str(tmp_path / "named.json")
    assert main(["history", "--device", str(folder.path), "--export", path, "--class-names", "--json"]) == 0
    assert json.loads(capsys.readouterr().out) == {"export": path, "updates": 3, "class_names": True}
    named = json.loads((tmp_path / "named.json").read_text())
    VALIDATOR.validate(named)
    assert [one["class_names"] for one in named["updates"]] == [
        {"new": ["hook"], "again": ["nut"]}, {"new": ["secret"], "again": []}, {"new": [], "again": ["bolt"]}]
    assert main(["history", "--device", str(folder.path), "--class-names"]) == 2
    assert "--export" in capsys.readouterr().err


def test_an_export_comes_back(folder, document, tmp_path):
    history = read_export(tmp_path / "a.json")
    assert history.device == document["device"] and history.plan == folder.read().carryover.plan
    assert [(one.number, one.classes_old, one.classes_new, one.kept) for one in history.updates] == [
        (one["number"], one["classes_old"], one["classes_new"], one["kept"]) for one in document["updates"]]
    for one, told in zip(history.updates, document["updates"]):
        assert {name: None if math.isnan(value) else value for name, value in one.descriptors.items()} == told["descriptors"]
        assert [each.settings.as_dict() for each in one.tries] == [each["settings"] for each in told["tries"]]
        assert [each.old for each in one.tries] == [each["achieved"]["old"] for each in told["tries"]]
    assert len({one.content for one in history.updates}) == 3


def test_a_device_with_no_update_to_learn_from_says_so(tmp_path):
    update(tmp_path / "arm", clouds(["nut", "bolt"]), plan=Plan("wa", 0, 4, 16, 100))
    with pytest.raises(InputError, match="history: must tell of an update after the first; received 1 updates"):
        export_history(tmp_path / "a.json", DeviceFolder(tmp_path / "arm").read())
    assert not (tmp_path / "a.json").exists()


def changed(document, *path, to):
    """The document with the value at a path replaced; to=... removes it."""
    document = copy.deepcopy(document)
    inner = document
    for key in path[:-1]:
        inner = inner[key]
    if to is ...:
        del inner[path[-1]]
    else:
        inner[path[-1]] = to
    return document


UPDATE, TRY = ("updates", 0), ("updates", 0, "tries", 0)
BAD = [
    (("kind",), "other", "kind: must be one of device history"), (("kind",), ..., "must hold kind, version"),
    (("version",), 2, "version: must be a whole number from 1 to 1; received 2; use the program's version"),
    (("version",), True, "version: must be a whole number"), (("more",), 1, "knows the keys"),
    (("device",), "../../etc", "device: must be an identity"), (("device",), 7, "device: must be an identity"),
    (("device",), "A" * 32, "device: must be an identity"), (("plan",), [], "plan: must be a JSON object"),
    (("plan", "method"), "other", "method: must be one of"), (("plan", "passes"), 0, "passes: must be a whole number"),
    (("plan", "memory_limit"), 0, "memory_limit"), (("plan", "memory_limit"), ..., "plan: must hold"),
    (("updates",), {}, "updates: must be a list"), (("updates",), [7], "update 1: must be a JSON object"),
    ((*UPDATE, "number"), 0, "update 1, number: must be a whole number"), ((*UPDATE, "number"), 1.5, "number: must be"),
    ((*UPDATE, "classes_old"), 0, "classes_old: must be"), ((*UPDATE, "classes_new"), -1, "classes_new: must be"),
    ((*UPDATE, "kept"), "yes", "kept: must be true or false"),
    ((*UPDATE, "overruled"), 1, "overruled: must be true or false"), ((*UPDATE, "reasons"), [], "knows the keys"),
    ((*UPDATE, "descriptors"), [], "must be a JSON object of descriptors"),
    ((*UPDATE, "descriptors", "speed"), 1, "must be descriptors that this version knows.*received 'speed'"),
    ((*UPDATE, "descriptors", "rows"), "many", "descriptors, rows: must be a number"),
    ((*UPDATE, "descriptors", "rows"), 0, "descriptors, rows: must be a number from 1"),
    ((*UPDATE, "descriptors", "rows"), True, "descriptors, rows: must be a number"),
    ((*UPDATE, "tries"), [], "tries: must be a list of one at least"), ((*UPDATE, "tries"), 1, "tries: must be a list"),
    (TRY, [], "try 1: must be a JSON object"), ((*TRY, "diverged"), 0, "diverged: must be true or false"),
    ((*TRY, "operations"), -1, "operations: must be a number from 0"),
    ((*TRY, "settings", "learning_rate"), 7, "learning_rate: must be"),
    ((*TRY, "settings", "kept_per_class"), ..., "kept_per_class: must be a whole number"),
    ((*TRY, "settings", "momentum"), 1, "knows the keys"), ((*TRY, "settings"), None, "must be a JSON object"),
    ((*TRY, "achieved", "old"), 1.5, "old: must be a number from 0 to 1"),
    ((*TRY, "achieved", "rows"), -1, "rows: must be a whole number"), ((*TRY, "achieved", "old"), ..., "must hold"),
]
# What a schema does not say: settings within the ranges of the method, and which of them it has.
BEYOND_THE_SCHEMA = {("settings", "kept_per_class")}


@pytest.mark.parametrize("path, to, rule", BAD, ids=lambda value: repr(value)[:40])
def test_a_file_that_breaks_a_rule_is_refused_here_and_by_the_schema(path, to, rule, document, tmp_path):
    bad = changed(document, *path, to=to)
    if path[-2:] not in BEYOND_THE_SCHEMA:
        assert not VALIDATOR.is_valid(bad)
    (tmp_path / "b.json").write_text(json.dumps(bad))
    with pytest.raises(InputError) as caught:
        read_export(tmp_path / "b.json")
    line = str(caught.value)
    assert re.search(rule, line.replace("(", "").replace(")", "")), line
    assert line.isprintable() and line.startswith(str(tmp_path))


def test_what_the_schema_allows_is_read(document, tmp_path):
    document["updates"][0]["descriptors"] = {}
    document["updates"][1]["descriptors"] = dict.fromkeys(DESCRIPTORS)
    document["updates"][2]["class_names"] = {"new": [7, "nut"], "again": []}
    document["updates"][2]["tries"][0]["achieved"] = dict.fromkeys(("old", "new", "all", "old_before")) | {"rows": 0}
    VALIDATOR.validate(document)
    (tmp_path / "b.json").write_text(json.dumps(document))
    assert len(read_export(tmp_path / "b.json").updates) == 3


@pytest.mark.parametrize("data", [b"", b"null", b"[]", b"{", b"[" * 100_000, b'{"kind": NaN}', b"\xff\xfe", b"7"])
def test_a_file_of_something_else_is_refused(data, tmp_path):
    (tmp_path / "b.json").write_bytes(data)
    with pytest.raises(InputError) as caught:
        read_export(tmp_path / "b.json")
    assert str(caught.value).isprintable() and str(tmp_path) in str(caught.value)
