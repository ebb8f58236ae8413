"""Stream definitions in TOML: what they mean, what is refused, and what the committed files may hold."""

import os
import pathlib
import subprocess
import sys
import tomllib

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.workshop.streams import FAMILIES, LOCKED, OPEN_SETS, load_streams

FOLDER = pathlib.Path(__file__).parents[2] / "bench_streams"
CONTESTS = ("contest_digits_ratdat", "contest_fonts_shuttle", "contest_languages_olive_vowel", "locked")
FILES = (*CONTESTS, "gather_open", "gather_synthetic", "demo_small")

DIGITS = 'name = "d"\nsource = "digits"\n'
CLOUDS = 'name = "c"\nsource = "synthetic_gaussian"\n'


@pytest.fixture
def load(tmp_path):
    def load(*tables):
        path = tmp_path / "streams.toml"
        path.write_text("".join(f"[[stream]]\n{table}\n" for table in tables))
        return load_streams(path)

    return load


def test_seeds_expand_in_order_with_keys_of_their_own(load):
    definitions = load(DIGITS + "increments = 4\nseeds = [3, 1]", CLOUDS + "seed = 9", CLOUDS.replace('"c"', '"e"'))
    assert [(one.name, one.seed) for one in definitions] == [("d", 3), ("d", 1), ("c", 9), ("e", 0)]
    assert [one.source for one in definitions] == ["handwritten_digits"] * 2 + ["synthetic_gaussian"] * 2
    assert len({one.key for one in definitions}) == len(set(definitions)) == 4


def test_keys_change_with_the_definition_and_not_with_the_folder(load, tmp_path):
    text = "[[stream]]\n" + DIGITS + "increments = 4\n"
    (tmp_path / "elsewhere").mkdir()
    (tmp_path / "elsewhere" / "other.toml").write_text(text)
    first, = load(DIGITS + "increments = 4")
    moved, = load_streams(tmp_path / "elsewhere" / "other.toml")
    changed, = load(DIGITS + "increments = 4\nrows_per_class = 50")
    assert first.key == moved.key and first == moved
    assert first.key != changed.key


def test_listed_increments_are_the_stream(load):
    stream = load(DIGITS + "increments = [[7, 1], [0], [3, 1]]\nrows_per_class = 12")[0].build()
    assert [stream.classes(t).tolist() for t in range(3)] == [[7, 1], [0], [3, 1]]
    assert np.bincount(stream.training(2).y).tolist() == [0, 12, 0, 12]
    assert (stream.name, stream.source, stream.seed) == ("d", "handwritten_digits", 0)


def test_dealt_increments_follow_the_seed(load):
    first, again, other = (one.build() for seed in (0, 0, 1)
                           for one in load(DIGITS + f"increments = 4\nclasses = 8\nseed = {seed}"))
    dealt = [[stream.classes(t).tolist() for t in range(4)] for stream in (first, again, other)]
    assert dealt[0] == dealt[1] != dealt[2]
    assert len(set(sum(dealt[0], []))) == 8


def test_contests_default_to_a_hundred_rows(load):
    stream = load(DIGITS + "increments = [[0, 1], [2]]")[0].build()
    assert np.bincount(stream.training(0).y).tolist() == [100, 100]


def test_treatments_apply(load):
    stream = load(DIGITS + 'increments = 4\nfeatures = "convolution"\ndimension = 32')[0].build()
    assert stream.n_features == 32


def test_files_of_ones_own(load, tmp_path):
    rng = np.random.default_rng(0)
    np.savez(tmp_path / "mine.npz", X=rng.normal(size=(60, 5)), y=np.repeat(["red", "green", "blue"], 20))
    table = 'name = "mine"\nfile = "mine.npz"\nincrements = [["red", "blue"], ["green"]]'
    definition, = load(table)
    stream = definition.build()
    assert (definition.source, stream.n_features) == ("file mine.npz", 5)
    assert set(stream.training(0).y.tolist()) == {"red", "blue"}
    assert len(stream.training(1)) == 12 and len(stream.scoring(1)) == 12
    np.savez(tmp_path / "mine.npz", X=rng.normal(size=(60, 5)), y=np.repeat(["red", "green", "blue"], 20))
    changed, = load(table)
    assert changed.key != definition.key
    assert not np.array_equal(changed.build().scoring(1).X, stream.scoring(1).X)


def test_csv_files_of_ones_own(load, tmp_path):
    lines = [f"{row},{row % 7},{row // 10}" for row in range(40)]
    (tmp_path / "mine.csv").write_text("a,b,label\n" + "\n".join(lines))
    stream = load('name = "mine"\nfile = "mine.csv"\nincrements = 3')[0].build()
    assert sorted(stream.seen(2).tolist()) == [0, 1, 2, 3]


BAD_TABLES = [
    (DIGITS + "increments = 4\nspeed = 3", "stream 'd' keys: knows the keys name.*received 'speed'"),
    ('source = "digits"\nincrements = 4', "stream 1 name: must be a text; received None"),
    ('name = 3\nsource = "digits"\nincrements = 4', "stream 1 name: must be a text; received 3"),
    ('name = "d"\nincrements = 4', "stream 'd' source: must be given, or else file; received neither"),
    (DIGITS + 'increments = 4\nfile = "x.npz"', "source: must be given, or else file; received both"),
    ('name = "d"\nsource = "numerals"\nincrements = 4', "source: must be one of synthetic_gaussian.*'numerals'"),
    ('name = "d"\nsource = 5\nincrements = 4', "source: must be one of .*received 5"),
    ('name = "d"\nfile = "absent.npz"\nincrements = 4', "file: must be a readable file.*absent.npz"),
    ('name = "d"\nfile = 5\nincrements = 4', "file: must be a path"),
    (DIGITS, "increments: must be a whole number from 2 to 1000; received None"),
    (DIGITS + "increments = true", "increments: must be a whole number"),
    (DIGITS + "increments = 1", "increments: must be a whole number from 2"),
    (DIGITS + 'increments = "four"', "increments: must be a whole number"),
    (DIGITS + "increments = [[0, 1]]", "increments: must be at least two; received 1"),
    (DIGITS + "increments = [[0], [1]]", "increments: must have at least 2 classes in increment 0"),
    (DIGITS + "increments = [[0, 1], [1, 1]]", "increments: must name a class once in increment 1"),
    (DIGITS + 'increments = [[0, 1], ["2"]]', "increments: must hold labels that are all texts or all whole"),
    (DIGITS + "increments = [0, 1]", "increments: must be lists of labels"),
    (DIGITS + "increments = [[0, 1], [2.5]]", "increments: must be lists of labels"),
    (DIGITS + "increments = [[0, 1], [2]]\nclasses = 3", "classes: must be left out where increments are listed"),
    (DIGITS + "increments = [[0, 1], [2]]\nrecurring = 0.5", "recurring: must be left out"),
    (CLOUDS + "increments = [[0, 1], [2]]", "increments: must be a number"),
    (DIGITS + "increments = 4\nclasses = 4", "classes: must be from 5 to 46 with 4 increments; received 4"),
    (DIGITS + "increments = 4\nrecurring = 1.5", "recurring: must be a number from 0 to 1; received 1.5"),
    (DIGITS + "increments = 4\nrows_per_class = 0", "rows_per_class: must be a whole number of at least 1"),
    (CLOUDS + "rows_per_class = 151", "rows_per_class: must be a whole number from 1 to 150"),
    (CLOUDS + "raw_dimension = 1", "raw_dimension: must be a whole number from 2"),
    (CLOUDS + "separation = -1", "separation: must be a number from 0"),
    (CLOUDS + 'noise = "much"', "noise: must be a number from 0"),
    (DIGITS + "increments = 4\nnoise = 0.5", "noise: must be left out: only synthetic families"),
    (DIGITS + 'increments = 4\nfeatures = "wavelet"', "features: must be one of raw, pca"),
    (DIGITS + 'increments = 4\nfeatures = "pca"', "dimension: must be given with pca"),
    (DIGITS + "increments = 4\ndimension = 8", "dimension: must be given with pca"),
    (DIGITS + "increments = 4\nseeds = []", "seeds: must be a list of whole numbers"),
    (DIGITS + "increments = 4\nseeds = [1, 1]", "seeds: must differ"),
    (DIGITS + "increments = 4\nseeds = [-1]", "seeds: must be a whole number from 0"),
    (DIGITS + "increments = 4\nseeds = [1]\nseed = 1", "seed: must be left out where seeds"),
]


@pytest.mark.parametrize("table, message", BAD_TABLES)
def test_tables_that_break_a_rule_are_refused_with_file_and_stream(load, table, message):
    with pytest.raises(InputError, match=message) as caught:
        load(table)
    assert "streams.toml stream" in str(caught.value) and "\n" not in str(caught.value)


@pytest.mark.parametrize("table, message", [
    (DIGITS + "increments = [[0, 1], [10]]", "increments: must name classes with at least 5 rows; received 10"),
    (DIGITS + 'increments = [["0", "1"], ["2"]]', "increments: must name classes with at least 5 rows; received '0'"),
    (DIGITS + "increments = 10", "increments: must be at most 9, with 10 classes"),
    (DIGITS + "increments = 4\nclasses = 11", "classes: must be at most the 10 of the source"),
    (DIGITS + 'increments = 4\nfeatures = "pca"\ndimension = 65', "dimension: must be at most"),
    (CLOUDS + 'features = "convolution"\ndimension = 16', "features: must be raw, pca or fourier"),
])
def test_definitions_that_do_not_fit_their_rows_are_refused_when_built(load, table, message):
    definition, = load(table)
    with pytest.raises(InputError, match=f"streams.toml stream '[dc]' {message}"):
        definition.build()


@pytest.mark.parametrize("text, message", [
    ("[[stream]\n", "must be a TOML file"),
    ("", "must hold \\[\\[stream\\]\\] tables; received none"),
    ("stream = 3", "must hold \\[\\[stream\\]\\] tables"),
    ("stream = []", "must hold \\[\\[stream\\]\\] tables"),
    ("[[streams]]\n" + DIGITS, "knows the keys stream"),
    ("[[stream]]\n" + CLOUDS + "[[stream]]\n" + CLOUDS,
     "name: must differ from the other streams' names; received 'c'"),
])
def test_files_that_hold_no_streams_are_refused(tmp_path, text, message):
    path = tmp_path / "bad.toml"
    path.write_text(text)
    with pytest.raises(InputError, match=message) as caught:
        load_streams(path)
    assert str(path) in str(caught.value)


def test_missing_and_binary_files_are_refused(tmp_path):
    with pytest.raises(InputError, match="must be a readable file"):
        load_streams(tmp_path / "absent.toml")
    (tmp_path / "binary.toml").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(InputError, match="must be a TOML file"):
        load_streams(tmp_path / "binary.toml")


def test_the_bits_of_a_stream_do_not_hang_on_the_process():
    code = ("import hashlib, sys; from hyperforecast.workshop.streams import load_streams\n"
            "streams = [one.build() for one in load_streams(sys.argv[1])]\n"
            "print(hashlib.sha256(b''.join(s.training(1).X.tobytes() + s.scoring(1).X.tobytes() for s in streams))"
            ".hexdigest())")
    outputs = {subprocess.run([sys.executable, "-c", code, str(FOLDER / "demo_small.toml")], check=True, text=True,
                              capture_output=True, env={**os.environ, "PYTHONHASHSEED": seed}).stdout
               for seed in ("1", "2")}
    assert len(outputs) == 1 and len(outputs.pop().strip()) == 64


# --- the committed files


def tables(name):
    return tomllib.loads((FOLDER / f"{name}.toml").read_text(encoding="utf-8"))["stream"]


def test_every_committed_file_is_listed_here_and_loads():
    keys = [one.key for name in FILES for one in load_streams(FOLDER / f"{name}.toml")]
    assert len(set(keys)) == len(keys)
    for path in FOLDER.glob("*.toml"):
        assert load_streams(path), path


def test_locked_sets_are_in_the_locked_file_only():
    assert LOCKED == ("fashion_mnist", "satellite", "soybean")
    for path in FOLDER.glob("*.toml"):
        sources = {one.origin for one in load_streams(path)}
        assert sources == set(LOCKED) if path.stem == "locked" else not sources & set(LOCKED), path


def test_contests_fix_their_classes_with_five_seeds_and_a_hundred_rows():
    for name in CONTESTS:
        for table in tables(name):
            assert table["seeds"] == [0, 1, 2, 3, 4] and table["rows_per_class"] == 100
            labels = sum(table["increments"], [])
            assert len(set(labels)) == len(labels)
            assert len(table["increments"]) == (10 if len(labels) >= 11 else len(table["increments"]))
    shape = {table["name"]: [len(one) for one in table["increments"]] for name in CONTESTS for table in tables(name)}
    assert shape["satellite"] == [2, 1, 1, 1, 1]
    assert shape["glyphs"] == [10] * 10
    assert shape["languages"] == [14] * 8 + [13] * 2


def test_gathering_covers_every_family_and_every_open_set_that_is_not_locked():
    assert {one.origin for one in load_streams(FOLDER / "gather_synthetic.toml")} == set(FAMILIES)
    assert {one.origin for one in load_streams(FOLDER / "gather_open.toml")} == set(OPEN_SETS) - set(LOCKED)


def test_gathering_from_digits_builds():
    for one in load_streams(FOLDER / "gather_open.toml"):
        if one.origin == "digits":
            assert one.build().n_boundaries == one.increments
