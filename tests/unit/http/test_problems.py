"""Every error leaves as one shape, with its status, and tells nothing that is not the caller's."""

from __future__ import annotations

import json
import logging
from http import HTTPStatus

import pytest
from marshmallow import ValidationError
from werkzeug import exceptions
from werkzeug.test import TestResponse

from schemas.problem import ProblemSchema
from service import errors
from service.errors import Fault, ServiceError
from service.http.problems import MOST_FAULTS, STATUS, TITLES, phrase, refused
from tests.unit.http.small import small_app

SECRET = "postgresql://store:hunter2@db/acceptance"
WANTED = {
    "malformed-request": 400,
    "unauthenticated": 401,
    "not-permitted": 403,
    "self-approval": 403,
    "not-found": 404,
    "specification-state": 409,
    "precondition-failed": 412,
    "invalid-content": 422,
    "too-few-units": 422,
    "not-positive-definite": 422,
    "ill-conditioned": 422,
    "idempotency-key-reused": 422,
    "store-unavailable": 503,
    "key-unavailable": 503,
}


def _leaves(kind: type[ServiceError] = ServiceError) -> list[type[ServiceError]]:
    return [kind, *(leaf for child in kind.__subclasses__() for leaf in _leaves(child))]


def _failed(error: Exception) -> TestResponse:
    answer = small_app(error).test_client().get("/fail")
    assert answer.mimetype == "application/problem+json"
    assert ProblemSchema().load(answer.json) == answer.json
    assert answer.json["status"] == answer.status_code
    assert answer.json["type"] == f"/problems/{answer.json['code']}"
    return answer


@pytest.mark.parametrize("kind", [kind for kind in _leaves() if kind.code in WANTED], ids=lambda kind: kind.code)
def test_an_error_for_the_caller_says_what_happened(kind: type[ServiceError]) -> None:
    fault = Fault("/batch/lot", "Müsli: mend it so.", "some-fault")
    answer = _failed(kind("What to do.", [fault]))
    assert (answer.status_code, answer.json["code"]) == (WANTED[kind.code], kind.code)
    assert (answer.json["title"], answer.json["detail"]) == (TITLES[kind.code], "What to do.")
    assert answer.json["errors"] == [fault.to_dict()]


def test_every_code_stands_for_one_error_and_one_status() -> None:
    assert {kind.code: status for kind, status in STATUS.items()} == WANTED
    assert len({kind.code for kind in _leaves()}) == len(_leaves())


@pytest.mark.parametrize("kind", [kind for kind in _leaves() if kind.code not in WANTED], ids=lambda kind: kind.code)
def test_an_error_that_is_not_for_the_caller_says_nothing_of_itself(kind: type[ServiceError]) -> None:
    answer = _failed(kind(SECRET, [Fault("", SECRET, "x")]))
    assert (answer.status_code, answer.json["code"], answer.json["errors"]) == (500, "internal", [])
    assert "hunter2" not in answer.text + str(answer.headers)


def test_an_unexpected_error_is_logged_and_not_told(caplog: pytest.LogCaptureFixture) -> None:
    with caplog.at_level(logging.ERROR):
        answer = _failed(KeyError(SECRET))
    assert (answer.status_code, answer.json["code"]) == (500, "internal")
    assert "hunter2" not in answer.text
    assert "KeyError" in caplog.text


def test_a_missing_token_is_answered_with_how_to_authenticate() -> None:
    answer = _failed(errors.UnauthenticatedError("No token."))
    assert answer.headers["WWW-Authenticate"] == 'Bearer realm="acceptance"'


@pytest.mark.parametrize("kind", [errors.StoreUnavailableError, errors.KeyUnavailableError])
def test_what_is_away_says_when_to_try_again(kind: type[ServiceError]) -> None:
    assert int(_failed(kind("Away.")).headers["Retry-After"]) > 0


@pytest.mark.parametrize(
    ("error", "status", "code"),
    [
        (exceptions.BadRequest(), 400, "bad-request"),
        (exceptions.NotFound(), 404, "not-found"),
        (exceptions.NotAcceptable(), 406, "not-acceptable"),
        (exceptions.RequestTimeout(), 408, "request-timeout"),
        (exceptions.LengthRequired(), 411, "length-required"),
        (exceptions.RequestEntityTooLarge(), 413, "content-too-large"),
        (exceptions.RequestURITooLarge(), 414, "uri-too-long"),
        (exceptions.UnsupportedMediaType(), 415, "unsupported-media-type"),
        (exceptions.RequestedRangeNotSatisfiable(), 416, "range-not-satisfiable"),
        (exceptions.UnprocessableEntity(), 422, "unprocessable-content"),
        (exceptions.TooManyRequests(), 429, "too-many-requests"),
        (exceptions.InternalServerError(), 500, "internal-server-error"),
    ],
)
def test_an_error_of_the_web_is_a_problem_with_a_code_of_its_own(error: Exception, status: int, code: str) -> None:
    answer = _failed(error)
    assert (answer.status_code, answer.json["code"]) == (status, code)


def test_a_wrong_method_is_told_the_right_ones() -> None:
    answer = small_app().test_client().put("/echo")
    assert (answer.status_code, answer.json["code"]) == (405, "method-not-allowed")
    assert answer.headers["Allow"] == "OPTIONS, POST"


def test_phrases_do_not_depend_on_the_version_of_python() -> None:
    renamed = {
        413: "Content Too Large",
        414: "URI Too Long",
        416: "Range Not Satisfiable",
        422: "Unprocessable Content",
    }
    for status in HTTPStatus:
        assert phrase(status) == renamed.get(status, HTTPStatus(status).phrase)


def test_very_many_faults_are_counted_and_the_first_are_listed() -> None:
    faults = [Fault(f"/rows/{i}", "Mend it.", "x") for i in range(MOST_FAULTS + 1)]
    answer = _failed(errors.InvalidContentError("Refused.", faults))
    assert [fault["pointer"] for fault in answer.json["errors"]] == [fault.pointer for fault in faults[:-1]]
    assert answer.json["detail"] == "Refused. Only the first 1000 of 1001 faults are listed."


@pytest.mark.parametrize(
    ("messages", "pointers"),
    [
        (["whole"], [""]),
        ({"_schema": ["whole"]}, [""]),
        ({"lot": ["one", "two"]}, ["/lot", "/lot"]),
        ({"rows": {3: {2: ["cell"]}, 5: ["row"]}}, ["/rows/3/2", "/rows/5"]),
        ({"a/b": {"~": {"~1": ["x"]}}}, ["/a~1b/~0/~01"]),
        ({"inner": {"_schema": ["object"], "": ["empty name"]}}, ["/inner", "/inner/"]),
    ],
)
def test_a_refusal_of_a_shape_has_a_pointer_for_every_fault(messages: object, pointers: list[str]) -> None:
    error = refused(ValidationError(messages))  # type: ignore[arg-type]
    assert [fault.pointer for fault in error.faults] == pointers
    assert {fault.code for fault in error.faults} == {"schema"}


def test_a_problem_is_json_in_utf8() -> None:
    answer = _failed(errors.InvalidContentError("Müsli ½"))
    assert json.loads(answer.data.decode("utf-8"))["detail"] == "Müsli ½"
