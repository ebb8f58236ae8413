"""Requests for advice from other languages: answered as on a device; whatever breaks a rule is one line; schemas hold."""

import json
import re

import jsonschema
import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.cli import main
from hyperforecast.describing import DESCRIPTORS
from hyperforecast.device import update
from hyperforecast.device.documents import SCHEMAS, SMALLEST, schema
from hyperforecast.device.request import read_request
from hyperforecast.forecasting import save_forecaster
from hyperforecast.increments import check_increment
from hyperforecast.learning import class_limits
from hyperforecast.settings import KEPT_PER_CLASS, METHODS, Plan

REQUEST, ANSWER = (jsonschema.Draft202012Validator(schema(name)) for name in ("request", "advice"))
LITTLE = {"classes_old": 4, "classes_new": 2, "rows": 450, "features": 64}


def clouds(labels, *, seed=0, rows=30):
    rng = np.random.default_rng(seed)
    X = np.concatenate([rng.normal(code, 1, (rows, 5)) for code in range(len(labels))])
    return check_increment(X, np.repeat(labels, rows))


@pytest.fixture(scope="module")
def paths(tmp_path_factory, forecasters):
    """Files of small forecasters by method."""
    folder = tmp_path_factory.mktemp("forecasters")
    for method, forecaster in forecasters.items():
        save_forecaster(folder / method, forecaster)
    return {method: str(folder / method) for method in forecasters}


def asked(tmp_path, document):
    (tmp_path / "request.json").write_text(json.dumps(document))
    return str(tmp_path / "request.json")


def answer(capsys, *arguments):
    assert main(["advise", *arguments, "--json"]) == 0
    return json.loads(capsys.readouterr().out)


def test_a_request_is_answered_as_on_the_device_that_has_these_descriptors(tmp_path, forecasters, paths, capsys):
    update(tmp_path / "arm", clouds(["nut", "bolt"]), plan=Plan("wa", 0, 4, 16, 100))
    told = update(tmp_path / "arm", clouds(["hook", "nut"], seed=1), forecaster=forecasters["wa"], dry_run=True).advice
    told = json.loads(json.dumps(told.as_dict()))
    REQUEST.validate({"method": "wa", "memory_limit": 100, "descriptors": told["descriptors"]})
    for limits in ({"memory_limit": 100}, {"most_kept": int(told["descriptors"]["most_kept"])}):
        path = asked(tmp_path, {"method": "wa", **limits, "descriptors": told["descriptors"]})
        answered = answer(capsys, "--descriptors", path, "--forecaster", paths["wa"])
        assert answered == told
    ANSWER.validate(answered)
    ANSWER.validate(told)


@pytest.mark.parametrize("method", METHODS)
def test_the_forecasters_that_ship_answer_whatever_little_is_known(method, tmp_path, capsys):
    limits = {"most_kept": 5} if Plan(method).rehearses else {}
    for descriptors in ({}, LITTLE, dict.fromkeys(DESCRIPTORS), dict.fromkeys(DESCRIPTORS, 1e300), dict.fromkeys(DESCRIPTORS, 1)):
        document = {"method": method, **limits, "descriptors": descriptors}
        REQUEST.validate(document)
        answered = answer(capsys, "--descriptors", asked(tmp_path, document))
        ANSWER.validate(answered)
        assert answered["settings"].get("kept_per_class", 5) <= 5
        assert set(answered["descriptors"]) == set(descriptors) | ({"most_kept"} if limits else set())
        assert not [place for place in answered["expected"].values() if not place["low"] <= place["value"] <= place["high"]]


def test_people_can_read_the_answer(tmp_path, capsys):
    path = asked(tmp_path, {"method": "lwf", "descriptors": LITTLE})
    assert main(["advise", "--descriptors", path]) == 0
    assert capsys.readouterr().out.startswith("Advised settings\n")


@pytest.mark.parametrize("limit, plan", [(120, Plan("wa", memory_limit=120)), ("1 MB", Plan("wa", memory_limit="1 MB")),
                                         (10**9, Plan("wa", memory_limit=10**9))])
def test_a_memory_limit_leaves_the_exemplars_that_it_leaves_a_device(limit, plan, tmp_path):
    request = read_request(asked(tmp_path, {"method": "wa", "memory_limit": limit, "descriptors": LITTLE}))
    assert request.most_kept == class_limits(plan, 64, 6)[1] == request.descriptors["most_kept"] <= KEPT_PER_CLASS[1]


WA = {"method": "wa", "most_kept": 5, "descriptors": {}}
BAD = [
    ([], "must be a JSON object; received list"), (7, "must be a JSON object"), (None, "must be a JSON object"),
    ({}, "must hold method, descriptors; received no method"), ({"method": "wa"}, "received no descriptors"),
    ({**WA, "method": "other"}, "method: must be one of ewc, lwf, icarl, wa; received 'other'"),
    ({**WA, "method": 3}, "method: must be one of"), ({**WA, "seed": 1}, "knows the keys .*received 'seed'"),
    ({**WA, "descriptors": []}, "descriptors: must be a JSON object of descriptors by name"),
    ({**WA, "descriptors": {"speed": 1}}, "descriptors: must be descriptors that this version knows.*received 'speed'"),
    ({**WA, "descriptors": {"rows": "450"}}, "descriptors, rows: must be a number from 1 .*received '450'; give null"),
    ({**WA, "descriptors": {"rows": True}}, "descriptors, rows: must be a number"),
    ({**WA, "descriptors": {"rows": [1]}}, "descriptors, rows: must be a number"),
    ({**WA, "descriptors": {"rows": 0}}, "descriptors, rows: must be a number from 1"),
    ({**WA, "descriptors": {"classes_old": 0}}, "classes_old: must be a number from 1"),
    ({**WA, "descriptors": {"classes_new": -1}}, "classes_new: must be a number from 0"),
    ({**WA, "most_kept": 0}, "most_kept: must be a whole number"), ({**WA, "most_kept": 2.5}, "most_kept: must be a whole"),
    ({**WA, "most_kept": "5"}, "most_kept: must be a whole"), ({**WA, "most_kept": True}, "most_kept: must be a whole"),
    ({"method": "wa", "descriptors": {}}, "most_kept: or else memory_limit must be given for wa; received neither"),
    ({**WA, "memory_limit": 100}, "must be given for wa; received most_kept, memory_limit"),
    ({"method": "lwf", "most_kept": 5, "descriptors": {}}, "most_kept: must be left out: lwf trains without exemplars"),
    ({"method": "ewc", "memory_limit": 5, "descriptors": {}}, "memory_limit: must be left out"),
    ({"method": "wa", "memory_limit": 0, "descriptors": LITTLE}, "memory_limit: must be a whole number of at least 1"),
    ({"method": "wa", "memory_limit": [], "descriptors": LITTLE}, "memory_limit: must be a whole number"),
]
BEYOND_THE_SCHEMA = [
    ({"method": "wa", "memory_limit": "much", "descriptors": LITTLE}, 'must be a number of exemplars, or of bytes'),
    ({"method": "wa", "memory_limit": 5, "descriptors": LITTLE}, "memory_limit: must hold at least one exemplar"),
    ({"method": "wa", "memory_limit": "1 MB", "descriptors": {"classes_old": 3, "classes_new": 1}},
     "memory_limit: needs the descriptors classes_old, classes_new, features"),
    ({"method": "wa", "memory_limit": 100, "descriptors": {"classes_old": 3, "classes_new": None}}, "needs the descriptors"),
]


@pytest.mark.parametrize("document, rule", [*BAD, *BEYOND_THE_SCHEMA], ids=lambda value: str(value)[:60])
def test_a_request_that_breaks_a_rule_is_one_line_and_exit_code_2(document, rule, tmp_path, capsys):
    assert REQUEST.is_valid(document) == ((document, rule) in BEYOND_THE_SCHEMA)
    path = asked(tmp_path, document)
    assert main(["advise", "--descriptors", path, "--json"]) == 2
    shown = capsys.readouterr()
    assert not shown.out and shown.err.count("\n") == 1 and shown.err.startswith(f"hyperforecast advise: {path}")
    assert re.search(rule, shown.err.replace("(", "").replace(")", "")), shown.err


def test_a_forecaster_for_another_method_is_refused(tmp_path, paths, capsys):
    path = asked(tmp_path, WA)
    assert main(["advise", "--descriptors", path, "--forecaster", paths["ewc"]]) == 2
    assert "forecaster: must be one for wa, the method of the request; received ewc" in capsys.readouterr().err


@pytest.mark.parametrize("arguments", [[], ["--device", "d"], ["--increment", "i.npz"],
                                       ["--descriptors", "f", "--device", "d"]])
def test_what_to_advise_on_must_be_named_in_one_way(arguments, capsys):
    assert main(["advise", *arguments]) == 2
    assert "--increment and --device: must be named, or --descriptors instead" in capsys.readouterr().err


# Schemas.


@pytest.mark.parametrize("name", SCHEMAS)
def test_schemas_are_valid_and_list_the_descriptors_there_are(name):
    """JSON Schema draft 2020-12, checked by the jsonschema library."""
    document = schema(name)
    jsonschema.Draft202012Validator.check_schema(document)
    listed = document["$defs"]["descriptors"]
    assert list(listed["properties"]) == list(DESCRIPTORS) and listed["additionalProperties"] is False
    for key, one in listed["properties"].items():
        assert one["description"] == DESCRIPTORS[key].explanation and one.get("minimum") == SMALLEST.get(key)
    assert SMALLEST.keys() <= DESCRIPTORS.keys()
    for example in document.get("examples", ()):
        jsonschema.Draft202012Validator(document).validate(example)


def test_schemas_speak_of_the_methods_settings_and_plan_that_there_are(tmp_path, forecasters):
    assert schema("request")["properties"]["method"]["enum"] == schema("advice")["properties"]["method"]["enum"] == list(METHODS)
    history = schema("history")["$defs"]
    assert set(history["plan"]["properties"]) == set(Plan.__dataclass_fields__)
    assert history["plan"]["properties"]["method"]["enum"] == list(METHODS)
    assert history["settings"] == schema("advice")["$defs"]["settings"]
    assert history["settings"]["properties"]["kept_per_class"]["maximum"] == KEPT_PER_CLASS[1]


def test_every_part_of_an_answer_is_in_its_schema(tmp_path, forecasters):
    told = read_request(asked(tmp_path, WA)).advice(forecasters["wa"]).as_dict()
    document = schema("advice")
    # Whether to wait is told only where the increment itself is at hand.
    assert set(told) == set(document["required"]) == set(document["properties"]) - {"waiting", "retrain"}


def test_schemas_are_printed(capsys):
    for arguments, name in ((["advise", "--schema", "request"], "request"), (["advise", "--schema", "advice"], "advice"),
                            (["history", "--schema"], "history")):
        assert main(arguments) == 0
        assert json.loads(capsys.readouterr().out) == schema(name)
    assert main(["history"]) == 2
    assert "--device: must name a device folder" in capsys.readouterr().err
