"""A signed record has one spelling, and nothing else passes for it."""

from __future__ import annotations

import base64
import hashlib
import json
from pathlib import Path

import pytest
from joserfc import jws
from joserfc.jwk import OKPKey

from service.errors import ServiceError, SignatureMismatchError, UnknownFormatError, VerificationError
from service.signing import keys
from service.signing.envelope import FORMAT, open_envelope, sign
from service.signing.keys import Signer, b64u

PAYLOAD = {"format": FORMAT, "record_type": "decision", "p_value": 1e-7, "unit": "µg/mL", "rows": [1, 2.5]}


@pytest.fixture(scope="module")
def signer(tmp_path_factory: pytest.TempPathFactory) -> Signer:
    path = tmp_path_factory.mktemp("key") / "key.pem"
    keys.create_key(path)
    return keys.load_signer(path)


@pytest.fixture(scope="module")
def trusted(signer: Signer) -> dict[str, keys.PublicKey]:
    return dict(keys.trusted_keys(keys.jwks([signer.public_key])))


@pytest.fixture(scope="module")
def envelope(signer: Signer) -> str:
    return sign(PAYLOAD, signer)


def _signed(signer: Signer, header: str, payload: bytes) -> str:
    message = f"{header}.{b64u(payload)}"
    return f"{message}.{b64u(signer.sign(message.encode()))}"


def test_an_envelope_opens_to_what_was_signed(envelope: str, trusted: dict[str, keys.PublicKey]) -> None:
    payload = open_envelope(envelope, trusted)
    assert payload.document == PAYLOAD
    assert payload.digest == hashlib.sha256(envelope.encode()).hexdigest()


def test_another_implementation_verifies_it(envelope: str, signer: Signer) -> None:
    key = OKPKey.import_key(keys.jwk(signer.public_key))
    verified = jws.deserialize_compact(envelope, key, algorithms=["Ed25519"])
    assert json.loads(verified.payload) == PAYLOAD
    assert verified.headers() == {"alg": "Ed25519", "kid": signer.kid, "typ": "acceptance-record"}


def test_every_change_of_one_character_is_refused(envelope: str, trusted: dict[str, keys.PublicKey]) -> None:
    for place, character in enumerate(envelope):
        for other in {"A", "B", "-", "="} - {character}:
            with pytest.raises(ServiceError):
                open_envelope(envelope[:place] + other + envelope[place + 1 :], trusted)


def test_no_last_character_has_another_spelling(envelope: str, trusted: dict[str, keys.PublicKey]) -> None:
    alphabet = "ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789-_"
    for other in set(alphabet) - {envelope[-1]}:
        with pytest.raises(SignatureMismatchError):
            open_envelope(envelope[:-1] + other, trusted)


@pytest.mark.parametrize(
    "spell",
    [
        lambda e: e + "=",
        lambda e: e + "\n",
        lambda e: " " + e,
        lambda e: e.replace("-", "+").replace("_", "/") + "+",
        lambda e: e + ".",
        lambda e: e.rsplit(".", 1)[0],
        lambda e: e.rsplit(".", 1)[0] + ".",
        lambda e: "." + e.split(".", 1)[1],
        lambda _: "",
    ],
)
def test_another_spelling_is_refused(envelope: str, trusted: dict[str, keys.PublicKey], spell: object) -> None:
    with pytest.raises(ServiceError):
        open_envelope(spell(envelope), trusted)  # type: ignore[operator]


HEADERS = [
    {"alg": "none"},
    {"alg": "EdDSA"},
    {"alg": "HS256"},
    {"alg": "Ed25519", "typ": "acceptance-record"},
    {"crit": []},
    {"crit": ["exp"], "exp": 1},
    {"b64": False, "crit": ["b64"]},
    {"jku": "https://example.org/keys"},
    {"jwk": {"kty": "OKP"}},
    {"typ": "JWT"},
]


@pytest.mark.parametrize("change", HEADERS, ids=str)
def test_another_header_is_refused_though_rightly_signed(
    signer: Signer, trusted: dict[str, keys.PublicKey], change: dict[str, object]
) -> None:
    header = {"alg": "Ed25519", "kid": signer.kid, "typ": "acceptance-record"} | change
    if change.get("alg") == "Ed25519":
        del header["kid"]
    text = b64u(json.dumps(header, separators=(",", ":")).encode())
    with pytest.raises(UnknownFormatError, match="trusted keys"):
        open_envelope(_signed(signer, text, b'{"format":"acceptance-record/1"}'), trusted)


@pytest.mark.parametrize(
    "text",
    [
        '{"alg":"none","alg":"Ed25519","kid":"KID","typ":"acceptance-record"}',
        '{"alg":"Ed25519","kid":"KID","typ":"acceptance-record" }',
        '{"kid":"KID","alg":"Ed25519","typ":"acceptance-record"}',
        '\ufeff{"alg":"Ed25519","kid":"KID","typ":"acceptance-record"}',
        '{"alg":"Ed25519","kid":"../../dev/null","typ":"acceptance-record"}',
        '{"alg":"Ed25519","kid":"\' OR 1=1","typ":"acceptance-record"}',
    ],
)
def test_a_header_that_means_the_same_is_not_the_same(
    signer: Signer, trusted: dict[str, keys.PublicKey], text: str
) -> None:
    header = b64u(text.replace("KID", signer.kid).encode())
    with pytest.raises(UnknownFormatError):
        open_envelope(_signed(signer, header, b'{"format":"acceptance-record/1"}'), trusted)


@pytest.mark.parametrize(
    "payload",
    [
        b'{"format":"acceptance-record/1","a":1}',
        b'{"a":1.0,"format":"acceptance-record/1"}',
        b'{"a":1e-07,"format":"acceptance-record/1"}',
        b'{"a":1,"a":1,"format":"acceptance-record/1"}',
        b'{"a":NaN,"format":"acceptance-record/1"}',
        b'{"a":1e400,"format":"acceptance-record/1"}',
        b'{"a":9007199254740993,"format":"acceptance-record/1"}',
        b'{"a":"\\u0041","format":"acceptance-record/1"}',
        b'{"a":"\\ud800","format":"acceptance-record/1"}',
        b'{ "format":"acceptance-record/1"}',
        b'\xef\xbb\xbf{"format":"acceptance-record/1"}',
        b'["acceptance-record/1"]',
        b"\xff\xfe",
        b"x",
    ],
)
def test_a_payload_that_is_not_canonical_is_refused_though_rightly_signed(
    signer: Signer, trusted: dict[str, keys.PublicKey], payload: bytes
) -> None:
    with pytest.raises(VerificationError):
        open_envelope(_signed(signer, signer.header, payload), trusted)


@pytest.mark.parametrize("payload", [b"{}", b'{"format":"acceptance-record/2"}', b'{"format":null}'])
def test_an_unknown_format_is_not_called_refuted(
    signer: Signer, trusted: dict[str, keys.PublicKey], payload: bytes
) -> None:
    with pytest.raises(UnknownFormatError, match="format"):
        open_envelope(_signed(signer, signer.header, payload), trusted)


def test_the_order_of_the_group_added_to_a_signature_is_refused(
    envelope: str, trusted: dict[str, keys.PublicKey]
) -> None:
    message, signature = envelope.rsplit(".", 1)
    data = base64.urlsafe_b64decode(signature + "==")
    group = 2**252 + 27742317777372353535851937790883648493
    s = int.from_bytes(data[32:], "little") + group
    with pytest.raises(SignatureMismatchError):
        open_envelope(f"{message}.{b64u(data[:32] + s.to_bytes(32, 'little'))}", trusted)


def test_a_signature_of_another_record_is_refused(signer: Signer, trusted: dict[str, keys.PublicKey]) -> None:
    one, other = sign(PAYLOAD, signer), sign(PAYLOAD | {"p_value": 0.5}, signer)
    with pytest.raises(SignatureMismatchError, match="does not belong"):
        open_envelope(f"{one.rsplit('.', 1)[0]}.{other.rsplit('.', 1)[1]}", trusted)


def test_the_key_file_is_not_needed_to_read(envelope: str, signer: Signer, tmp_path: Path) -> None:
    (tmp_path / "jwks.json").write_text(json.dumps(keys.jwks([signer.public_key])), encoding="utf-8")
    assert open_envelope(envelope, keys.read_trusted(tmp_path / "jwks.json")).document == PAYLOAD
