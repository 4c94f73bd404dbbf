"""Keys: made once, kept private, admitted with care."""

from __future__ import annotations

import base64
import json
import os
import tomllib
from pathlib import Path

import pytest
from cryptography.exceptions import InvalidSignature
from cryptography.hazmat.primitives import serialization
from cryptography.hazmat.primitives.asymmetric import rsa
from cryptography.hazmat.primitives.asymmetric.ed25519 import Ed25519PrivateKey, Ed25519PublicKey

from service.errors import KeyUnavailableError, UnknownFormatError
from service.signing import keys

VECTORS = tomllib.loads((Path(__file__).parents[2] / "vectors/ed25519.toml").read_text(encoding="utf-8"))


def _bytes(text: str) -> bytes:
    return base64.urlsafe_b64decode(text + "=" * (-len(text) % 4))


def _pem(key: Ed25519PrivateKey | rsa.RSAPrivateKey, passphrase: bytes | None = None) -> bytes:
    encryption: serialization.KeySerializationEncryption = serialization.NoEncryption()
    if passphrase is not None:
        encryption = serialization.BestAvailableEncryption(passphrase)
    return key.private_bytes(serialization.Encoding.PEM, serialization.PrivateFormat.PKCS8, encryption)


def _file(folder: Path, data: bytes, mode: int = 0o600) -> Path:
    path = folder / "key.pem"
    path.write_bytes(data)
    path.chmod(mode)
    return path


def test_the_published_key_signs_as_published() -> None:
    signer = keys.Signer(Ed25519PrivateKey.from_private_bytes(_bytes(VECTORS["private"])))
    assert keys.jwk(signer.public_key)["x"] == VECTORS["public"]
    assert keys.thumbprint(signer.public_key) == signer.kid == VECTORS["thumbprint"]
    assert keys.b64u(signer.sign(VECTORS["signing_input"].encode())) == VECTORS["signature"]


@pytest.mark.parametrize("encoding", VECTORS["refused"])
def test_a_key_of_small_order_is_refused(encoding: str) -> None:
    with pytest.raises(UnknownFormatError):
        keys.admit(bytes.fromhex(encoding))


def test_the_refusal_is_needed_because_such_a_key_needs_no_private_one() -> None:
    identity, signature = bytes([1]) + bytes(31), bytes([1]) + bytes(63)
    Ed25519PublicKey.from_public_bytes(identity).verify(signature, b"any message")
    with pytest.raises(UnknownFormatError, match="small order"):
        keys.admit(identity)


def test_honest_keys_are_admitted() -> None:
    for _ in range(20):
        data = Ed25519PrivateKey.generate().public_key().public_bytes_raw()
        assert keys.admit(data).public_bytes_raw() == data


@pytest.mark.parametrize("length", [0, 31, 33])
def test_a_key_of_another_length_is_refused(length: int) -> None:
    with pytest.raises(UnknownFormatError, match="32 bytes"):
        keys.admit(bytes(length))


def test_a_new_key_is_its_owners_alone_and_never_replaced(tmp_path: Path) -> None:
    path = tmp_path / "key.pem"
    keys.create_key(path)
    assert path.stat().st_mode & 0o777 == 0o600
    before = path.read_bytes()
    with pytest.raises(KeyUnavailableError, match="cannot be made"):
        keys.create_key(path)
    assert path.read_bytes() == before


@pytest.mark.parametrize("mode", [0o640, 0o604, 0o660, 0o644])
def test_a_key_open_to_others_is_refused(tmp_path: Path, mode: int) -> None:
    with pytest.raises(KeyUnavailableError, match="chmod 600"):
        keys.load_signer(_file(tmp_path, _pem(Ed25519PrivateKey.generate()), mode))


@pytest.mark.skipif(os.geteuid() != 0, reason="only root can give a file away")
def test_a_key_of_another_account_is_refused(tmp_path: Path) -> None:
    path = _file(tmp_path, _pem(Ed25519PrivateKey.generate()))
    os.chown(path, 65534, 65534)
    with pytest.raises(KeyUnavailableError, match="another account"):
        keys.load_signer(path)


def test_an_encrypted_key_opens_with_its_passphrase_only(tmp_path: Path) -> None:
    key = Ed25519PrivateKey.generate()
    path = _file(tmp_path, _pem(key, b"a long passphrase"))
    assert keys.load_signer(path, b"a long passphrase").public_key == key.public_key()
    for wrong in (None, b"another"):
        with pytest.raises(KeyUnavailableError, match="passphrase"):
            keys.load_signer(path, wrong)


def test_what_is_no_such_key_is_refused(tmp_path: Path) -> None:
    with pytest.raises(KeyUnavailableError, match="cannot be read"):
        keys.load_signer(tmp_path / "missing.pem")
    with pytest.raises(KeyUnavailableError, match="not a private key"):
        keys.load_signer(_file(tmp_path, b"nonsense"))
    with pytest.raises(KeyUnavailableError, match="not an Ed25519 key"):
        keys.load_signer(_file(tmp_path, _pem(rsa.generate_private_key(65537, 2048))))


GOOD = {"kty": "OKP", "crv": "Ed25519", "x": VECTORS["public"]}


@pytest.mark.parametrize(
    "document",
    [
        {},
        {"keys": []},
        {"keys": "all"},
        {"keys": [1]},
        {"keys": [GOOD | {"kty": "RSA"}]},
        {"keys": [GOOD | {"crv": "X25519"}]},
        {"keys": [GOOD | {"x": VECTORS["public"] + "="}]},
        {"keys": [GOOD | {"x": VECTORS["public"][:-1] + "p"}]},
        {"keys": [GOOD | {"x": "A" * 43}]},
        {"keys": [GOOD | {"x": "é" * 43}]},
        {"keys": [GOOD | {"x": None}]},
    ],
)
def test_a_key_set_that_is_none_is_refused(document: dict[str, object]) -> None:
    with pytest.raises(UnknownFormatError):
        keys.trusted_keys(document)


@pytest.mark.parametrize("data", [b"", b"[]", b"{", b"-----BEGIN PUBLIC KEY-----\nAAAA\n-----END PUBLIC KEY-----\n"])
def test_a_file_without_a_public_key_is_refused(tmp_path: Path, data: bytes) -> None:
    with pytest.raises(UnknownFormatError):
        keys.read_trusted(_file(tmp_path, data))


def test_a_public_key_of_another_kind_is_refused(tmp_path: Path) -> None:
    public = rsa.generate_private_key(65537, 2048).public_key()
    pem = public.public_bytes(serialization.Encoding.PEM, serialization.PublicFormat.SubjectPublicKeyInfo)
    with pytest.raises(UnknownFormatError, match="not Ed25519"):
        keys.read_trusted(_file(tmp_path, pem))


def test_the_published_set_is_enough_to_verify() -> None:
    published = json.loads(json.dumps(keys.jwks([keys.admit(_bytes(VECTORS["public"]))])))
    [key] = keys.trusted_keys(published).values()
    key.verify(_bytes(VECTORS["signature"]), VECTORS["signing_input"].encode())
    with pytest.raises(InvalidSignature):
        key.verify(_bytes(VECTORS["signature"]), b"another message")
