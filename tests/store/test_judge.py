"""Judging: any worker comes to the same verdict, one of them makes it known."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
import redis

from service.store import catalogue, judge
from service.store.keys import path
from service.store.loading import load
from service.store.logs import COMPACT_ROWS
from service.streams.record import HEADER, RECORD, Stream
from service.tallies import Tallies
from tests.store.batches import batch
from tests.store.workers import (
    append,
    blobs_of,
    check,
    feed,
    honest,
    named,
    one_price,
    ordinary,
    outboxes,
    post,
    quarantine,
    watch,
)

Hire = Callable[[], Tallies]


def generation(tallies: Tallies, merchant: str) -> int:
    (blob,) = blobs_of(tallies.logs, merchant)
    return int(np.frombuffer(blob.log[:32], HEADER)["generation"][0])


def log_key(tallies: Tallies, merchant: str) -> str:
    name = path("main", Stream(merchant, "sale", "EUR"))
    return tallies.logs.partition("main", merchant).log(name)


def test_a_log_is_compacted_when_it_is_long_or_when_it_crossed(tallies: Tallies) -> None:
    watch(tallies)
    post(tallies, honest("long", n=COMPACT_ROWS - 1))
    assert generation(tallies, "long") == 0
    post(tallies, honest("long", n=1, first=COMPACT_ROWS))
    assert generation(tallies, "long") == 1
    post(tallies, one_price("short", n=20))
    assert generation(tallies, "short") == 1


def test_a_lost_race_costs_nothing(tallies: Tallies, hire: Hire) -> None:
    watch(tallies)
    append(tallies, one_price("raced"))
    blobs = blobs_of(tallies.logs, "raced")
    verdicts = [one.judge.judge("main", blobs) for one in (tallies, hire())]
    assert verdicts[0].crossings == verdicts[1].crossings
    (alarm,) = feed(tallies)
    assert alarm["repeats"] == len(verdicts[0].crossings) - 1 > 0
    assert generation(tallies, "raced") == 1
    assert outboxes(tallies) == 0
    (state,) = load(blobs_of(tallies.logs, "raced")).folded.state
    assert state["rows"] == 30


def test_rows_that_the_winner_of_a_race_had_not_read_still_alarm(
    tallies: Tallies, hire: Hire
) -> None:
    watch(tallies)
    append(tallies, honest("raced", n=COMPACT_ROWS))
    early = blobs_of(tallies.logs, "raced")
    append(tallies, one_price("raced", first=COMPACT_ROWS))
    late = blobs_of(tallies.logs, "raced")
    hire().judge.judge("main", early)
    assert generation(tallies, "raced") == 1
    assert not feed(tallies)
    tallies.judge.judge("main", late)
    assert [a["merchant"] for a in feed(tallies)] == ["raced"]


def test_a_crossing_found_by_two_is_told_by_the_loser_where_the_winner_died(
    tallies: Tallies, hire: Hire, monkeypatch
) -> None:
    watch(tallies)
    append(tallies, one_price("raced"))
    blobs = blobs_of(tallies.logs, "raced")
    dying = hire()
    monkeypatch.setattr(dying.feed, "publish", lambda *_: None)
    dying.judge.judge("main", blobs)
    assert outboxes(tallies) > 0
    tallies.judge.judge("main", blobs)
    assert [a["merchant"] for a in feed(tallies)] == ["raced"]
    assert outboxes(tallies) == 0


@pytest.mark.parametrize("harm", ["torn log", "torn snapshot", "format", "policy", "no snapshot"])
def test_poison_keeps_nothing_from_the_others(tallies: Tallies, hire: Hire, harm: str) -> None:
    watch(tallies)
    post(tallies, honest("poison", n=COMPACT_ROWS + 40))
    log = log_key(tallies, "poison")
    snapshot = log.replace("log/", "snap/")
    client = tallies.client
    if harm == "torn log":
        client.append(log, "torn")
    elif harm == "torn snapshot":
        client.set(snapshot, client.get(snapshot)[:-3])
    elif harm == "format":
        client.set(snapshot, b"\xff" + client.get(snapshot)[1:])
    elif harm == "policy":
        record = np.zeros(1, RECORD)
        record["amount"], record["policy"] = 4900, 999
        client.append(log, record.tobytes())
    else:
        client.delete(snapshot)
        client.set(log, client.get(log)[:16] + b"\1" + client.get(log)[17:])
    amounts = [*one_price("x").amount.tolist(), *ordinary(30, seed=5), *ordinary(30, seed=6)]
    merchants = ["sound"] * 30 + ["poison"] * 30 + ["quiet"] * 30
    reader = hire()  # keeps no state that was sound before
    posted = post(reader, batch(merchants, amounts, ids=named("x", 0, 90)), reply="merchants")
    assert posted.accepted == 90
    assert [a["merchant"] for a in posted.alarms] == ["sound"]
    assert {e["merchant"]: e["count"] for e in posted.entries} == {"sound": 30, "quiet": 30}
    assert list(quarantine(tallies)) == [b"main/poison/sale/EUR"]
    assert check(tallies, "quarantine") == "warn"
    again = post(tallies, batch(merchants, amounts, ids=named("x", 0, 90)))
    assert (again.accepted, again.duplicates) == (0, 90)


def test_any_error_of_the_fold_is_poison(tallies: Tallies, monkeypatch) -> None:
    def fold(folded, records, slot, policies, kinds, names):
        if b"main/poison/sale/EUR" in [names[s] for s in slot]:
            raise TypeError("nobody foresaw this")
        return sound(folded, records, slot, policies, kinds, names)

    sound = judge.fold
    monkeypatch.setattr(judge, "fold", fold)
    posted = post(
        tallies, batch(["poison", "sound"], [1999, 2999], ids=["a", "b"]), reply="merchants"
    )
    assert posted.accepted == 2
    assert [e["merchant"] for e in posted.entries] == ["sound"]
    assert quarantine(tallies) == {b"main/poison/sale/EUR": b"TypeError: nobody foresaw this"}


def test_a_store_that_fails_puts_nobody_in_quarantine(tallies: Tallies, monkeypatch) -> None:
    post(tallies, honest("sound"))
    blobs = blobs_of(tallies.logs, "sound")
    monkeypatch.setattr(catalogue, "FRESH_SECONDS", -1)
    tallies.client.lpush("{tw/main}revision", "not a number")
    with pytest.raises(redis.ResponseError, match="WRONGTYPE"):
        tallies.judge.judge("main", blobs)
    assert not quarantine(tallies)


def test_a_policy_takes_effect_from_the_rows_that_carry_it(tallies: Tallies, hire: Hire) -> None:
    """Under the first policy nothing alarms while a stream learns; the second watches at once."""
    for merchant in ("changed", "unchanged"):
        append(tallies, one_price(merchant))
    watch(tallies)
    append(tallies, one_price("changed", first=30))
    append(tallies, one_price("watched"))
    blobs = blobs_of(tallies.logs, "changed", "unchanged", "watched")
    verdicts = [one.judge.judge("main", blobs) for one in (tallies, hire(), hire())]
    first = verdicts[0].crossings
    assert {c.slot for c in first} == {0, 2}
    assert min(c.record for c in first if c.slot == 0) >= 30
    assert min(c.record for c in first if c.slot == 2) < 30
    for other in verdicts[1:]:
        assert other.crossings == first
        assert other.folded.state.tobytes() == verdicts[0].folded.state.tobytes()
    assert verdicts[0].folded.state["policy"].tolist() == [2, 1, 2]
    assert sorted(a["merchant"] for a in feed(tallies)) == ["changed", "watched"]


def test_an_unknown_policy_version_is_looked_up(tallies: Tallies, hire: Hire, monkeypatch) -> None:
    monkeypatch.setattr(catalogue, "FRESH_SECONDS", 3600)
    other = hire()
    assert set(other.catalogue.of("main").by_version) == {1}
    watch(tallies)
    append(tallies, one_price("new"))
    other.judge.judge("main", blobs_of(other.logs, "new"))
    assert [a["merchant"] for a in feed(tallies)] == ["new"]
    assert not quarantine(tallies)
    (entry,) = other.merchants("main")
    assert entry["standing"] == "alarmed"


def test_a_version_of_the_snapshot_alone_is_looked_up_too(
    tallies: Tallies, hire: Hire, monkeypatch
) -> None:
    monkeypatch.setattr(catalogue, "FRESH_SECONDS", 3600)
    other = hire()
    other.catalogue.of("main")
    watch(tallies)
    post(tallies, honest("new", n=COMPACT_ROWS))
    stream = other.stream_of("main", "new", "sale", None)
    found = other.detail("main", stream, measures=False, now=0)
    assert found["count"] == COMPACT_ROWS
    assert not quarantine(tallies)


def test_history_stays_off_the_feed_until_a_live_row_crosses(tallies: Tallies) -> None:
    watch(tallies)
    posted = post(tallies, one_price("past"), historic=True)
    (alarm,) = posted.alarms
    assert alarm["historic"]
    assert alarm["cursor"] is None
    assert feed(tallies) == []
    assert tallies.alarm("main", alarm["id"])["historic"]
    tallies.sweep.round()
    assert feed(tallies) == []
    post(tallies, one_price("past", n=60, first=30), historic=True)
    assert feed(tallies) == []
    (told,) = post(tallies, one_price("past", first=90)).alarms  # the old one, now in the feed
    assert told["cursor"] is not None
    assert not told["historic"]
    assert post(tallies, one_price("past", first=180)).alarms == []
    (live,) = feed(tallies)
    assert live["id"] == alarm["id"]
    assert not live["historic"]
    assert live["cursor"] is not None
    assert live["repeats"] > alarm["repeats"]
    post(tallies, one_price("past", first=120))
    assert [a["cursor"] for a in feed(tallies)] == [live["cursor"]]


def test_a_stream_that_was_never_there_is_nothing(tallies: Tallies) -> None:
    judged = tallies.judge.judge("main", blobs_of(tallies.logs, "nobody"))
    assert judged.folded.state["rows"].tolist() == [0]
    assert judged.crossings == []
