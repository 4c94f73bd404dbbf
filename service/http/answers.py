"""Answers made of verified bytes."""

from __future__ import annotations

import base64
import hashlib
import json
from collections.abc import Mapping
from typing import Any

from flask import Response, request

from service.signing.envelope import Payload

JOSE = "application/jose"


def plain(document: Mapping[str, Any], status: int = 200) -> Response:
    """Return a document that is not itself signed."""
    return Response(json.dumps(document, allow_nan=False, ensure_ascii=False), status, mimetype="application/json")


def with_envelope(payload: Payload) -> bytes:
    """Return the record's own bytes with one member more: the envelope that they came from."""
    return payload.data[:-1] + b',"envelope":"' + payload.envelope.encode("ascii") + b'"}'


def record(payload: Payload, status: int = 200, *, media_type: str = "application/json") -> Response:
    """Return a record: its bytes with the envelope, or the envelope alone.

    Parameters
    ----------
    payload : Payload
        Verified.
    status : int, optional
        HTTP status.
    media_type : str, optional
        ``application/json``, or ``application/jose`` for the envelope alone.
    """
    body = payload.envelope.encode("ascii") if media_type == JOSE else with_envelope(payload)
    answer = Response(body, status, mimetype=media_type)
    digest = hashlib.sha256(body).digest()
    answer.headers["Content-Digest"] = f"sha-256=:{base64.b64encode(digest).decode('ascii')}:"
    answer.headers["Vary"] = "Accept"
    answer.set_etag(payload.digest)
    if request.method in ("GET", "HEAD"):
        answer.make_conditional(request)
    return answer
