"""Commands for trusting a forecaster, as a user runs them."""

import json
import os
import shutil
import subprocess
import sys

import numpy as np
import pytest

from hyperforecast.cli import main
from hyperforecast.forecasting import load_forecaster, save_forecaster


@pytest.fixture
def cell(tmp_path, monkeypatch, forecasters, capsys):
    """A device after two updates, increments beside it, and another forecaster than the one that ships."""
    monkeypatch.chdir(tmp_path)
    rng = np.random.default_rng(0)
    for t, labels in enumerate((["nut", "bolt"], ["hook", "ring"], ["pin"])):
        y = np.repeat(labels, 30)
        centers = {label: np.random.default_rng([7, *label.encode()]).normal(0, 3, 6) for label in labels}
        X = np.stack([centers[label] for label in y.tolist()]) + rng.normal(size=(len(y), 6))
        np.savez(f"delivery{t}.npz", X=X, y=y)
    save_forecaster("new.forecaster", forecasters["wa"])
    assert main(["update", "--increment", "delivery0.npz", "--device", "cell", "--memory-limit", "120"]) == 0
    assert main(["update", "--increment", "delivery1.npz", "--device", "cell"]) in (0, 3)
    capsys.readouterr()


def run(capsys, *arguments):
    assert main([*arguments, "--json"]) == 0
    return json.loads(capsys.readouterr().out)


def refused(capsys, *arguments):
    assert main(list(arguments)) == 2
    shown = capsys.readouterr()
    assert not shown.out and shown.err.count("\n") == 1
    return shown.err


def test_show_pin_compare_upgrade(cell, capsys):
    shipped, new = load_forecaster("wa").checksum, load_forecaster("new.forecaster").checksum
    told = run(capsys, "forecaster", "--device", "cell")
    assert (told["forecaster"], told["pinned"]) == (shipped, False)
    assert [(one["forecaster"], one["updates"]) for one in told["advised"]] == [(shipped, [2])]
    assert run(capsys, "forecaster", "--device", "cell", "--pin", "shipped")["pinned"]
    update = ("update", "--increment", "delivery2.npz", "--device", "cell")
    assert "--upgrade" in refused(capsys, *update, "--forecaster", "new.forecaster")
    assert "--upgrade" in refused(capsys, "forecaster", "--device", "cell", "--pin", "new.forecaster")
    compared = run(capsys, "forecaster", "--device", "cell", "--compare", "new.forecaster")
    assert (compared["before"]["forecaster"], compared["after"]["forecaster"]) == (shipped, new)
    assert [one["update"] for one in compared["boundaries"]] == [2] and not compared["upgraded"]
    assert run(capsys, "forecaster", "--device", "cell")["forecaster"] == shipped
    assert main(["forecaster", "--device", "cell", "--upgrade", "new.forecaster"]) == 0
    text = capsys.readouterr().out
    assert "nearer" in text and f"pinned to {new[:16]}" in text and "tell little" in text
    assert run(capsys, *update, "--dry-run")["forecaster"] == new
    assert run(capsys, "advise", *update[1:])["forecaster"] == new
    assert not run(capsys, "forecaster", "--device", "cell", "--unpin")["pinned"]
    assert run(capsys, "advise", *update[1:])["forecaster"] == shipped


def test_sign_and_verify(cell, capsys):
    pytest.importorskip("cryptography", reason="pip install '.[signing]'")
    told = run(capsys, "sign", "--new-key", "key.pem")
    assert told["public_key"] == "key.public.pem"
    signed = run(capsys, "sign", "--forecaster", "new.forecaster", "--key", "key.pem")
    assert signed["signature"] == "new.forecaster.sig"
    verify = ("verify", "--forecaster", "new.forecaster", "--key", "key.public.pem")
    assert run(capsys, *verify)["verified"]
    pin = ("forecaster", "--device", "cell", "--pin", "new.forecaster", "--key", "key.public.pem")
    assert run(capsys, *pin)["public_key"]
    assert run(capsys, "verify", "--device", "cell")["verified"]
    with open("new.forecaster", "r+b") as file:
        file.seek(1000)
        file.write(b"tampered")
    assert "must be the signature" in refused(capsys, *verify)
    assert "needs --forecaster and --key" in refused(capsys, "sign")
    assert "--key" in refused(capsys, "verify", "--forecaster", "new.forecaster")


def test_without_the_package_one_line_says_how_to_verify(cell, tmp_path):
    script = ("import sys; sys.modules['cryptography'] = None; from hyperforecast.cli import main; "
              "sys.exit(main(sys.argv[1:]))")
    for name in ("key.pem", "new.forecaster.sig"):
        (tmp_path / name).write_bytes(b"x" * 64)
    command = [sys.executable, "-c", script, "verify", "--forecaster", "new.forecaster", "--key", "key.pem"]
    done = subprocess.run(command, capture_output=True, text=True, env={**os.environ, "OPENBLAS_NUM_THREADS": "1"})
    assert done.returncode == 2 and done.stderr.count("\n") == 1 and not done.stdout
    assert "cryptography" in done.stderr and "openssl pkeyutl -verify" in done.stderr


@pytest.mark.skipif(shutil.which("openssl") is None, reason="needs openssl: apt-get install openssl")
def test_the_line_that_names_openssl_works(cell, capsys):
    pytest.importorskip("cryptography", reason="pip install '.[signing]'")
    from hyperforecast.forecasting.signature import INSTEAD

    run(capsys, "sign", "--new-key", "key.pem", "--forecaster", "new.forecaster")
    command = INSTEAD.partition("with: ")[2].replace("PUBLIC", "key.public.pem").replace("FILE", "new.forecaster")
    assert subprocess.run(command.split(), capture_output=True).returncode == 0
    shutil.copy("delivery0.npz", "new.forecaster")
    assert subprocess.run(command.split(), capture_output=True).returncode != 0
