"""Every error leaves through here, as one shape: application/problem+json (RFC 9457)."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from http import HTTPStatus
from types import MappingProxyType
from typing import Any

from flask import Flask, Response, current_app
from marshmallow import ValidationError
from werkzeug.exceptions import HTTPException, MethodNotAllowed

from service import errors
from service.errors import Fault, InvalidContentError, ServiceError

STATUS: Mapping[type[ServiceError], int] = MappingProxyType(
    {
        errors.MalformedRequestError: 400,
        errors.UnauthenticatedError: 401,
        errors.NotPermittedError: 403,
        errors.SelfApprovalError: 403,
        errors.NotFoundError: 404,
        errors.SpecificationStateError: 409,
        errors.PreconditionError: 412,
        errors.InvalidContentError: 422,
        errors.TooFewUnitsError: 422,
        errors.NotPositiveDefiniteError: 422,
        errors.IllConditionedError: 422,
        errors.IdempotencyConflictError: 422,
        errors.StoreUnavailableError: 503,
        errors.KeyUnavailableError: 503,
    }
)
"""Status of each error; any other is a fault of this program, 500."""

MOST_FAULTS = 1000
"""Faults that one problem lists; of more, their number is said."""

_PHRASES: Mapping[int, str] = MappingProxyType(
    {
        413: "Content Too Large",
        414: "URI Too Long",
        416: "Range Not Satisfiable",
        422: "Unprocessable Content",
    }
)
"""Phrases of RFC 9110 that differ between versions of Python; codes and documents are made of them."""

TITLES: Mapping[str, str] = MappingProxyType(
    {
        "malformed-request": "The request cannot be read",
        "unauthenticated": "No valid token",
        "not-permitted": "Not permitted in this role",
        "self-approval": "Authors do not approve their own work",
        "not-found": "Nothing here",
        "specification-state": "Not possible in the specification's present state",
        "precondition-failed": "Not as you saw it last",
        "invalid-content": "The content cannot be used",
        "too-few-units": "Too few units for the test",
        "not-positive-definite": "The covariance is not positive definite",
        "ill-conditioned": "The covariance is too close to singular",
        "idempotency-key-reused": "The Idempotency-Key was used with another body",
        "store-unavailable": "The store cannot be used now",
        "key-unavailable": "The signing key cannot be used",
        "internal": "A fault of the service",
    }
)
"""Code of each problem to its title."""


def problem(status: int, code: str, detail: str, faults: tuple[Fault, ...] = ()) -> Response:
    """Return a problem object as an answer.

    Parameters
    ----------
    status : int
        HTTP status.
    code : str
        Stable name of the kind of problem; its ``type`` is ``/problems/<code>``.
    detail : str
        What happened, for a person.
    faults : tuple of Fault, optional
        Every fault found.
    """
    if len(faults) > MOST_FAULTS:
        detail += f" Only the first {MOST_FAULTS} of {len(faults)} faults are listed."
    document = {
        "type": f"/problems/{code}",
        "title": TITLES.get(code) or phrase(status),
        "status": status,
        "detail": detail,
        "code": code,
        "errors": [fault.to_dict() for fault in faults[:MOST_FAULTS]],
    }
    return Response(json.dumps(document, ensure_ascii=False), status, mimetype="application/problem+json")


def phrase(status: int) -> str:
    """Return what a status means, in the words of RFC 9110 whatever the version of Python."""
    return _PHRASES.get(status) or HTTPStatus(status).phrase


def register(app: Flask) -> None:
    """Make every error of an application a problem object."""
    app.register_error_handler(ServiceError, _service_error)
    app.register_error_handler(HTTPException, _http_error)
    app.register_error_handler(Exception, _unexpected)


def _service_error(error: ServiceError) -> Response:
    status = STATUS.get(type(error))
    if status is None:
        return _unexpected(error)
    answer = problem(status, error.code, error.detail, error.faults)
    if status == 401:
        answer.headers["WWW-Authenticate"] = 'Bearer realm="acceptance"'
    if status == 503:
        answer.headers["Retry-After"] = "5"
    return answer


def _http_error(error: HTTPException) -> Response:
    status = error.code or 500
    code = phrase(status).lower().replace(" ", "-")
    answer = problem(status, code, error.description or phrase(status))
    if isinstance(error, MethodNotAllowed) and error.valid_methods:
        answer.headers["Allow"] = ", ".join(sorted(error.valid_methods))
    return answer


def _unexpected(error: Exception) -> Response:
    current_app.logger.error("unexpected error", exc_info=error)
    return problem(500, "internal", "The service failed. Nothing was decided; the operator's log says more.")


def refused(error: ValidationError) -> InvalidContentError:
    """Return a schema's refusal with a pointer to every fault."""
    faults = [Fault(pointer, text, "schema") for pointer, text in _flat(error.messages, "")]
    count = "one fault" if len(faults) == 1 else f"{len(faults)} faults"
    return InvalidContentError(f"The request has {count}; nothing was decided and nothing was stored.", faults)


def _flat(messages: Any, pointer: str) -> Iterator[tuple[str, str]]:
    if isinstance(messages, Mapping):
        for name, inner in messages.items():
            step = "" if name == "_schema" else "/" + str(name).replace("~", "~0").replace("/", "~1")
            yield from _flat(inner, pointer + step)
    elif isinstance(messages, list):
        for inner in messages:
            yield from _flat(inner, pointer)
    else:
        yield pointer, str(messages)
