"""Detached signatures of forecaster files: Ed25519 (RFC 8032) over a file's bytes, keys in PEM files.

The 64 bytes of a signature lie beside the file, under its name with `SUFFIX`. Standard tools make and check the same:

    openssl pkeyutl -sign -inkey KEY -rawin -in FILE -out FILE.sig
    openssl pkeyutl -verify -pubin -inkey PUBLIC -rawin -in FILE -sigfile FILE.sig

The package `cryptography` is imported when a key is first used; the rest of the program does without.
"""

import os
from pathlib import Path

from hyperforecast.checks import InputError
from hyperforecast.storage import LARGEST_ARRAY, read_bytes, write_atomically

SUFFIX = ".sig"
SIGNATURE_BYTES = 64
LARGEST_KEY = 10_000
INSTEAD = ("pip install 'hyperforecast[signing]', or verify with: "
           "openssl pkeyutl -verify -pubin -inkey PUBLIC -rawin -in FILE -sigfile FILE.sig")


def make_key(path):
    """Write a new private key to `path`, readable by its owner alone, and its public key; return that one's path.

    The public key of key.pem is key.public.pem. `InputError` if there is a file of either name, or none can be made.
    """
    path = Path(path)
    public_path = path.with_suffix(f".public{path.suffix}")
    ed25519, serialization, _ = _library()
    private = ed25519.Ed25519PrivateKey.generate()
    written = private.private_bytes(serialization.Encoding.PEM, serialization.PrivateFormat.PKCS8,
                                    serialization.NoEncryption())
    public = private.public_key().public_bytes(serialization.Encoding.PEM,
                                               serialization.PublicFormat.SubjectPublicKeyInfo)
    if public_path.exists():
        raise InputError(public_path, "must be a new name", "a file that is there", "name another key")
    try:
        handle = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600)
    except OSError as error:
        raise InputError(path, "must be the name of a new file", error.strerror, "name another key") from None
    with open(handle, "wb") as file:
        file.write(written)
    write_atomically(public_path, public)
    return public_path


def sign(data, private_key, *, name="private key"):
    """Return the signature (64 bytes) of `data` with a private key in PEM (bytes), which errors call `name`."""
    ed25519, serialization, _ = _library()
    try:
        key = serialization.load_pem_private_key(private_key, password=None)
    except Exception:  # Whatever the library makes of bytes from anywhere.
        key = None
    if not isinstance(key, ed25519.Ed25519PrivateKey):
        raise InputError(name, "must be an Ed25519 private key in PEM, without a password", "another file",
                         "make one with: hyperforecast sign --new-key KEY")
    return key.sign(data)


def verify(data, signature, public_key, *, name="signature", key_name="public key"):
    """Raise `InputError` unless `signature` (bytes) is that of `data` (bytes) by the public key in PEM (bytes)."""
    ed25519, serialization, InvalidSignature = _library()
    try:
        key = serialization.load_pem_public_key(public_key)
    except Exception:  # Whatever the library makes of bytes from anywhere.
        key = None
    if not isinstance(key, ed25519.Ed25519PublicKey):
        raise InputError(key_name, "must be an Ed25519 public key in PEM", "another file")
    try:
        key.verify(signature, data)
    except InvalidSignature:
        raise InputError(name, "must be the signature of these bytes by this key", "another one",
                         "do not use the file: get it again, and the public key, from someone you trust") from None


def sign_file(path, key_path, *, signature_path=None):
    """Sign the file `path` with the private key in `key_path`; return where the signature lies (path + ".sig")."""
    signature_path = Path(f"{path}{SUFFIX}" if signature_path is None else signature_path)
    signature = sign(read_bytes(path, largest=LARGEST_ARRAY), read_bytes(key_path, largest=LARGEST_KEY), name=key_path)
    write_atomically(signature_path, signature)
    return signature_path


def read_signature(path, *, signature_path=None):
    """Return the signature (bytes) that lies beside the file `path`, or in `signature_path`."""
    return read_bytes(f"{path}{SUFFIX}" if signature_path is None else signature_path, largest=SIGNATURE_BYTES)


def read_public_key(path):
    """Return the bytes of a public key's PEM file."""
    return read_bytes(path, largest=LARGEST_KEY)


def _library():
    try:
        from cryptography.exceptions import InvalidSignature
        from cryptography.hazmat.primitives import serialization
        from cryptography.hazmat.primitives.asymmetric import ed25519
    except ModuleNotFoundError:
        raise InputError("signature", "needs the package cryptography", "none", INSTEAD) from None
    return ed25519, serialization, InvalidSignature
