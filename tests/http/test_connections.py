"""What a connection meets on a real gunicorn: a refused body is never taken for the next request."""

from __future__ import annotations

import json
import socket
from collections.abc import Iterator
from dataclasses import dataclass
from http.client import HTTPConnection, HTTPResponse

import pytest

from tests.live import serving
from tests.plant import open_plant, request_for

LIMIT = 20_000
GOOD = json.dumps(request_for("PX-2601"))
SMUGGLED = "GET /v1/specifications HTTP/1.1\r\nHost: 127.0.0.1\r\n\r\n"


@dataclass(frozen=True)
class Line:
    host: str
    port: int
    tokens: dict[str, str]

    def connection(self) -> HTTPConnection:
        return HTTPConnection(self.host, self.port, timeout=20)

    def headers(self, who: str = "pipeline", **more: str) -> dict[str, str]:
        named = {name.replace("_", "-"): value for name, value in more.items()}
        return {"Authorization": f"Bearer {self.tokens[who]}", "Content-Type": "application/json", **named}

    def stored(self) -> int:
        connection = self.connection()
        connection.request("GET", "/v1/decisions?limit=500", headers=self.headers("auditor"))
        items = json.loads(connection.getresponse().read())["items"]
        connection.close()
        return len(items)

    def raw(self, request: bytes) -> bytes:
        with socket.create_connection((self.host, self.port), timeout=20) as connection:
            connection.sendall(request)
            connection.shutdown(socket.SHUT_WR)
            return b"".join(iter(lambda: connection.recv(65536), b""))

    def head(self, *lines: str, close: bool = True) -> bytes:
        start = ["POST /v1/decisions HTTP/1.1", "Host: 127.0.0.1", f"Connection: {'close' if close else 'keep-alive'}"]
        named = [f"{name}: {value}" for name, value in self.headers().items()]
        return "\r\n".join([*start, *named, *lines, "", ""]).encode()


@pytest.fixture(scope="module")
def line(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Line]:
    folder = tmp_path_factory.mktemp("line")
    opened = open_plant(folder).approved()
    opened.site.store.close()
    with serving(folder, BODY_LIMIT=str(LIMIT)) as (address, _):
        host, port = address.removeprefix("http://").split(":")
        yield Line(host, int(port), dict(opened.tokens))


def _answered(connection: HTTPConnection) -> tuple[int, str]:
    answer: HTTPResponse = connection.getresponse()
    body = answer.read().decode()
    return answer.status, body


@pytest.mark.parametrize(
    ("who", "media_type", "padding", "status"),
    [
        ("auditor", "application/json", 0, 403),
        ("pipeline", "text/plain", 0, 415),
        ("pipeline", "application/json", LIMIT, 413),
    ],
)
def test_a_refused_body_is_not_read_as_the_next_request(
    line: Line, who: str, media_type: str, padding: int, status: int
) -> None:
    connection = line.connection()
    body = " " * padding + SMUGGLED + GOOD
    connection.request("POST", "/v1/decisions", body, line.headers(who, Content_Type=media_type))
    assert _answered(connection)[0] == status
    connection.request("GET", "/livez")
    assert _answered(connection) == (200, "live\n")
    connection.close()


def test_a_connection_without_a_token_is_refused_before_its_body_is_read(line: Line) -> None:
    before = line.stored()
    connection = line.connection()
    connection.request("POST", "/v1/decisions", GOOD, {"Content-Type": "application/json"})
    assert _answered(connection)[0] == 401
    connection.close()
    assert line.stored() == before


@pytest.mark.parametrize(
    "chunks",
    [
        b"zz\r\n{}\r\n0\r\n\r\n",
        b"-5\r\n{}\r\n0\r\n\r\n",
        b"2\r\n{}xx\r\n0\r\n\r\n",
        b"0x2\r\n{}\r\n0\r\n\r\n",
        b"ffffffffffffffffff\r\n{}\r\n0\r\n\r\n",
        b"\r\n\r\n",
    ],
)
def test_chunks_that_are_none_are_refused(line: Line, chunks: bytes) -> None:
    before = line.stored()
    answer = line.raw(line.head("Transfer-Encoding: chunked", close=False) + chunks + SMUGGLED.encode())
    assert answer.startswith(b"HTTP/1.1 400")
    assert b"application/problem+json" in answer
    assert b"specifications" not in answer
    assert line.stored() == before


@pytest.mark.parametrize("size", [1, 7, 4096])
def test_chunks_of_any_size_make_one_body(line: Line, size: int) -> None:
    connection = line.connection()
    pieces = (GOOD[i : i + size].encode() for i in range(0, len(GOOD), size))
    connection.request("POST", "/v1/decisions", pieces, line.headers(), encode_chunked=True)
    status, body = _answered(connection)
    connection.close()
    assert (status, json.loads(body)["outcome"]) == (201, "accepted")


@pytest.mark.parametrize("excess", [1, 2, 5000])
def test_chunks_above_the_limit_are_refused_however_they_are_cut(line: Line, excess: int) -> None:
    before = line.stored()
    connection = line.connection()
    pieces = iter([GOOD.encode(), b" " * (LIMIT - len(GOOD)), b" " * excess])
    connection.request("POST", "/v1/decisions", pieces, line.headers(), encode_chunked=True)
    status, body = _answered(connection)
    connection.close()
    assert (status, json.loads(body)["code"]) == (413, "content-too-large")
    assert line.stored() == before


def test_chunks_of_exactly_the_limit_are_taken(line: Line) -> None:
    connection = line.connection()
    pieces = iter([GOOD.encode(), b" " * (LIMIT - len(GOOD))])
    connection.request("POST", "/v1/decisions", pieces, line.headers(), encode_chunked=True)
    assert _answered(connection)[0] == 201
    connection.close()


@pytest.mark.parametrize(
    "lines",
    [
        ["Content-Length: 2", "Content-Length: 3"],
        ["Content-Length: -2"],
        ["Content-Length: 2x"],
        ["Transfer-Encoding: gzip, identity"],
        ["Transfer-Encoding: chunked, chunked"],
        ["X: " + "a" * 9000],
    ],
)
def test_a_head_of_two_meanings_is_refused(line: Line, lines: list[str]) -> None:
    before = line.stored()
    answer = line.raw(line.head(*lines) + GOOD.encode())
    assert answer.split(b" ", 2)[1][:1] in (b"4", b"5")
    assert b"Traceback" not in answer
    assert line.stored() == before


def test_two_requests_on_one_connection_are_answered_in_turn(line: Line) -> None:
    request = line.head(f"Content-Length: {len(GOOD)}", close=False) + GOOD.encode()
    last = line.head(f"Content-Length: {len(GOOD)}") + GOOD.encode()
    answer = line.raw(request + last)
    assert answer.count(b"HTTP/1.1 201") == 2


def test_a_client_that_asks_whether_to_go_on_is_answered(line: Line) -> None:
    with socket.create_connection((line.host, line.port), timeout=20) as connection:
        connection.sendall(line.head(f"Content-Length: {len(GOOD)}", "Expect: 100-continue"))
        assert connection.recv(65536).startswith(b"HTTP/1.1 100")
        connection.sendall(GOOD.encode())
        assert connection.recv(65536).startswith(b"HTTP/1.1 201")
