"""Everything has a limit: what is above it is refused and told so, and nobody else suffers."""

from __future__ import annotations

import contextlib
import gzip
import json
import socket
import threading
import time
from collections.abc import Iterator
from concurrent.futures import FIRST_COMPLETED, Future, ThreadPoolExecutor, wait
from pathlib import Path
from typing import Any

import pytest
import redis

from service.store.embedded import EmbeddedStore
from service.web.line import EARLY
from tests.processes import PATIENCE, eventually
from tests.scenarios.running import KEY, Answer, Service, serving

Row = dict[str, Any]

POSTING, WAITING, THREADS = 2, 2, 3
LIMITS = {
    "WORKERS": "1",
    "MAX_POSTING": str(POSTING),
    "MAX_WAITING": str(WAITING),
    "THREADS": str(THREADS),
    "MAX_BODY": "400000",
    "MAX_EXPANDED": "500000",
    "MAX_ROWS": "60",
    "MAX_STREAMS": "30",
    "MAX_FULL": "3",
}
PATIENT = {"QUEUE_TIMEOUT": "120", "CALLER_TIMEOUT": "60", "STORE_TIMEOUT": "60", "TIMEOUT": "600"}
HASTY = {"QUEUE_TIMEOUT": "0.2", "CALLER_TIMEOUT": "0.3", "STORE_TIMEOUT": "1", "MAX_POSTING": "1"}


@pytest.fixture(scope="module")
def store(store_binary: Path, tmp_path_factory: pytest.TempPathFactory) -> Iterator[EmbeddedStore]:
    with EmbeddedStore(tmp_path_factory.mktemp("limits"), store_binary) as store:
        yield store


@pytest.fixture(scope="module")
def service(store: EmbeddedStore, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Service]:
    folder = tmp_path_factory.mktemp("patient")
    with serving(store.url, folder, **LIMITS, **PATIENT) as service:
        yield service


@pytest.fixture(scope="module")
def hasty(store: EmbeddedStore, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Service]:
    folder = tmp_path_factory.mktemp("hasty")
    with serving(store.url, folder, **{**LIMITS, **HASTY}) as service:
        yield service


@pytest.fixture
def client(store: EmbeddedStore) -> Iterator[redis.Redis]:
    with redis.Redis.from_url(store.url) as client:
        yield client


@contextlib.contextmanager
def paused(client: redis.Redis) -> Iterator[None]:
    """Let no write of the store end."""
    client.client_pause(int(PATIENCE * 1000), all=False)
    try:
        yield
    finally:
        client.client_unpause()


def rows(merchant: str, n: int = 10) -> list[Row]:
    return [{"merchant": merchant, "amount": 1000 + i, "id": f"{merchant}-{i}"} for i in range(n)]


def send(service: Service, sent: list[Row], query: str = "") -> Answer:
    return service.send_json("POST", f"/v1/batches{query}", {"transactions": sent})


def packed(service: Service, body: bytes) -> Answer:
    headers = {"Content-Type": "application/json", "Content-Encoding": "gzip"}
    return service.send("POST", "/v1/batches", gzip.compress(body), headers)


def refused(answer: Answer, status: int, said: str) -> None:
    assert answer.status == status, answer.text
    assert answer.headers["Content-Type"] == "application/problem+json"
    assert said in answer.document["detail"].replace(",", "")
    assert answer.headers["X-Request-Id"]
    if status == 503:
        assert int(answer.headers["Retry-After"]) >= 1


def head(length: int, *more: str, path: str = "/v1/batches", key: str = KEY) -> bytes:
    lines = [
        f"POST {path} HTTP/1.1",
        "Host: here",
        f"Authorization: Bearer {key}",
        "Content-Type: application/json",
        f"Content-Length: {length}",
        *more,
    ]
    return "".join(f"{line}\r\n" for line in lines).encode() + b"\r\n"


@contextlib.contextmanager
def callers(service: Service, number: int, said: bytes) -> Iterator[list[socket.socket]]:
    """Open connections on which something is said, and then nothing more."""
    with contextlib.ExitStack() as open_:
        lines = []
        for _ in range(number):
            line = socket.create_connection(("127.0.0.1", service.port), timeout=PATIENCE)
            lines.append(open_.enter_context(line))
            line.sendall(said)
        yield lines


def heard(line: socket.socket) -> bytes:
    """Return all that is answered until the service hangs up."""
    found = b""
    while part := line.recv(1 << 16):
        found += part
    return found


def answered(line: socket.socket) -> tuple[int, dict[str, Any]]:
    """Return status and document of the last answer, which says that it is the last."""
    top, _, body = heard(line).partition(b"\r\n\r\n")
    assert b"connection: close" in top.lower()
    return int(top.split()[1]), json.loads(body)


def test_a_batch_above_each_limit_is_413_with_the_limit(service: Service) -> None:
    refused(send(service, rows("many", 61)), 413, "60 transactions")
    assert service.post(rows("enough", 60))["accepted"] == 60
    wide = [{"merchant": f"wide-{i}", "amount": 5, "id": "a"} for i in range(31)]
    refused(send(service, wide), 413, "30")
    assert service.post(wide[:30])["accepted"] == 30
    refused(send(service, wide[:4], "?reply=full"), 413, "3 streams")
    assert len(service.post(wide[:3], "?reply=full")["merchants"]) == 3
    spaces = {"Content-Type": "application/json"}
    refused(service.send("POST", "/v1/batches", b" " * 400_001, spaces), 413, "400000 bytes")
    refused(packed(service, b" " * 500_001), 413, "500000 bytes")
    refused(packed(service, b" " * (100 << 20)), 413, "500000 bytes")
    deep = b'{"transactions": [{"merchant": ' + b"[" * 100_000
    refused(packed(service, deep), 400, "nested too deeply")
    refused(packed(service, b"[" + b"[]," * 160_000 + b"[]]"), 422, "")


def test_a_body_that_is_too_long_is_refused_before_it_comes(service: Service) -> None:
    with callers(service, 1, head(10**9) + b"x" * EARLY) as (line,):
        status, problem = answered(line)
    assert (status, problem["status"]) == (413, 413)
    assert "400,000" in problem["detail"]


@pytest.mark.parametrize(
    "longest", [{"id": "i" * 64, "merchant": "m" * 64, "flow": "sale"}, {"id": "i" * 64}]
)
def test_names_and_ids_have_at_most_64_characters(service: Service, longest: Row) -> None:
    row = {"merchant": "names", "amount": 5, **longest}
    assert service.post([row])["accepted"] == 1
    for name in longest:
        answer = send(service, [{**row, name: row[name] + "x" * 64}])
        refused(answer, 422, "")
        assert [e["pointer"] for e in answer.document["errors"]] == [f"/transactions/0/{name}"]


def test_a_head_without_end_is_hung_up_on(service: Service) -> None:
    with callers(service, 1, b"GET / HTTP/1.1\r\n" + b"X-More: more\r\n" * 5000) as (line,):
        assert heard(line) == b""
    assert service.send("GET", "/health/live", headers={"X": "x" * 8_000}).status == 200
    assert service.send("GET", "/health/live", headers={"X": "x" * 9_000}).status == 431


def test_posts_above_what_may_wait_are_refused_and_those_that_wait_are_counted(
    service: Service, client: redis.Redis
) -> None:
    more = 5
    with ThreadPoolExecutor(POSTING + WAITING + more) as pool:
        with paused(client):
            posts: set[Future[Answer]] = {
                pool.submit(send, service, rows(f"queue-{i}"))
                for i in range(POSTING + WAITING + more)
            }
            ended: set[Future[Answer]] = set()
            while len(ended) < more:
                now, posts = wait(posts, PATIENCE, FIRST_COMPLETED)
                assert now, "nobody is refused"
                ended |= now
            # Neither readers nor health wait for those who post.
            for _ in range(3):
                assert service.get("/v1/policies")["policies"]
                assert service.get("/health/live")["status"] == "pass"
            # And no body is read for which there is no room.
            with callers(service, 1, head(300_000) + b" " * EARLY) as (line,):
                status, problem = answered(line)
            assert (status, problem["status"]) == (503, 503)
        for post in ended:
            refused(post.result(), 503, "wait already")
        assert len(posts) == POSTING + WAITING
        for post in posts:
            assert post.result().document["accepted"] == 10
    for i in range(POSTING + WAITING + more):
        service.post(rows(f"queue-{i}"))
        assert service.get(f"/v1/merchants/queue-{i}")["count"] == 10


def test_waiting_and_the_store_have_time_outs_of_their_own(
    hasty: Service, client: redis.Redis
) -> None:
    with paused(client), ThreadPoolExecutor(2) as pool:
        answers = list(pool.map(lambda name: send(hasty, rows(name)), ["hasty-1", "hasty-2"]))
    answers.sort(key=lambda answer: "place" not in answer.text)
    refused(answers[0], 503, "No place became free in time")
    refused(answers[1], 503, "send")
    assert hasty.post(rows("hasty-1"))["exactly_once"]


def test_a_store_that_is_busy_with_a_script_is_503_and_nothing_is_counted(
    service: Service, client: redis.Redis
) -> None:
    service.post(rows("busy", 3))
    client.config_set("busy-reply-threshold", 1)

    def run() -> None:
        with (
            contextlib.suppress(redis.ResponseError),
            redis.Redis(connection_pool=client.connection_pool) as other,
        ):
            other.eval("while true do end", 0)

    def busy() -> bool:
        try:
            client.ping()
        except redis.ResponseError as error:
            return "BUSY" in str(error)
        return False

    script = threading.Thread(target=run)
    script.start()
    try:
        eventually(busy, "a busy store")
        refused(send(service, rows("busy", 20)), 503, "again")
        refused(service.send("GET", "/v1/merchants/busy"), 503, "again")
    finally:
        client.script_kill()
        script.join()
    receipt = service.post(rows("busy", 20))
    assert (receipt["accepted"], receipt["duplicates"]) == (17, 3)


CHUNKED = head(1).replace(b"Content-Length: 1", b"Transfer-Encoding: chunked")
SLOW = {
    "empty lines": b"\r\n\r\n",
    "nothing": b"",
    "half a head": head(100)[:40],
    "half a body": head(100) + b"{",
    "half a body, without a key": head(100, key="none") + b"{",
    "half a body, as asked for": head(100, "Expect: 100-continue"),
    "half a check": head(100, "Expect: 100-continue", path="/v1/checks"),
    "half a chunk": head(1).replace(b"Content-Length: 1", b"Transfer-Encoding: chunked")
    + b"9\r\n{",
    "half a long body": head(399_999) + b" " * EARLY,
    "half a long body, without a key": head(399_999, key="none") + b" " * EARLY,
    "nonsense": b"GET / HTTP/1.1\r\nnonsense\r\n\r\n",
    "a short request": b"GET /health/live HTTP/1.1\r\nHost: here\r\n\r\n",
    "requests whose answers are not taken": (
        b"GET /v1/openapi.json HTTP/1.1\r\nHost: here\r\n\r\n" * 200
    ),
}


@pytest.mark.parametrize("said", SLOW)
def test_slow_callers_keep_nobody_else_out(service: Service, said: str) -> None:
    """More of them than there are threads, and each may take longer than this test."""
    threads = POSTING + THREADS + 2 * WAITING + 4
    with callers(service, 2 * threads, SLOW[said]):
        for i in range(3):
            service.reconnect()
            posted: Answer | None = None
            while posted is None or posted.status == 503:  # as one who posts is told to
                posted = send(service, rows(f"slow-{i}"))
            assert posted.status == 200, posted.text
            live = service.send("GET", "/health/live")
            assert live.status == 200


@pytest.mark.parametrize("said", ["nothing", "half a body", "a short request"])
def test_more_connections_than_a_worker_keeps_leave_room_for_who_comes(
    service: Service, said: str
) -> None:
    with callers(service, 560, SLOW[said]):
        service.reconnect()
        assert service.post(rows("crowd"))["exactly_once"]


def test_a_body_that_comes_too_slowly_is_408(hasty: Service) -> None:
    for said in ("half a body", "half a body, as asked for", "half a chunk", "half a long body"):
        with callers(hasty, 1, SLOW[said]) as (line,):
            found = heard(line).removeprefix(b"HTTP/1.1 100 Continue\r\n\r\n")
        top, _, body = found.partition(b"\r\n\r\n")
        assert top.split()[1] == b"408", said
        assert b"application/problem+json" in top
        assert "too slowly" in json.loads(body)["detail"]
    assert hasty.post(rows("after"))["exactly_once"]


@pytest.mark.parametrize("said", ["nothing", "half a head"])
def test_a_head_that_comes_too_slowly_is_hung_up_on(hasty: Service, said: str) -> None:
    with callers(hasty, 3, SLOW[said]) as lines:
        assert [heard(line) for line in lines] == [b""] * 3


def test_a_body_byte_by_byte_has_no_more_time(hasty: Service) -> None:
    with callers(hasty, 1, SLOW["half a body"]) as (line,):
        found: list[tuple[int, Any]] = []
        listener = threading.Thread(target=lambda: found.append(answered(line)))
        listener.start()
        with contextlib.suppress(OSError):
            for _ in range(90):
                line.sendall(b" ")
                time.sleep(0.02)
        listener.join()
    assert found[0][0] == 408


def test_who_sends_several_requests_at_once_gets_all_answers_in_order(service: Service) -> None:
    body = json.dumps({"transactions": rows("pipelined")}).encode()
    post = head(len(body)) + body
    last = b"GET /health/live HTTP/1.1\r\nHost: here\r\nConnection: close\r\n\r\n"
    said = post * 3 + last
    with callers(service, 1, said[:700]) as (line,):
        line.sendall(said[700:])
        found = heard(line)
    assert found.count(b"HTTP/1.1 200 OK") == 4
    assert found.count(b'"accepted":10') + found.count(b'"duplicates":10') == 3
    assert found.endswith(b'{"status":"pass"}')
