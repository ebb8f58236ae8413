"""Rebuilding: a recipe gives the same forecaster to the bit, interrupted or not, and only from what it names."""

import json
import re
from pathlib import Path

import pytest

from hyperforecast.checks import InputError
from hyperforecast.cli import main
from hyperforecast.forecasting import load_forecaster, save_forecaster
from hyperforecast.settings import METHODS
from hyperforecast.workshop.fitting import Fit, fit_records, load_dataset, models, networks, read_recipe, rebuild
from hyperforecast.workshop.gathering import RecordsFile, gather, trajectories
from hyperforecast.workshop.streams import load_streams

ROOT = Path(__file__).parents[2]
FAMILIES = ("synthetic_drifting", "synthetic_gaussian", "synthetic_rectified")
LEFT_OUT = "synthetic_rectified"
FEW = {"FIRST_ROUND": (12, 0, 4), "STEERED_ROUND": (4, 8, 4)}


@pytest.fixture(scope="module", autouse=True)
def small():
    """Few attempts, few trees."""
    with pytest.MonkeyPatch.context() as patch:
        for name, attempts in FEW.items():
            patch.setattr(trajectories, name, attempts)
        patch.setattr(models, "ROUNDS", 8)
        patch.setattr(models, "SMALL_ROUNDS", 5)
        patch.setattr(networks, "MOST_EPOCHS", 8)
        patch.setattr(models, "LARGE", {"num_leaves": 31, "min_data_in_leaf": 20})
        yield


def streams(families, seeds, increments):
    return "".join(f'[[stream]]\nname = "{family}"\nsource = "{family}"\nseeds = {seeds}\nincrements = {increments}\n'
                   f"classes = 6\nraw_dimension = 5\nrows_per_class = 14\n" for family in families)


@pytest.fixture(scope="module")
def recipe_file(tmp_path_factory):
    folder = tmp_path_factory.mktemp("recipe")
    (folder / "first.toml").write_text(streams(FAMILIES, [0, 1], 3))
    (folder / "second.toml").write_text(streams(FAMILIES, [7], 4))
    (folder / "recipe.toml").write_text(
        'seed = 2\n[[round]]\nstreams = ["first.toml"]\n[[round]]\nstreams = ["second.toml"]\n'
        f'[round.steering]\nwithout = ["{LEFT_OUT}"]\nfolds = 2\n[fit]\nfolds = 2\n')
    return folder / "recipe.toml"


@pytest.fixture(scope="module")
def recipe(recipe_file):
    return read_recipe(recipe_file)


@pytest.fixture(scope="module")
def rebuilt(recipe, tmp_path_factory):
    """A folder with what one run left."""
    folder = tmp_path_factory.mktemp("rebuilt")
    rebuild(recipe, "wa", folder)
    return folder


def kept(folder):
    """The folder's forecasters by name, as bytes."""
    return {path.name: path.read_bytes() for path in folder.glob("*.forecaster")}


class Interruption(Exception):
    """Stands for whatever stops a run."""


def test_the_same_recipe_gives_the_same_bits(recipe, rebuilt, tmp_path):
    assert rebuild(recipe, "wa", tmp_path / "new") == tmp_path / "new" / "wa.forecaster"
    assert kept(tmp_path / "new") == kept(rebuilt) and len(kept(rebuilt)) == 2


@pytest.mark.parametrize("stop_at", ["3 of 6 trajectories", "held out synthetic_drifting", "2 of 3 trajectories",
                                     "fitting the forecaster$"])
def test_an_interrupted_run_goes_on_and_gives_the_same_bits(stop_at, recipe, rebuilt, tmp_path):
    def stop(told):
        if re.search(stop_at, str(told)):
            raise Interruption

    with pytest.raises(Interruption):
        rebuild(recipe, "wa", tmp_path, progress=stop)
    assert not (tmp_path / "wa.forecaster").exists()
    before = RecordsFile(tmp_path / "records.sqlite").stored()
    told = []
    rebuild(recipe, "wa", tmp_path, progress=lambda one: told.append(str(one)))
    assert kept(tmp_path) == kept(rebuilt)
    assert sum("trajectories, about" in line for line in told) == 9 - len(before)


def test_a_finished_run_gathers_nothing_again(recipe, rebuilt):
    told, before = [], kept(rebuilt)
    rebuild(recipe, "wa", rebuilt, progress=lambda one: told.append(str(one)))
    assert not [line for line in told if "trajectories" in line or "steers" in line] and kept(rebuilt) == before


def test_it_is_what_the_commands_make_step_by_step(recipe_file, rebuilt, tmp_path):
    """Gather, fit to steer, gather steered, fit: each by its own command."""
    def run(*arguments):
        assert main([*map(str, arguments), "--workers", "1", "--seed", "2"]) == 0

    records, steering, made = tmp_path / "all.sqlite", tmp_path / "steering.forecaster", tmp_path / "made.forecaster"
    first, second = (recipe_file.parent / name for name in ("first.toml", "second.toml"))
    run("gather", "--streams", first, "--records", records, "--method", "wa")
    run("fit", "--records", records, "--method", "wa", "--forecaster", steering, "--without", LEFT_OUT, "--folds", 2)
    run("gather", "--streams", second, "--records", records, "--method", "wa", "--forecaster", steering)
    run("fit", "--records", records, "--method", "wa", "--forecaster", made, "--folds", 2)
    assert made.read_bytes() == (rebuilt / "wa.forecaster").read_bytes()


def test_other_records_in_the_folder_change_nothing(recipe, rebuilt, tmp_path):
    (tmp_path / "others.toml").write_text(streams(FAMILIES[:2], [50], 3))
    gather(load_streams(tmp_path / "others.toml"), tmp_path / "records.sqlite", methods=["wa"])
    rebuild(recipe, "wa", tmp_path)
    assert kept(tmp_path) == kept(rebuilt)


def test_what_steers_is_blind_to_the_sources_it_leaves_out_and_the_last_fit_sees_all(rebuilt):
    steering = next(path for path in rebuilt.glob("steering.*"))
    assert LEFT_OUT not in load_forecaster(steering).recipe["boundaries"]
    recipe = load_forecaster(rebuilt / "wa.forecaster").recipe
    # Two boundaries of each stream of three increments, three of those of four.
    assert recipe["boundaries"] == dict.fromkeys(FAMILIES, 2 * 2 + 3) and recipe["without"] == []


def test_another_recipe_is_not_steered_by_what_an_earlier_one_left(recipe_file, rebuilt, tmp_path):
    text = recipe_file.read_text().replace(f'without = ["{LEFT_OUT}"]\n', "")
    for name in ("first.toml", "second.toml"):
        text = text.replace(name, (recipe_file.parent / name).as_posix())
    (tmp_path / "recipe.toml").write_text(text)
    (tmp_path / "records.sqlite").write_bytes((rebuilt / "records.sqlite").read_bytes())
    for name, data in kept(rebuilt).items():
        (tmp_path / name).write_bytes(data)
    rebuild(read_recipe(tmp_path / "recipe.toml"), "wa", tmp_path)
    assert len(kept(tmp_path)) == 3 and kept(tmp_path)["wa.forecaster"] != kept(rebuilt)["wa.forecaster"]


@pytest.mark.parametrize("same", [True, False])
def test_the_command_says_whether_it_is_the_one_that_ships(same, recipe_file, rebuilt, tmp_path, monkeypatch, capsys):
    shipped = tmp_path / "shipped.forecaster"
    if same:
        shipped.write_bytes((rebuilt / "wa.forecaster").read_bytes())
    else:
        dataset = RecordsFile(rebuilt / "records.sqlite")
        save_forecaster(shipped, fit_records(dataset, "wa", Fit(folds=2), seed=5))
    monkeypatch.setattr("hyperforecast.forecasting.load_forecaster",
                        lambda source: load_forecaster(shipped if source == "wa" else source))
    arguments = ["rebuild", "--recipe", str(recipe_file), "--method", "wa", "--folder", str(rebuilt), "--workers", "1"]
    assert main([*arguments, "--json"]) == 0
    captured = capsys.readouterr()
    document = json.loads(captured.out)
    assert document["same"] is same
    assert document["checksum"] == load_forecaster(rebuilt / "wa.forecaster").checksum
    assert document["shipped"] == load_forecaster(shipped).checksum
    assert "round 2 of 2: 3 streams" in captured.err
    assert main(arguments) == 0
    assert ("the one that ships, to the bit" in capsys.readouterr().out) is same


def test_the_recipe_of_those_that_ship_is_whole():
    recipe = read_recipe(ROOT / "models" / "recipe.toml")
    assert recipe.rounds[0].steering is None and not recipe.fit.without
    measured = {one.source for part in recipe.rounds for one in part.definitions if not one.source.startswith("synthetic_")}
    for method in METHODS:
        steering = load_forecaster(recipe.rounds[1].steering / f"{method}.forecaster")
        assert steering.method == method and not measured & set(steering.recipe["boundaries"])


def test_a_forecaster_that_is_given_steers_as_one_that_is_fitted(recipe_file, rebuilt, tmp_path):
    text = recipe_file.read_text().replace("[round.steering]", 'steered_by = "given"\n[fit]').partition("[fit]")[0]
    for name in ("first.toml", "second.toml"):
        text = text.replace(name, (recipe_file.parent / name).as_posix())
    (tmp_path / "recipe.toml").write_text(f"{text}[fit]\nfolds = 2\n")
    (tmp_path / "given").mkdir()
    (tmp_path / "given" / "wa.forecaster").write_bytes(next(rebuilt.glob("steering.*")).read_bytes())
    rebuild(read_recipe(tmp_path / "recipe.toml"), "wa", tmp_path / "made")
    assert kept(tmp_path / "made")["wa.forecaster"] == kept(rebuilt)["wa.forecaster"]


ROUND = '[[round]]\nstreams = ["first.toml"]\n'


@pytest.mark.parametrize("text, words", [
    ("[[round", "must be a TOML file"),
    ("seed = 1", r"must hold \[\[round\]\] tables; received none"),
    ("round = 3", r"must hold \[\[round\]\] tables; received 3"),
    (ROUND + "speed = 1", "round 1: knows the keys streams, steering, steered_by; received 'speed'"),
    ("pace = 1\n" + ROUND, "knows the keys seed, round, fit; received 'pace'"),
    ("seed = -1\n" + ROUND, "seed: must be a whole number of at least 0; received -1"),
    ("[[round]]\nstreams = []", "round 1 streams: must be a list of texts"),
    ("[[round]]\nstreams = [3]", "round 1 streams: must be a list of texts"),
    ('[[round]]\nstreams = ["no.toml"]', "no.toml: must be a readable file"),
    (ROUND + "[round.steering]\nfolds = 2", "round 1: cannot be steered"),
    (ROUND + ROUND + "steering = 3", "round 2 steering: must be a table; received 3"),
    (ROUND + ROUND + "[round.steering]\nfolds = 1", "round 2 steering folds: must be a whole number of at least 2"),
    (ROUND + ROUND + "steered_by = 3", "steered_by: must be a folder, relative to the recipe; received 3"),
    (ROUND + ROUND + "steered_by = 'x'\n[round.steering]\nfolds = 2", "must be steered by one thing"),
    (ROUND + "[fit]\nwithout = 3", "fit without: must be a list of texts"),
    (ROUND + "[fit]\ndepth = 3", "fit: knows the keys without, folds; received 'depth'"),
])
def test_a_recipe_that_breaks_a_rule_is_refused(text, words, recipe_file):
    path = recipe_file.parent / "broken.toml"
    path.write_text(text)
    with pytest.raises(InputError, match=words):
        read_recipe(path)


def test_a_source_to_leave_out_must_be_in_the_records(rebuilt, capsys):
    records = rebuilt / "records.sqlite"
    words = f"without: must name sources of the wa records: {', '.join(FAMILIES)}; received fonts, moons"
    with pytest.raises(InputError, match=words):
        load_dataset(RecordsFile(records), "wa", without=["moons", LEFT_OUT, "fonts"])
    assert main(["fit", "--records", str(records), "--method", "wa", "--without", "moons", "fonts",
                 "--forecaster", str(rebuilt / "never")]) == 2
    assert capsys.readouterr().err == f"hyperforecast fit: {words}\n" and not (rebuilt / "never").exists()
