"""Malformed increments, stream files and JSON documents from a fuzzer, through the commands that read them.

Each is refused with one clear line and exit code 2, unless what came out happens to be well formed. Counts grow with
HYPERFORECAST_FAULTS=full; pytest -rP prints them.
"""

import io
import json
import os
import tomllib
from collections import Counter
from contextlib import redirect_stderr, redirect_stdout

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from hyperforecast.cli import main
from hyperforecast.describing import DESCRIPTORS
from hyperforecast.device import DeviceFolder, update
from hyperforecast.device.export import export_history
from hyperforecast.increments import check_increment
from hyperforecast.settings import Plan
from hyperforecast.storage import array_bytes
from hyperforecast.workshop import gathering

FULL = os.environ.get("HYPERFORECAST_FAULTS") == "full"
# Six tests. The same examples every time; others with HYPERFORECAST_FAULTS=full.
fuzzed = settings(max_examples=350 if FULL else 100, deadline=None, derandomize=not FULL, database=None,
                  suppress_health_check=list(HealthCheck))
ENDS = Counter()


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """A folder with a device of two updates, `arm`, its export, and the counts of how commands ended."""
    folder, rng = tmp_path_factory.mktemp("fuzz"), np.random.default_rng(0)
    for number, classes in enumerate((2, 3)):
        update(folder / "arm", check_increment(rng.normal(size=(40, 3)), np.arange(40) % classes),
               plan=None if number else Plan("ewc", 0, 1, 16, 200), most_lost=1, most_lost_by_class=1)
    export_history(folder / "good.json", DeviceFolder(folder / "arm").read())
    return folder


@pytest.fixture(autouse=True)
def counts(request):
    """Print how the commands of a test ended."""
    ENDS.clear()
    yield
    print(f"{ENDS[2]} refused with one line and exit code 2, {ENDS[0]} well formed: {request.node.name}")
    assert ENDS[2] > 0.5 * sum(ENDS.values())


def ended(*arguments):
    """Run a command; return its exit code, having looked at how it tells of a refusal."""
    out, err = io.StringIO(), io.StringIO()
    with redirect_stdout(out), redirect_stderr(err):
        code = main([str(one) for one in arguments])
    assert code in (0, 2), (code, err.getvalue())
    if code == 2:
        line = err.getvalue()
        assert line.count("\n") == 1 and line[:-1].isprintable() and line.startswith("hyperforecast ") and not out.getvalue()
        # Names file or parameter, states the rule, shows what was received.
        assert ": " in line and "; received " in line, line
    ENDS[code] += 1
    return code


@st.composite
def changed(draw, whole):
    """Bytes of a file with some of them changed, left out or put in."""
    data = bytearray(whole)
    for _ in range(draw(st.integers(1, 4))):
        place = draw(st.integers(0, len(data)))
        data[place:place + draw(st.integers(0, 8))] = draw(st.binary(max_size=8))
    return bytes(data)


# Increments.


def packed(X, y, *, compressed=True):
    stream = io.BytesIO()
    (np.savez_compressed if compressed else np.savez)(stream, X=X, y=y)
    return stream.getvalue()


ODD = st.sampled_from([np.nan, np.inf, -np.inf, 1e39, -1e300])
TABLES = st.builds(lambda rows, columns, dtype: np.zeros((rows, columns), dtype), st.integers(0, 5), st.integers(0, 5),
                   st.sampled_from(["f4", "f8", "i2", "?", "U3", "c8", "M8[s]"]))
GOOD = np.arange(24.0).reshape(8, 3) % 5
BAD_NPZ = st.one_of(
    changed(packed(GOOD, np.arange(8) % 3)), changed(packed(GOOD, np.arange(8) % 3, compressed=False)),
    st.binary(max_size=200),
    st.builds(packed, TABLES, st.lists(st.integers() | st.text(max_size=4) | ODD, max_size=6).map(
        lambda labels: np.array(labels, str) if any(isinstance(one, str) for one in labels) else np.array(labels, float))),
    st.builds(lambda at, value: packed(np.where(np.arange(24).reshape(8, 3) == at, value, GOOD), np.arange(8) % 3),
              st.integers(0, 23), ODD))
BAD_CSV = st.one_of(
    st.binary(max_size=120), changed(b"a,label,b,c\n1,nut,2,3\n3,bolt,4,4\n"),
    st.lists(st.lists(st.sampled_from(["1", "nan", "x", "", '"', "label", "1e999", "\0", "9" * 400]), max_size=5).map(
        ",".join), max_size=5).map(lambda lines: ("a,label,b,c\n" + "\n".join(lines)).encode("utf-8")))
BAD_NPY = st.one_of(changed(array_bytes(GOOD)), st.binary(max_size=150), TABLES.filter(lambda table: table.dtype.kind in "fiubU").map(array_bytes))


@fuzzed
@given(BAD_NPZ)
def test_malformed_npz_increments(folder, data):
    (folder / "a.npz").write_bytes(data)
    ended("advise", "--increment", folder / "a.npz", "--device", folder / "arm")


@fuzzed
@given(BAD_CSV)
def test_malformed_csv_increments(folder, data):
    (folder / "a.csv").write_bytes(data)
    ended("advise", "--increment", folder / "a.csv", "--device", folder / "arm")


@fuzzed
@given(BAD_NPY, changed(array_bytes(np.arange(8) % 3)) | st.just(array_bytes(np.arange(8) % 3)))
def test_malformed_npy_increments(folder, data, labels):
    (folder / "a.npy").write_bytes(data)
    (folder / "a.labels.npy").write_bytes(labels)
    ended("advise", "--increment", folder / "a.npy", "--device", folder / "arm")


# Stream files.

KEYS = ["name", "source", "file", "seeds", "seed", "increments", "classes", "recurring", "largest_increment",
        "rows_per_class", "features", "dimension", "raw_dimension", "separation", "noise", "speed"]
VALUES = st.sampled_from([
    '"d"', '""', '"digits"', '"synthetic_gaussian"', '"../../etc/passwd"', "0", "1", "2", "-1", "4", "1.5", "nan", "inf",
    "1e400", "true", "[]", "[1, 2]", "[[0, 1], [2]]", '[["a"], [1]]', "[[[0]]]", "{}", "9223372036854775807",
    "99999999999999999999", "2031-01-01", '"\\u0000"', '"""\n"""'])
TABLE_TEXT = st.lists(st.tuples(st.sampled_from(KEYS), VALUES).map(" = ".join), max_size=6).map(
    lambda lines: "[[stream]]\n" + "\n".join(lines))
GOOD_STREAM = b'[[stream]]\nname = "c"\nsource = "synthetic_gaussian"\nincrements = 3\nclasses = 6\nseeds = [1, 2]\n'


@fuzzed
@given(st.one_of(st.binary(max_size=80), changed(GOOD_STREAM), TABLE_TEXT.map(str.encode),
                 st.text(max_size=80).map(lambda text: text.encode("utf-8", "surrogatepass"))))
def test_malformed_stream_files(folder, data):
    (folder / "a.toml").write_bytes(data)
    with pytest.MonkeyPatch.context() as patch:
        # What is well formed is not gathered.
        patch.setattr(gathering, "gather", lambda *_, **__: 0)
        patch.setattr(gathering, "RecordsFile", lambda _: type("None_", (), {"counts": list})())
        code = ended("gather", "--streams", folder / "a.toml", "--records", folder / "r.sqlite")
    if code == 0:
        assert tomllib.loads(data.decode())["stream"]


# JSON documents.

NAMES = st.sampled_from([*list(DESCRIPTORS)[:12], "method", "descriptors", "most_kept", "memory_limit", "kind", "version"]) \
    | st.text(max_size=5)
NUMBERS = st.integers() | st.floats() | st.sampled_from([10**400, -1, 0, 0.0, 1e308])
JSONS = st.recursive(st.none() | st.booleans() | NUMBERS | st.text(max_size=8),
                     lambda inner: st.lists(inner, max_size=3) | st.dictionaries(NAMES, inner, max_size=4), max_leaves=8)
REQUESTS = st.fixed_dictionaries(
    {"method": st.sampled_from(["ewc", "lwf", "icarl", "wa"]) | JSONS,
     "descriptors": st.dictionaries(NAMES, NUMBERS | st.none() | JSONS, max_size=5) | JSONS},
    optional={"most_kept": NUMBERS | JSONS, "memory_limit": NUMBERS | st.text(max_size=6) | JSONS, "more": JSONS})


def written(document):
    return json.dumps(document).encode("utf-8", "surrogatepass")


@fuzzed
@given(st.one_of(st.binary(max_size=60), JSONS.map(written), REQUESTS.map(written),
                 changed(b'{"method": "lwf", "descriptors": {"rows": 450, "classes_old": 4}}')))
def test_malformed_requests(folder, data):
    (folder / "a.json").write_bytes(data)
    ended("advise", "--descriptors", folder / "a.json", "--json")


@st.composite
def broken(draw, document):
    """A document with one part, anywhere in it, taken out or replaced."""
    document = json.loads(json.dumps(document))
    inner, path = document, []
    while True:
        keys = list(inner) if isinstance(inner, dict) else list(range(len(inner)))
        key = draw(st.sampled_from(keys))
        path.append(key)
        if not isinstance(inner[key], (dict, list)) or not inner[key] or draw(st.integers(0, 3)) == 0:
            break
        inner = inner[key]
    if draw(st.booleans()):
        inner[path[-1]] = draw(JSONS)
    else:
        del inner[path[-1]]
    return document


@pytest.fixture(scope="module")
def good_export(folder):
    return json.loads((folder / "good.json").read_text())


@fuzzed
@given(st.data())
def test_malformed_exports(folder, good_export, data):
    document = data.draw(st.one_of(st.binary(max_size=40), broken(good_export).map(written),
                                   changed((folder / "good.json").read_bytes())))
    (folder / "a.json").write_bytes(document)
    ended("merge", "--from", folder / "a.json", "--records", folder / "merged.sqlite")
