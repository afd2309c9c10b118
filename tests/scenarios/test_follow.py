"""Fraud engines follow the feed while both workers raise alarms: each one once, none missed."""

from __future__ import annotations

import random
import threading
from typing import Any

import numpy as np
import pytest

from tests.scenarios.conftest import CHEATS
from tests.scenarios.running import Service
from tests.scenarios.together import run_together

Alarm = dict[str, Any]


def end_of_feed(service: Service) -> str:
    """Return the position after all alarms of other scenarios."""
    after = ""
    while True:
        page = service.get(f"/v1/alarms?limit=500{after}")
        if not page["alarms"]:
            return after
        after = f"&after={page['next']}"


def follow(
    service: Service, start: str, limit: int, over: threading.Event, query: str = ""
) -> list[Alarm]:
    """Go on from where the last page ended until all is over and no more alarms come."""
    seen: list[Alarm] = []
    after = start
    while True:
        last = over.is_set()
        service.reconnect()  # the next page may come from the other worker
        page = service.get(f"/v1/alarms?limit={limit}&wait=2{after}{query}")
        assert len(page["alarms"]) <= limit
        seen += page["alarms"]
        if page["next"] is not None:
            after = f"&after={page['next']}"
        if last and not page["alarms"]:
            return seen


def cheat(service: Service, mine: list[str], seed: int) -> None:
    """Post the rows of some cheats, a few at a time, by way of either worker."""
    chance = random.Random(seed)
    rng = np.random.default_rng(seed)
    waiting = {name: rng.integers(4900, 5000, 60).tolist() for name in mine}
    while waiting:
        name = chance.choice(sorted(waiting))
        left = waiting[name]
        rows = [
            {"merchant": name, "amount": left.pop(), "currency": "EUR", "id": f"{name}-{len(left)}"}
            for _ in range(min(len(left), chance.randrange(1, 9)))
        ]
        if not left:
            del waiting[name]
        service.post(rows)
        if chance.random() < 0.5:
            service.reconnect()


@pytest.fixture(scope="module")
def followed(business: Any) -> tuple[str, list[list[Alarm]]]:
    """Two followers of everything and one of a single merchant, beside four posters."""
    service: Service = business.service
    start, over = end_of_feed(service), threading.Event()

    def post() -> None:
        try:
            run_together([lambda i=i: cheat(service, CHEATS[i::4], i) for i in range(4)])
        finally:
            over.set()

    _, *seen = run_together(
        [
            post,
            lambda: follow(service, start, 2, over),
            lambda: follow(service, start, 100, over),
            lambda: follow(service, start, 5, over, f"&merchant={CHEATS[3]}"),
        ]
    )
    return start, seen


def test_followers_see_every_alarm_once(followed: tuple[str, list[list[Alarm]]]) -> None:
    _, (one, other, single) = followed
    for seen in (one, other):
        assert sorted(alarm["merchant"] for alarm in seen) == sorted(CHEATS)
        assert len({alarm["id"] for alarm in seen}) == len(CHEATS)
    assert [alarm["id"] for alarm in one] == [alarm["id"] for alarm in other]
    assert [alarm["merchant"] for alarm in single] == [CHEATS[3]]


def test_feed_read_later_is_the_feed_as_it_was_followed(
    service: Service, followed: tuple[str, list[list[Alarm]]]
) -> None:
    start, (one, *_) = followed
    over = threading.Event()
    over.set()
    later = follow(service, start, 7, over)
    assert [alarm["cursor"] for alarm in later] == [alarm["cursor"] for alarm in one]
    for position in (0, 11, len(one) - 1):  # any cursor is a place to go on from
        rest = service.get(f"/v1/alarms?limit=500&after={one[position]['cursor']}")["alarms"]
        assert [alarm["id"] for alarm in rest] == [alarm["id"] for alarm in one[position + 1 :]]
    for alarm in later:
        assert service.get(f"/v1/alarms/{alarm['id']}")["cursor"] == alarm["cursor"]
        assert service.get(f"/v1/merchants/{alarm['merchant']}")["open_alarm"] == alarm["id"]
