"""Places and the queue for them, with real threads."""

from __future__ import annotations

import threading
from collections.abc import Callable

import pytest
from flask import Flask

from service.web.admission import Admission
from service.web.problems import Problem
from tests.processes import PATIENCE, eventually
from tests.web.described import DescribedClient


def queued(admission: Admission, number: int) -> Callable[[], bool]:
    return lambda: len(admission._queue) == number


def test_places_are_given_in_the_order_of_asking() -> None:
    admission = Admission(1, 5, PATIENCE)
    admission.enter()
    told: list[int] = []

    def ask(number: int) -> None:
        admission.enter()
        told.append(number)
        admission.leave()

    threads = [threading.Thread(target=ask, args=(i,)) for i in range(5)]
    for i, thread in enumerate(threads):
        thread.start()
        eventually(queued(admission, i + 1), "one more who waits")
    assert admission.crowded()
    admission.leave()
    for thread in threads:
        thread.join()
    assert told == [0, 1, 2, 3, 4]
    assert not admission.crowded()


def test_more_than_may_wait_are_refused_and_told_when_to_come_again() -> None:
    admission = Admission(2, 1, PATIENCE)
    admission.enter()
    admission.enter()
    waiting = threading.Thread(target=admission.enter)
    waiting.start()
    eventually(queued(admission, 1), "one who waits")
    with pytest.raises(Problem, match="wait already") as caught:
        admission.enter()
    assert caught.value.status == 503
    admission.leave()
    waiting.join()
    with pytest.raises(Problem, match="in time"):
        Admission(0, 1, 0.01).enter()


def test_who_gave_up_waiting_leaves_no_trace() -> None:
    admission = Admission(1, 1, 0.01)
    admission.enter()
    for _ in range(3):
        with pytest.raises(Problem, match="in time"):
            admission.enter()
    assert not admission.crowded()
    admission.leave()
    admission.enter()


def test_never_more_hold_a_place_than_there_are_and_all_come_back() -> None:
    admission = Admission(3, 20, PATIENCE)
    inside: set[int] = set()
    most: list[int] = []

    def work(name: int) -> None:
        for _ in range(200):
            admission.enter()
            inside.add(name)
            most.append(len(inside))
            inside.discard(name)
            admission.leave()

    threads = [threading.Thread(target=work, args=(i,)) for i in range(12)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert len(most) == 12 * 200
    assert max(most) <= 3
    for _ in range(3):
        admission.enter()


@pytest.mark.parametrize(
    ("method", "path", "name"),
    [
        ("POST", "/v1/batches", "posting"),
        ("GET", "/v1/merchants", "answering"),
        ("PUT", "/v1/policies/strict", "answering"),
        ("POST", "/v1/checks", "answering"),
        ("GET", "/v1/openapi.json", "answering"),
        ("GET", "/method", "answering"),
    ],
)
def test_who_finds_no_place_is_503_and_the_others_are_served(
    served: Flask, caller: DescribedClient, method: str, path: str, name: str
) -> None:
    here = served.extensions["tallyward"]
    full = getattr(here, name)
    full._waiting = 0
    while full._free:
        full.enter()
    answer = caller.open(path, method=method, json={} if method != "GET" else None)
    assert answer.status_code == 503
    assert int(answer.headers["Retry-After"]) >= 1
    assert answer.mimetype == "application/problem+json"
    assert caller.open(path, method=method, headers={}).status_code in (401, 503)
    other = "/v1/policies" if name == "posting" else "/health/ready"
    assert caller.get(other).status_code == 200
    full.leave()
    assert caller.open(path, method=method).status_code != 503
    assert full._free == 1, "the place was not given back"


def test_a_place_comes_back_whatever_the_answer_was(client: DescribedClient, app: Flask) -> None:
    here = app.extensions["tallyward"]
    for _ in range(20):
        assert client.get("/v1/merchants").status_code == 500
        assert client.get("/v1/policies").status_code == 503
        assert client.post("/v1/batches", data=b"{", content_type="text/csv").status_code == 415
        assert client.open("/v1/openapi.json", method="HEAD").status_code == 200
    assert (here.posting._free, here.answering._free) == (2, 8)
