"""A fraud engine follows the feed."""

from __future__ import annotations

import threading

import pytest
from flask import Flask

from tests.web.business import WATCHFUL, alarmed, fixed_price, ordinary, post, rows
from tests.web.described import DescribedClient, described_client


def test_the_feed_is_followed_without_missing_or_repeating_one(caller: DescribedClient) -> None:
    raised = [alarmed(caller, f"shop-{i}")["id"] for i in range(5)]
    seen: list[str] = []
    after = ""
    for _ in range(10):
        body = caller.get(f"/v1/alarms?limit=2{after}").get_json()
        seen += [a["id"] for a in body["alarms"]]
        after = f"&after={body['next']}"
        if not body["alarms"]:
            break
    assert seen == raised
    later = alarmed(caller, "shop-9")["id"]
    body = caller.get(f"/v1/alarms?{after[1:]}").get_json()
    assert [a["id"] for a in body["alarms"]] == [later]


def test_an_alarm_is_told_alone_as_on_the_feed(caller: DescribedClient) -> None:
    raised = alarmed(caller)
    (listed,) = caller.get("/v1/alarms").get_json()["alarms"]
    alone = caller.get(f"/v1/alarms/{raised['id']}").get_json()
    assert listed == alone
    assert alone["cursor"] == caller.get("/v1/alarms").get_json()["next"]
    entry = caller.get("/v1/merchants/harbour-books").get_json()
    assert (entry["open_alarm"], entry["standing"]) == (raised["id"], "alarmed")


def test_filters_advance_past_what_they_leave_out(caller: DescribedClient) -> None:
    for i in range(3):
        alarmed(caller, f"shop-{i}")
    body = caller.get("/v1/alarms?merchant=shop-1").get_json()
    assert [a["merchant"] for a in body["alarms"]] == ["shop-1"]
    nothing = caller.get("/v1/alarms?merchant=nobody").get_json()
    assert nothing["alarms"] == []
    assert caller.get(f"/v1/alarms?after={nothing['next']}").get_json()["alarms"] == []
    for query, count in (
        ("view=lead_pair&cell=49", 3),
        ("view=lead_pair&cell=50", 0),
        ("flow=refund", 0),
        ("currency=EUR&state=open", 3),
        ("state=dismissed", 0),
    ):
        assert len(caller.get(f"/v1/alarms?{query}").get_json()["alarms"]) == count, query


def test_an_empty_feed_gives_a_position_to_go_on_from(caller: DescribedClient) -> None:
    empty = caller.get("/v1/alarms").get_json()
    assert empty["alarms"] == []
    raised = alarmed(caller)
    body = caller.get(f"/v1/alarms?after={empty['next']}").get_json()
    assert [a["id"] for a in body["alarms"]] == [raised["id"]]


def test_a_waiting_follower_is_told_when_there_is_an_alarm(
    served: Flask, caller: DescribedClient
) -> None:
    caller.put("/v1/policies/standard", json=WATCHFUL)
    post(caller, rows(ordinary(500)))
    follower = described_client(served)
    told: list[str] = []

    def follow() -> None:
        body = follower.get("/v1/alarms?wait=30").get_json()
        told.extend(a["merchant"] for a in body["alarms"])

    waiting = threading.Thread(target=follow)
    waiting.start()
    post(caller, rows(ordinary(500) + fixed_price(40)))
    waiting.join(60)
    assert told == ["harbour-books"]


def test_a_wait_for_nothing_ends_with_the_position(caller: DescribedClient) -> None:
    alarmed(caller)
    position = caller.get("/v1/alarms").get_json()["next"]
    body = caller.get(f"/v1/alarms?after={position}&wait=0.3").get_json()
    assert body == {"alarms": [], "next": position}


def test_only_so_many_may_wait_at_once(served: Flask, caller: DescribedClient) -> None:
    seats = served.extensions["tallyward"].seats
    taken = 0
    while seats.acquire(blocking=False):
        taken += 1
    assert taken == served.extensions["tallyward"].settings.threads // 2
    answer = caller.get("/v1/alarms?wait=5")
    assert answer.status_code == 429
    assert int(answer.headers["Retry-After"]) >= 1
    assert caller.get("/v1/alarms").status_code == 200
    seats.release()
    assert caller.get("/v1/alarms?wait=0.01").status_code == 200
    assert seats.acquire(blocking=False), "the seat was not given back"


@pytest.mark.parametrize(
    ("query", "parameter"),
    [
        ("after=yesterday", "after"),
        ("after=1-2-3", "after"),
        ("wait=31", "wait"),
        ("wait=-1", "wait"),
        ("wait=nan", "wait"),
        ("limit=0", "limit"),
        ("limit=1001", "limit"),
        ("cell=123", "cell"),
        ("view=circle", "view"),
        ("state=closed", "state"),
    ],
)
def test_wrong_parameters_are_named(caller: DescribedClient, query: str, parameter: str) -> None:
    answer = caller.get(f"/v1/alarms?{query}")
    assert answer.status_code == 422
    assert [e["parameter"] for e in answer.get_json(force=True)["errors"]] == [parameter]
