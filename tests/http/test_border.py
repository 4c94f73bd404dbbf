"""What bad input meets, on a real gunicorn: a problem of its own, nothing stored, and a service that goes on."""

from __future__ import annotations

import json
import socket
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import pytest
import requests

from tests.live import serving
from tests.plant import open_plant, request_for

LIMIT = 20_000


@dataclass(frozen=True)
class Border:
    address: str
    tokens: dict[str, str]

    def post(self, body: bytes | Iterator[bytes], who: str = "pipeline", **headers: str) -> requests.Response:
        named = {name.replace("_", "-"): value for name, value in headers.items()}
        sent = {"Authorization": f"Bearer {self.tokens[who]}", "Content-Type": "application/json", **named}
        return requests.post(f"{self.address}/v1/decisions", data=body, headers=sent, timeout=20)

    def stored(self) -> int:
        sent = {"Authorization": f"Bearer {self.tokens['auditor']}"}
        return len(requests.get(f"{self.address}/v1/decisions", headers=sent, timeout=20).json()["items"])


@pytest.fixture(scope="module")
def border(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Border]:
    folder = tmp_path_factory.mktemp("border")
    opened = open_plant(folder).approved()
    opened.site.store.close()
    with serving(folder, BODY_LIMIT=str(LIMIT)) as (address, _):
        yield Border(address, dict(opened.tokens))


GOOD = json.dumps(request_for("PX-2601"))


def _changed(**batch: object) -> bytes:
    body = request_for("PX-2601")
    body["batch"].update(batch)
    return json.dumps(body).encode()


def _cell(text: str) -> bytes:
    return GOOD.replace("628.2", text, 1).encode()


@pytest.mark.parametrize(
    ("body", "status", "word"),
    [
        (b"", 400, "not one JSON document"),
        (GOOD[:-5].encode(), 400, "not one JSON document"),
        (GOOD.encode() + b"x", 400, "Extra data"),
        (b"\xef\xbb\xbf" + GOOD.encode(), 400, "byte order mark"),
        (GOOD.encode("utf-16"), 400, "not UTF-8"),
        (b"[1]", 400, "not an object"),
        (b"[" * 5000, 400, "nested deeper"),
        (GOOD.replace('"lot":', '"lot": "a", "lot":').encode(), 400, "'lot' stands twice"),
        (GOOD.replace("PX-2601", "\\ud800", 1).encode(), 400, "surrogate"),
        (_cell("NaN"), 400, "NaN"),
        (_cell("-Infinity"), 400, "-Infinity"),
        (_cell("1e400"), 400, "larger than a double"),
        (_cell("9" * 400), 400, "larger than a double"),
    ],
)
def test_what_is_not_strict_json_is_malformed(border: Border, body: bytes, status: int, word: str) -> None:
    answer = border.post(body)
    assert (answer.status_code, answer.headers["Content-Type"]) == (status, "application/problem+json")
    assert word in answer.json()["detail"]


@pytest.mark.parametrize(
    ("body", "pointer"),
    [
        (_cell('"628.2"'), "/batch/rows/0/0"),
        (_cell("true"), "/batch/rows/0/0"),
        (_cell('{"below": 600}'), "/batch/rows/0/0"),
        (_cell("628.20000000000000001"), "/batch/rows/0/0"),
        (_cell("1e101"), "/batch/rows/0/0"),
        (_cell("-1e101"), "/batch/rows/0/0"),
        (_cell("628.2, 1.0"), "/batch/rows/1"),
        (_changed(rows=[]), "/batch/rows"),
        (_changed(rows=[[]]), "/batch/rows"),
        (_changed(rows=1), "/batch/rows"),
        (_changed(lot=5), "/batch/lot"),
        (_changed(lot="a\nb"), "/batch/lot"),
        (_changed(lot=" "), "/batch/lot"),
        (_changed(lot="x" * 101), "/batch/lot"),
        (_changed(lots="a"), "/batch/lots"),
        (_changed(characteristics=[]), "/batch/characteristics"),
        (_changed(units=["a"]), "/batch/units"),
        (_changed(sequence=[1.0]), "/batch/sequence"),
        (_changed(sequence=["2026-12-01 07:00"] * 12), "/batch/sequence/0"),
        (b"{}", "/batch"),
    ],
)
def test_what_has_the_wrong_shape_is_refused_where_it_stands(border: Border, body: bytes, pointer: str) -> None:
    answer = border.post(body)
    assert answer.status_code == 422
    assert pointer in [fault["pointer"] for fault in answer.json()["errors"]]


def test_all_faults_come_at_once(border: Border) -> None:
    body = json.loads(GOOD)
    body["batch"]["rows"][0][0], body["batch"]["rows"][5][4] = "1", None
    body["batch"]["lot"], body["x"] = "", 1
    del body["batch"]["batch_id"]
    pointers = {fault["pointer"] for fault in border.post(json.dumps(body).encode()).json()["errors"]}
    assert pointers == {"/batch/rows/0/0", "/batch/lot", "/batch/batch_id", "/x"}


@pytest.mark.parametrize("media_type", ["text/plain", "application/x-www-form-urlencoded", "application/xml", ""])
def test_another_media_type_is_refused(border: Border, media_type: str) -> None:
    assert border.post(GOOD.encode(), Content_Type=media_type).status_code == 415


def test_a_compressed_body_is_refused(border: Border) -> None:
    assert border.post(GOOD.encode(), Content_Encoding="gzip").status_code == 415


def test_a_body_above_the_limit_is_refused(border: Border) -> None:
    answer = border.post(GOOD.encode() + b" " * LIMIT)
    assert (answer.status_code, answer.json()["code"]) == (413, "content-too-large")


def test_a_chunked_body_above_the_limit_is_refused_and_not_cut(border: Border) -> None:
    def chunks() -> Iterator[bytes]:
        # Cut at the limit, this would be a whole and valid document.
        yield GOOD.encode() + b" " * (LIMIT - len(GOOD))
        yield b"junk" * 10

    assert border.post(chunks()).status_code == 413


def test_a_chunked_body_below_the_limit_is_taken(border: Border) -> None:
    before = border.stored()
    assert border.post(iter([GOOD[:100].encode(), GOOD[100:].encode()])).status_code == 201
    assert border.stored() == before + 1


@pytest.mark.parametrize("key", ["", "x" * 256, "a\tb"])
def test_an_idempotency_key_that_is_none_is_refused(border: Border, key: str) -> None:
    assert border.post(GOOD.encode(), Idempotency_Key=key).status_code == 400


def _raw(border: Border, request: bytes) -> bytes:
    host, port = border.address.removeprefix("http://").split(":")
    with socket.create_connection((host, int(port)), timeout=10) as connection:
        connection.sendall(request)
        connection.shutdown(socket.SHUT_WR)
        answer = b""
        while block := connection.recv(65536):
            answer += block
    return answer


def _head(border: Border, *lines: str) -> bytes:
    start = ["POST /v1/decisions HTTP/1.1", "Host: 127.0.0.1", "Content-Type: application/json", "Connection: close"]
    return "\r\n".join([*start, f"Authorization: Bearer {border.tokens['pipeline']}", *lines, "", ""]).encode()


def test_a_body_shorter_than_announced_is_not_decided(border: Border) -> None:
    before = border.stored()
    _raw(border, _head(border, f"Content-Length: {len(GOOD) + 50}") + GOOD.encode())
    assert border.stored() == before


def test_a_chunked_body_that_is_cut_is_not_decided(border: Border) -> None:
    before = border.stored()
    chunk = f"{len(GOOD):x}\r\n{GOOD}\r\n".encode()
    answer = _raw(border, _head(border, "Transfer-Encoding: chunked") + chunk)
    assert not answer.startswith(b"HTTP/1.1 2")
    assert border.stored() == before


def test_two_lengths_are_refused(border: Border) -> None:
    answer = _raw(border, _head(border, f"Content-Length: {len(GOOD)}", "Transfer-Encoding: chunked") + GOOD.encode())
    assert answer.startswith(b"HTTP/1.1 400")


def test_after_all_of_it_nothing_is_stored_and_the_service_answers(border: Border) -> None:
    bad: list[Any] = [b"", b"[" * 5000, _cell("NaN"), _changed(rows=1), GOOD.encode() + b" " * LIMIT]
    before = border.stored()
    statuses = {border.post(body).status_code for body in bad}
    assert statuses <= {400, 413, 422}
    assert border.stored() == before
    assert requests.get(f"{border.address}/readyz", timeout=20).ok
    assert border.post(GOOD.encode()).status_code == 201
