"""Bundles: what was written comes back, and whatever else lies in a file is refused with one line."""

import io
import json
import os
import socket
import zipfile

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hyperforecast import storage
from hyperforecast.checks import InputError
from hyperforecast.storage import (
    Bundle, VersionError, array_bytes, bundle_checksum, checksum, dump_json, parse_array, parse_json,
    read_bundle_file, read_bundle_folder, read_bytes, read_json, stored_array, write_atomically, write_bundle_file,
    write_bundle_folder,
)

# The same 200 examples every time; set HYPERFORECAST_FUZZ to a number for as many new ones.
fuzzed = settings(max_examples=int(os.environ.get("HYPERFORECAST_FUZZ", 200)), deadline=None,
                  derandomize="HYPERFORECAST_FUZZ" not in os.environ)
TRUNCATIONS, FLIPS = 20, 60


def some_bundle():
    rng = np.random.default_rng(0)
    arrays = {
        "numbers": rng.normal(size=(7, 5)).astype(np.float32), "scalar": np.array(2.5),
        "nothing": np.empty((0, 3), np.int64), "flags": np.array([True, False]),
        "big_endian": np.arange(4, dtype=">i4"),
        "columns_first": np.asfortranarray(np.arange(12.0).reshape(3, 4)), "every_other": np.arange(10)[::2],
        "labels": np.array(["nut", "bolt", "écrou", "螺母"]), "odd": np.array([np.nan, np.inf, -0.0]),
    }
    facts = {"text": "é\u2028\n", "list": [1, 2.5, None, True], "nested": {"b": 1, "a": {}}}
    return Bundle("toolbox", 2, facts, arrays)


def same_bundle(one, other):
    return ((one.kind, one.version, one.facts) == (other.kind, other.version, other.facts)
            and one.arrays.keys() == other.arrays.keys()
            and all(other.arrays[name].dtype == array.dtype and other.arrays[name].shape == array.shape
                    and other.arrays[name].tobytes() == array.tobytes() for name, array in one.arrays.items()))


@pytest.fixture
def written_file(tmp_path):
    write_bundle_file(tmp_path / "a.bundle", some_bundle())
    return tmp_path / "a.bundle"


@pytest.fixture
def written_folder(tmp_path):
    (tmp_path / "folder").mkdir()
    write_bundle_folder(tmp_path / "folder", some_bundle())
    return tmp_path / "folder"


def read_file(path):
    return read_bundle_file(path, "toolbox", newest=2)


def read_folder(path):
    return read_bundle_folder(path, "toolbox", newest=2)


def assert_one_line(caught):
    assert len(str(caught.value).splitlines()) == 1 and caught.value.rule and caught.value.received


# What was written comes back.


def test_a_bundle_comes_back_from_a_file_and_from_a_folder(written_file, written_folder):
    bundle = some_bundle()
    for read, path in ((read_file, written_file), (read_folder, written_folder)):
        back, sha = read(path)
        assert same_bundle(bundle, back) and sha == bundle_checksum(bundle)


def test_the_same_content_gives_the_same_bytes(written_file, tmp_path):
    bundle = some_bundle()
    # Neither the order of names nor how an array lies in memory is content.
    shuffled = Bundle(bundle.kind, bundle.version, dict(reversed(bundle.facts.items())),
                      {name: array.copy(order="C") for name, array in reversed(bundle.arrays.items())})
    write_bundle_file(tmp_path / "b.bundle", shuffled)
    assert (tmp_path / "b.bundle").read_bytes() == written_file.read_bytes()
    shuffled.arrays["flags"] = ~shuffled.arrays["flags"]
    assert bundle_checksum(shuffled) != bundle_checksum(bundle)


def test_other_tools_can_read_a_bundle(written_file, written_folder):
    with zipfile.ZipFile(written_file) as archive, np.load(written_file) as arrays:
        assert archive.testzip() is None
        np.testing.assert_array_equal(arrays["labels"], some_bundle().arrays["labels"])
    manifest = json.loads((written_folder / "manifest.json").read_text(encoding="utf-8"))
    assert manifest["facts"] == some_bundle().facts
    np.testing.assert_array_equal(np.load(written_folder / "numbers.npy"), some_bundle().arrays["numbers"])


# Damage is found, wherever it is.


def damaged(data, rng):
    """Yield copies of bytes, cut short at many places, then with single bytes changed."""
    for length in np.unique(np.linspace(0, len(data) - 1, TRUNCATIONS).astype(int)):
        yield f"cut to {length}", data[:length]
    for _ in range(FLIPS):
        place, change = int(rng.integers(len(data))), int(rng.integers(1, 256))
        yield f"byte {place} xor {change}", data[:place] + bytes([data[place] ^ change]) + data[place + 1:]


def test_damage_to_a_file_is_found_or_harmless(written_file):
    """A cut is refused. A changed byte is, too, unless no reader looks at it, as at a date in the zip directory."""
    found, cases = 0, list(damaged(written_file.read_bytes(), np.random.default_rng(1)))
    for what, data in cases:
        written_file.write_bytes(data)
        try:
            back, sha = read_file(written_file)
        except InputError as error:
            assert str(error).isprintable()
            found += 1
        else:
            assert not what.startswith("cut") and same_bundle(back, some_bundle()) and sha == bundle_checksum(back), what
    assert found > 0.7 * len(cases)


def test_damage_to_any_file_of_a_folder_is_found(written_folder):
    rng = np.random.default_rng(2)
    for file in sorted(written_folder.iterdir()):
        whole = file.read_bytes()
        for what, data in damaged(whole, rng):
            file.write_bytes(data)
            with pytest.raises(InputError) as caught:
                read_folder(written_folder)
            assert_one_line(caught)
        file.write_bytes(whole)
    assert same_bundle(read_folder(written_folder)[0], some_bundle())


def test_a_missing_file_is_told(written_folder, tmp_path):
    (written_folder / "flags.npy").unlink()
    with pytest.raises(InputError, match="flags.npy: must be a readable file; received No such file"):
        read_folder(written_folder)
    for read in (read_file, read_folder, read_json):
        with pytest.raises(InputError, match="nowhere.*: must be a readable file; received No such file") as caught:
            read(tmp_path / "nowhere")
        assert_one_line(caught)


def test_foreign_files_are_refused(tmp_path):
    path = tmp_path / "a.bundle"
    for data in (b"", b"PK", b"PK\x05\x06" + bytes(18), b"SQLite format 3\x00", b"\x89PNG\r\n\x1a\n", b"hello" * 99):
        path.write_bytes(data)
        with pytest.raises(InputError, match="a.bundle: must be") as caught:
            read_file(path)
        assert_one_line(caught)
    np.savez(tmp_path / "b.npz", X=np.eye(2))
    with pytest.raises(InputError, match="must be a complete toolbox file"):
        read_file(tmp_path / "b.npz")


def test_another_kind_and_a_newer_version_are_refused_by_name(written_file):
    with pytest.raises(InputError, match="must be a forecaster; received 'toolbox'"):
        read_bundle_file(written_file, "forecaster", newest=2)
    with pytest.raises(VersionError, match="must be of version 1 to 1; received version 2; use the program's version"):
        read_bundle_file(written_file, "toolbox", newest=1)


# A bundle that somebody made who means harm: every checksum right.


def signed(members=(), entries=(), **changes):
    """Return the files of a bundle with right checksums: bytes of arrays, their entries and the manifest as told."""
    listed = {name: {"sha256": checksum(data), "dtype": "<f8", "shape": [2]} for name, data in dict(members).items()}
    for name, entry in dict(entries).items():
        listed[name] = {**listed.get(name, {}), **entry} if isinstance(entry, dict) else entry
    body = {"kind": "toolbox", "version": 1, "facts": {}, "arrays": listed, **changes}
    return {"manifest.json": dump_json({**body, "sha256": checksum(dump_json(body))}),
            **{f"{name}.npy": data for name, data in dict(members).items()}}


def zipped(path, members, compression=zipfile.ZIP_DEFLATED):
    with zipfile.ZipFile(path, "w", compression) as archive:
        for name, data in members.items():
            archive.writestr(name, data)
    return path


def npy(descr, shape, data=b"", version=(1, 0)):
    header = str({"descr": descr, "fortran_order": False, "shape": shape}).encode()
    header += b" " * (-(len(header) + 11) % 64) + b"\n"
    return b"\x93NUMPY" + bytes(version) + len(header).to_bytes(2, "little") + header + data


PAIR = array_bytes(np.array([1.0, 2.0]))
PICKLED = io.BytesIO()
np.save(PICKLED, np.array([{"a": 1}, 2], dtype=object), allow_pickle=True)
LARGE_ZEROS = array_bytes(np.zeros(2**21))
HOSTILE = {
    "name climbs": signed({"../pair": PAIR}), "name is absolute": signed({"/pair": PAIR}),
    "name in a folder": signed({"a/pair": PAIR}), "name is empty": signed({"": PAIR}),
    "name ends a line": signed({"pair\n": PAIR}), "name is long": signed({"p" * 81: PAIR}),
    "object array": signed({"pair": PICKLED.getvalue()}),
    "object type told": signed({"pair": PICKLED.getvalue()}, {"pair": {"dtype": "|O"}}),
    "another shape": signed({"pair": PAIR}, {"pair": {"shape": [1, 2]}}),
    "another type": signed({"pair": PAIR}, {"pair": {"dtype": "<i8"}}),
    "no such type": signed({"pair": PAIR}, {"pair": {"dtype": "<f3"}}),
    "fields": signed({"pair": PAIR}, {"pair": {"dtype": "f8,f8"}}),
    "date": signed({"pair": PAIR}, {"pair": {"dtype": "<M8[s]"}}),
    "negative side": signed({"pair": PAIR}, {"pair": {"shape": [-2]}}),
    "true side": signed({"pair": PAIR}, {"pair": {"shape": [True]}}),
    "half a side": signed({"pair": PAIR}, {"pair": {"shape": [2.0]}}),
    "absurd side": signed({"pair": PAIR}, {"pair": {"shape": [10**30]}}),
    "sides beyond memory and none": signed({"pair": npy("<f8", (2**62, 0))}, {"pair": {"shape": [2**62, 0]}}),
    "many sides": signed({"pair": npy("<f8", (1,) * 60, bytes(8))}, {"pair": {"shape": [1] * 60}}),
    "array missing": signed({}, {"pair": {"sha256": checksum(PAIR), "dtype": "<f8", "shape": [2]}}),
    "array larger than told": signed({"pair": LARGE_ZEROS}),
    "array not .npy": signed({"pair": b"two numbers"}), "array empty": signed({"pair": b""}),
    "array cut": signed({"pair": PAIR[:-1]}), "array too long": signed({"pair": PAIR + b"x"}),
    "entry not a mapping": signed({"pair": PAIR}, {"pair": [1]}),
    "entry incomplete": signed({"pair": PAIR}, {"pair": {"more": 1}}),
    "arrays not a mapping": signed(arrays=[]),
    "version is text": signed({"pair": PAIR}, version="1"), "version is true": signed({"pair": PAIR}, version=True),
    "version 0": signed({"pair": PAIR}, version=0), "version beyond": signed({"pair": PAIR}, version=10**40),
    "kind is none": signed({"pair": PAIR}, kind=None), "a part more": signed({"pair": PAIR}, more=1),
    "manifest missing": {"pair.npy": PAIR}, "manifest not JSON": {"manifest.json": b"{"},
    "manifest a list": {"manifest.json": b"[]"}, "manifest a number": {"manifest.json": b"7"},
    "manifest not text": {"manifest.json": b"\xff\xfe"}, "manifest has NaN": {"manifest.json": b'{"kind": NaN}'},
    "manifest nested": {"manifest.json": b"[" * 100_000}, "manifest surrogate": signed({"pair": PAIR}) | {
        "manifest.json": signed({"pair": PAIR})["manifest.json"].replace(b'"toolbox"', b'"\\ud800"')},
    "manifest huge": {"manifest.json": b" " * (16 * 2**20 + 1)},
}


@pytest.mark.parametrize("case", HOSTILE)
def test_a_hostile_file_is_refused(case, tmp_path):
    with pytest.raises(InputError, match="a.bundle") as caught:
        read_file(zipped(tmp_path / "a.bundle", HOSTILE[case]))
    assert_one_line(caught)


@pytest.mark.parametrize("case", [case for case in HOSTILE if not case.startswith("name")])
def test_a_hostile_folder_is_refused(case, tmp_path):
    for name, data in HOSTILE[case].items():
        (tmp_path / name).write_bytes(data)
    with pytest.raises(InputError) as caught:
        read_folder(tmp_path)
    assert_one_line(caught)
    assert str(caught.value).startswith(str(tmp_path))


@pytest.mark.parametrize("name", ["../pair", "/pair", "a/pair", "pair\n", ""])
def test_a_folder_that_points_outside_itself_is_refused_before_anything_is_read(name, tmp_path, monkeypatch):
    looked_at = []

    def noted(path, *, largest):
        looked_at.append(path.name)
        return read_bytes(path, largest=largest)

    monkeypatch.setattr(storage, "read_bytes", noted)
    (tmp_path / "manifest.json").write_bytes(signed({name: PAIR})["manifest.json"])
    with pytest.raises(InputError, match="must list arrays by a plain name") as caught:
        read_folder(tmp_path)
    assert_one_line(caught)
    assert looked_at == ["manifest.json"]


def test_the_harmless_ones_of_this_kind_are_read(tmp_path):
    back, _ = read_file(zipped(tmp_path / "a.bundle", signed({"pair": PAIR})))
    np.testing.assert_array_equal(back.arrays["pair"], [1.0, 2.0])


@pytest.mark.parametrize("compression", [zipfile.ZIP_BZIP2, zipfile.ZIP_LZMA])
def test_other_compression_is_refused(compression, tmp_path):
    path = zipped(tmp_path / "a.bundle", signed({"pair": PAIR}), compression)
    with pytest.raises(InputError, match="must be stored or deflated; received method"):
        read_file(path)


def test_an_encrypted_file_is_refused(tmp_path):
    data = zipped(tmp_path / "a.bundle", signed({"pair": PAIR})).read_bytes()
    # Bit 0 of the general purpose flag, in the directory and before each member (PKWARE APPNOTE 4.4.4).
    data = data.replace(b"PK\x01\x02\x14\x03\x14\x00\x00\x00", b"PK\x01\x02\x14\x03\x14\x00\x01\x00")
    (tmp_path / "a.bundle").write_bytes(data)
    with pytest.raises(InputError, match="must be a complete toolbox file; received .*encrypted"):
        read_file(tmp_path / "a.bundle")


def test_a_bomb_is_not_unpacked(tmp_path):
    """A small file whose directory tells of 64 MB of zeros, with a manifest that knows of two numbers."""
    members = signed({"pair": PAIR})
    path = zipped(tmp_path / "a.bundle", {**members, "pair.npy": bytes(2**26)})
    assert path.stat().st_size < 2**17
    with pytest.raises(InputError, match="must not expand more than 100 times"):
        read_file(path)


# Arrays and JSON documents.


@pytest.mark.parametrize("header", [
    npy("|O", (2,)), npy("O", (2,)), npy([("a", "<f8")], (2,)), npy([], (2,)), npy("<c16", (2,)), npy("<M8[s]", (2,)),
    npy("|V8", (2,)), npy("|S4", (2,)), npy(("<f8", (2,)), (2,)), npy("<U0", (2**60,)), npy("f4,f4", (2,)),
    npy(("<f8",), (2,)), npy("<f3", (2,)), npy(7, (2,)), npy(None, (2,)), npy({"names": []}, (2,)),
    npy("<f8", (-1,)), npy("<f8", (True,), bytes(8)), npy("<f8", (1.0,), bytes(8)), npy("<f8", "2", bytes(16)),
    npy("<f8", (10**30,)), npy("<f8", (2**62, 8)), npy("<f8", (0, 10**30)), npy("<f8", (2**63 - 1, 0)),
    npy("<f8", (1,) * 70, bytes(8)), npy("<f8", (2,), bytes(15)), npy("<f8", (2,), bytes(17)), npy("<f8", 2, bytes(16)),
    npy("<f8", (2,), bytes(16), version=(3, 0)), npy("<f8", (2,), bytes(16), version=(9, 9)), npy("x" * 20_000, (2,)),
    b"", b"\x93NUMPY", b"\x93NUMPY\x01\x00\xff\xff", b"\x93NUMPY\x01\x00\x02\x00{}", b"PK\x03\x04",
    npy("<f8", (2,), bytes(16)).replace(b"False", b"10**9"),
    npy("<f8", (2,), bytes(16)).replace(b"'shape'", b"'slope'"),
    npy("<f8", (2,), bytes(16)).replace(b"{", b"(" * 500, 1), npy("<f8", (2,), bytes(16)).replace(b"(2,)", b"(2L)"),
], ids=lambda data: ascii(data[10:60]))
def test_arrays_that_are_none_are_refused(header):
    with pytest.raises(InputError, match="^a.npy: must") as caught:
        parse_array("a.npy", header)
    assert_one_line(caught)


@pytest.mark.parametrize("array", some_bundle().arrays.values(), ids=some_bundle().arrays)
def test_arrays_come_back(array):
    back = parse_array("a", array_bytes(array))
    assert back.dtype == array.dtype and back.shape == array.shape
    np.testing.assert_array_equal(back, array)


@pytest.mark.parametrize("array", [np.array([None]), np.array([1j]), np.zeros(2, [("a", "f4")]), np.array([b"a"]),
                                   np.array(["2026-01-01"], "M8[D]"), [1.0], 1.0, None], ids=repr)
def test_only_numbers_and_text_are_written(array, tmp_path):
    with pytest.raises(InputError, match="^a: must be an array of numbers or text; received "):
        write_bundle_file(tmp_path / "a.bundle", Bundle("toolbox", 1, {}, {"a": array}))
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize("name", ["../a", "a/b", "a b", "", "é", "a\n", "a" * 81, 3])
def test_only_plain_names_are_written(name, tmp_path):
    with pytest.raises(InputError, match="^array name: must be letters, digits and underscores; received "):
        write_bundle_file(tmp_path / "a.bundle", Bundle("toolbox", 1, {}, {name: np.zeros(1)}))
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize("data", [b"", b"{", b"nul", b"NaN", b"[Infinity]", b"-Infinity", b"1e999", b"[-1e400]",
                                  b"1" * 5000, b"\xff", b"\xef\xbb\xbf1", b"[" * 100_000, b"{'a': 1}", b"1 2"])
def test_json_is_read_strictly(data):
    with pytest.raises(InputError, match="^facts: must hold a JSON document; received ") as caught:
        parse_json("facts", data)
    assert_one_line(caught)


def test_json_is_written_in_one_way_only():
    document = {"b": [1, 2.5, None, True, "é\u2028"], "a": {"z": 1e-300, "y": -0.0}}
    assert parse_json("a", dump_json(document)) == document
    assert dump_json(document) == dump_json(dict(reversed(document.items())))
    with pytest.raises(ValueError):
        dump_json([np.nan])


@fuzzed
@given(st.one_of(st.binary(max_size=200), st.text(st.sampled_from('{}[]":,.-+eE0123456789nultrefasNIy \n\\'),
                                                  max_size=60).map(str.encode)))
def test_json_bytes_are_a_document_or_an_input_error(data):
    try:
        document = parse_json("fuzz", data)
    except InputError as error:
        assert len(str(error).splitlines()) == 1
    else:
        try:
            assert parse_json("again", dump_json(document)) == document
        except UnicodeEncodeError:  # half of a surrogate pair is JSON, and cannot be written as UTF-8
            assert b"\\u" in data


@st.composite
def changed(draw, whole):
    """Bytes of a file with some of them changed, left out or put in."""
    data = bytearray(whole)
    for _ in range(draw(st.integers(1, 4))):
        place = draw(st.integers(0, len(data)))
        old = draw(st.integers(0, 8))
        data[place:place + old] = draw(st.binary(max_size=8))
    return bytes(data)


@fuzzed
@given(st.one_of(st.binary(max_size=300), changed(PAIR), changed(PICKLED.getvalue()),
                 changed(array_bytes(np.array(["nut", "bolt"])))))
def test_array_bytes_are_an_array_or_an_input_error(data):
    try:
        array = parse_array("fuzz", data)
    except InputError as error:
        assert len(str(error).splitlines()) == 1
    else:
        assert array.dtype.kind in "biufU" and array.nbytes <= len(data)


def test_a_stored_array_is_checked_before_use():
    arrays = {"a": np.zeros((2, 3)), "b": np.array(["x"])}
    assert stored_array(arrays, "a", kinds="f", shape=(2, None)) is arrays["a"]
    for name, kinds, shape in (("c", "f", (2, 3)), ("a", "iu", (2, 3)), ("b", "f", (1,)), ("a", "f", (3, 2)),
                               ("a", "f", (6,)), ("a", "f", (2, 3, None))):
        with pytest.raises(InputError, match=f"^{name}: must "):
            stored_array(arrays, name, kinds=kinds, shape=shape)


# Files.


def test_only_files_are_read_and_only_so_much(tmp_path):
    (tmp_path / "large").write_bytes(b"12345")
    assert read_bytes(tmp_path / "large", largest=5) == b"12345"
    with pytest.raises(InputError, match="large: must hold at most 4 bytes; received 5 bytes"):
        read_bytes(tmp_path / "large", largest=4)
    os.mkfifo(tmp_path / "pipe")
    with socket.socket(socket.AF_UNIX) as door:
        door.bind(os.path.relpath(tmp_path / "door"))
        for path in (tmp_path, tmp_path / "pipe", tmp_path / "door", "/dev/zero"):
            with pytest.raises(InputError, match="must be a file; received a folder, pipe or device"):
                read_bytes(path, largest=5)


@pytest.mark.parametrize("name", ["a\0b", "x" * 300, "missing/a"])
def test_names_that_cannot_be_are_input_errors(name, tmp_path):
    with pytest.raises(InputError, match="must be a readable file") as caught:
        read_bytes(tmp_path / name, largest=5)
    assert_one_line(caught)
    with pytest.raises(InputError, match="must be a file that can be written") as caught:
        write_atomically(tmp_path / name, b"new")
    assert_one_line(caught)


@pytest.mark.parametrize("failing", ["fsync", "replace"])
@pytest.mark.parametrize("error, seen", [(OSError(28, "No space left on device"), InputError),
                                         (KeyboardInterrupt(), KeyboardInterrupt)])
def test_a_failed_write_leaves_the_old_file_and_nothing_else(failing, error, seen, written_file, monkeypatch):
    before = written_file.read_bytes()

    def fail(*_):
        raise error

    monkeypatch.setattr(os, failing, fail)
    bundle = some_bundle()
    bundle.facts["text"] = "new"
    with pytest.raises(seen) as caught:
        write_bundle_file(written_file, bundle)
    if seen is InputError:
        line = "a.bundle: must be a file that can be written; received No space left on device"
        assert str(caught.value).endswith(line)
    assert written_file.read_bytes() == before
    assert os.listdir(written_file.parent) == ["a.bundle"]


def test_a_write_replaces_the_old_file_whole_and_leaves_nothing_else(tmp_path):
    for data in (b"old" * 999, b"new"):
        write_atomically(tmp_path / "a", data)
        assert (tmp_path / "a").read_bytes() == data and os.listdir(tmp_path) == ["a"]


def test_readers_meet_the_old_file_or_the_new_one_never_a_part(tmp_path, monkeypatch):
    path, replace, seen = tmp_path / "a", os.replace, []
    write_atomically(path, b"old")

    def watched(source, target):
        seen.append((target.read_bytes(), source.read_bytes()))
        replace(source, target)

    monkeypatch.setattr(os, "replace", watched)
    write_atomically(path, b"new")
    assert seen == [(b"old", b"new")] and path.read_bytes() == b"new"
