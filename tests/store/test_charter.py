"""The charter: what is fixed at the first start stays, and others are told."""

from __future__ import annotations

import threading

import pytest

from service.store.charter import Charter, charter
from service.store.connection import connect
from service.store.errors import StoreError
from service.store.keys import SETTINGS


def test_racing_first_starts_agree(fresh_store: str) -> None:
    found: list[Charter] = []
    ready = threading.Barrier(8)

    def start() -> None:
        with connect(fresh_store, 5) as client:
            client.ping()
            ready.wait()
            found.append(charter(client, 4))

    threads = [threading.Thread(target=start) for _ in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert len(found) == 8
    assert len(set(found)) == 1
    assert all(0 < half < 2**64 for half in found[0].ident_key)
    assert found[0].ident_key[0] != found[0].ident_key[1]


def test_every_store_has_a_key_of_its_own(client) -> None:
    first = charter(client, 4)
    assert charter(client, 4) == first
    client.flushall()
    assert charter(client, 4).ident_key != first.ident_key


def test_the_number_of_partitions_cannot_change(client) -> None:
    first = charter(client, 4)
    with pytest.raises(StoreError, match=r"made with 4 partitions.*TALLYWARD_PARTITIONS=4"):
        charter(client, 8)
    assert charter(client, 4) == first


def test_a_store_of_another_format_is_refused(client) -> None:
    charter(client, 4)
    client.hset(SETTINGS, "format", 3)
    with pytest.raises(StoreError, match="the store has format 3, this version reads 2"):
        charter(client, 4)


@pytest.mark.parametrize(("room", "shard"), [(512, 399), (4096, 3194), (100_000, 3194), (64, 49)])
def test_sets_are_as_large_as_the_server_keeps_them_as_arrays(client, room: int, shard) -> None:
    client.config_set("set-max-intset-entries", room)
    assert charter(client, 4).shard == shard
    client.config_set("set-max-intset-entries", 300)
    assert charter(client, 4).shard == shard


def test_a_server_that_tells_no_settings_is_taken_to_have_its_own(client) -> None:
    client.execute_command("ACL", "SETUSER", "default", "-config")
    try:
        assert charter(client, 4).shard == 399
    finally:
        client.execute_command("ACL", "SETUSER", "default", "+@all")
