"""The store goes away and comes back: nothing is lost, nothing is doubled, and callers are told."""

from __future__ import annotations

import contextlib
import os
import signal
import sys
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

from service.store.catalogue import FRESH_SECONDS
from service.store.script import APPEND
from tests.processes import eventually
from tests.scenarios.running import Answer, Service, StoreServer, serving
from tests.store.line import BadLine

Row = dict[str, Any]


def lose_replies(line: BadLine, times: int, then: Callable[[], object] = lambda: None) -> None:
    """Lose the replies to the next appends, which the store has done; then do something."""
    line.times, line.then = times, then
    line.losing = APPEND.sha.encode()


def lost(line: BadLine) -> bool:
    return not line.losing


@pytest.fixture(scope="module")
def store(store_binary: Path, tmp_path_factory: pytest.TempPathFactory) -> Iterator[StoreServer]:
    store = StoreServer(tmp_path_factory.mktemp("outage"), store_binary)
    store.start()
    yield store
    store.kill()


@pytest.fixture(scope="module")
def line(store: StoreServer) -> Iterator[BadLine]:
    with BadLine(store.folder / "line.sock", store.url) as line:
        yield line


@pytest.fixture(scope="module")
def service(store: StoreServer, line: BadLine) -> Iterator[Service]:
    with serving(line.url, store.folder, LOG_LEVEL="error") as service:
        service.put("/v1/policies/by-law", {"reference": "law"})
        service.put("/v1/merchants/cheat", {"policy": "by-law"})
        time.sleep(FRESH_SECONDS + 0.2)  # until the other worker must ask again
        yield service


@pytest.fixture(autouse=True)
def running(store: StoreServer) -> Iterator[None]:
    """Leave the store running to the next test."""
    yield
    assert store.process is not None
    if store.process.poll() is not None:
        store.start()


def rows(merchant: str, n: int = 40, start: int = 0) -> list[Row]:
    return [
        {"merchant": merchant, "amount": 1000 + i, "currency": "EUR", "id": f"{merchant}-{i}"}
        for i in range(start, start + n)
    ]


def send(service: Service, sent: list[Row]) -> Answer:
    return service.send_json("POST", "/v1/batches", {"transactions": sent})


def count(service: Service, merchant: str) -> int:
    return int(service.get(f"/v1/merchants/{merchant}")["count"])


def ready(service: Service) -> Answer:
    return service.send("GET", "/health/ready", headers={"Authorization": ""})


def assert_told_to_come_back(answer: Answer) -> None:
    assert answer.status == 503
    assert answer.headers["Content-Type"] == "application/problem+json"
    assert int(answer.headers["Retry-After"]) >= 1
    assert answer.document["status"] == 503
    assert answer.document["title"] == "Service Unavailable"
    assert answer.headers["X-Request-Id"]


def test_outage_is_told_and_the_same_post_counts_once_afterwards(
    service: Service, store: StoreServer
) -> None:
    assert send(service, rows("harbour")).document["accepted"] == 40
    assert ready(service).document["status"] in ("pass", "warn")
    assert send(service, rows("harbour", 40)).document["durability"] == "always"

    store.kill()
    assert_told_to_come_back(send(service, rows("harbour", 60)))
    for path in ("/v1/merchants", "/v1/merchants/harbour", "/v1/alarms"):
        assert_told_to_come_back(service.send("GET", path))
    unready = ready(service)
    assert (unready.status, unready.document["status"]) == (503, "fail")
    assert {"name": "store", "status": "fail"}.items() <= unready.document["checks"][0].items()
    assert int(unready.headers["Retry-After"]) >= 1
    live = service.send("GET", "/health/live", headers={"Authorization": ""})
    assert (live.status, live.document["status"]) == (200, "pass")
    amounts = {"amounts": [100, 200], "currency": "EUR"}
    assert service.send_json("POST", "/v1/checks", amounts).status == 200  # needs no store

    store.start()
    eventually(lambda: ready(service).status == 200, "readiness")
    receipt = service.post(rows("harbour", 60))
    assert (receipt["accepted"], receipt["duplicates"]) == (20, 40)
    assert service.post(rows("harbour", 60))["duplicates"] == 60
    assert count(service, "harbour") == 60


@pytest.mark.skipif(sys.platform != "linux", reason="needs Linux: processes under /proc")
def test_worker_that_is_replaced_during_an_outage_comes_up(
    service: Service, store: StoreServer
) -> None:
    service.post(rows("replaced", 10))
    store.kill()
    workers = service.workers
    assert len(workers) == 2
    for worker in workers:
        os.kill(worker, signal.SIGKILL)
        eventually(
            lambda gone=worker: gone not in service.workers and len(service.workers) == 2,
            "another worker",
        )
        service.reconnect()
    live = service.send("GET", "/health/live")
    assert (live.status, live.document["status"]) == (200, "pass")
    assert ready(service).status == 503
    assert_told_to_come_back(send(service, rows("replaced", 20)))
    store.start()
    eventually(lambda: ready(service).status == 200, "readiness")
    assert service.post(rows("replaced", 20))["duplicates"] == 10
    assert count(service, "replaced") == 20


def test_service_that_starts_before_its_store_waits_for_it(
    store_binary: Path, tmp_path: Path
) -> None:
    store = StoreServer(tmp_path / "store", store_binary)
    with serving(store.url, tmp_path, LOG_LEVEL="error") as service:
        assert ready(service).status == 503
        assert_told_to_come_back(send(service, rows("early", 20)))
        assert_told_to_come_back(service.send("GET", "/v1/merchants"))
        store.start()
        try:
            eventually(lambda: ready(service).status == 200, "readiness")
            assert service.post(rows("early", 20))["accepted"] == 20
            service.reconnect()
            assert service.post(rows("early", 30))["duplicates"] == 20
        finally:
            store.kill()


def test_post_whose_reply_was_lost_is_not_doubled(
    service: Service, store: StoreServer, line: BadLine
) -> None:
    """The store does the append and is killed before a word of it comes back."""
    service.post(rows("lost", 10))
    lose_replies(line, 1, then=store.kill)
    assert_told_to_come_back(send(service, rows("lost", 30)))
    assert lost(line)
    store.start()
    receipt = service.post(rows("lost", 50))
    assert (receipt["accepted"], receipt["duplicates"]) == (20, 30)
    assert count(service, "lost") == 50


def test_line_that_breaks_once_is_not_noticed(service: Service, line: BadLine) -> None:
    """The worker asks again under the same token, and gets the reply of the first time."""
    service.post(rows("broken", 10))
    lose_replies(line, 1)
    receipt = service.post(rows("broken", 30))
    assert lost(line)
    assert (receipt["accepted"], receipt["duplicates"]) == (20, 10)
    assert count(service, "broken") == 30


def test_line_that_breaks_twice_is_told_and_nothing_is_doubled(
    service: Service, line: BadLine
) -> None:
    service.post(rows("twice", 10))
    lose_replies(line, 2)
    assert_told_to_come_back(send(service, rows("twice", 30)))
    assert lost(line)
    assert count(service, "twice") == 30  # it had been counted
    assert service.post(rows("twice", 30))["duplicates"] == 30
    assert count(service, "twice") == 30


def test_alarm_of_a_post_whose_reply_was_lost_reaches_the_feed(
    service: Service, line: BadLine
) -> None:
    """Nobody sends again and nobody asks for the merchant: the sweep judges what was left."""
    before = service.get("/v1/alarms")["next"]
    after = f"&after={before}" if before else ""
    cheat = [
        {"merchant": "cheat", "amount": 4900 + i % 7, "currency": "EUR", "id": f"c{i}"}
        for i in range(60)
    ]
    lose_replies(line, 2)
    assert_told_to_come_back(send(service, cheat))
    found = service.get(f"/v1/alarms?wait=30{after}")["alarms"]
    assert [alarm["merchant"] for alarm in found] == ["cheat"]
    assert service.post(cheat)["duplicates"] == 60
    assert service.get(f"/v1/alarms?after={found[0]['cursor']}")["alarms"] == []


def test_store_that_is_killed_again_and_again_loses_and_doubles_nothing(
    service: Service, store: StoreServer
) -> None:
    """A payment system that does as it is told: it sends the same batch until it gets a 200."""
    names = ("ferry", "kiosk", "baker")
    posted = dict.fromkeys(names, 0)

    def insist(part: list[Row]) -> None:
        answers: list[Answer] = []

        def taken() -> bool:
            with contextlib.suppress(OSError):
                answers.append(send(service, part))
            return bool(answers) and answers[-1].status == 200

        eventually(taken, "a 200")
        for answer in answers[:-1]:
            assert_told_to_come_back(answer)

    for k in range(60):
        part = [row for name in names for row in rows(name, 7, 7 * k)]
        if k % 12 == 5:
            store.kill()
            assert_told_to_come_back(send(service, part))
            store.start()
        if k % 12 == 9:  # in the middle of a post, whatever comes of it
            killer = threading.Thread(target=store.kill)
            killer.start()
            with contextlib.suppress(OSError):
                send(service, part)
            killer.join()
            store.start()
        insist(part)
        for name in names:
            posted[name] += 7
    for name in names:
        assert count(service, name) == posted[name] == 420
        kept = service.get(f"/v1/merchants/{name}/rows")["rows"]
        assert [row["amount"] for row in kept] == [1000 + i for i in range(420)][-len(kept) :]
        assert len(kept) >= 128
