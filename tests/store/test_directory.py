"""The directory: entries are as new as the last post, whoever refreshes them."""

from __future__ import annotations

from collections.abc import Callable

import pytest

from service.store.directory import BATCH
from service.tallies import Tallies
from tests.store.batches import NOW, batch
from tests.store.workers import append, honest, named, post, quarantine

Hire = Callable[[], Tallies]


def counts(tallies: Tallies) -> dict[str, int]:
    return {e["merchant"]: e["count"] for e in tallies.merchants("main")}


def left(tallies: Tallies) -> int:
    return sum(tallies.client.hlen(p.dirty) for p in tallies.logs.partitions)


def then(monkeypatch, tallies: Tallies, what: Callable[[], object], times: int = 1) -> list[int]:
    """Let something happen between this worker's reading of streams and its writing of entries."""
    judge, calls = tallies.judge.judge, []

    def judging(*args, **kwargs):
        judged = judge(*args, **kwargs)
        calls.append(len(judged.index))
        if len(calls) <= times:
            what()
        return judged

    monkeypatch.setattr(tallies.judge, "judge", judging)
    return calls


def test_a_listing_is_fresh_right_after_a_post(tallies: Tallies, hire: Hire) -> None:
    other = hire()
    post(tallies, honest("a", n=5))
    assert counts(other) == {"a": 5}
    post(other, batch(["a", "b"], [1999, 2999], ids=["x", "y"]))
    assert counts(tallies) == {"a": 6, "b": 1}
    assert left(tallies) == 0
    post(tallies, batch(["a"], [1999], ids=["x"]))
    assert left(tallies) == 0  # a duplicate changes nothing
    append(tallies, honest("c"))  # its worker died
    assert counts(other) == {"a": 6, "b": 1, "c": 30}


def test_streams_of_all_partitions_and_none_of_other_tenants(tallies: Tallies) -> None:
    merchants = [f"m{i}" for i in range(9)]
    rows = batch(merchants, range(1000, 1009), ids=named("m", 0, 9))
    post(tallies, rows)
    for tenant in ("hill", "mai"):
        tallies.post(tenant, honest("other"), historic=False, reply="alarms", now=NOW)
    assert counts(tallies) == dict.fromkeys(merchants, 1)
    assert [e["merchant"] for e in tallies.merchants("hill")] == ["other"]


def test_more_streams_than_are_folded_at_a_time(tallies: Tallies) -> None:
    n = 2 * BATCH + 100
    merchants = [f"m{i:04d}" for i in range(n)]
    post(tallies, batch(merchants, range(1000, 1000 + n), ids=named("m", 0, n)))
    for partition in tallies.logs.partitions:
        tallies.directory.refresh(partition, now=NOW, most=1)
    assert 0 < left(tallies) < n
    assert counts(tallies) == dict.fromkeys(merchants, 1)
    assert left(tallies) == 0


def test_a_stream_touched_during_a_refresh_stays_marked(
    tallies: Tallies, hire: Hire, monkeypatch
) -> None:
    other = hire()
    append(tallies, honest("a", n=5))
    then(monkeypatch, tallies, lambda: append(other, honest("a", n=2, first=5)))
    assert counts(tallies) == {"a": 5}
    assert left(tallies) == 1
    assert counts(other) == {"a": 7}
    assert left(tallies) == 0


def test_a_slow_refresh_does_not_put_back_an_older_entry(
    tallies: Tallies, hire: Hire, monkeypatch
) -> None:
    other = hire()

    def overtake() -> None:
        append(other, honest("a", n=2, first=5))
        assert counts(other) == {"a": 7}

    append(tallies, honest("a", n=5))
    then(monkeypatch, tallies, overtake)
    assert counts(tallies) == {"a": 7}
    assert counts(other) == {"a": 7}


def test_streams_touched_all_the_time_do_not_hold_up_a_listing(
    tallies: Tallies, hire: Hire, monkeypatch
) -> None:
    other, amounts = hire(), iter(range(1000, 10_000))
    append(tallies, honest("busy"))
    calls = then(
        monkeypatch, tallies, lambda: append(other, batch(["busy"], [next(amounts)])), times=100
    )
    assert counts(tallies) == {"busy": 30}
    assert len(calls) == 1


@pytest.mark.parametrize("streams", [1, BATCH + 20])
def test_streams_in_quarantine_do_not_hold_up_a_listing(tallies: Tallies, streams: int) -> None:
    merchants = [f"m{i:04d}" for i in range(streams)]
    post(tallies, batch(merchants, [1999] * streams, ids=named("m", 0, streams)))
    logs = tallies.client.keys("*log/*")
    for key in logs[: max(1, streams // 20)]:
        tallies.client.append(key, "torn")
    post(tallies, honest("sound"))
    ill = len(quarantine(tallies))
    found = counts(tallies)
    assert found.pop("sound") == 30
    assert len(quarantine(tallies)) == max(1, streams // 20) >= ill
    assert len(found) == streams - len(quarantine(tallies))
    assert left(tallies) == 0


def test_a_scan_that_returns_nothing_is_not_the_end(tallies: Tallies, client) -> None:
    """A hash that shrank while the server saves keeps its empty buckets."""
    post(tallies, honest("a"))
    (partition,) = [p for p in tallies.logs.partitions if client.exists(p.dirty)]
    n, step = 100_000, 2000
    pipe = client.pipeline(transaction=False)
    for i in range(0, n, step):
        pipe.hset(partition.dirty, mapping={f"main/x{j}/sale/EUR": 1 for j in range(i, i + step)})
    pipe.execute()
    client.config_set("rdb-key-save-delay", 10_000_000)
    try:
        client.bgsave()
        for i in range(0, n, step):
            pipe.hdel(partition.dirty, *(f"main/x{j}/sale/EUR" for j in range(i, i + step)))
        pipe.execute()
        assert client.hlen(partition.dirty) == 1
        assert counts(tallies) == {"a": 30}
        assert left(tallies) == 0
    finally:
        client.config_set("rdb-key-save-delay", 0)
        client.flushall()  # ends the saving


def test_entries_say_the_category_given_since(tallies: Tallies) -> None:
    post(tallies, honest("a"))
    assert [e["category"] for e in tallies.merchants("main")] == [None]
    tallies.assign("main", "a", policy=None, category="5942")
    assert [e["category"] for e in tallies.merchants("main")] == ["5942"]


def test_a_merchants_streams(tallies: Tallies) -> None:
    for flow, currency in (("sale", "EUR"), ("refund", "EUR"), ("sale", "USD")):
        post(tallies, batch(["a"], [1999], ids=["x"], flow=flow, currency=currency))
    assert tallies.directory.streams("main", "a") == [
        ("refund", "EUR"),
        ("sale", "EUR"),
        ("sale", "USD"),
    ]
    assert tallies.directory.streams("main", "b") == []
    assert tallies.directory.streams("hill", "a") == []
