"""A signed record: compact JWS with one constant header per key, over canonical bytes.

``envelope = H "." P "." S`` in ASCII.  These bytes are stored, exported and
hashed; nothing is ever serialised again to be verified.

References
----------
.. [1] RFC 7515 (JWS), section 7.1: compact serialisation.
.. [2] RFC 9864: the fully specified algorithm name ``Ed25519``.
"""

from __future__ import annotations

import base64
import hashlib
import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from cryptography.exceptions import InvalidSignature

from service.errors import MalformedRequestError, SignatureMismatchError, UnknownFormatError, VerificationError
from service.signing import canonical
from service.signing.keys import PublicKey, Signer, b64u

FORMAT = "acceptance-record/1"
"""Format of the payloads that this program writes and reads."""

TrustedKeys = Mapping[str, PublicKey]
"""Header segment to public key."""

_SEGMENTS = re.compile(r"([A-Za-z0-9_-]+)\.([A-Za-z0-9_-]+)\.([A-Za-z0-9_-]{86})")


@dataclass(frozen=True, slots=True)
class Payload:
    """What a verified envelope says.

    Parameters
    ----------
    data : bytes
        The canonical bytes that were signed.
    document : dict
        The same, parsed.
    envelope : str
        The envelope that they came from.
    """

    data: bytes
    document: dict[str, Any]
    envelope: str

    @property
    def digest(self) -> str:
        """SHA-256 of the envelope in hexadecimal, as ``sha256sum`` of a file that holds it prints."""
        return hashlib.sha256(self.envelope.encode("ascii")).hexdigest()


def sign(document: Mapping[str, Any], signer: Signer) -> str:
    """Return the envelope of a payload document.

    Parameters
    ----------
    document : mapping
        With ``format`` and everything else that is to be signed.
    signer : Signer
        The record key.

    Raises
    ------
    VerificationError
        Where the document has no canonical form.
    """
    message = f"{signer.header}.{b64u(canonical.encode(document))}"
    return f"{message}.{b64u(signer.sign(message.encode('ascii')))}"


def open_envelope(envelope: str, trusted: TrustedKeys) -> Payload:
    """Return what an envelope says, once every step holds.

    1. three base64url segments, the last of 64 bytes; 2. the header is the
    constant of a trusted key; 3. each segment in its one spelling; 4. the
    signature verifies; 5. the payload is strict JSON in canonical form; 6. its
    format is known.

    Parameters
    ----------
    envelope : str
        As stored.
    trusted : mapping
        Header segment to public key.

    Raises
    ------
    SignatureMismatchError
        Where steps 1, 3 or 4 fail.
    UnknownFormatError
        Where the key or the format is not known here.
    VerificationError
        Where the payload is not canonical.
    """
    # Step 1
    match = _SEGMENTS.fullmatch(envelope)
    if match is None:
        raise SignatureMismatchError("The text is not a signed record: three base64url segments are expected.")
    header, payload, signature = match.groups()
    # Step 2
    key = trusted.get(header)
    if key is None:
        raise UnknownFormatError("The record is not signed by one of the trusted keys.")
    # Step 3
    data, signature_bytes = _one_spelling(payload), _one_spelling(signature)
    # Step 4
    try:
        key.verify(signature_bytes, f"{header}.{payload}".encode("ascii"))
    except InvalidSignature as error:
        raise SignatureMismatchError("The signature does not belong to this record.") from error
    # Step 5
    try:
        document = canonical.strict_loads(data)
    except MalformedRequestError as error:
        raise VerificationError(f"The record's payload is not strict JSON. {error.detail}") from error
    if not isinstance(document, dict) or canonical.encode(document) != data:
        raise VerificationError("The record's payload is not in canonical form.")
    # Step 6
    if document.get("format") != FORMAT:
        raise UnknownFormatError(f"The record is of format {document.get('format')!r}, which is not known here.")
    return Payload(data, document, envelope)


def _one_spelling(segment: str) -> bytes:
    """Decode base64url, and refuse any spelling but the one that encoding gives."""
    try:
        data = base64.urlsafe_b64decode(segment + "=" * (-len(segment) % 4))
    except ValueError as error:
        raise SignatureMismatchError("A segment of the record is not base64url.") from error
    if b64u(data) != segment:
        raise SignatureMismatchError("A segment of the record is not in its one spelling of base64url.")
    return data
