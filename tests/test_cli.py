"""Commands as a user runs them: results on standard output, one line and exit code 2 for bad input."""

import json
import pathlib

import jsonschema
import numpy as np
import pytest

from hyperforecast.cli import main
from hyperforecast.device.documents import schema
from hyperforecast.forecasting import load_forecaster

STREAMS = """
[[stream]]
name = "small"
source = "synthetic_gaussian"
seeds = [1, 2]
increments = 3
classes = 6
rows_per_class = 12
raw_dimension = 6

[[stream]]
name = "other"
source = "synthetic_modes"
seeds = [1]
increments = 3
classes = 6
rows_per_class = 12
raw_dimension = 6
"""


@pytest.fixture
def deliveries(tmp_path):
    """Files of three increments of Gaussian classes."""
    rng = np.random.default_rng(0)
    centers = rng.normal(size=(6, 8)) * 2
    paths = []
    for t in range(3):
        y = np.repeat([2 * t, 2 * t + 1], 30)
        X = centers[y] + rng.normal(size=(60, 8))
        paths.append(tmp_path / f"delivery{t}.npz")
        np.savez(paths[-1], X=X, y=np.array(["nut", "bolt", "hook", "ring", "pin", "clip"])[y])
    return [str(path) for path in paths]


@pytest.fixture
def device(tmp_path, deliveries, capsys):
    """A device folder after two updates."""
    folder = str(tmp_path / "cell")
    assert main(["update", "--increment", deliveries[0], "--device", folder, "--memory-limit", "120"]) == 0
    assert main(["update", "--increment", deliveries[1], "--device", folder]) in (0, 3)
    capsys.readouterr()
    return folder


def run(capsys, *arguments):
    """Run a command with --json; return its document."""
    status = main([*arguments, "--json"])
    shown = capsys.readouterr()
    assert status in (0, 3), shown.err
    return json.loads(shown.out)


def refused(capsys, *arguments, status=2):
    """Run a command that must be refused; return its one line."""
    assert main(list(arguments)) == status
    shown = capsys.readouterr()
    assert not shown.out and shown.err.count("\n") == 1
    return shown.err


def test_advise_tells_settings_expectations_reasons_and_alternatives(capsys, device, deliveries):
    told = run(capsys, "advise", "--increment", deliveries[2], "--device", device)
    assert set(told["settings"]) == {"learning_rate", "regularization", "kept_per_class"}
    assert all(one["low"] <= one["value"] <= one["high"] for one in told["expected"].values())
    assert told["alternatives"] and 0 <= told["familiarity"]["score"] <= 1 and len(told["reasons"]) <= 3
    assert main(["advise", "--increment", deliveries[2], "--device", device]) == 0
    text = capsys.readouterr().out
    assert "90% interval" in text and "Alternatives" in text and "local codes and licensed practice" in text


def test_a_dry_run_stores_nothing(capsys, device, deliveries):
    before = run(capsys, "history", "--device", device)
    told = run(capsys, "update", "--increment", deliveries[2], "--device", device, "--dry-run")
    assert told["status"] == "dry_run" and told["generation"] is None
    assert run(capsys, "history", "--device", device) == before


def test_what_advice_is_to_care_for_is_told_and_kept(capsys, device, deliveries):
    given = ["--increment", deliveries[2], "--device", device]
    usual, old = (run(capsys, "advise", *given, *told) for told in (
        [], ["--old-weight", "1", "--tolerance", "0.02", "--unfamiliar", "warn"]))
    assert usual["preferences"] == {"old_weight": None, "now_weight": 1 / 3, "tolerance": 0.005, "unfamiliar": "try 4"}
    assert old["preferences"] == {"old_weight": 1.0, "now_weight": 1 / 3, "tolerance": 0.02, "unfamiliar": "warn"}
    assert old["expected"]["old"]["value"] >= usual["expected"]["old"]["value"]
    main(["update", *given, "--old-weight", "0.8"])
    assert "Asked for  old weight 0.8\n" in capsys.readouterr().out
    assert run(capsys, "advise", *given)["preferences"]["old_weight"] == 0.8
    assert run(capsys, "advise", *given, "--old-weight", "count")["preferences"]["old_weight"] is None
    assert "--old-weight: must be a number" in refused(capsys, "advise", *given, "--old-weight", "most")
    assert "now_weight: must be a number" in refused(capsys, "advise", *given, "--now-weight", "-1")


def test_history_tells_what_was_advised_expected_and_achieved(capsys, device):
    updates = run(capsys, "history", "--device", device)["updates"]
    assert [one["number"] for one in updates] == [1, 2]
    assert updates[0]["advice"] is None and set(updates[1]["expected"]) == {"old", "new", "all"}
    assert main(["history", "--device", device]) == 0
    assert "achieved" in capsys.readouterr().out


def test_search_reports_the_best_attempt_and_writes_warm_starts(capsys, device, deliveries, tmp_path):
    found = run(capsys, "search", "--increment", deliveries[2], "--device", device, "--attempts", "10", "--warm")
    assert len(found["scores"]) == 10 and found["best"] == found["settings"][found["best_index"]]
    advised = run(capsys, "advise", "--increment", deliveries[2], "--device", device)
    assert found["settings"][0] == advised["settings"]
    path = tmp_path / "warm.json"
    run(capsys, "search", "--increment", deliveries[2], "--device", device, "--warm-starts", str(path))
    assert json.loads(path.read_text())["points"][0]["settings"] == advised["settings"]


def test_gather_fit_and_contest_from_the_command_line(capsys, tmp_path):
    streams, records, result = (str(tmp_path / name) for name in ("streams.toml", "records.sqlite", "result.json"))
    (tmp_path / "streams.toml").write_text(STREAMS)
    gathered = run(capsys, "gather", "--streams", streams, "--records", records, "--method", "ewc", "--workers", "1")
    assert gathered["run"] == 3 and sum(one["trajectories"] for one in gathered["records"]) == 3
    assert run(capsys, "gather", "--streams", streams, "--records", records, "--method", "ewc")["run"] == 0
    path = str(tmp_path / "ewc.forecaster")
    fitted = run(capsys, "fit", "--records", records, "--method", "ewc", "--forecaster", path, "--workers", "1")
    assert load_forecaster(path).checksum == fitted["checksum"]
    assert set(fitted["recipe"]["boundaries"]) == {"synthetic_gaussian", "synthetic_modes"}
    line = refused(capsys, "contest", "--streams", streams, "--forecaster", path, "--result", result)
    assert "without" in line and "synthetic_gaussian" in line
    line = refused(capsys, "fit", "--records", records, "--method", "wa", "--forecaster", path)
    assert "two sources" in line


@pytest.mark.parametrize("subject", ["device", "records"])
def test_reports_are_self_contained(capsys, device, tmp_path, subject):
    if subject == "records":
        streams, named = tmp_path / "streams.toml", str(tmp_path / "records.sqlite")
        streams.write_text(STREAMS)
        main(["gather", "--streams", str(streams), "--records", named, "--method", "lwf", "--workers", "1"])
    else:
        named = device
    path = tmp_path / "report.html"
    assert main(["report", f"--{subject}", named, "--html", str(path)]) == 0
    capsys.readouterr()
    text = path.read_text()
    assert text.startswith("<!DOCTYPE html>") and "<svg" in text and "src=\"http" not in text


def test_bad_input_is_one_line_and_changes_nothing(capsys, device, deliveries, tmp_path):
    before = run(capsys, "history", "--device", device)
    damaged = tmp_path / "damaged.npz"
    damaged.write_bytes(pathlib.Path(deliveries[2]).read_bytes()[:200])
    wide = tmp_path / "wide.npz"
    np.savez(wide, X=np.ones((4, 9)), y=np.arange(4))
    for increment in ("missing.npz", str(damaged), str(wide), str(tmp_path / "cell")):
        for command in ("advise", "update"):
            assert increment.split("/")[-1] in refused(capsys, command, "--increment", increment, "--device", device)
    assert "plan" in refused(capsys, "update", "--increment", deliveries[2], "--device", device, "--passes", "3")
    assert "device folder" in refused(capsys, "advise", "--increment", deliveries[2], "--device", str(tmp_path / "none"))
    assert "forecaster" in refused(capsys, "advise", "--increment", deliveries[2], "--device", device, "--forecaster",
                                   deliveries[0])
    assert "memory_limit" in refused(capsys, "update", "--increment", deliveries[2], "--device", str(tmp_path / "new"),
                                     "--memory-limit", "1")
    assert run(capsys, "history", "--device", device) == before
    assert not (tmp_path / "new").exists()


def test_advice_is_overruled_with_who_and_why_or_not_at_all(capsys, device, deliveries):
    update = ["update", "--increment", deliveries[2], "--device", device]
    for given in (["--by", "shift 2", "--because", "a trial"], ["--settings", "learning_rate=0.01"],
                  ["--settings", "learning_rate=0.01", "--by", "shift 2"]):
        assert "all three or none" in refused(capsys, *update, *given)
    who = ["--by", "shift 2", "--because", "a trial"]
    for wrong in ("speed=1", "learning_rate=fast", "learning_rate=7", "kept_per_class=2.5"):
        assert "; received" in refused(capsys, *update, "--settings", wrong, *who)
    assert main([*update, "--settings", "learning_rate=0.01,kept_per_class=4", *who]) in (0, 3)
    assert "overruled by shift 2: a trial" in capsys.readouterr().out
    entry = run(capsys, "history", "--device", device)["updates"][-1]
    assert entry["overruled"] == {"by": "shift 2", "because": "a trial"}
    assert (entry["settings"]["learning_rate"], entry["settings"]["kept_per_class"]) == (0.01, 4)
    assert entry["settings"]["regularization"] == entry["advice"]["settings"]["regularization"]
    assert main(["history", "--device", device]) == 0
    assert "update 3: overruled by shift 2: a trial" in capsys.readouterr().out


def test_weigh_tells_what_to_expect_and_writes_a_page(capsys, device, deliveries, tmp_path):
    weigh = ["weigh", "--increment", deliveries[2], "--device", device, "--settings", "kept_per_class=3"]
    told = run(capsys, *weigh)
    advised = run(capsys, "advise", "--increment", deliveries[2], "--device", device)
    assert told["advice"]["settings"] == told["beside"][0]["settings"] == advised["settings"]
    assert told["own"]["settings"] == {**advised["settings"], "kept_per_class": 3}
    jsonschema.validate(advised, schema("advice"))
    assert told["waiting"] == advised["waiting"] and told["limits"]["kept_per_class"] > 3
    path = tmp_path / "page.html"
    assert main([*weigh, "--html", str(path)]) == 0
    text = capsys.readouterr().out
    for part in ("yours", "Along learning rate", "Good region", "Methods", "One more megabyte", "rows collected first"):
        assert part in text
    page = path.read_text()
    assert page.startswith("<!DOCTYPE html>") and page.count("<svg") == 4 and "src=\"http" not in page
    assert "--least-gain" in refused(capsys, *weigh, "--least-gain", "3")
    assert "all three" not in refused(capsys, *weigh[:-1], "kept_per_class=none")


@pytest.mark.parametrize("arguments", [["bogus"], ["advise", "--schema", "none"], ["gather", "--streams"], ["update", "--method", "none"]])
def test_a_command_that_cannot_be_read_is_refused(capsys, arguments):
    with pytest.raises(SystemExit, match="2"):
        main(arguments)
    assert "see hyperforecast" in capsys.readouterr().err
