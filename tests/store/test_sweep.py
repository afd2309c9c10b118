"""The sweep: what a worker leaves half done is finished by another, once."""

from __future__ import annotations

import signal
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest
import redis

from service.settings import Settings
from service.store.keys import path
from service.store.sweep import CALLS_AT_ONCE
from service.streams.record import Stream
from service.tallies import Tallies
from tests.store.batches import batch
from tests.store.workers import (
    apart,
    append,
    check,
    feed,
    honest,
    one_price,
    outboxes,
    post,
    quarantine,
    unjudged,
    watch,
    worker,
)

ROOT = Path(__file__).parents[2]
Hire = Callable[[], Tallies]


def die(url: str, step: str) -> None:
    """Run a worker that is killed where a step begins."""
    command = [sys.executable, "-m", "tests.store.dying", url, step]
    done = subprocess.run(command, cwd=ROOT, capture_output=True, check=False)
    assert done.returncode == -signal.SIGKILL, done.stderr


def free_leases(tallies: Tallies) -> None:
    """Do what time does to the leases of a worker that is gone."""
    for partition in tallies.logs.partitions:
        tallies.client.delete(partition.lease)


@pytest.mark.parametrize("step", ["judge.go_on", "logs.compact", "feed.publish", "logs.judged"])
def test_a_dead_workers_alarm_is_published_once(
    tallies: Tallies, fresh_store: str, step: str
) -> None:
    watch(tallies)
    die(fresh_store, step)
    assert unjudged(tallies) == 1
    assert outboxes(tallies) > 0 if step == "feed.publish" else outboxes(tallies) == 0
    tallies.sweep.round()
    (alarm,) = feed(tallies)
    assert alarm["merchant"] == "dying"
    assert unjudged(tallies) == outboxes(tallies) == 0
    assert post(tallies, one_price("dying", n=31)).duplicates == 30
    tallies.sweep.round()
    assert [a["id"] for a in feed(tallies)] == [alarm["id"]]


def test_a_late_call_is_judged_whatever_the_directory_says(tallies: Tallies) -> None:
    watch(tallies)
    append(tallies, one_price("left"))
    for partition in tallies.logs.partitions:
        tallies.client.delete(partition.dirty)  # as if another worker had just written the entry
    tallies.sweep.round()
    assert [a["merchant"] for a in feed(tallies)] == ["left"]
    assert unjudged(tallies) == 0


def test_a_young_call_is_left_to_its_worker(tallies: Tallies) -> None:
    tallies.sweep.late_ms = 3_600_000
    append(tallies, honest("young"))
    tallies.sweep.round()
    assert unjudged(tallies) == 1


@pytest.mark.parametrize("seconds", [0.5, 60.0])
def test_a_call_is_known_for_as_long_as_its_worker_may_send_it_again(
    fresh_store: str, seconds: float
) -> None:
    tallies = Tallies(Settings(redis_url=fresh_store, store_timeout=seconds, timeout=600))
    tallies.client.close()
    wait_and_send_again = 2 * seconds * 1000
    assert tallies.sweep.late_ms > wait_and_send_again


def test_any_number_of_late_calls_is_judged(tallies: Tallies) -> None:
    for i in range(CALLS_AT_ONCE + 7):
        append(tallies, batch(["busy"], [i + 1]))
    tallies.sweep.round()
    assert unjudged(tallies) == 0


def test_a_failing_partition_does_not_hold_up_the_others(tallies: Tallies, caplog) -> None:
    watch(tallies)
    for merchant in apart(tallies, "shop"):
        append(tallies, one_price(merchant))
    broken = tallies.logs.partitions[0]
    tallies.client.set(broken.outbox, "not a hash")
    tallies.sweep.round()
    assert len(feed(tallies)) == 1
    assert "partition 0 failed" in caplog.text
    tallies.client.delete(broken.outbox)
    tallies.sweep.round()
    assert len(feed(tallies)) == 2


def test_a_store_that_is_away_ends_the_round(lone_store) -> None:
    tallies = worker(lone_store.url)
    lone_store.stop()
    with pytest.raises(redis.ConnectionError):
        tallies.sweep.round()


def test_a_late_call_that_cannot_be_folded_is_forgotten(tallies: Tallies) -> None:
    watch(tallies)
    append(tallies, one_price("sound"))
    append(tallies, honest("poison"))
    partition = tallies.logs.partition("main", "poison")
    key = partition.log(path("main", Stream("poison", "sale", "EUR")))
    tallies.client.append(key, "torn")
    tallies.sweep.round()
    assert unjudged(tallies) == 0
    assert list(quarantine(tallies)) == [b"main/poison/sale/EUR"]
    assert [a["merchant"] for a in feed(tallies)] == ["sound"]


def test_a_stream_that_can_be_folded_again_leaves_quarantine(tallies: Tallies, hire: Hire) -> None:
    post(tallies, honest("ill"))
    partition = tallies.logs.partition("main", "ill")
    key = partition.log(path("main", Stream("ill", "sale", "EUR")))
    sound = tallies.client.get(key)
    tallies.client.set(key, b"\xff" + sound[1:])  # a format of a later version
    assert post(hire(), honest("ill", n=5, first=30)).accepted == 5
    assert quarantine(tallies)
    tallies.sweep.round()
    assert quarantine(tallies)
    written = tallies.client.get(key)
    tallies.client.set(key, sound[:1] + written[1:])
    free_leases(tallies)
    hire().sweep.round()  # the later version is started: a worker tries at once, then seldom
    assert not quarantine(tallies)
    assert check(tallies, "quarantine") == "pass"
    assert [e["count"] for e in tallies.merchants("main")] == [35]


def test_one_worker_at_a_time_sweeps_a_partition(tallies: Tallies, hire: Hire) -> None:
    tallies.sweep.round()
    append(tallies, honest("late"))
    other = hire()
    other.sweep.round()
    assert unjudged(tallies) == 1
    assert all(tallies.client.pttl(p.lease) > 0 for p in tallies.logs.partitions)
    free_leases(tallies)
    other.sweep.round()
    assert unjudged(tallies) == 0


def test_nothing_is_remembered_of_calls_that_are_done(tallies: Tallies) -> None:
    for i in range(20):
        post(tallies, honest(f"m{i % 3}", n=3, first=3 * i))
    tallies.sweep.late_ms = 3_600_000
    tallies.sweep.round()
    assert unjudged(tallies) == 0
    assert not any(tallies.logs._judged.values())


def test_calls_whose_end_was_lost_are_forgotten_late(tallies: Tallies) -> None:
    post(tallies, honest("a"))
    for partition in tallies.logs.partitions:
        tallies.logs._take_judged(partition.number)  # as an append that then fails does
    tallies.sweep.late_ms = 3_600_000
    tallies.sweep.round()
    assert unjudged(tallies) == 1
    tallies.sweep.late_ms = -1000
    tallies.sweep.round()
    assert unjudged(tallies) == 0


def test_what_is_kept_besides_the_tallies_expires(tallies: Tallies) -> None:
    watch(tallies)
    for first in range(0, 600, 200):
        post(tallies, honest("kept", n=200, first=first))
    tallies.claim("main", "key", "digest")
    tallies.sweep.round()
    lasting = {"log/", "snap/", "ids/", "of/", "dir/", "settings", "versions", "policies"}
    lasting |= {"revision", "mark", "alarm/", "feed"}
    for key in tallies.client.keys("*"):
        name = key.decode().split("}", 1)[1]
        if not any(name.startswith(kind) for kind in lasting):
            assert tallies.client.pttl(key) > 0, name
