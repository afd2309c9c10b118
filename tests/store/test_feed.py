"""The feed: every alarm once, whoever publishes it and whoever follows."""

from __future__ import annotations

import random
import threading

import msgspec
import pytest

from service.store.connection import connect
from service.store.errors import Unknown
from service.store.feed import Feed, Outgoing, Stored
from service.store.keys import Partition, Tenant

PARTITION = Partition(0)
ALARMS, PUBLISHERS, FOLLOWERS = 300, 6, 2


def crossing(number: int, ordinal: int = 0, *, historic: bool = False, tenant: str = "main"):
    document = msgspec.json.encode({"number": number, "ordinal": ordinal})
    return Outgoing(f"{tenant}/m{number}/sale/EUR", f"{number:032x}", ordinal, historic, document)


def box(client, crossings) -> None:
    client.hset(PARTITION.outbox, mapping={c.field: c.boxed() for c in crossings})


def everything(feed: Feed, tenant: str = "main") -> list[Stored]:
    return feed.after(tenant, None, 100_000)[0]


def test_racing_publishers_and_followers_see_every_alarm_once(client, fresh_store: str) -> None:
    alarms = [crossing(i, o) for i in range(ALARMS) for o in range(2)]
    box(client, alarms)
    done = threading.Event()
    seen: list[list[Stored]] = [[] for _ in range(FOLLOWERS)]
    failures: list[Exception] = []

    def publish(seed: int) -> None:
        mine = alarms.copy()
        random.Random(seed).shuffle(mine)
        with connect(fresh_store, 5) as own:
            for i in range(0, len(mine), 7):
                Feed(own).publish(PARTITION, mine[i : i + 7])

    def follow(into: list[Stored]) -> None:
        with connect(fresh_store, 5) as own:
            position = None
            while True:
                last = done.is_set()
                found, position = Feed(own).after("main", position, 5)
                into += found
                if last and not found:
                    return

    def run(work, *args) -> None:
        try:
            work(*args)
        except Exception as error:
            failures.append(error)

    publishers = [threading.Thread(target=run, args=(publish, i)) for i in range(PUBLISHERS)]
    followers = [threading.Thread(target=run, args=(follow, into)) for into in seen]
    for thread in (*followers, *publishers):
        thread.start()
    for thread in publishers:
        thread.join()
    done.set()
    for thread in followers:
        thread.join()
    assert not failures
    entries = client.xrange(Tenant("main").feed)
    place = {fields[b"alarm"].decode(): entry.decode() for entry, fields in entries}
    assert len(entries) == len(place) == ALARMS
    for found in seen:
        assert [(s.alarm, s.cursor) for s in found] == list(place.items())
    assert all(
        [c["ordinal"] for c in s.crossings] == [0, 1]
        and s.path == f"main/m{int(s.alarm, 16)}/sale/EUR"
        for s in everything(Feed(client))
    )
    assert client.hlen(PARTITION.outbox) == 0


def test_what_is_published_again_changes_nothing(client) -> None:
    feed = Feed(client)
    feed.publish(PARTITION, [crossing(1), crossing(2)])
    before = everything(feed)
    box(client, [crossing(2), crossing(1)])
    assert sorted(feed.left(PARTITION), key=lambda c: c.path) == [crossing(1), crossing(2)]
    feed.publish(PARTITION, feed.left(PARTITION))
    assert everything(feed) == before
    assert feed.left(PARTITION) == []


def test_crossings_may_come_in_any_order(client) -> None:
    feed = Feed(client)
    order = list(range(40))
    random.Random(3).shuffle(order)
    for ordinal in order:
        feed.publish(PARTITION, [crossing(1, ordinal)])
    (stored,) = everything(feed)
    assert [c["ordinal"] for c in stored.crossings] == [*range(16), 39]
    assert client.xlen(Tenant("main").feed) == 1


def test_history_has_no_place_in_the_feed_and_gets_one_by_a_live_crossing(client) -> None:
    feed = Feed(client)
    feed.publish(PARTITION, [crossing(1, historic=True), crossing(2)])
    assert [s.alarm for s in everything(feed)] == [crossing(2).alarm]
    assert feed.one("main", crossing(1).alarm).cursor is None
    feed.publish(PARTITION, [crossing(1, 1)])
    one = feed.one("main", crossing(1).alarm)
    assert [s.alarm for s in everything(feed)] == [crossing(2).alarm, crossing(1).alarm]
    assert one.cursor == everything(feed)[1].cursor
    feed.publish(PARTITION, [crossing(1, 2, historic=True)])
    assert len(everything(feed)) == 2


def test_one_outbox_serves_several_tenants(client) -> None:
    feed = Feed(client)
    feed.publish(PARTITION, [crossing(1), crossing(2, tenant="hill")])
    assert [s.alarm for s in everything(feed)] == [crossing(1).alarm]
    assert [s.alarm for s in everything(feed, "hill")] == [crossing(2).alarm]
    with pytest.raises(Unknown):
        feed.one("hill", crossing(1).alarm)


def test_a_page_says_where_to_go_on(client) -> None:
    feed = Feed(client)
    assert feed.after("main", None, 3) == ([], "0-0")
    feed.publish(PARTITION, [crossing(i) for i in range(5)])
    found, position = feed.after("main", None, 3)
    assert (len(found), position) == (3, found[-1].cursor)
    found, position = feed.after("main", position, 3)
    assert [s.alarm for s in found] == [crossing(3).alarm, crossing(4).alarm]
    assert feed.after("main", position, 3) == ([], position)


@pytest.mark.parametrize(
    "cursor",
    ["", "1", "x-1", "-1-0", "1-1-1", "1-0\n", "٣-٠", f"{2**64}-0", f"0-{2**64}", f"{2**64 - 1}-0"],
)
def test_a_cursor_that_was_never_given_out_is_refused(client, cursor: str) -> None:
    with pytest.raises(ValueError, match="not a cursor"):
        Feed(client).after("main", cursor, 1)


def test_the_last_cursors_that_a_server_could_give_are_read(client) -> None:
    cursor = f"{2**64 - 2}-{2**64 - 2}"
    assert Feed(client).after("main", cursor, 1) == ([], cursor)


@pytest.mark.parametrize("alarm", ["", "0" * 31, "F" * 32, "0" * 32, "../settings"])
def test_an_alarm_that_does_not_exist_is_unknown(client, alarm: str) -> None:
    with pytest.raises(Unknown, match="there is no alarm"):
        Feed(client).one("main", alarm)
