"""What a request meets before a view sees it."""

from __future__ import annotations

import json
from io import BytesIO

import pytest
from werkzeug.test import TestResponse

from service.errors import MalformedRequestError, NotFoundError
from service.http.guards import refuse_query, refuse_unreadable
from tests.unit.http.small import LIMIT, small_app

GOOD = b'{"lot": "PX-2601"}'


def _post(body: bytes, content_type: str = "application/json", **headers: str) -> TestResponse:
    named = {name.replace("_", "-"): value for name, value in headers.items()}
    return small_app().test_client().post("/echo", data=body, content_type=content_type, headers=named)


def _chunked(body: bytes) -> TestResponse:
    return _streamed(body, HTTP_TRANSFER_ENCODING="chunked")


def _streamed(body: bytes, **environment: str) -> TestResponse:
    """Send a body as a server hands it over that knows where it ends, whatever its length is said to be."""
    given = {"wsgi.input_terminated": True, "CONTENT_TYPE": "application/json", **environment}
    return small_app().test_client().post("/echo", input_stream=BytesIO(body), environ_overrides=given)


def _pointers(answer: TestResponse) -> list[str]:
    return [fault["pointer"] for fault in answer.json["errors"]]


def test_a_good_body_reaches_the_view_whole() -> None:
    answer = _post(b'{"lot": "PX-2601", "rows": [[1, null]], "inner": {"a/b~c": 3}}')
    assert answer.status_code == 200
    assert answer.json["body"] == {"lot": "PX-2601", "rows": [[1.0, None]], "inner": {"a/b~c": 3}}


@pytest.mark.parametrize("media_type", ["application/json; charset=utf-8", "Application/JSON", "application/json;q=1"])
def test_parameters_of_the_media_type_do_no_harm(media_type: str) -> None:
    assert _post(GOOD, media_type).status_code == 200


@pytest.mark.parametrize(
    "media_type", ["", "text/plain", "text/json", "application/problem+json", "application/x-ndjson", "json", "*/*"]
)
def test_another_media_type_is_refused_with_the_one_to_send(media_type: str) -> None:
    answer = _post(GOOD, media_type)
    assert (answer.status_code, answer.json["code"]) == (415, "unsupported-media-type")
    assert "Send the body as application/json" in answer.json["detail"]


@pytest.mark.parametrize(("encoding", "status"), [("gzip", 415), ("identity", 200), ("br, gzip", 415)])
def test_a_body_comes_as_it_is(encoding: str, status: int) -> None:
    assert _post(GOOD, Content_Encoding=encoding).status_code == status


@pytest.mark.parametrize("send", [_post, _chunked])
@pytest.mark.parametrize(
    ("length", "status"), [(LIMIT - 1, 200), (LIMIT, 200), (LIMIT + 1, 413), (LIMIT + 2, 413), (9999, 413)]
)
def test_a_body_is_taken_up_to_the_limit_and_never_cut(send: object, length: int, status: int) -> None:
    assert callable(send)
    answer = send(GOOD + b" " * (length - len(GOOD)))
    assert answer.status_code == status
    if status == 200:
        assert answer.json["length"] == length
    else:
        assert f"{LIMIT} bytes" in answer.json["detail"]


def test_a_chunked_body_whose_beginning_is_a_document_is_not_taken_for_it() -> None:
    assert _chunked(GOOD + b" " * (LIMIT - len(GOOD)) + b'{"lot": "other"}').status_code == 413


def test_a_body_shorter_than_announced_is_refused() -> None:
    answer = _streamed(GOOD, CONTENT_LENGTH=str(len(GOOD) + 1))
    assert (answer.status_code, answer.mimetype) == (400, "application/problem+json")


@pytest.mark.parametrize(
    ("body", "word"),
    [
        (b"", "not one JSON document"),
        (b"null", "not an object"),
        (b'"lot"', "not an object"),
        (b"[]", "not an object"),
        (GOOD + b"}", "Extra data"),
        (GOOD * 2, "Extra data"),
        (b'{"lot": "a", "lot": "a"}', "'lot' stands twice"),
        (b'{"lot": "a", "inner": {"a/b~c": 1, "a/b~c": 2}}', "stands twice"),
        (b'{"lot": "a", "\\u006cot": "b"}', "'lot' stands twice"),
        (b'{"lot": NaN}', "NaN"),
        (b'{"lot": Infinity}', "Infinity"),
        (b'{"share": 1e999}', "larger than a double"),
        (b'{"lot": "\\ud83c"}', "surrogate"),
        (b'{"\\udf5e": 1}', "surrogate"),
        (b'{"lot": "\xff"}', "UTF-8"),
        (b'{"lot": "\xed\xa0\xbc"}', "UTF-8"),
        (b"\xef\xbb\xbf" + GOOD, "byte order mark"),
        (b"{'lot': 'a'}", "not one JSON document"),
        (b'{"lot": "a",}', "not one JSON document"),
        (b'{"share": 01}', "not one JSON document"),
        (b'{"share": .5}', "not one JSON document"),
        (b'{"lot": "a\nb"}', "not one JSON document"),
        (b"[" * LIMIT, "nested deeper"),
    ],
)
def test_what_is_not_one_strict_json_object_is_malformed(body: bytes, word: str) -> None:
    answer = _post(body)
    assert (answer.status_code, answer.json["code"]) == (400, "malformed-request")
    assert word in answer.json["detail"]


def test_every_fault_is_told_with_its_pointer() -> None:
    answer = _post(b'{"rows": [[1, "2"], [true, null]], "share": 1, "inner": {"a/b~c": 1.5, "x/y": 0}, "lo~t": 0}')
    assert (answer.status_code, answer.json["code"]) == (422, "invalid-content")
    assert sorted(_pointers(answer)) == [
        "/inner/a~1b~0c",
        "/inner/x~1y",
        "/lot",
        "/lo~0t",
        "/rows/0/1",
        "/rows/1/0",
        "/share",
    ]
    assert "7 faults" in answer.json["detail"]


def test_each_pointer_leads_to_what_is_wrong() -> None:
    document = {"lot": 5, "rows": [[1, 2], [3, "4"]], "inner": {"a/b~c": "7"}}
    found = []
    for pointer in _pointers(_post(json.dumps(document).encode())):
        at: object = document
        for step in pointer[1:].split("/"):
            name = step.replace("~1", "/").replace("~0", "~")
            at = at[int(name)] if isinstance(at, list) else at[name]  # type: ignore[index]
        found.append(at)
    assert sorted(map(str, found)) == ["4", "5", "7"]


def test_a_number_that_cannot_be_kept_is_refused_where_it_stands() -> None:
    answer = _post(b'{"lot": "a", "rows": [[1, 0.10000000000000001]], "inner": {"a/b~c": 9007199254740991}}')
    [fault] = answer.json["errors"]
    assert (answer.status_code, fault["pointer"], fault["code"]) == (422, "/rows/0/1", "number-not-exact")
    assert "0.1" in fault["detail"]


# --- queries


def _list(query: str) -> TestResponse:
    return small_app().test_client().get(f"/list?{query}")


def test_a_query_is_read_by_its_shape() -> None:
    assert _list("outcome=accepted&limit=20").json == {"outcome": "accepted", "limit": 20}
    assert _list("").json == {}


@pytest.mark.parametrize(
    ("query", "word"),
    [
        ("outcom=accepted", "Did you mean 'outcome'?"),
        ("q=1", "Known are: limit, outcome."),
        ("outcome=accepted&outcome=rejected", "each query parameter once: outcome"),
        ("outcome=", "Give one of"),
        ("limit=1.0", "plain digits"),
        ("limit=1_0", "plain digits"),
        ("limit=99999999999999999999", "plain digits"),
    ],
)
def test_a_query_that_cannot_be_read_is_refused(query: str, word: str) -> None:
    answer = _list(query)
    assert (answer.status_code, answer.json["code"]) == (400, "malformed-request")
    assert word in answer.json["detail"]


def test_where_no_query_is_known_none_is_passed_over() -> None:
    with (
        small_app().test_request_context("/fail?dry_run=true&b=1"),
        pytest.raises(MalformedRequestError, match="dry_run, b"),
    ):
        refuse_query()
    with small_app().test_request_context("/fail"):
        refuse_query()


@pytest.mark.parametrize("parameter", ["a\x00b", "a\nb", "\u202e", "x" * 201, 10**250])
def test_a_path_that_no_name_can_be_leads_to_nothing(parameter: object) -> None:
    with pytest.raises(NotFoundError):
        refuse_unreadable(["premix-a", parameter])
    refuse_unreadable(["premix-a", 1, "Müsli 1"])


# --- what the client likes best


@pytest.mark.parametrize(
    ("accept", "given"),
    [
        (None, "text/plain"),
        ("", "text/plain"),
        ("*/*", "text/plain"),
        ("text/*", "text/plain"),
        ("text/csv", "text/csv"),
        ("text/plain;q=0.1, text/csv", "text/csv"),
        ("text/html, */*;q=0.1", "text/plain"),
        ("TEXT/CSV", "text/csv"),
    ],
)
def test_the_best_liked_type_is_given(accept: str | None, given: str) -> None:
    headers = {} if accept is None else {"Accept": accept}
    assert small_app().test_client().get("/either/x", headers=headers).mimetype == given


@pytest.mark.parametrize("accept", ["text/html", "text/plain;q=0", "garbage", "application/problem+json"])
def test_what_cannot_be_given_is_refused_with_what_can(accept: str) -> None:
    answer = small_app().test_client().get("/either/x", headers={"Accept": accept})
    assert (answer.status_code, answer.json["code"]) == (406, "not-acceptable")
    assert "text/plain, text/csv" in answer.json["detail"]
