"""Commands that use and check a device, as a user runs them."""

import csv
import json

import numpy as np
import pytest

from hyperforecast.cli import main

NAMES = np.array(["nut", "bolt", "hook", "ring", "pin", "clip"])


@pytest.fixture
def files(tmp_path):
    """Files of three increments of Gaussian classes, and judged rows of all classes."""
    rng = np.random.default_rng(0)
    centers = rng.normal(size=(6, 8)) * 6
    paths = []
    for name, codes in (("a", [0, 1]), ("b", [2, 3]), ("c", [4, 5]), ("judged", range(6))):
        y = np.repeat(codes, 30)
        paths.append(str(tmp_path / f"{name}.npz"))
        np.savez(paths[-1], X=centers[y] + rng.normal(size=(len(y), 8)), y=NAMES[y])
    return paths


@pytest.fixture
def device(tmp_path, files, capsys):
    """A device folder after two updates."""
    folder = str(tmp_path / "cell")
    assert main(["update", "--increment", files[0], "--device", folder, "--memory-limit", "120"]) == 0
    assert main(["update", "--increment", files[1], "--device", folder]) == 0
    capsys.readouterr()
    return folder


def run(capsys, *arguments):
    """Run a command with --json; return its document."""
    assert main([*arguments, "--json"]) == 0
    return json.loads(capsys.readouterr().out)


def refused(capsys, *arguments):
    """Run a command that must be refused; return its one line."""
    assert main(list(arguments)) == 2
    shown = capsys.readouterr()
    assert not shown.out and shown.err.count("\n") == 1
    return shown.err


def test_predictions_come_as_lines_json_csv_and_npz(capsys, device, files, tmp_path):
    X = np.load(files[3], allow_pickle=False)["X"]
    bare, table = tmp_path / "rows.npz", tmp_path / "rows.csv"
    np.savez(bare, X=X)
    np.savetxt(table, X, delimiter=",", header=",".join("abcdefgh"), comments="")
    told = run(capsys, "predict", "--device", device, "--rows", str(bare))
    labels = [one["label"] for one in told["rows"]]
    assert len(labels) == 180 and all(sum(one["probabilities"]) == pytest.approx(1) for one in told["rows"])
    assert [told["classes"][np.argmax(one["probabilities"])] for one in told["rows"]] == labels
    assert run(capsys, "predict", "--device", device, "--rows", str(table))["rows"][0]["label"] == labels[0]
    for end in ("csv", "npz"):
        run(capsys, "predict", "--device", device, "--rows", files[3], "--out", str(tmp_path / f"out.{end}"))
    with open(tmp_path / "out.csv", newline="") as file:
        rows = list(csv.DictReader(file))
    assert [row["label"] for row in rows] == labels and float(rows[0][f"p({labels[0]})"]) > 0.25
    with np.load(tmp_path / "out.npz", allow_pickle=False) as out:
        assert out["labels"].tolist() == labels and out["probabilities"].shape == (180, 4)
    assert main(["predict", "--device", device, "--rows", files[3]]) == 0
    assert labels[0] in capsys.readouterr().out.splitlines()[1]
    assert "csv" in refused(capsys, "predict", "--device", device, "--rows", files[3], "--out", "out.txt")


def test_evaluation_stands_beside_the_forecast_and_becomes_an_outcome(capsys, device, files):
    told = run(capsys, "evaluate", "--device", device, "--rows", files[3])
    assert told["unknown_classes"] == [{"class": "clip", "rows": 30}, {"class": "pin", "rows": 30}]
    assert told["forecast"]["update"] == 2 and told["forecast"]["all"]["verdict"] in ("below", "within", "above")
    assert main(["evaluate", "--device", device, "--rows", files[3], "--of-update", "2"]) == 0
    text = capsys.readouterr().out
    assert "Beside the forecast of update 2" in text and "not known: class pin" in text
    history = run(capsys, "history", "--device", device)
    assert history["updates"][1]["outcomes"][0]["all"] == told["accuracy"]
    assert "kept" in refused(capsys, "evaluate", "--device", device, "--rows", files[3], "--of-update", "7")


def test_a_device_carries_an_acceptance_set(capsys, device, files):
    assert "acceptance set" in refused(capsys, "evaluate", "--device", device)
    told = run(capsys, "evaluate", "--device", device, "--rows", files[3], "--keep-as-acceptance")
    assert run(capsys, "evaluate", "--device", device)["confusion"] == told["confusion"]
    assert main(["update", "--increment", files[2], "--device", device]) in (0, 3)
    assert "acceptance" in capsys.readouterr().out
    assert run(capsys, "evaluate", "--device", device, "--drop-acceptance")["acceptance_rows"] == 0
    assert "acceptance set" in refused(capsys, "evaluate", "--device", device)


def test_rollback_by_hand_is_told_by_the_history(capsys, device):
    told = run(capsys, "rollback", "--device", device, "--because", "wrong crate")
    assert told["undone"] == [2]
    assert main(["history", "--device", device]) == 0
    text = capsys.readouterr().out
    assert "undone" in text and "after update 2: rolled back" in text


def test_classes_are_listed_and_looked_after(capsys, device):
    listed = run(capsys, "classes", "--device", device)["classes"]
    assert [one["label"] for one in listed] == ["bolt", "nut", "hook", "ring"] and listed[0]["floor"] is None
    assert run(capsys, "classes", "--device", device, "--floor", "nut", "0.9")["classes"][1]["floor"] == 0.9
    run(capsys, "classes", "--device", device, "--rename", "hook", "crane hook")
    run(capsys, "classes", "--device", device, "--merge", "ring", "crane hook")
    run(capsys, "classes", "--device", device, "--retire", "bolt")
    assert main(["classes", "--device", device, "--erase", "nut"]) == 0
    text = capsys.readouterr().out
    assert "crane hook" in text and "no mention of its name is left" in text
    steps = [one["step"] for one in run(capsys, "history", "--device", device)["steps"]]
    assert steps == ["floor", "renamed", "merged", "retired", "erased"]
    assert "knows crane hook" in refused(capsys, "classes", "--device", device, "--retire", "nut")
    assert "--floor" in refused(capsys, "classes", "--device", device, "--floor", "crane hook", "high")


def test_doubtful_names_and_labels_are_told_before_anything_is_learned(capsys, device, files, tmp_path):
    with np.load(files[2], allow_pickle=False) as file:
        X, y = file["X"], np.where(file["y"] == "pin", "Hook ", file["y"])
    y[:3] = "nut"
    np.savez(tmp_path / "doubtful.npz", X=X, y=y)
    told = run(capsys, "check", "--increment", str(tmp_path / "doubtful.npz"), "--device", device)
    assert told["similar_names"] == [["hook", "Hook "]]
    assert {0, 1, 2} <= {one["row"] for one in told["suspicious"]["rows"]}
    assert main(["check", "--increment", str(tmp_path / "doubtful.npz")]) == 0
    assert "labels looked at are more likely wrong" in capsys.readouterr().out
    for command in ("advise", "update"):
        assert main([command, "--increment", str(tmp_path / "doubtful.npz"), "--device", device]) in (0, 3)
        text = capsys.readouterr().out
        assert "Doubtful: class Hook  is new" in text and "Doubtful: 3 of" in text
    assert len(run(capsys, "history", "--device", device)["updates"][-1]["doubts"]) == 2
