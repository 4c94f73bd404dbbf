"""Ed25519 keys: made once, kept private, published as JWK, admitted with care.

References
----------
.. [1] RFC 8032 (Ed25519); RFC 8037 (its JWK); RFC 7638 (thumbprint); RFC 9864 (the name "Ed25519").
"""

from __future__ import annotations

import base64
import hashlib
import json
import os
import stat
from collections.abc import Iterable, Mapping
from functools import cache
from pathlib import Path
from types import MappingProxyType
from typing import Any

from cryptography.exceptions import UnsupportedAlgorithm
from cryptography.hazmat.primitives import serialization
from cryptography.hazmat.primitives.asymmetric.ed25519 import Ed25519PrivateKey, Ed25519PublicKey

from service.errors import KeyUnavailableError, UnknownFormatError

PublicKey = Ed25519PublicKey

_FIELD = 2**255 - 19


class Signer:
    """Signs with one private record key.

    Parameters
    ----------
    private_key : Ed25519PrivateKey
        Never leaves this object.
    """

    __slots__ = ("_private_key", "header", "kid", "public_key")

    def __init__(self, private_key: Ed25519PrivateKey) -> None:
        self._private_key = private_key
        self.public_key = private_key.public_key()
        self.kid = thumbprint(self.public_key)
        self.header = header_segment(self.public_key)

    def sign(self, message: bytes) -> bytes:
        """Return the 64-byte signature of a message."""
        return self._private_key.sign(message)


def b64u(data: bytes) -> str:
    """Return base64url without padding (RFC 7515, section 2)."""
    return base64.urlsafe_b64encode(data).rstrip(b"=").decode("ascii")


def raw(key: PublicKey) -> bytes:
    """Return the 32 bytes of a public key."""
    return key.public_bytes_raw()


def thumbprint(key: PublicKey) -> str:
    """Return the RFC 7638 thumbprint of a public key, base64url."""
    members = {"crv": "Ed25519", "kty": "OKP", "x": b64u(raw(key))}
    return b64u(hashlib.sha256(json.dumps(members, separators=(",", ":")).encode("ascii")).digest())


def header_segment(key: PublicKey) -> str:
    """Return the one JWS header that this key signs under: a constant text, compared as such."""
    header = {"alg": "Ed25519", "kid": thumbprint(key), "typ": "acceptance-record"}
    return b64u(json.dumps(header, separators=(",", ":")).encode("ascii"))


def jwk(key: PublicKey) -> dict[str, str]:
    """Return the public key as a JWK (RFC 8037)."""
    return {"kty": "OKP", "crv": "Ed25519", "x": b64u(raw(key)), "kid": thumbprint(key), "alg": "Ed25519", "use": "sig"}


def jwks(keys: Iterable[PublicKey]) -> dict[str, list[dict[str, str]]]:
    """Return a JWK set of public keys."""
    return {"keys": [jwk(key) for key in keys]}


def admit(data: bytes) -> PublicKey:
    """Return the public key of these bytes, or refuse them.

    Parameters
    ----------
    data : bytes
        The RFC 8032 encoding.

    Raises
    ------
    UnknownFormatError
        Where the encoding is not canonical, or the point is of small order.
    """
    if len(data) != 32:
        raise UnknownFormatError(f"An Ed25519 public key has 32 bytes; this one has {len(data)}.")
    y = int.from_bytes(data, "little") & ((1 << 255) - 1)
    if y >= _FIELD:
        raise UnknownFormatError("The public key is not in its canonical form.")
    if y in _small_order():
        raise UnknownFormatError("The public key is a point of small order, which any message can be signed for.")
    return Ed25519PublicKey.from_public_bytes(data)


@cache
def _small_order() -> frozenset[int]:
    """Return the y coordinates of the points of order 1, 2, 4 and 8.

    y = 1 (order 1), y = -1 (order 2), y = 0 (order 4), and +-y8 (order 8) with
    y8^2 a root of d t^2 + 2 t - 1 = 0: doubling such a point gives y = 0.
    """
    d = -121665 * pow(121666, -1, _FIELD) % _FIELD
    root = _square_root((1 + d) % _FIELD)
    assert root is not None
    eighth = set()
    for sign in (root, -root):
        y = _square_root((sign - 1) * pow(d, -1, _FIELD) % _FIELD)
        if y is not None:
            eighth |= {y, -y % _FIELD}
    return frozenset({0, 1, _FIELD - 1} | eighth)


def _square_root(a: int) -> int | None:
    """Return a square root modulo 2^255 - 19, or None where there is none (RFC 8032, section 5.1.3)."""
    candidate = pow(a, (_FIELD + 3) // 8, _FIELD)
    if candidate * candidate % _FIELD != a % _FIELD:
        candidate = candidate * pow(2, (_FIELD - 1) // 4, _FIELD) % _FIELD
    return candidate if candidate * candidate % _FIELD == a % _FIELD else None


def trusted_keys(document: Mapping[str, Any]) -> Mapping[str, PublicKey]:
    """Return header segment to key for every key of a JWK set.

    Raises
    ------
    UnknownFormatError
        Where the document is not a set of Ed25519 keys, or a key is refused.
    """
    entries = document.get("keys")
    if not isinstance(entries, list) or not entries:
        raise UnknownFormatError("The trusted keys are not a JWK set with at least one key.")
    found = [_from_jwk(entry) for entry in entries]
    return MappingProxyType({header_segment(key): key for key in found})


def _from_jwk(entry: object) -> PublicKey:
    if not isinstance(entry, Mapping) or entry.get("kty") != "OKP" or entry.get("crv") != "Ed25519":
        raise UnknownFormatError("A trusted key is not an Ed25519 JWK (RFC 8037).")
    x = entry.get("x")
    data = base64.urlsafe_b64decode(f"{x}=") if isinstance(x, str) and len(x) == 43 and x.isascii() else b""
    if b64u(data) != x:
        raise UnknownFormatError("The member x of a trusted key is not 32 bytes in base64url.")
    return admit(data)


def read_trusted(path: Path) -> Mapping[str, PublicKey]:
    """Return the trusted keys in a file: a JWK set, or one public key as PEM.

    Raises
    ------
    UnknownFormatError
        Where the file is neither.
    """
    data = path.read_bytes()
    try:
        if data.lstrip().startswith(b"-----BEGIN"):
            key = serialization.load_pem_public_key(data)
            if not isinstance(key, Ed25519PublicKey):
                raise UnknownFormatError(f"{path} holds a public key that is not Ed25519.")
            return trusted_keys(jwks([admit(raw(key))]))
        document = json.loads(data)
        return trusted_keys(document if isinstance(document, dict) else {})
    except (ValueError, UnsupportedAlgorithm) as error:
        raise UnknownFormatError(f"{path} is neither a JWK set nor a public key in PEM.") from error


def create_key(path: Path) -> None:
    """Make a private key in a new file of mode 0600, and see it on the disk.

    Raises
    ------
    KeyUnavailableError
        Where the file exists already, or cannot be written.
    """
    pem = Ed25519PrivateKey.generate().private_bytes(
        serialization.Encoding.PEM, serialization.PrivateFormat.PKCS8, serialization.NoEncryption()
    )
    try:
        descriptor = os.open(path, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o600)
        with os.fdopen(descriptor, "wb") as file:
            file.write(pem)
            file.flush()
            os.fsync(file.fileno())
        folder = os.open(path.parent, os.O_RDONLY)
        try:
            os.fsync(folder)
        finally:
            os.close(folder)
    except OSError as error:
        raise KeyUnavailableError(f"The key file {path} cannot be made: {error.strerror}.") from error


def load_signer(path: Path, passphrase: bytes | None = None) -> Signer:
    """Read a private key that nobody else can read.

    Parameters
    ----------
    path : Path
        PKCS#8 PEM, encrypted or not.
    passphrase : bytes, optional
        Of an encrypted key.

    Raises
    ------
    KeyUnavailableError
        Where the file is missing, open to others, not ours, or not an Ed25519 key.
    """
    try:
        with path.open("rb") as file:
            _refuse_open_to_others(path, os.fstat(file.fileno()))
            key = serialization.load_pem_private_key(file.read(), passphrase)
    except OSError as error:
        raise KeyUnavailableError(f"The key file {path} cannot be read: {error.strerror}.") from error
    except (ValueError, TypeError, UnsupportedAlgorithm) as error:
        text = f"The key file {path} is not a private key, or its passphrase is missing or wrong."
        raise KeyUnavailableError(text) from error
    if not isinstance(key, Ed25519PrivateKey):
        raise KeyUnavailableError(f"The key in {path} is not an Ed25519 key.")
    return Signer(key)


def _refuse_open_to_others(path: Path, status: os.stat_result) -> None:
    if status.st_uid != os.geteuid():
        raise KeyUnavailableError(f"The key file {path} belongs to another account. Give it to the service's own.")
    if stat.S_IMODE(status.st_mode) & 0o077:
        raise KeyUnavailableError(f"The key file {path} is open to other accounts. Run: chmod 600 {path}")
