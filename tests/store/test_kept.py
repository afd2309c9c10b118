"""Kept states: an append says what a worker has not folded, or that its state is void."""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
import redis

from service.store.connection import connect
from service.store.errors import Unavailable
from service.store.keys import path
from service.store.loading import kept_records, load
from service.store.logs import Appended, Known, Logs
from service.streams.record import HEADER, Stream
from tests.scenarios.running import StoreServer
from tests.store.batches import NOW, batch
from tests.store.workers import HORIZON, blobs_of, compact


class Worker:
    """Appends, and keeps by merchant what may be kept, in the order of `Known`."""

    def __init__(self, client: redis.Redis, partitions: int = 1, **settings: int) -> None:
        self.logs = Logs(client, partitions, HORIZON, **settings)
        self.kept: dict[str, tuple[int, int, int, int]] = {}

    def post(self, merchants, amounts, **columns) -> Appended:
        return self.append(*self.pack(merchants, amounts, **columns))

    def pack(self, merchants, amounts, **columns):
        rows = batch(merchants, amounts, **columns)
        kept = [self.kept.get(s.merchant, (0, 0, 0, 0)) for s in rows.streams]
        incarnation, *others = zip(*kept, strict=True)
        known = Known(np.array(incarnation, np.uint64), *map(np.array, others))
        versions = [1] * len(rows.streams)
        calls = self.logs.calls("main", rows, versions, now=NOW, historic=False, known=known)
        return calls, rows

    def append(self, calls, rows) -> Appended:
        done = self.logs.append(calls, rows)
        for i, stream in enumerate(rows.streams):
            records = int((done.slot == i).sum())
            start = int(done.start[i])
            if i in done.cold:
                loaded = load([done.cold[i]])
                start, records = int(loaded.folded.state["records"][0]), len(loaded.records)
            self.kept.pop(stream.merchant, None)
            if done.may_keep[i]:
                self.kept[stream.merchant] = (
                    int(done.incarnation[i]),
                    start + records,
                    int(done.generation[i]),
                    int(done.era[i]),
                )
        return done


def unfolded(done: Appended, stream: int = 0) -> list[int] | None:
    """Return the amounts that go on from a kept state; None for a cold stream."""
    assert (stream in done.cold) == (done.start[stream] < 0)
    if stream in done.cold:
        return None
    return done.records["amount"][done.slot == stream].tolist()


def held(worker: Worker, merchant: str) -> list[int]:
    (blob,) = blobs_of(worker.logs, merchant)
    return kept_records(blob.log or b"")["amount"].tolist()


def last_calls(client: redis.Redis) -> list[bytes]:
    return client.keys("*last/*")


def test_a_worker_that_is_alone_reads_nothing_again(client) -> None:
    worker = Worker(client, 3)
    done = worker.post(["a", "b", "a"], [1, 2, 3])
    assert unfolded(done, 0) == [1, 3]
    assert unfolded(done, 1) == [2]
    assert done.start.tolist() == [0, 0]
    done = worker.post(["b", "c", "a", "b"], [4, 5, 6, 7])
    assert [unfolded(done, i) for i in range(3)] == [[4, 7], [5], [6]]
    assert done.start.tolist() == [1, 0, 2]
    assert done.first.tolist() == [1, 0, 2]


def test_rows_known_before_are_not_among_the_records(client) -> None:
    worker = Worker(client)
    worker.post(["a", "a"], [1, 2], ids=["x", "y"])
    done = worker.post(["a", "b", "a", "a"], [2, 5, 3, 3], ids=["y", "y", "z", "z"])
    assert unfolded(done, 0) == [3]
    assert unfolded(done, 1) == [5]
    done = worker.post(["a"], [3], ids=["z"])
    assert unfolded(done) == []
    assert (done.start[0], done.first[0], done.count[0]) == (3, -1, 0)


def test_rows_of_another_worker_come_before_the_own(client) -> None:
    mine, other = Worker(client), Worker(client)
    mine.post(["a", "b"], [1, 2])
    other.post(["b", "a", "b"], [11, 12, 13])
    done = mine.post(["a", "c", "b"], [3, 4, 5])
    assert [unfolded(done, i) for i in range(3)] == [[12, 3], [4], [11, 13, 5]]
    assert done.start.tolist() == [1, 0, 1]
    assert done.first.tolist() == [2, 0, 3]


@pytest.mark.parametrize("others", [0, 20, 100])
def test_a_compaction_by_another_worker_does_no_harm(client, others: int) -> None:
    mine, other = Worker(client), Worker(client)
    mine.post(["a"] * 200, range(1, 201))
    theirs = list(range(201, 201 + others))
    if theirs:
        other.post(["a"] * others, theirs)
    assert compact(other.logs, "a")
    done = mine.post(["a"], [999])
    assert unfolded(done) == [*theirs, 999]
    assert (done.generation[0], done.folded[0]) == (1, 200 + others)


def test_a_state_older_than_the_log_is_void(client) -> None:
    mine, other = Worker(client), Worker(client)
    mine.post(["a"] * 10, range(1, 11))
    other.post(["a"] * 200, range(11, 211))
    assert compact(other.logs, "a")
    done = mine.post(["a"], [999])
    assert unfolded(done) is None
    loaded = load([done.cold[0]])
    assert loaded.records["amount"].tolist() == [999]
    assert (done.generation[0], done.folded[0], done.first[0]) == (1, 210, 210)
    assert unfolded(mine.post(["a"], [1000])) == [1000]


def test_a_state_that_is_ahead_of_its_log_is_void(client) -> None:
    worker = Worker(client)
    worker.post(["a"], [1])
    incarnation, _, generation, era = worker.kept["a"]
    worker.kept["a"] = incarnation, 2, generation, era
    assert unfolded(worker.post(["a"], [2])) is None


def test_a_merchant_that_was_forgotten_begins_again(client) -> None:
    mine, other = Worker(client), Worker(client)
    mine.post(["a", "b"], [1, 2])
    for key in client.keys("*/main/*"):
        client.delete(key)
    other.post(["b", "b"], [21, 22])
    done = mine.post(["a", "b"], [3, 4])
    assert unfolded(done, 0) == [3]
    assert done.start.tolist() == [0, -1]
    assert load([done.cold[1]]).records["amount"].tolist() == [21, 22, 4]


def test_nothing_is_trusted_where_the_last_call_is_forgotten(client) -> None:
    worker = Worker(client)
    worker.post(["a", "b"], [1, 2])
    assert 0 < client.ttl(*last_calls(client)) <= 3600
    client.delete(*last_calls(client))
    assert unfolded(worker.post(["a"], [3])) is None
    # the store remembers that call, but what was kept of b is older
    assert unfolded(worker.post(["b"], [4])) is None
    done = worker.post(["a", "b"], [5, 6])
    assert [unfolded(done, i) for i in range(2)] == [[5], [6]]


@pytest.fixture
def server(store_binary: Path, tmp_path: Path) -> Iterator[StoreServer]:
    server = StoreServer(tmp_path, store_binary)
    server.start()
    yield server
    server.kill()


def test_a_store_that_lost_its_last_writes_is_found_out(server: StoreServer) -> None:
    client = connect(server.url, 5)
    mine = Worker(client)
    mine.post(["a", "b"], [1, 2])
    shutil.copytree(server.folder / "appendonlydir", server.folder / "earlier")
    mine.post(["a"], [3])
    mine.post(["b"], [4])
    server.kill()
    shutil.rmtree(server.folder / "appendonlydir")
    (server.folder / "earlier").rename(server.folder / "appendonlydir")
    server.start()
    other = Worker(client)
    other.post(["a", "b"], [13, 14])  # row numbers match again
    done = mine.post(["a"], [5])
    assert unfolded(done) is None
    assert kept_records(done.cold[0].log)["amount"].tolist() == [1, 13, 5]
    done = mine.post(["b"], [6])
    assert unfolded(done) is None
    assert kept_records(done.cold[0].log)["amount"].tolist() == [2, 14, 6]
    client.close()


def test_a_call_sent_again_lets_nothing_be_kept(client) -> None:
    mine, other = Worker(client), Worker(client)
    mine.post(["a"] * 200, range(1001, 1201))
    calls, rows = mine.pack(["a", "b"], [2, 3])
    first = mine.append(calls, rows)
    assert [unfolded(first, i) for i in range(2)] == [[2], [3]]
    other.post(["a"], [4])
    again = mine.append(calls, rows)
    assert again.taken.all()
    assert again.first.tolist() == first.first.tolist()
    assert again.incarnation.tolist() == first.incarnation.tolist()
    assert not again.may_keep.any()
    assert kept_records(again.cold[0].log)["amount"].tolist()[199:] == [1200, 2, 4]
    assert kept_records(again.cold[1].log)["amount"].tolist() == [3]
    assert unfolded(mine.post(["a"], [5])) is None
    assert unfolded(mine.post(["a"], [6])) == [6]


def test_nothing_is_kept_over_a_call_that_failed(client) -> None:
    worker = Worker(client)
    worker.post(["a"], [1])
    client.config_set("maxmemory", 1)
    with pytest.raises(Unavailable):
        worker.post(["a"], [2])
    client.config_set("maxmemory", 0)
    assert unfolded(worker.post(["a"], [3])) is None
    assert unfolded(worker.post(["a"], [4])) == [4]


def test_what_was_packed_before_another_append_is_not_trusted(client) -> None:
    worker = Worker(client)
    worker.post(["a"], [1])
    calls, rows = worker.pack(["a"], [2])
    worker.post(["a"], [3])
    assert unfolded(worker.append(calls, rows)) is None
    assert held(worker, "a") == [1, 3, 2]


def test_many_rows_of_one_partition_are_cut_between_streams(client) -> None:
    worker = Worker(client, call_rows=3)
    merchants = ["a", "b", "c", "d", "b", "b", "b", "e"]
    calls, rows = worker.pack(merchants, range(1, 9))
    assert [call.streams.tolist() for call in calls] == [[0], [1], [2, 3, 4]]
    assert worker.append(calls, rows).taken.all()
    done = worker.post(merchants, range(11, 19))  # still of several eras
    done = worker.post(merchants, range(21, 29))
    assert [unfolded(done, i) for i in range(5)] == [[21], [22, 25, 26, 27], [23], [24], [28]]
    assert done.slot.tolist() == sorted(done.slot.tolist())
    assert done.taken.all()
    assert held(worker, "b") == [2, 5, 6, 7, 12, 15, 16, 17, 22, 25, 26, 27]


def test_partitions_are_trusted_apart(client) -> None:
    worker = Worker(client, 2)
    merchants = [f"m{i}" for i in range(8)]
    worker.post(merchants, range(1, 9))
    parts = [worker.logs.partition("main", m).number for m in merchants]
    assert set(parts) == {0, 1}
    (lost,) = client.keys("{tw0}last/*")
    client.delete(lost)
    done = worker.post(merchants, range(11, 19))
    assert [unfolded(done, i) for i in range(8)] == [
        None if p == 0 else [11 + i] for i, p in enumerate(parts)
    ]


def test_calls_after_one_that_is_not_trusted_are_not_either(client) -> None:
    worker = Worker(client, call_rows=1)
    worker.post(["a"], [1])
    worker.post(["b"], [2])
    assert [unfolded(worker.post([m], [9])) for m in "ab"] == [[9], [9]]
    client.delete(*last_calls(client))
    done = worker.post(["a", "b"], [3, 4])
    assert [unfolded(done, i) for i in range(2)] == [None, None]


def test_a_log_as_read_names_its_stream(client) -> None:
    worker = Worker(client)
    worker.post(["a"], [1])
    worker.kept.clear()
    done = worker.post(["a"], [2])
    assert done.cold[0].path == path("main", Stream("a", "sale", "EUR"))
    assert done.cold[0].version == done.cold[0].log[4:16]


def test_a_compaction_that_was_lost_makes_a_state_cold(client) -> None:
    """A crossing may have been told with it, and be known to nobody now."""
    worker, other = Worker(client), Worker(client)
    worker.post(["a"] * 40, list(range(1, 41)))
    key = worker.logs.partitions[0].log("main/a/sale/EUR")
    before = client.get(key)
    assert compact(other.logs, "a")
    assert unfolded(worker.post(["a"], [50])) == [50]  # which knows of the compaction now
    rows = kept_records(client.get(key))
    header = before[: HEADER.itemsize]
    client.set(key, header + rows.tobytes())
    client.setrange(key.replace("log/", "seen/"), 0, header)
    assert unfolded(worker.post(["a"], [60])) is None
