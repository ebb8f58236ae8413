"""Arrays and facts on disk: plain, checksummed, written in one rename.

A *bundle* is a manifest (JSON) and named arrays (.npy, never pickled). It lies
in a folder, readable with any tool, or in a single uncompressed or deflated
zip file. The manifest names kind, version, and for each array its SHA-256,
dtype and shape, so that damage is found before anything is believed and no
more memory is spent than the manifest and the file's size allow.
"""

import hashlib
import io
import json
import math
import os
import re
import stat
import struct
import tokenize
import warnings
import zipfile
import zlib
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from hyperforecast.checks import InputError

MANIFEST = "manifest.json"
LARGEST_MANIFEST = 16 * 2**20
LARGEST_ARRAY = 2**31
# A file of bundles may unpack to so many bytes, or to so many times its own.
LARGEST_EXPANDED, MOST_EXPANDED = 2**26, 100
ARRAY_NAME = re.compile(r"[A-Za-z0-9_]{1,80}")
ARRAY_TYPE = re.compile(r"[<>|][biufU][1-9][0-9]{0,5}")
# Begins the line of a manifest that tells its checksum: no other key stands so far to the left.
SEAL = b'\n "sha256": "'
# Begins the last record of a zip file, of 22 bytes without the comment (PKWARE APPNOTE 4.3.16).
END_OF_ZIP = b"PK\x05\x06"
MOST_DIMENSIONS = 32
# numpy's own limit, as every product of sides (those of no length aside) must fit a pointer.
MOST_BYTES = 2**62
# What zipfile and zlib raise on damaged bytes.
DAMAGE = (zipfile.BadZipFile, zlib.error, struct.error, OSError, ValueError, TypeError, LookupError, ArithmeticError,
          EOFError, RuntimeError, MemoryError)


class VersionError(InputError):
    """An undamaged file of a version that this program does not read."""


@dataclass
class Bundle:
    """Named arrays with facts about them.

    Attributes
    ----------
    kind : str
        What the bundle is, e.g. "forecaster".
    version : int
        Version of that kind's layout.
    facts : dict
        JSON-able facts.
    arrays : dict of str to ndarray
        Numeric, boolean or fixed-width text arrays.
    """

    kind: str
    version: int
    facts: dict = field(default_factory=dict)
    arrays: dict = field(default_factory=dict)


def write_atomically(path, data):
    """Write bytes to `path` by way of a temporary name, fsync and one rename; `InputError` if it cannot be written."""
    path = Path(path)
    try:
        partial = path.with_name(f".{path.name}.{os.urandom(4).hex()}.partial")
        try:
            with open(partial, "wb") as file:
                file.write(data)
                file.flush()
                os.fsync(file.fileno())
            os.replace(partial, path)
        except BaseException:
            partial.unlink(missing_ok=True)
            raise
        sync_folder(path.parent)
    except (OSError, ValueError) as error:
        raise InputError(path, "must be a file that can be written", _reason(error)) from None


def sync_folder(folder):
    """Ask the file system to keep the names in `folder`, where it can."""
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def read_json(path, *, largest=LARGEST_MANIFEST):
    """Return the JSON document in `path`; `InputError` if it is missing, too large or not JSON."""
    return parse_json(path, read_bytes(path, largest=largest))


def read_bytes(path, *, largest):
    """Return the bytes of the file `path`; `InputError` if missing, unreadable or above `largest` bytes."""
    path = Path(path)
    try:
        status = path.stat()
        if not stat.S_ISREG(status.st_mode):
            raise InputError(path, "must be a file", "a folder, pipe or device")
        if status.st_size > largest:
            raise InputError(path, f"must hold at most {largest} bytes", f"{status.st_size} bytes")
        return path.read_bytes()
    except InputError:
        raise
    except (OSError, ValueError) as error:
        raise InputError(path, "must be a readable file", _reason(error)) from None


def _reason(error):
    return getattr(error, "strerror", None) or error


def parse_json(name, data):
    """Parse JSON bytes strictly (no NaN, Infinity or numbers beyond float64); `name` is what errors call them."""
    def refuse(word):
        raise ValueError(f"the number {word}")

    def finite(digits):
        return float(digits) if math.isfinite(float(digits)) else refuse(digits)

    try:
        return json.loads(data.decode("utf-8"), parse_constant=refuse, parse_float=finite)
    except (ValueError, RecursionError) as error:
        raise InputError(name, "must hold a JSON document", error) from None


def dump_json(document):
    """Return `document` as canonical JSON bytes: sorted keys, no NaN."""
    return json.dumps(document, sort_keys=True, indent=1, allow_nan=False, ensure_ascii=False).encode() + b"\n"


def checksum(data):
    """Return the SHA-256 of bytes, in hexadecimal."""
    return hashlib.sha256(data).hexdigest()


def array_bytes(array):
    """Return an array in .npy format (version 1.0 header, C order)."""
    stream = io.BytesIO()
    np.lib.format.write_array(stream, np.asarray(array, order="C"), allow_pickle=False)
    return stream.getvalue()


def parse_array(name, data):
    """Return the array in .npy bytes; object arrays and sizes that do not match are refused."""
    stream = io.BytesIO(data)
    shape, _, dtype = read_array_header(name, stream)
    expected = math.prod(shape) * dtype.itemsize
    if expected != len(data) - stream.tell():
        raise InputError(name, "must hold as many bytes as its header says",
                         f"{len(data) - stream.tell()}, not {expected}")
    stream.seek(0)
    return np.lib.format.read_array(stream, allow_pickle=False)


def read_array_header(name, stream):
    """Return (shape, fortran_order, dtype) of a .npy stream, which is left at the first data byte."""
    try:
        version = np.lib.format.read_magic(stream)
        read = {(1, 0): np.lib.format.read_array_header_1_0, (2, 0): np.lib.format.read_array_header_2_0}[version]
        with warnings.catch_warnings():
            # numpy guesses at old or odd headers with a warning; here they are refused.
            warnings.simplefilter("error")
            shape, fortran, dtype = read(stream, max_header_size=10_000)
    except (*DAMAGE, SyntaxError, AttributeError, tokenize.TokenError, Warning) as error:
        raise InputError(name, "must be an array in .npy format", error) from None
    if not ARRAY_TYPE.fullmatch(dtype.str):
        raise InputError(name, "must hold real numbers or text, no Python objects", dtype)
    sides = [max(side, 1) for side in shape]
    if len(sides) > MOST_DIMENSIONS or any(type(side) is not int or side < 0 for side in shape) \
            or math.prod(sides) * dtype.itemsize > MOST_BYTES:
        raise InputError(name, "must have a shape that memory can hold", shape)
    return shape, fortran, dtype


@contextmanager
def opened_zip(path, source, *, what):
    """Context with the zip archive in `source`, a path or file; any damage found within is an `InputError`.

    Parameters
    ----------
    path : str or Path
        What errors call it.
    source : path or binary file
    what : str
        What it must be, for errors.
    """
    try:
        with zipfile.ZipFile(source) as archive:
            for member in archive.infolist():
                if member.compress_type not in (zipfile.ZIP_STORED, zipfile.ZIP_DEFLATED):
                    raise InputError(path, "must be stored or deflated", f"method {member.compress_type}")
            yield archive
    except InputError:
        raise
    except DAMAGE as error:
        raise InputError(path, f"must be {what}", error, "copy it again from the source") from None


def _manifest(bundle, encoded):
    listed = {
        name: {"sha256": checksum(data), "dtype": bundle.arrays[name].dtype.str,
               "shape": list(bundle.arrays[name].shape)}
        for name, data in encoded.items()
    }
    body = {"kind": bundle.kind, "version": bundle.version, "facts": bundle.facts, "arrays": listed}
    manifest = dump_json({**body, "sha256": checksum(dump_json(body))})
    if len(manifest) > LARGEST_MANIFEST:
        raise InputError("facts", f"must fit a manifest of {LARGEST_MANIFEST} bytes", f"{len(manifest)} bytes")
    return manifest


def _encode(bundle):
    for name, array in bundle.arrays.items():
        if not isinstance(name, str) or not ARRAY_NAME.fullmatch(name):
            raise InputError("array name", "must be letters, digits and underscores", repr(name))
        if not isinstance(array, np.ndarray) or not ARRAY_TYPE.fullmatch(array.dtype.str):
            raise InputError(name, "must be an array of numbers or text", getattr(array, "dtype", type(array).__name__))
    encoded = {name: array_bytes(array) for name, array in sorted(bundle.arrays.items())}
    return _manifest(bundle, encoded), encoded


def bundle_checksum(bundle):
    """Return the SHA-256 that names this bundle's exact content."""
    return json.loads(_encode(bundle)[0])["sha256"]


def write_bundle_file(path, bundle):
    """Write a bundle as one deflated zip file, the same bytes for the same content; return its checksum.

    The archive's comment is the SHA-256 of all bytes before it.
    """
    manifest, encoded = _encode(bundle)
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED, compresslevel=9) as archive:
        for name, data in [(MANIFEST, manifest), *((f"{name}.npy", data) for name, data in encoded.items())]:
            archive.writestr(zipfile.ZipInfo(name, (1980, 1, 1, 0, 0, 0)), data, zipfile.ZIP_DEFLATED, 9)
        archive.comment = bytes(64)
    data = stream.getvalue()[:-64]
    write_atomically(path, data + checksum(data).encode())
    return json.loads(manifest)["sha256"]


def write_bundle_folder(folder, bundle):
    """Write a bundle's files into an existing empty folder and fsync each; return its checksum."""
    folder = Path(folder)
    manifest, encoded = _encode(bundle)
    for name, data in [*((f"{name}.npy", data) for name, data in encoded.items()), (MANIFEST, manifest)]:
        with open(folder / name, "wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
    sync_folder(folder)
    return json.loads(manifest)["sha256"]


def _check_manifest(path, data, kind, newest):
    document = parse_json(path, data)
    parts = {"kind", "version", "facts", "arrays", "sha256"}
    if not isinstance(document, dict) or set(document) != parts or not isinstance(document["arrays"], dict):
        raise InputError(path, f"must be a {kind} manifest", "other content")
    if document["kind"] != kind:
        raise InputError(path, f"must be a {kind}", repr(document["kind"]))
    # The checksum is that of the canonical JSON without the line that tells it. Only text with escapes could be written
    # in several ways, and is written again to see; that takes long.
    before, _, rest = data.rpartition(SEAL)
    if checksum(before + rest[66:]) != document["sha256"] or b"\\u" in data and dump_json(document) != data:
        raise InputError(path, "must match its checksum", "altered content", "copy it again from the source")
    # Undamaged from here on, but perhaps made by somebody who means harm.
    version = document["version"]
    if type(version) is not int or not 1 <= version <= newest:
        raise VersionError(path, f"must be of version 1 to {newest}", f"version {version!r}",
                           "use the program's version that wrote it, or a newer one")
    for name, entry in document["arrays"].items():
        if not ARRAY_NAME.fullmatch(name) or not _is_array_entry(entry):
            raise InputError(path, "must list arrays by a plain name, with checksum, type and shape", repr(name))
    return document


def _plain_array(data, dtype, shape):
    """Return the array in .npy bytes whose header is written as `array_bytes` does, else None; much quicker than numpy."""
    start = 10 + int.from_bytes(data[8:10], "little")
    header = f"{{'descr': {dtype.str!r}, 'fortran_order': False, 'shape': {shape!r}, }}".encode()
    if data[:8] != b"\x93NUMPY\x01\x00" or data[10:start].rstrip(b" \n") != header or 0 in shape \
            or len(data) != start + math.prod(shape) * dtype.itemsize:
        return None
    return np.frombuffer(data, dtype, offset=start).reshape(shape).copy()


def _is_array_entry(entry):
    return (isinstance(entry, dict) and set(entry) == {"sha256", "dtype", "shape"}
            and isinstance(entry["dtype"], str) and ARRAY_TYPE.fullmatch(entry["dtype"]) is not None
            and isinstance(entry["shape"], list) and len(entry["shape"]) <= MOST_DIMENSIONS
            and all(type(side) is int and side >= 0 for side in entry["shape"]))


def _read_bundle(path, kind, newest, read_member):
    document = _check_manifest(path, read_member(MANIFEST, LARGEST_MANIFEST), kind, newest)
    arrays = {}
    for name, entry in document["arrays"].items():
        dtype, shape = np.dtype(entry["dtype"]), tuple(entry["shape"])
        data = read_member(f"{name}.npy", math.prod(shape) * dtype.itemsize + 10_000)
        if checksum(data) != entry["sha256"]:
            raise InputError(path, f"must match its checksums ({name}.npy)", "altered content",
                             "copy it again from the source")
        arrays[name] = _plain_array(data, dtype, shape)
        if arrays[name] is not None:
            continue
        arrays[name] = parse_array(f"{path} ({name}.npy)", data)
        if arrays[name].dtype != dtype or arrays[name].shape != shape:
            raise InputError(f"{path} ({name}.npy)", "must have the type and shape that the manifest says",
                             f"{arrays[name].dtype.str} {arrays[name].shape}")
    return Bundle(document["kind"], document["version"], document["facts"], arrays), document["sha256"]


def read_bundle_file(path, kind, *, newest):
    """Return (bundle, checksum) from a file of `write_bundle_file`.

    Raises
    ------
    InputError
        If the file is missing, truncated, altered, of another kind or of a version above `newest`.
    """
    path = Path(path)
    data = read_bytes(path, largest=LARGEST_ARRAY)
    sealed = data[-86:-82] == END_OF_ZIP and data[-66:-64] == b"\x40\x00" and data[-64:] == checksum(data[:-64]).encode()
    # Files of before had no comment.
    if not sealed and not (data[-22:-18] == END_OF_ZIP and data[-2:] == b"\0\0"):
        raise InputError(path, f"must be a complete {kind} file", "altered content, or none of that kind",
                         "copy it again from the source")
    with opened_zip(path, io.BytesIO(data), what=f"a complete {kind} file") as archive:
        if sum(member.file_size for member in archive.infolist()) > max(LARGEST_EXPANDED, MOST_EXPANDED * len(data)):
            raise InputError(path, f"must not expand more than {MOST_EXPANDED} times", "a file that does")

        def read_member(name, largest):
            if archive.getinfo(name).file_size > largest:
                raise InputError(path, f"must hold a {name} of at most {largest} bytes", "more")
            return archive.read(name)

        return _read_bundle(path, kind, newest, read_member)


def read_bundle_folder(folder, kind, *, newest):
    """Return (bundle, checksum) from a folder of `write_bundle_folder`; errors as `read_bundle_file`."""
    folder = Path(folder)
    try:
        return _read_bundle(folder, kind, newest, lambda name, largest: read_bytes(folder / name, largest=largest))
    except InputError:
        raise
    except DAMAGE as error:
        raise InputError(folder, f"must be a complete {kind}", error, "copy it again from the source") from None


def stored_array(arrays, name, *, kinds, shape):
    """Return the array `name` of a bundle, checked before use.

    Parameters
    ----------
    arrays : dict of str to ndarray
    name : str
    kinds : str
        The dtype kinds it may have, e.g. "iu" for whole numbers.
    shape : tuple
        The lengths it must have; None where any will do.

    Raises
    ------
    InputError
        If it is absent, of another kind or of another shape.
    """
    array = arrays.get(name)
    if not isinstance(array, np.ndarray) or array.dtype.kind not in kinds:
        raise InputError(name, f"must be an array of dtype kind {' or '.join(kinds)}", getattr(array, "dtype", "none"))
    fits = array.ndim == len(shape) and all(want in (None, have) for want, have in zip(shape, array.shape))
    if not fits:
        raise InputError(name, f"must have the shape {shape}", array.shape)
    return array
