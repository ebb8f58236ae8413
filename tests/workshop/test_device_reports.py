"""Reports of a device and of one update: they tell what the history tells, on the page and as JSON."""

import json
import re
from html import unescape

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.cli import main
from hyperforecast.device import DeviceFolder, record_outcome, roll_back, set_floor, step_in_words, update
from hyperforecast.increments import check_increment
from hyperforecast.settings import Plan, Settings
from hyperforecast.workshop.reporting import charts
from hyperforecast.workshop.reporting.device_report import device_document, device_page
from hyperforecast.workshop.reporting.update_report import (
    CAUTION, MOST_CLASSES, class_rows, update_document, update_page, verdict,
)

LENIENT = {"most_lost": 1.0, "most_lost_by_class": 1.0}


def clouds(labels, seed):
    rng = np.random.default_rng(seed)
    y = np.repeat(labels, 20)
    places = {label: np.random.default_rng([7, *label.encode()]).normal(0, 3, 6) for label in labels}
    return check_increment(np.stack([places[label] for label in y.tolist()]) + rng.normal(0, 1, (len(y), 6)), y)


@pytest.fixture(scope="module")
def folder(tmp_path_factory, forecasters):
    """A first update, one as advised, one overruled and rolled back, one undone, and what people did between."""
    folder, wa = DeviceFolder(tmp_path_factory.mktemp("device") / "arm"), forecasters["wa"]
    update(folder, clouds(["nut", "bolt"], 0), plan=Plan("wa", 8, 6, 16, 200))
    update(folder, clouds(["hook", "nut"], 1), forecaster=wa, **LENIENT)
    record_outcome(folder, clouds(["hook", "bolt"], 9), 2)
    set_floor(folder, "bolt", 0.5)
    report = update(folder, clouds(["rod"], 2), forecaster=wa, settings=Settings(1.0, 0.001, 1), by="P. Tinker",
                    because="the buyer waits", most_lost=0.0, most_lost_by_class=0.0)
    assert not report.entry["kept"]
    update(folder, clouds(["ring"], 3), forecaster=wa, **LENIENT)
    roll_back(folder, because="rings taken for hooks")
    return folder


@pytest.fixture(scope="module")
def generation(folder):
    return folder.read()


def text_of(page):
    """What a page says, without its charts and styles."""
    bare = re.sub(r"<(svg|style)\b.*?</\1>", " ", page.html(), flags=re.S)
    return " ".join(unescape(re.sub(r"<[^>]*>", " ", bare)).split())


def test_what_became_of_each_update(generation):
    assert [verdict(one) for one in generation.history] == ["kept", "kept", "rolled back", "undone by hand"]


@pytest.mark.parametrize("number", [1, 2, 3, 4])
def test_the_page_of_an_update_tells_what_the_history_tells(generation, number):
    document = update_document(generation, number, name="arm")
    entry, text = generation.history[number - 1], text_of(update_page(document))
    assert json.loads(json.dumps(document)) == document and document["update"] == entry
    assert f"Update {number} of arm: {verdict(entry)}" in text and CAUTION in text
    assert f"{entry['rows']} rows" in text and f"classes known before {entry['classes_old']}" in text
    assert f"{entry['achieved']['all']:.0%} on {entry['achieved']['rows']} rows" in text
    for label in entry["classes_new"]:
        assert label in text
    for reason in entry["reasons"]:
        assert reason in text
    if entry["advice"] is not None:
        assert "expected {value:.0%} ({low:.0%} to {high:.0%})".format(**entry["expected"]["all"]) in text
        assert entry["forecaster"][:16] in text and f"Familiarity {entry['advice']['familiarity']['score']:.2f}" in text
        for reason in entry["advice"]["reasons"]:
            assert reason in text


def test_people_are_on_the_page(generation):
    overruled = text_of(update_page(update_document(generation, 3, name="arm")))
    assert "Overruled by P. Tinker: the buyer waits" in overruled and "It was not kept: " in overruled
    assert "rings taken for hooks" in text_of(update_page(update_document(generation, 4, name="arm")))
    later = text_of(update_page(update_document(generation, 2, name="arm")))
    outcome = generation.history[1]["outcomes"][0]
    time = outcome["time"].replace("T", " ")[:19]
    assert f"Labels that came later, {time} UTC: " in later and "over 40 rows" in later
    assert "floor (class bolt; floor 0.5)" in later


def test_what_a_device_was_told_and_had_to_give_up_is_on_the_page(generation):
    document = update_document(generation, 2, name="arm")
    entry = document["update"]
    advice = {**entry["advice"], "familiarity": {**entry["advice"]["familiarity"], "familiar": False,
                                                 "why": ["more classes than any record"]}}
    text = text_of(update_page({**document, "update": {
        **entry, "advice": advice, "limits": {"given_up": ["3 of 6 passes"]}, "doubts": ["nut looks like Nut"] * 6,
        "preferences": {"old_weight": 0.9, "now_weight": 1 / 3},
        "unfamiliar": {"policy": "try 2", "tried": [{"check_accuracy": 0.75}, {"check_accuracy": -1.0}]}}}))
    for told in ("not familiar", "Unlike the records: more classes than any record.", "Given up: 3 of 6 passes.",
                 "In doubt: nut looks like Nut.", "4 more doubts", "Preferences: old weight 0.900.",
                 "unlike the records: try 2; tried side by side, 75% on held-back rows."):
        assert told in text


def test_classes_come_in_the_order_of_the_device(generation):
    rows = class_rows(generation.history[1])
    assert [(one["class"], one["new"], one["arrived"]) for one in rows] == [
        ("bolt", False, 0), ("nut", False, 20), ("hook", True, 20)]
    assert rows[2]["before"] is None and all(0 <= one["after"] <= 1 for one in rows)
    assert class_rows({**generation.history[1], "by_class": None}) == []


def test_of_many_classes_the_page_draws_those_that_lost_most(generation):
    entry, n = generation.history[1], 50
    before = [0.9] * 45 + [None] * 5
    after = [0.9 - 0.011 * code for code in range(45)] + [0.5] * 5
    entry = {**entry, "classes_old": 45, "by_class": {
        "class": [f"c{code}" for code in range(n)], "arrived": [0] * n, "check_rows": [4] * n, "before": before,
        "after": after}}
    document = {**update_document(generation, 2, name="arm"), "update": entry, "classes": class_rows(entry)}
    page = update_page(document).html()
    drawn = {int(code) for code in re.findall(r">c(\d+)</text>", page)}
    assert drawn == {*range(45, 50), *range(45 - (MOST_CLASSES - 5), 45)}
    # The mean over c0 to c35.
    assert f"36 other classes, which lost less, are not drawn; they come to {0.9 - 0.011 * 17.5:.0%} on average." in page
    assert len(document["classes"]) == n


def test_an_update_that_is_not_there_is_refused(generation):
    with pytest.raises(InputError, match="1 to 4; received 7"):
        update_document(generation, 7, name="arm")


def test_the_life_of_a_device(generation):
    document = device_document(generation, name="arm")
    assert json.loads(json.dumps(document)) == document and document["updates"] == generation.history
    text = text_of(device_page(document))
    assert "4 updates: 2 kept, 1 rolled back, 1 undone by hand; it knows 3 classes" in text
    assert "floors bolt 50%" in text and "P. Tinker the buyer waits" in text and "rings taken for hooks" in text
    assert generation.history[1]["forecaster"][:16] + " " in text and "2, 3, 4" in text
    for reason in generation.history[2]["reasons"]:
        assert reason in text
    # Of classes only what was kept: bolt after updates 1, 2 and 4.
    shares = [one["by_class"]["after"][0] for one in generation.history if one["kept"]]
    assert "bolt " + " ".join(f"{100 * share:.0f}" for share in shares) in text


def test_a_step_in_words():
    step = {"time": "t", "after_update": 3, "step": "merged", "from": "nut", "into": "bolt", "undone": [],
            "told": ["a", 2], "forecaster": "0123456789abcdef" * 4}
    assert step_in_words(step) == "merged (from nut; into bolt; told a, 2; forecaster 0123456789abcdef)"
    assert step_in_words({"step": "acceptance set"}) == "acceptance set"


def test_a_change_is_dashed_only_where_it_is_a_loss():
    drawing = charts.change_chart("t", ["a", "b", "c"], [0.5, 0.5, np.nan], [0.9, 0.1, 0.7], ["1 row"] * 3).drawing
    lines = [path.get("style") for path in drawing.iter("path") if "stroke-width: 1.4" in path.get("style", "")]
    assert sorted("dasharray" in style for style in lines) == [False, True]
    texts = {"".join(element.itertext()).strip() for element in drawing.iter("text")}
    assert {"a", "b", "c", "1 row", "before", "after"} <= texts


def test_the_report_command(folder, tmp_path, capsys):
    def run(*arguments):
        assert main(["report", "--device", str(folder.path), "--json", "--html", *map(str, arguments)]) == 0
        return json.loads(capsys.readouterr().out)

    generation = folder.read()
    life = run(tmp_path / "life.html")
    assert life == {**device_document(generation, name="arm"), "html": str(tmp_path / "life.html")}
    one = run(tmp_path / "one.html", "--update", 3)
    assert one["update"] == generation.history[2] and "rolled back" in (tmp_path / "one.html").read_text()
    assert main(["report", "--device", str(folder.path), "--html", str(tmp_path / "x.html"), "--update", "9"]) == 2
    assert main(["report", "--records", "x", "--html", str(tmp_path / "x.html"), "--update", "1"]) == 2
    assert not (tmp_path / "x.html").exists() and capsys.readouterr().err.count("\n") == 2
