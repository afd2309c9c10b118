"""A batch is acknowledged once as many replicas have it as the operator asked for."""

from __future__ import annotations

import signal
from collections.abc import Iterator
from pathlib import Path

import pytest

from service.settings import Settings
from service.tallies import Tallies, Unavailable
from tests.processes import eventually, free_port
from tests.scenarios.running import StoreServer
from tests.store.batches import NOW
from tests.store.workers import blobs_of, check, honest, post, worker


@pytest.fixture
def servers(store_binary: Path, tmp_path: Path) -> Iterator[tuple[StoreServer, StoreServer]]:
    """Give a server and another that follows it."""
    pair = (
        StoreServer(tmp_path / "first", store_binary),
        StoreServer(tmp_path / "copy", store_binary),
    )
    for server in pair:
        server.start()
    yield pair
    for server in pair:
        server.kill()


@pytest.fixture
def first(servers: tuple[StoreServer, StoreServer]) -> Iterator[Tallies]:
    tallies = Tallies(
        Settings(redis_url=servers[0].url, partitions=2, replicas=1, store_timeout=0.5)
    )
    port = free_port()
    tallies.client.config_set("port", port)
    copy = worker(servers[1].url)
    copy.client.flushall()
    copy.client.replicaof("127.0.0.1", port)
    eventually(lambda: copy.client.info()["master_link_status"] == "up", "a copy")
    copy.client.close()
    yield tallies
    tallies.client.close()


def test_what_is_acknowledged_is_there_when_the_replica_takes_over(
    servers: tuple[StoreServer, StoreServer], first: Tallies
) -> None:
    assert post(first, honest("a", n=30)).accepted == 30
    assert first.durability == "replicas"
    assert check(first, "replicas") == "pass"
    servers[0].kill()  # at once, with no word to anybody
    copy = worker(servers[1].url)
    copy.client.replicaof("NO", "ONE")
    assert len(blobs_of(copy.logs, "a")[0].log) == 32 * 31
    again = post(copy, honest("a", n=31))
    assert (again.accepted, again.duplicates) == (1, 30)
    copy.client.close()


def test_without_its_replica_a_batch_is_not_acknowledged_and_then_completed(
    servers: tuple[StoreServer, StoreServer], first: Tallies
) -> None:
    copy = servers[1]
    copy.kill()
    eventually(lambda: first.client.info()["connected_slaves"] == 0, "the end of the copy")
    with pytest.raises(Unavailable, match="not yet on 1 replicas"):
        post(first, honest("a", n=30))
    assert check(first, "replicas") == "fail"
    port = first.client.config_get("port")["port"]
    copy.start()
    follower = worker(copy.url)
    follower.client.replicaof("127.0.0.1", port)
    eventually(lambda: follower.client.info()["master_link_status"] == "up", "a copy")
    again = post(first, honest("a", n=31))
    assert (again.accepted, again.duplicates) == (1, 30)
    assert len(blobs_of(follower.logs, "a")[0].log) == 32 * 32
    follower.client.close()


def test_a_call_that_is_sent_again_waits_for_the_replica_too(
    servers: tuple[StoreServer, StoreServer], first: Tallies
) -> None:
    """It writes no row then, and its connection may be another one."""
    assert post(first, honest("b", n=1)).accepted == 1
    servers[1].process.send_signal(signal.SIGSTOP)  # connected, and behind from now on
    rows = honest("a", n=30)
    calls = first.logs.calls("main", rows, [1], now=NOW, historic=False, mark=first.logs.mark)
    for _ in range(2):
        with pytest.raises(Unavailable, match="not yet on 1 replicas"):
            first.logs.append(calls, rows)
        first.client.connection_pool.disconnect()
    assert len(blobs_of(first.logs, "a")[0].log) == 32 * 31
