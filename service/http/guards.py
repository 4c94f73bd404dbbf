"""What a request meets before a view sees it: size, media type, strict JSON, the schema."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

from flask import current_app, request
from gunicorn.http.errors import ParseException
from marshmallow import Schema, ValidationError
from werkzeug.exceptions import NotAcceptable, RequestEntityTooLarge, UnsupportedMediaType

from service.errors import InvalidContentError, MalformedRequestError, NotFoundError
from service.http.problems import refused
from service.signing.canonical import inexact_numbers, strict_loads

JSON = "application/json"

_LONGEST = 200


def read_body() -> bytes:
    """Return the body, whole.

    Raises
    ------
    UnsupportedMediaType
        Where it is not declared as plain application/json.
    RequestEntityTooLarge
        Where it is larger than the limit, also when sent in chunks.
    MalformedRequestError
        Where the connection was cut before its end, or its chunks are none.
    """
    if request.mimetype != JSON:
        raise UnsupportedMediaType(f"Send the body as {JSON}; this one is {request.mimetype or 'of no declared type'}.")
    if request.headers.get("Content-Encoding", "identity") != "identity":
        raise UnsupportedMediaType("Send the body without Content-Encoding.")
    limit = int(current_app.config["BODY_LIMIT"])
    try:
        body = request.get_data(cache=False)
    except RequestEntityTooLarge as error:
        raise _too_large(limit) from error
    except ParseException as error:
        raise MalformedRequestError(f"The body cannot be read as it was sent: {error}.") from error
    # A chunked body is cut silently at MAX_CONTENT_LENGTH, which is therefore one byte above the limit.
    if len(body) > limit:
        raise _too_large(limit)
    announced = request.content_length
    if announced is not None and len(body) != announced:
        raise MalformedRequestError(f"The body ended after {len(body)} of the {announced} bytes announced.")
    return body


def _too_large(limit: int) -> RequestEntityTooLarge:
    return RequestEntityTooLarge(f"The body is larger than {limit} bytes, the most this site takes.")


def load_body(body: bytes, schema: Schema) -> dict[str, Any]:
    """Return the body as the schema gives it.

    Raises
    ------
    MalformedRequestError
        Where it is not one strict JSON object.
    InvalidContentError
        Where the schema refuses it, or a number cannot be kept as it is written; with every fault.
    """
    document = strict_loads(body)
    if not isinstance(document, dict):
        raise MalformedRequestError("The body is JSON, but not an object.")
    try:
        loaded: dict[str, Any] = schema.load(document)
    except ValidationError as error:
        raise refused(error) from error
    faults = inexact_numbers(body)
    if faults:
        raise InvalidContentError("Numbers in the body have more digits than can be kept.", faults)
    return loaded


def load_query(schema: Schema) -> dict[str, Any]:
    """Return the query parameters as the schema gives them.

    Raises
    ------
    MalformedRequestError
        Where one is unknown, repeated or cannot be read.
    """
    repeated = [name for name, values in request.args.lists() if len(values) > 1]
    if repeated:
        raise MalformedRequestError(f"Give each query parameter once: {', '.join(repeated)}.")
    try:
        loaded: dict[str, Any] = schema.load(request.args.to_dict())
    except ValidationError as error:
        faults = refused(error).faults
        text = " ".join(f"{fault.pointer.removeprefix('/')}: {fault.detail}" for fault in faults)
        raise MalformedRequestError(f"The query cannot be read. {text}", faults) from error
    return loaded


def refuse_query() -> None:
    """Refuse query parameters where none is known, so that none is thought to have had an effect.

    Raises
    ------
    MalformedRequestError
        Where there is one.
    """
    if request.args:
        raise MalformedRequestError(f"This takes no query parameters; leave out {', '.join(request.args)}.")


def refuse_unreadable(parameters: Iterable[object]) -> None:
    """Refuse path parameters that no name can be: a store need not be asked, and not every store could answer.

    Raises
    ------
    NotFoundError
        Where one holds control characters or is longer than any name.
    """
    if not all(text.isprintable() and len(text) <= _LONGEST for text in map(str, parameters)):
        raise NotFoundError("There is nothing at this path.")


def negotiate(*offers: str) -> str:
    """Return the media type, among those offered, that the client likes best.

    Raises
    ------
    NotAcceptable
        Where it takes none of them.
    """
    if not request.headers.get("Accept", "").strip():
        return offers[0]
    best = request.accept_mimetypes.best_match(offers)
    if best is None:
        raise NotAcceptable(f"This is offered as {', '.join(offers)}.")
    return str(best)
