"""Appending: once and only once, whatever is sent twice, torn or lost."""

from __future__ import annotations

import numpy as np
import pytest
import redis

from service.store.connection import connect
from service.store.errors import Unavailable
from service.store.keys import Partition, path, stream_of
from service.store.loading import CorruptStream, kept_records, load
from service.store.logs import COMPACT_ROWS, EVIDENCE_ROWS, Logs
from service.streams.folded import Folded
from service.streams.record import HEADER, RECORD, Stream
from service.streams.snapshots import write_snapshots
from tests.store.batches import NOW, batch

HORIZON = 8 * 86_400


@pytest.fixture
def client(fresh_store: str):
    client = connect(fresh_store, 5)
    yield client
    client.close()


@pytest.fixture
def logs(client: redis.Redis) -> Logs:
    return Logs(client, 3, HORIZON)


def post(logs: Logs, rows):
    calls = logs.calls("main", rows, [1] * len(rows.streams), now=NOW, historic=False)
    return logs.append(calls, rows)


def amounts_of(logs: Logs, merchant: str) -> list[int]:
    name = path("main", Stream(merchant, "sale", "EUR"))
    log = logs.read([(logs.partition("main", merchant), name)])[0].log
    return kept_records(log or b"")["amount"].tolist()


def compact(logs: Logs, merchant: str) -> bool:
    name = path("main", Stream(merchant, "sale", "EUR"))
    blobs = logs.read([(logs.partition("main", merchant), name)])
    loaded = load(blobs)
    loaded.folded.state["records"] += len(loaded.records)
    return logs.compact(
        blobs,
        write_snapshots(loaded.folded, range(len(loaded.folded.state))),
        loaded.folded.state["records"].tolist(),
        [{}],
    )[0]


def test_rows_land_in_their_streams_in_the_order_given(logs: Logs) -> None:
    rows = batch(["a", "b", "a", "c", "b", "a"], [1, 2, 3, 4, 5, 6], ids=list("uvwxyz"))
    done = post(logs, rows)
    assert done.taken.all()
    assert done.first.tolist() == [0, 0, 0]
    assert done.count.tolist() == [3, 2, 1]
    assert amounts_of(logs, "a") == [1, 3, 6]
    assert amounts_of(logs, "b") == [2, 5]
    again = post(logs, batch(["b"], [7], ids=["new"]))
    assert again.first.tolist() == [2]


def test_a_row_seen_before_is_left_out(logs: Logs) -> None:
    post(logs, batch(["a", "a"], [1, 2], ids=["x", "y"]))
    done = post(logs, batch(["a", "a", "a"], [2, 3, 3], ids=["y", "z", "z"]))
    assert done.taken.tolist() == [False, True, False]
    assert amounts_of(logs, "a") == [1, 2, 3]


def test_the_same_id_of_another_merchant_is_another_row(logs: Logs) -> None:
    done = post(logs, batch(["a", "b"], [1, 2], ids=["x", "x"]))
    assert done.taken.all()


@pytest.mark.parametrize("size", [50, 300, 2000])
def test_ids_are_known_after_compaction_too(logs: Logs, size: int) -> None:
    ids = [f"{i:07d}" for i in range(size)]
    half = size // 2
    post(logs, batch(["a"] * half, range(1, half + 1), ids=ids[:half]))
    assert compact(logs, "a")
    post(logs, batch(["a"] * (size - half), range(half + 1, size + 1), ids=ids[half:]))
    assert compact(logs, "a")
    done = post(logs, batch(["a"] * (size + 1), [9] * (size + 1), ids=[*ids, "fresh"]))
    assert done.taken.tolist() == [False] * size + [True]
    assert done.first.tolist() == [size]


def test_idents_that_go_from_a_log_to_sets_keep_all_their_digits(logs: Logs, client) -> None:
    idents = [2**63 - 1, 10**18, 10**18 + 1, 9_007_199_254_740_993 * 1000 + 7]
    post(logs, batch(["a"] * 4, [1, 2, 3, 4], ids=list("abcd"), idents=idents))
    assert not client.keys("*seen*")
    post(logs, batch(["a"] * 40, range(5, 45)))
    keys = [k for k in client.keys("*seen*") if client.type(k) == b"set"]
    assert {int(m) for k in keys for m in client.smembers(k)} == set(idents)
    assert client.object("encoding", keys[0]) == b"intset"


def test_offsets_at_or_below_the_mark_are_known(logs: Logs) -> None:
    first = batch(["a"] * 3, [1, 2, 3], source="till-1", offsets=[10, 11, 12])
    assert post(logs, first).taken.all()
    mixed = batch(["a"] * 4, [2, 3, 4, 5], source="till-1", offsets=[11, 12, 13, 2**53 - 1])
    assert post(logs, mixed).taken.tolist() == [False, False, True, True]
    other = batch(["a"], [6], source="till-2", offsets=[0])
    assert post(logs, other).taken.all()
    elsewhere = batch(["b"], [7], source="till-1", offsets=[5])
    assert post(logs, elsewhere).taken.all()
    assert amounts_of(logs, "a") == [1, 2, 3, 4, 5, 6]


def test_a_call_sent_twice_is_answered_as_the_first_time(logs: Logs) -> None:
    rows = batch(["a", "b", "a"], [1, 2, 3])  # no identity: only the call's own token protects
    calls = logs.calls("main", rows, [1, 1], now=NOW, historic=False)
    first = logs.append(calls, rows)
    again = logs.append(calls, rows)
    assert again.taken.all()
    assert again.first.tolist() == first.first.tolist()
    assert amounts_of(logs, "a") == [1, 3]


def test_scripts_that_the_server_lost_are_brought_along(logs: Logs, client) -> None:
    post(logs, batch(["a"], [1]))
    client.script_flush()
    assert post(logs, batch(["a", "b"], [2, 3])).taken.all()
    client.script_flush()
    assert compact(logs, "a")


def test_compaction_keeps_evidence_and_row_numbers(logs: Logs) -> None:
    n = 3 * COMPACT_ROWS
    ids = [f"id-{i}" for i in range(n)]
    post(logs, batch(["a"] * n, range(1, n + 1), ids=ids))
    assert compact(logs, "a")
    assert amounts_of(logs, "a") == list(range(n - EVIDENCE_ROWS + 1, n + 1))
    name = path("main", Stream("a", "sale", "EUR"))
    partition = logs.partition("main", "a")
    assert logs.ids(partition, name)[1] == ids[-EVIDENCE_ROWS:]
    blob = logs.read([(partition, name)])[0]
    header = np.frombuffer(blob.log[:32], HEADER)[0]
    assert header["base"] == n - EVIDENCE_ROWS
    assert header["generation"] == 1
    loaded = load([blob])
    assert len(loaded.records) == 0
    assert loaded.folded.state["records"][0] == n
    done = post(logs, batch(["a"], [5], ids=["next"]))
    assert done.first.tolist() == [n]


def test_of_two_compactions_of_one_log_only_the_first_gets_through(logs: Logs, client) -> None:
    post(logs, batch(["a"] * 200, range(1, 201)))
    name = path("main", Stream("a", "sale", "EUR"))
    partition = logs.partition("main", "a")
    blobs = logs.read([(partition, name)])
    loaded = load(blobs)
    loaded.folded.state["records"] += 200
    snapshot = write_snapshots(loaded.folded, range(len(loaded.folded.state)))
    assert logs.compact(blobs, snapshot, [200], [{"x:0": b"1"}]) == [True]
    assert logs.compact(blobs, snapshot, [200], [{"y:0": b"2"}]) == [False]
    assert client.hgetall(partition.outbox) == {b"x:0": b"1"}
    assert not client.keys("*new/*")


def test_rows_appended_while_a_worker_folds_survive_its_compaction(logs: Logs) -> None:
    post(logs, batch(["a"] * 200, range(1, 201)))
    name = path("main", Stream("a", "sale", "EUR"))
    where = [(logs.partition("main", "a"), name)]
    blobs = logs.read(where)
    loaded = load(blobs)
    loaded.folded.state["records"] += 200
    post(logs, batch(["a"] * 3, [901, 902, 903], ids=["p", "q", "r"]))
    assert logs.compact(
        blobs, write_snapshots(loaded.folded, range(len(loaded.folded.state))), [200], [{}]
    ) == [True]
    assert load(logs.read(where)).records["amount"].tolist() == [901, 902, 903]
    known = post(logs, batch(["a"], [901], ids=["p"]))  # its ident went into the sets too
    assert not known.taken.any()


def test_a_full_store_refuses_before_it_writes(logs: Logs, client) -> None:
    post(logs, batch(["a"], [1], ids=["x"]))
    client.config_set("maxmemory-policy", "noeviction")
    client.config_set("maxmemory", 1)
    with pytest.raises(Unavailable, match="took 0 of 1 rows"):
        post(logs, batch(["a"], [2], ids=["y"]))
    client.config_set("maxmemory", 0)
    assert post(logs, batch(["a"], [2], ids=["y"])).taken.all()
    assert amounts_of(logs, "a") == [1, 2]


def test_a_batch_taken_in_part_is_completed_by_sending_it_again(logs: Logs, client) -> None:
    merchants = [f"m{i}" for i in range(12)]
    ids = [f"id{i}" for i in range(12)]
    hurt = logs.partition("main", "m0")
    client.set(hurt.calls, "not a hash")  # this partition's script fails before its first write
    with pytest.raises(Unavailable):
        post(logs, batch(merchants, range(1, 13), ids=ids))
    client.delete(hurt.calls)
    done = post(logs, batch(merchants, range(1, 13), ids=ids))
    fresh = [m for m, new in zip(merchants, done.taken, strict=True) if new]
    assert 0 < len(fresh) < 12
    assert all(logs.partition("main", m) == hurt for m in fresh)
    assert [amounts_of(logs, m) for m in merchants] == [[i] for i in range(1, 13)]


def test_judged_calls_are_forgotten_and_others_wait_for_the_sweep(logs: Logs, client) -> None:
    rows = batch(["a"], [1])
    calls = logs.calls("main", rows, [1], now=NOW, historic=False)
    logs.append(calls, rows)
    partition = calls[0].partition
    assert client.hlen(partition.calls) == client.zcard(partition.pending) == 1
    logs.judged(calls)
    logs.flush_judged()
    assert client.hlen(partition.calls) == client.zcard(partition.pending) == 0
    post(logs, rows)
    assert client.zcard(partition.pending) == 1


def test_short_logs_are_written_exactly(logs: Logs, client) -> None:
    for i in range(20):
        post(logs, batch(["a"], [i + 1]))
    key = logs.partition("main", "a").log(path("main", Stream("a", "sale", "EUR")))
    assert client.strlen(key) == 32 + 20 * RECORD.itemsize
    assert client.memory_usage(key) < 1000


@pytest.mark.parametrize("harm", ["torn", "format", "incarnation", "gap"])
def test_a_log_that_does_not_fit_its_snapshot_is_refused(logs: Logs, client, harm: str) -> None:
    post(logs, batch(["a"] * 300, range(1, 301)))
    assert compact(logs, "a")
    partition = logs.partition("main", "a")
    name = path("main", Stream("a", "sale", "EUR"))
    log = bytearray(client.get(partition.log(name)))
    if harm == "torn":
        del log[-5:]
    elif harm == "format":
        log[0] = 99
    elif harm == "incarnation":
        log[8] ^= 255
    else:
        header = np.frombuffer(bytes(log[:32]), HEADER).copy()
        header["base"] += 500
        log[:32] = header.tobytes()
    client.set(partition.log(name), bytes(log))
    with pytest.raises(CorruptStream):
        load(logs.read([(partition, name)]))


def test_paths_come_back_as_streams() -> None:
    stream = Stream("a.b:c@d+e-f", "sale", "EUR")
    assert stream_of(path("main", stream)) == ("main", stream)
    assert Partition(3).log("x") == "{tw3}log/x"
    assert len(write_snapshots(Folded.new(1), [0])) == 1
