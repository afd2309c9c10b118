"""The demo's connection, against a small real HTTP server that misbehaves on request."""

from __future__ import annotations

import gzip
import json
import threading
from collections.abc import Callable, Iterator
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer

import pytest

from service.demo.connection import ATTEMPTS, LONGEST_WAIT, Connection, Refused, Unreachable

Act = tuple[int, dict[str, str], bytes] | None
"""Status, headers and body of an answer; None hangs up without one."""

GOOD: Act = (200, {}, b'{"accepted": 1}')


class Stage(ThreadingHTTPServer):
    """Answers the n-th request with the n-th act, and any later one with the last."""

    daemon_threads = False

    def __init__(self) -> None:
        super().__init__(("127.0.0.1", 0), Player)
        self.acts: list[Act] = []
        self.heard: list[tuple[str, str, dict[str, str], bytes]] = []
        self.peers: set[int] = set()

    @property
    def url(self) -> str:
        return f"http://127.0.0.1:{self.server_port}"


class Player(BaseHTTPRequestHandler):
    protocol_version = "HTTP/1.1"
    server: Stage

    def do_POST(self) -> None:
        body = self.rfile.read(int(self.headers.get("Content-Length", 0)))
        stage = self.server
        act = stage.acts[min(len(stage.heard), len(stage.acts) - 1)]
        stage.heard.append((self.command, self.path, dict(self.headers), body))
        stage.peers.add(self.client_address[1])
        if act is None:
            self.close_connection = True
            return
        status, headers, content = act
        self.send_response(status)
        for name, value in headers.items():
            self.send_header(name, value)
        self.send_header("Content-Length", str(len(content)))
        self.end_headers()
        self.wfile.write(content)

    def do_GET(self) -> None:
        self.do_POST()

    def log_message(self, format: str, *args: object) -> None:
        """Keep the test's output clean."""


@pytest.fixture
def stage() -> Iterator[Stage]:
    server = Stage()
    thread = threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.01})
    thread.start()
    yield server
    server.shutdown()
    thread.join()
    server.server_close()


@pytest.fixture
def waits() -> list[float]:
    return []


@pytest.fixture
def connect(stage: Stage, waits: list[float]) -> Iterator[Callable[[], Connection]]:
    opened: list[Connection] = []

    def connect() -> Connection:
        opened.append(Connection(stage.url, "secret", sleep=waits.append))
        return opened[-1]

    yield connect
    for connection in opened:
        connection.__exit__(None, None, None)


def test_a_post_is_compressed_json_with_the_key(stage, connect) -> None:
    stage.acts = [GOOD]
    assert connect().post("/v1/batches", {"transactions": []}) == {"accepted": 1}
    method, path, headers, body = stage.heard[0]
    assert (method, path) == ("POST", "/v1/batches")
    assert headers["Authorization"] == "Bearer secret"
    assert headers["Content-Encoding"] == "gzip"
    assert json.loads(gzip.decompress(body)) == {"transactions": []}


def test_one_connection_serves_many_requests(stage, connect) -> None:
    stage.acts = [GOOD]
    connection = connect()
    for _ in range(5):
        connection.post("/v1/batches", {})
    connection.get("/v1/alarms")
    assert len(stage.heard) == 6
    assert len(stage.peers) == 1


def test_a_path_before_v1_is_kept(stage) -> None:
    stage.acts = [GOOD]
    with Connection(stage.url + "/tally/", "secret") as connection:
        connection.get("/v1/alarms")
    assert stage.heard[0][1] == "/tally/v1/alarms"


@pytest.mark.parametrize("status", [429, 503])
def test_busy_waits_as_long_as_asked_and_sends_the_same_again(
    stage, connect, waits, status
) -> None:
    stage.acts = [(status, {"Retry-After": "7"}, b""), GOOD]
    assert connect().post("/v1/batches", {"a": 1}) == {"accepted": 1}
    assert waits == [7.0]
    assert stage.heard[0][3] == stage.heard[1][3]


def test_an_endless_wait_is_cut(stage, connect, waits) -> None:
    stage.acts = [(503, {"Retry-After": "86400"}, b""), GOOD]
    connect().post("/v1/batches", {})
    assert waits == [LONGEST_WAIT]


def test_a_date_in_retry_after_falls_back_to_growing_waits(stage, connect, waits) -> None:
    busy = (503, {"Retry-After": "Wed, 21 Oct 2026 07:28:00 GMT"}, b"")
    stage.acts = [busy, busy, busy, GOOD]
    connect().post("/v1/batches", {})
    assert waits == sorted(waits)
    assert waits[0] < waits[1] < waits[2]


def test_a_lost_connection_is_opened_again(stage, connect) -> None:
    stage.acts = [GOOD, None, None, GOOD]
    connection = connect()
    connection.post("/v1/batches", {"a": 1})
    assert connection.post("/v1/batches", {"a": 2}) == {"accepted": 1}
    assert len(stage.heard) == 4


def test_it_gives_up_in_the_end(stage, connect, waits) -> None:
    stage.acts = [(503, {}, b"")]
    with pytest.raises(Unreachable, match="503"):
        connect().get("/v1/alarms")
    assert len(stage.heard) == ATTEMPTS
    assert len(waits) == ATTEMPTS - 1
    assert max(waits) <= LONGEST_WAIT


def test_a_refusal_is_final_and_says_why(stage, connect, waits) -> None:
    problem = {
        "title": "Invalid",
        "status": 422,
        "detail": "1 row is invalid",
        "errors": [{"pointer": "/transactions/17/amount", "detail": "must be an integer"}],
    }
    stage.acts = [(422, {}, json.dumps(problem).encode())]
    with pytest.raises(Refused, match="1 row is invalid; /transactions/17/amount") as caught:
        connect().post("/v1/batches", {})
    assert caught.value.status == 422
    assert waits == []
    assert len(stage.heard) == 1


def test_an_answer_that_is_not_json_is_refused(stage, connect) -> None:
    stage.acts = [(200, {}, b"<html>")]
    with pytest.raises(Refused, match="not JSON"):
        connect().get("/v1/alarms")


@pytest.mark.parametrize("url", ["127.0.0.1:8080", "ftp://127.0.0.1", "http://"])
def test_an_address_that_is_none_is_refused(url: str) -> None:
    with pytest.raises(ValueError, match="address"):
        Connection(url, "secret")
