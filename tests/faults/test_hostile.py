"""Files of somebody who means harm: small, and refused before memory is spent; nothing outside the folder is read.

Each is read in a process of its own whose peak memory is looked at afterwards. More hostile files, of every kind, are in
tests/test_storage.py, tests/test_increments.py and tests/device/test_folder.py. pytest -rP prints counts.
"""

import io
import json
import os
import struct
import subprocess
import sys
import zlib

import numpy as np
import pytest

from hyperforecast.device import DeviceFolder, update
from hyperforecast.increments import check_increment
from hyperforecast.settings import Plan
from hyperforecast.storage import array_bytes, checksum, dump_json

# Of a process that has imported numpy and this package, with much to spare; each file asks for a gigabyte or more.
MOST_MEGABYTES = 250
READ = """
import re, sys
from hyperforecast.cli import main
code = main(sys.argv[1:])
# Of this program alone; getrusage would count what the parent held when it started it.
print(code, int(re.search(r"VmHWM:\\s*(\\d+) kB", open("/proc/self/status").read())[1]) // 1024)
"""


def header(descr, shape, *, fortran=False):
    text = str({"descr": descr, "fortran_order": fortran, "shape": shape}).encode()
    text += b" " * (-(len(text) + 11) % 64) + b"\n"
    return b"\x93NUMPY\x01\x00" + len(text).to_bytes(2, "little") + text


def write_zip(path, members):
    """Write members, bytes or (header, count of zero bytes that follow), deflated; zeros pack a thousandfold.

    By hand (PKWARE APPNOTE 4.3): one packed megabyte of zeros is repeated, and no time spent on their CRC.
    """
    body, directory = b"", b""
    for name, data in members.items():
        start, zeros = data if isinstance(data, tuple) else (data, 0)
        packer = zlib.compressobj(9, zlib.DEFLATED, -15)
        packed = packer.compress(start) + packer.flush(zlib.Z_FULL_FLUSH)
        packed += (packer.compress(bytes(2**20)) + packer.flush(zlib.Z_FULL_FLUSH)) * (zeros // 2**20) + packer.flush()
        told = struct.pack("<4H3I2H", 0, 8, 0, 33, 0 if zeros else zlib.crc32(start), len(packed), len(start) + zeros,
                           len(name), 0)
        directory += b"PK\x01\x02" + struct.pack("<2H", 20, 20) + told + struct.pack("<3H2I", 0, 0, 0, 0, len(body)) \
            + name.encode()
        body += b"PK\x03\x04" + struct.pack("<H", 20) + told + name.encode() + packed
    end = struct.pack("<4H2IH", 0, 0, len(members), len(members), len(directory), len(body), 0)
    path.write_bytes(body + directory + b"PK\x05\x06" + end)
    return path


GIGABYTE = 2**30
X, Y = array_bytes(np.zeros((4, 3))), array_bytes(np.arange(4))
NPZ = {
    "labels beyond the rows": {"X.npy": X, "y.npy": (header("<i8", (GIGABYTE // 8,)), GIGABYTE)},
    "labels of a million signs": {"X.npy": X, "y.npy": (header("<U67108864", (4,)), GIGABYTE)},
    "features in columns": {"X.npy": (header("<f4", (2**26, 4), fortran=True), GIGABYTE), "y.npy": Y},
    "features as text": {"X.npy": (header("<U4", (2**24, 4)), GIGABYTE), "y.npy": Y},
    "features of three dimensions": {"X.npy": (header("<f4", (2**13, 2**7, 2**8)), GIGABYTE), "y.npy": Y},
    "one dimension": {"X.npy": (header("<f4", (2**28,)), GIGABYTE), "y.npy": Y},
    "objects": {"X.npy": (header("|O", (2**27,)), GIGABYTE), "y.npy": Y},
    "shape beyond memory": {"X.npy": header("<f4", (2**40, 2**20)), "y.npy": Y},
    "header of a gigabyte": {"X.npy": (b"\x93NUMPY\x02\x00" + (GIGABYTE).to_bytes(4, "little"), GIGABYTE), "y.npy": Y},
}


def refused(*arguments):
    """Run a command in a process of its own; return its one line."""
    done = subprocess.run([sys.executable, "-c", READ, *arguments], capture_output=True, text=True,
                          env={**os.environ, "OPENBLAS_NUM_THREADS": "1"})
    assert done.returncode == 0, done.stderr
    code, megabytes = map(int, done.stdout.split())
    assert code in (2, 5) and done.stderr.count("\n") == 1, done.stderr
    assert megabytes < MOST_MEGABYTES, f"{megabytes} MB: {done.stderr}"
    return done.stderr


@pytest.fixture(scope="module")
def device(tmp_path_factory):
    folder = tmp_path_factory.mktemp("device") / "arm"
    update(folder, check_increment(np.random.default_rng(0).normal(size=(40, 3)), np.arange(40) % 2),
           plan=Plan("ewc", 0, 1, 16, 100))
    return folder


@pytest.mark.parametrize("case", NPZ)
def test_an_increment_that_unpacks_to_a_gigabyte_is_refused_before_it_is_unpacked(case, device, tmp_path):
    path = write_zip(tmp_path / "a.npz", NPZ[case])
    assert path.stat().st_size < 2**24
    assert "a.npz" in refused("advise", "--increment", str(path), "--device", str(device))


@pytest.mark.parametrize("suffix, data", [
    (".npy", header("<f4", (2**28, 3))), (".csv", b"label," + b"a," * 10), (".parquet", b"PAR1")])
def test_a_sparse_file_of_a_terabyte_is_refused(suffix, data, device, tmp_path):
    path = tmp_path / f"a{suffix}"
    with open(path, "wb") as file:
        file.write(data)
        file.truncate(2**40)
    (tmp_path / "a.labels.npy").write_bytes(Y)
    assert path.name in refused("advise", "--increment", str(path), "--device", str(device))


def forecaster_bomb(path):
    """A forecaster with right checksums in its manifest, whose arrays unpack to a gigabyte."""
    entry = {"sha256": "0" * 64, "dtype": "<f8", "shape": [2**27]}
    body = {"kind": "forecaster", "version": 1, "facts": {}, "arrays": {"typical": entry}}
    manifest = dump_json({**body, "sha256": checksum(dump_json(body))})
    return write_zip(path, {"manifest.json": manifest, "typical.npy": (header("<f8", (2,)), GIGABYTE)})


def manifest_bomb(path):
    return write_zip(path, {"manifest.json": (b" ", GIGABYTE)})


@pytest.mark.parametrize("bomb", [manifest_bomb, forecaster_bomb])
def test_a_forecaster_that_unpacks_to_a_gigabyte_is_refused_before_it_is_unpacked(bomb, device, tmp_path):
    np.savez(tmp_path / "a.npz", X=np.zeros((4, 3)), y=np.arange(4))
    path = bomb(tmp_path / "f.forecaster")
    line = refused("advise", "--increment", str(tmp_path / "a.npz"), "--device", str(device), "--forecaster", str(path))
    assert "f.forecaster" in line


@pytest.mark.parametrize("name", ["../../outside", "/etc/hostname", "a/../../b"])
def test_a_generation_that_names_files_outside_is_refused(name, device, tmp_path):
    folder = tmp_path / "arm"
    subprocess.run(["cp", "-r", str(device), str(folder)], check=True)
    path = folder / "generation-000001" / "manifest.json"
    document = json.loads(path.read_bytes())
    document.pop("sha256")
    document["arrays"][name] = document["arrays"]["center"]
    path.write_bytes(dump_json({**document, "sha256": checksum(dump_json(document))}))
    line = refused("history", "--device", str(folder))
    assert "must list arrays by a plain name" in line


@pytest.mark.parametrize("depth", [10_000, 10**6])
def test_documents_nested_without_end_are_refused(depth, tmp_path):
    for opening in (b"[", b'{"method":'):
        (tmp_path / "a.json").write_bytes(opening * depth)
        assert "a.json" in refused("advise", "--descriptors", str(tmp_path / "a.json"))
        assert "a.json" in refused("merge", "--records", str(tmp_path / "r.sqlite"), "--from", str(tmp_path / "a.json"))
    assert not (tmp_path / "r.sqlite").exists()


def test_an_object_array_runs_nothing(device, tmp_path):
    class Harm:
        def __reduce__(self):
            return os.mkdir, (str(tmp_path / "harm"),)

    stream = io.BytesIO()
    np.save(stream, np.array([Harm()], dtype=object), allow_pickle=True)
    write_zip(tmp_path / "a.npz", {"X.npy": stream.getvalue(), "y.npy": Y})
    assert "no Python objects" in refused("advise", "--increment", str(tmp_path / "a.npz"), "--device", str(device))
    assert not (tmp_path / "harm").exists() and DeviceFolder(device).read().number == 1
