"""Signatures against RFC 8032 and OpenSSL.

The vectors are tests 1 to 3 of RFC 8032, section 7.1, from memory; a wrong digit would not verify. PEM files are
PKCS #8 and SubjectPublicKeyInfo as in RFC 8410, sections 7 and 4 (prefixes from memory).
"""

import base64
import shutil
import subprocess

import pytest

from hyperforecast.checks import InputError
from hyperforecast.forecasting.signature import make_key, read_public_key, read_signature, sign, sign_file, verify

pytest.importorskip("cryptography", reason="pip install '.[signing]'")

VECTORS = [
    ("9d61b19deffd5a60ba844af492ec2cc44449c5697b326919703bac031cae7f60",
     "d75a980182b10ab7d54bfed3c964073a0ee172f3daa62325af021a68f707511a", "",
     "e5564300c360ac729086e2cc806e828a84877f1eb8e5d974d873e065224901555fb8821590a33bacc61e39701cf9b46bd25bf5f0595bbe24"
     "655141438e7a100b"),
    ("4ccd089b28ff96da9db6c346ec114e0f5b8a319f35aba624da8cf6ed4fb8a6fb",
     "3d4017c3e843895a92b70aa74d1b7ebc9c982ccf2ec4968cc0cd55f12af4660c", "72",
     "92a009a9f0d4cab8720e820b5f642540a2b27b5416503f8fb3762223ebdb69da085ac1e43e15996e458f3613d0f11d8c387b2eaeb4302aee"
     "b00d291612bb0c00"),
    ("c5aa8df43f9f837bedb7442f31dcb7b166d38535076f094b85ce3a2e0b4458f7",
     "fc51cd8e6218a1a38da47ed00230f0580816ed13ba3303ac5deb911548908025", "af82",
     "6291d657deec24024827e69c3abe01a30ce548a284743a445e3680d7db5ac3ac18ff9b538d16f290ae67f760984dc6594a7c15e9716ed28d"
     "c027beceea1ec40a"),
]
PRIVATE_PREFIX, PUBLIC_PREFIX = "302e020100300506032b657004220420", "302a300506032b6570032100"


def pem(kind, prefix, key):
    body = base64.b64encode(bytes.fromhex(prefix + key)).decode()
    return f"-----BEGIN {kind} KEY-----\n{body}\n-----END {kind} KEY-----\n".encode()


@pytest.mark.parametrize("secret, public, message, signature", VECTORS)
def test_vectors_of_the_rfc(secret, public, message, signature):
    private_pem, public_pem = pem("PRIVATE", PRIVATE_PREFIX, secret), pem("PUBLIC", PUBLIC_PREFIX, public)
    message, signature = bytes.fromhex(message), bytes.fromhex(signature)
    assert sign(message, private_pem) == signature
    verify(message, signature, public_pem)
    for altered in (message + b"x", b"x" + message):
        with pytest.raises(InputError, match="must be the signature of these bytes"):
            verify(altered, signature, public_pem)
    for at in range(64):
        with pytest.raises(InputError, match="must be the signature"):
            verify(message, signature[:at] + bytes([signature[at] ^ 1]) + signature[at + 1:], public_pem)
    with pytest.raises(InputError, match="must be the signature"):
        verify(message, signature[:-1], public_pem)


@pytest.mark.skipif(shutil.which("openssl") is None, reason="needs openssl: apt-get install openssl")
def test_openssl_verifies_what_is_signed_here_and_the_other_way_round(tmp_path):
    def openssl(*arguments):
        return subprocess.run(["openssl", *map(str, arguments)], capture_output=True, text=True)

    file, key, theirs = tmp_path / "a.forecaster", tmp_path / "key.pem", tmp_path / "theirs.pem"
    file.write_bytes(bytes(range(256)) * 20)
    public = make_key(key)
    check = ("pkeyutl", "-verify", "-pubin", "-rawin", "-in", file, "-sigfile", sign_file(file, key), "-inkey")
    assert openssl(*check, public).returncode == 0
    assert openssl("genpkey", "-algorithm", "ed25519", "-out", theirs).returncode == 0
    assert openssl("pkey", "-in", theirs, "-pubout", "-out", tmp_path / "theirs.public.pem").returncode == 0
    assert openssl(*check, tmp_path / "theirs.public.pem").returncode != 0
    signed = tmp_path / "theirs.sig"
    assert openssl("pkeyutl", "-sign", "-inkey", theirs, "-rawin", "-in", file, "-out", signed).returncode == 0
    signature = read_signature(file, signature_path=signed)
    verify(file.read_bytes(), signature, read_public_key(tmp_path / "theirs.public.pem"))
    with pytest.raises(InputError, match="must be the signature"):
        verify(file.read_bytes(), signature, read_public_key(public))
    # A key with a password, and one of another kind.
    locked, other = tmp_path / "locked.pem", tmp_path / "other.pem"
    assert openssl("pkcs8", "-topk8", "-in", theirs, "-out", locked, "-passout", "pass:12345678").returncode == 0
    assert openssl("genpkey", "-algorithm", "x25519", "-out", other).returncode == 0
    for wrong in (locked, other, file, public):
        with pytest.raises(InputError, match="Ed25519 private key"):
            sign_file(file, wrong)
    with pytest.raises(InputError, match="Ed25519 public key"):
        verify(b"", b"", read_public_key(theirs))


def test_a_key_is_its_owners_alone_and_never_overwritten(tmp_path):
    key = tmp_path / "key.pem"
    public = make_key(key)
    assert (key.stat().st_mode & 0o777, public.name) == (0o600, "key.public.pem")
    content = key.read_bytes(), public.read_bytes()
    with pytest.raises(InputError, match="new name"):
        make_key(key)
    public.unlink()
    with pytest.raises(InputError, match="new file"):
        make_key(key)
    assert key.read_bytes() == content[0] and not public.exists()
