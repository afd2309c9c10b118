"""The tallies as the web asks them, over real stores that die, forget, refuse and come back."""

from __future__ import annotations

import os
import signal
import socket
import time
from collections.abc import Callable, Iterator
from contextlib import closing
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import service.tallies as module
from service.settings import Settings
from service.store.embedded import EmbeddedStore
from service.store.keys import path
from service.store.script import APPEND
from service.streams.record import Stream
from service.tallies import Conflict, Tallies, Unavailable, Unknown
from tests.store.batches import NOW, batch
from tests.store.line import BadLine
from tests.store.workers import (
    apart,
    append,
    check,
    feed,
    hiring,
    honest,
    named,
    one_price,
    outboxes,
    post,
    unjudged,
    watch,
    worker,
)

DAY = 86_400_000


@pytest.fixture
def hire(fresh_store: str) -> Iterator[Callable[[], Tallies]]:
    """Return a function that starts one more worker on the same store."""
    with hiring(fresh_store) as hire:
        yield hire


@pytest.fixture
def tallies(hire: Callable[[], Tallies]) -> Tallies:
    return hire()


def counts(tallies: Tallies) -> dict[str, int]:
    return {e["merchant"]: e["count"] for e in tallies.merchants("main")}


class TestPosting:
    def test_every_row_is_told_of(self, tallies: Tallies) -> None:
        post(tallies, batch(["a"], [1999], ids=["known"]))
        rows = batch(
            ["a"] * 5,
            [1999, 0, 2999, 3999, 4999],
            ids=["known", "zero", "late", "old", "new"],
            at=[NOW, NOW - 9 * DAY, NOW - 8 * DAY, NOW - 30 * DAY, NOW],
        )
        rows = replace(rows, unverified=np.array([False, False, False, True, False]))
        posted = post(tallies, rows)
        told = (posted.accepted, posted.duplicates, posted.late, posted.zero, posted.unverified)
        assert told == (4, 1, 2, 1, 1)
        again = post(tallies, rows)
        told = (again.accepted, again.duplicates, again.late, again.zero, again.unverified)
        assert told == (0, 5, 0, 0, 0)
        assert counts(tallies) == {"a": 4}

    def test_an_empty_batch_is_nothing(self, tallies: Tallies) -> None:
        assert post(tallies, batch([], [])).accepted == 0
        assert unjudged(tallies) == 0

    def test_alarms_are_those_of_the_requests_own_rows(
        self, tallies: Tallies, hire: Callable[[], Tallies]
    ) -> None:
        watch(tallies)
        append(tallies, one_price("dead", n=20))  # its worker died before judging
        mine = one_price("mine")
        rows = batch(
            ["dead", *["mine"] * 30],
            [1999, *mine.amount.tolist()],
            ids=["other", *named("mine", 0, 30)],
        )
        posted = post(hire(), rows)
        assert [a["merchant"] for a in posted.alarms] == ["mine"]
        assert sorted(a["merchant"] for a in feed(tallies)) == ["dead", "mine"]
        assert post(tallies, mine).alarms == []

    def test_entries_come_as_asked(self, tallies: Tallies) -> None:
        assert post(tallies, honest("a")).entries == []
        (entry,) = post(tallies, honest("a", first=30), reply="merchants").entries
        assert entry["count"] == 60
        (full,) = post(tallies, honest("a", first=60), reply="full").entries
        assert full["count"] == 90
        assert full["policy"] == "standard"

    def test_a_key_with_another_body_is_a_conflict(
        self, tallies: Tallies, hire: Callable[[], Tallies]
    ) -> None:
        tallies.claim("main", "key", "a" * 64)
        hire().claim("main", "key", "a" * 64)
        with pytest.raises(Conflict):
            hire().claim("main", "key", "b" * 64)
        tallies.claim("hill", "key", "b" * 64)
        tallies.claim("main", "other", "b" * 64)
        (claim, *_) = tallies.client.keys("{tw/main}claim/*")
        assert tallies.client.ttl(claim) > tallies.horizon_s


class TestFaults:
    """Once rows are counted the answer says so; before that nothing is."""

    @pytest.mark.parametrize("identity", [True, False])
    def test_an_answer_that_was_lost_is_asked_for_again(
        self, fresh_store: str, tmp_path: Path, identity: bool
    ) -> None:
        rows = replace(honest("a"), ident=honest("a").ident * np.uint64(identity))
        with BadLine(tmp_path / "line.sock", fresh_store) as line:
            tallies = worker(line.url)
            line.losing = APPEND.sha.encode()
            posted = post(tallies, rows)
            tallies.client.close()
        assert line.lost == 1
        assert (posted.accepted, posted.duplicates) == (30, 0)
        tallies = worker(fresh_store)
        assert counts(tallies) == {"a": 30}
        tallies.client.close()

    def test_a_judge_that_fails_leaves_it_to_the_sweep(self, tallies: Tallies) -> None:
        watch(tallies)
        for partition in tallies.logs.partitions:
            tallies.client.set(partition.outbox, "not a hash")  # so that no crossing is kept
        posted = post(tallies, one_price("a"), reply="merchants")
        assert (posted.accepted, posted.alarms, posted.entries) == (30, [], [])
        assert unjudged(tallies) == 1
        for partition in tallies.logs.partitions:
            tallies.client.delete(partition.outbox)
        tallies.sweep.round()
        assert [a["merchant"] for a in feed(tallies)] == ["a"]
        assert unjudged(tallies) == outboxes(tallies) == 0

    @pytest.mark.parametrize("part", ["entries", "detail"])
    def test_no_error_of_ours_hides_that_rows_were_counted(
        self, tallies: Tallies, monkeypatch, part: str
    ) -> None:
        watch(tallies)

        def fail(*args: object, **kwargs: object) -> None:
            raise KeyError("nobody foresaw this")

        monkeypatch.setattr(module, part, fail)
        reply = "merchants" if part == "entries" else "full"
        assert post(tallies, one_price("a"), reply=reply).accepted == 30
        assert post(tallies, one_price("a")).duplicates == 30
        assert len(feed(tallies)) == 1

    def test_a_category_that_cannot_be_kept_stops_the_batch_before_it_counts(
        self, tallies: Tallies
    ) -> None:
        key = tallies.logs.partition("main", "a").categories("main")
        tallies.client.set(key, "not a hash")
        rows = replace(batch(["a"], [1999]), categories={"a": "5942"})
        with pytest.raises(Unavailable):
            post(tallies, rows)
        tallies.client.delete(key)
        assert counts(tallies) == {}
        assert post(tallies, rows).accepted == 1
        assert [e["category"] for e in tallies.merchants("main")] == ["5942"]

    def test_a_store_that_is_away_took_nothing(self, lone_store: EmbeddedStore) -> None:
        tallies = worker(lone_store.url)
        post(tallies, honest("a"))
        lone_store.stop()
        with pytest.raises(Unavailable):
            post(tallies, honest("a", first=30))
        calls = tallies.logs.calls("main", honest("a", first=30), [1], now=NOW, historic=False)
        with pytest.raises(Unavailable, match="took 0 of 30 rows"):
            tallies.logs.append(calls, honest("a", first=30))
        assert check(tallies, "store") == "fail"
        lone_store.start()
        assert post(tallies, honest("a", first=30)).accepted == 30
        tallies.sweep.round()
        assert counts(tallies) == {"a": 60}
        assert unjudged(tallies) == 0

    @pytest.mark.parametrize("how", [signal.SIGTERM, signal.SIGKILL])
    def test_everything_is_there_after_a_restart(
        self, lone_store: EmbeddedStore, how: signal.Signals
    ) -> None:
        tallies = worker(lone_store.url)
        watch(tallies)
        tallies.assign("main", "a", policy=None, category="5942")
        rows = [honest("a", n=200), one_price("b"), honest("c", n=20), batch(["d"], [1999])]
        offsets = batch(["e"] * 3, [1, 2, 3], source="till", offsets=[0, 1, 2])
        for each in (*rows, offsets):
            post(tallies, each)
        append(tallies, one_price("f"))
        before = sorted(tallies.merchants("main", now=NOW), key=lambda e: e["merchant"])
        (alarm, other) = feed(tallies)
        kept = tallies.rows("main", Stream("a", "sale", "EUR"))
        pid = lone_store.pid
        assert pid is not None
        if how == signal.SIGKILL:
            time.sleep(1.1)  # the promise is for what is older than a second
            os.kill(pid, how)
            while lone_store.pid in (None, pid):
                time.sleep(0.01)
        else:
            lone_store.stop()
            lone_store.start()
        tallies = worker(lone_store.url)
        after = sorted(tallies.merchants("main", now=NOW), key=lambda e: e["merchant"])
        assert after == before
        assert [e["count"] for e in after] == [200, 30, 20, 1, 3, 30]
        assert feed(tallies) == [alarm, other]
        assert tallies.rows("main", Stream("a", "sale", "EUR")) == kept
        for each in (*rows[:3], offsets):
            assert post(tallies, each).accepted == 0
        assert tallies.policies("main")["standard"]["version"] == 2
        assert tallies.alarms("main", after=alarm["cursor"], limit=9)[0] == [other]

    def test_a_replica_is_not_ready_and_takes_nothing_until_it_is_promoted(
        self, fresh_store: str, tallies: Tallies, lone_store: EmbeddedStore
    ) -> None:
        replica = worker(lone_store.url)
        assert check(replica, "role") == "pass"
        with closing(socket.socket()) as free:
            free.bind(("127.0.0.1", 0))
            port = free.getsockname()[1]
        tallies.client.config_set("port", port)
        tallies.client.config_set("repl-diskless-sync-delay", 0)
        try:
            watch(tallies)
            post(tallies, one_price("a"))
            replica.client.replicaof("127.0.0.1", port)
            while replica.client.info("replication")["master_link_status"] != "up":
                time.sleep(0.01)
            assert tallies.facts(0).replicas == 1
            assert check(replica, "role") == "fail"
            assert feed(replica) == feed(tallies) != []
            with pytest.raises(Unavailable):
                post(replica, honest("a", first=30))
            replica.client.replicaof("NO", "ONE")
            assert check(replica, "role") == "pass"
            promoted = worker(lone_store.url)
            assert promoted.ident_key() == tallies.ident_key()
            assert post(promoted, one_price("a", n=31)).duplicates == 30
        finally:
            replica.client.replicaof("NO", "ONE")
            while replica.client.info("persistence")["aof_rewrite_in_progress"]:
                time.sleep(0.01)  # a server does not end before it has a whole file
            tallies.client.config_set("port", 0)


class TestReadiness:
    def test_a_store_as_it_should_be(self, tallies: Tallies) -> None:
        post(tallies, honest("a"))
        assert {c["name"]: c["status"] for c in tallies.checks()} == {
            "store": "pass",
            "role": "pass",
            "eviction": "pass",
            "durability": "pass",
            "replicas": "pass",
            "memory": "pass",
            "quarantine": "pass",
            "unjudged": "pass",
        }

    @pytest.mark.parametrize("policy", ["allkeys-lru", "volatile-ttl", "allkeys-random"])
    def test_a_store_that_may_evict_is_not_ready(self, tallies: Tallies, policy: str) -> None:
        tallies.client.config_set("maxmemory-policy", policy)
        assert check(tallies, "eviction") == "fail"
        with pytest.raises(Unavailable, match=f"{policy}, it may drop tallies"):
            _ = tallies.durability

    def test_what_answers_a_new_connection_is_looked_at_again(self, tallies: Tallies) -> None:
        assert tallies.durability == "everysec"
        tallies.client.config_set("appendfsync", "always")
        assert tallies.durability == "everysec"  # seen a moment ago
        tallies.client.connection_pool.disconnect()
        tallies.client.ping()
        assert tallies.durability == "always"

    def test_a_store_without_a_file_is_warned_of(self, tallies: Tallies) -> None:
        tallies.client.config_set("appendonly", "no")
        assert check(tallies, "durability") == "warn"

    @pytest.mark.parametrize(("share", "status"), [(0.5, "pass"), (0.9, "warn"), (0.99, "fail")])
    def test_memory_that_runs_out_is_told(
        self, tallies: Tallies, share: float, status: str
    ) -> None:
        pad = 64 << 20  # so that the share does not depend on what the server does meanwhile
        tallies.client.setrange("pad", pad, "x")
        used = tallies.client.info("memory")["used_memory"]
        tallies.client.config_set("maxmemory", int(used / share))
        assert check(tallies, "memory") == status

    def test_calls_that_nobody_judges_are_told(self, tallies: Tallies) -> None:
        append(tallies, honest("a"))
        assert check(tallies, "unjudged") == "pass"
        partition = tallies.logs.partition("main", "a")
        (call,) = tallies.client.zrange(partition.pending, 0, -1)
        tallies.client.zincrby(partition.pending, -61_000, call)
        assert check(tallies, "unjudged") == "warn"
        tallies.sweep.round()
        assert check(tallies, "unjudged") == "pass"

    def test_a_stream_in_quarantine_is_unavailable_and_told(self, tallies: Tallies) -> None:
        for currency in ("EUR", "USD"):
            post(tallies, batch(["ill"], [1999], ids=["x"], currency=currency))
            stream = Stream("ill", "sale", currency)
            key = tallies.logs.partition("main", "ill").log(path("main", stream))
            tallies.client.append(key, "torn")
            assert post(tallies, batch(["ill"], [2999], ids=["y"], currency=currency)).accepted == 1
        stream = Stream("ill", "sale", "EUR")
        for ask in (
            lambda: tallies.stream_of("main", "ill", "sale", None),
            lambda: tallies.detail("main", stream, measures=False, now=NOW),
            lambda: tallies.digits("main", stream, "lead_digit", "window", now=NOW),
            lambda: tallies.rows("main", stream),
        ):
            with pytest.raises(Unavailable, match="quarantine"):
                ask()
        assert counts(tallies) == {}
        assert check(tallies, "quarantine") == "warn"


class TestCategories:
    def given(self, tallies: Tallies, category: str) -> None:
        post(tallies, replace(batch(["a"], [1999]), categories={"a": category}))

    def shown(self, tallies: Tallies) -> set[str]:
        (entry,) = tallies.merchants("main")
        found = tallies.detail("main", Stream("a", "sale", "EUR"), measures=False, now=NOW)
        return {entry["category"], found["category"]}

    def test_the_last_one_given_is_remembered(
        self, tallies: Tallies, hire: Callable[[], Tallies]
    ) -> None:
        self.given(tallies, "5942")
        post(tallies, batch(["a"], [1999]))
        assert self.shown(hire()) == {"5942"}
        self.given(tallies, "5411")
        assert self.shown(hire()) == {"5411"}

    def test_an_assignment_counts_whatever_this_worker_remembers(
        self, tallies: Tallies, hire: Callable[[], Tallies]
    ) -> None:
        self.given(tallies, "5942")
        hire().assign("main", "a", policy=None, category="5411")
        assert tallies.assign("main", "a", policy=None, category="5942")["category"] == "5942"
        assert self.shown(tallies) == {"5942"}

    def test_what_a_worker_remembers_does_not_last(
        self, tallies: Tallies, hire: Callable[[], Tallies], monkeypatch
    ) -> None:
        monkeypatch.setattr(module, "CATEGORIES_SECONDS", -1)
        self.given(tallies, "5942")
        self.given(hire(), "5411")
        self.given(tallies, "5942")
        assert self.shown(tallies) == {"5942"}


class TestStreams:
    def test_the_busiest_one_is_meant_where_none_is_named(self, tallies: Tallies) -> None:
        post(tallies, batch(["a"] * 2, [1, 2], currency="USD"))
        post(tallies, batch(["a"] * 3, [1, 2, 3], currency="EUR"))
        post(tallies, batch(["a"] * 9, range(1, 10), flow="refund"))
        assert tallies.stream_of("main", "a", "sale", None) == Stream("a", "sale", "EUR")
        assert tallies.stream_of("main", "a", "sale", "USD") == Stream("a", "sale", "USD")
        with pytest.raises(Unknown, match=r"refund in EUR, sale in EUR, sale in USD"):
            tallies.stream_of("main", "a", "payout", None)
        with pytest.raises(Unknown, match="no merchant 'b'"):
            tallies.stream_of("main", "b", "sale", None)
        with pytest.raises(Unknown):
            tallies.stream_of("hill", "a", "sale", None)

    def test_streams_of_both_partitions(self, tallies: Tallies) -> None:
        merchants = apart(tallies, "m")
        post(tallies, batch(merchants, [1999, 2999], ids=["x", "x"]))
        assert counts(tallies) == dict.fromkeys(merchants, 1)


def test_a_store_that_comes_back_empty_gives_all_workers_one_ident_key(
    fresh_store: str,
) -> None:
    first, second = (Tallies(Settings(redis_url=fresh_store)) for _ in range(2))
    before = first.ident_key()
    assert second.ident_key() == before
    first.client.flushall()
    assert first.facts(0)
    assert second.facts(0)
    assert first.ident_key() == second.ident_key() != before
