"""Logs of streams in their partitions: append a batch, read with snapshots, compact."""

from __future__ import annotations

import os
import threading
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

import msgspec
import numpy as np
import numpy.typing as npt
import redis
from redis.exceptions import RedisError

from service.batches.batch import Batch
from service.digits.significand import IntArray
from service.store.errors import Unavailable, surely_not_applied
from service.store.keys import Partition, partition_of, path
from service.store.script import APPEND, COMPACT, Command, first_error, run
from service.streams.record import HISTORIC, RECORD, ROW, Records

EVIDENCE_ROWS = 128
"""Folded rows that a log keeps as evidence."""

COMPACT_ROWS = 128
"""A log is compacted when it holds so many records that its snapshot does not."""

_PLACE = np.dtype([("source", "<u2"), ("offset", "<f8")])
_TEMPORARY_MS = 60_000


@dataclass(frozen=True)
class Call:
    """The part of a batch that goes to one partition.

    Attributes
    ----------
    partition : Partition
    token : bytes
        Random name of the call; the partition answers a second try of it as the first.
    streams : list of int
        Indices into the batch's streams.
    paths : list of str
    rows : int64 array (m,)
        Indices into the batch's rows, grouped by stream in the order of ``streams``.
    per_stream : int64 array
        Rows of each stream.
    commands : list of Command
    """

    partition: Partition
    token: bytes
    streams: list[int]
    paths: list[str]
    rows: IntArray
    per_stream: IntArray
    commands: list[Command]


@dataclass(frozen=True)
class Blobs:
    """What the store holds of one stream: its snapshot and its log, None where there is none."""

    path: str
    partition: Partition
    snapshot: bytes | None
    log: bytes | None


@dataclass
class Appended:
    """Outcome of appending a batch.

    Attributes
    ----------
    taken : bool array (n,)
        Rows that are new, in the order of the batch.
    first : int64 array (streams,)
        Row number of each stream's first new row in its log, -1 for none.
    blobs : list of Blobs, by stream of the batch
        Read right after the append.
    count : int64 array (streams,)
        New rows of each stream.
    """

    taken: npt.NDArray[np.bool_]
    first: IntArray
    count: IntArray
    blobs: list[Blobs]


def decimals(idents: npt.NDArray[np.uint64]) -> bytes:
    """Return idents as 19 decimal digits each, one after the other."""
    powers = 10 ** np.arange(18, -1, -1, dtype=np.uint64)
    digits = idents[:, None] // powers % np.uint64(10)
    return (digits + np.uint64(48)).astype(np.uint8).tobytes()


class Logs:
    """The logs of all streams in one store.

    Parameters
    ----------
    client : redis.Redis
    partitions : int
        Number of partitions, fixed in the store.
    horizon_s : int
        Seconds for which ids are remembered at least.
    """

    def __init__(self, client: redis.Redis, partitions: int, horizon_s: int) -> None:
        self.client = client
        self.partitions = [Partition(i) for i in range(partitions)]
        self.horizon_s = horizon_s
        self._judged: dict[int, list[bytes]] = {i: [] for i in range(partitions)}
        self._lock = threading.Lock()

    def partition(self, tenant: str, merchant: str) -> Partition:
        """Return the partition of a merchant's streams."""
        return self.partitions[partition_of(tenant, merchant, len(self.partitions))]

    def calls(
        self, tenant: str, batch: Batch, versions: Sequence[int], *, now: int, historic: bool
    ) -> list[Call]:
        """Pack a batch into one call a partition.

        Parameters
        ----------
        versions : sequence of int
            Policy version in force, by stream of the batch.
        now : int
            Arrival, ms since 1970 UTC.
        """
        home = np.array(
            [partition_of(tenant, s.merchant, len(self.partitions)) for s in batch.streams],
            dtype=np.int64,
        )
        by_home = np.argsort(home, kind="stable")
        rank = np.empty(len(home), np.int64)
        rank[by_home] = np.arange(len(home))
        order = np.argsort(rank[batch.stream], kind="stable")
        records = _records(batch, np.asarray(versions), order, now, historic)
        per_stream = np.bincount(rank[batch.stream], minlength=len(home))
        texts = [_counted(batch.ids[i]) for i in order.tolist()]
        sizes = np.add.reduceat(
            np.fromiter(map(len, texts), np.int64, len(texts)),
            np.concatenate([[0], np.cumsum(per_stream)[:-1]]),
        )
        out = []
        edges = np.searchsorted(home[by_home], np.arange(len(self.partitions) + 1))
        row_edges = np.concatenate([[0], np.cumsum(per_stream)])
        for p in np.unique(home).tolist():
            a, b = int(edges[p]), int(edges[p + 1])
            ra, rb = int(row_edges[a]), int(row_edges[b])
            rows = order[ra:rb]
            streams = by_home[a:b].tolist()
            paths = [path(tenant, batch.streams[i]) for i in streams]
            partition = self.partitions[p]
            token = os.urandom(16)
            counts = np.zeros(b - a, [("rows", "<u4"), ("ids", "<u4"), ("incarnation", "S8")])
            counts["rows"], counts["ids"] = per_stream[a:b], sizes[a:b]
            entropy = np.frombuffer(os.urandom(8 * (b - a)), np.uint8).reshape(-1, 8) | 1
            counts["incarnation"] = entropy.view("S8").reshape(-1)
            append = APPEND.call(
                [partition.log(name) for name in paths],
                [
                    partition.tag,
                    token,
                    self._take_judged(p),
                    counts.tobytes(),
                    records[ra:rb].tobytes(),
                    decimals(batch.ident[rows]),
                    "".join(texts[ra:rb]).encode("latin-1"),
                    _places(batch, rows),
                    msgspec.msgpack.encode(batch.sources),
                    self.horizon_s,
                ],
            )
            out.append(
                Call(
                    partition,
                    token,
                    streams,
                    paths,
                    rows,
                    per_stream[a:b],
                    [append, _read(partition, paths)],
                )
            )
        return out

    def append(self, calls: Sequence[Call], batch: Batch) -> Appended:
        """Append a batch, each partition atomically, and read the streams it touched.

        A call whose outcome is unknown is sent once more under the same token.

        Raises
        ------
        Unavailable
            If a partition did not take its rows, or may not have; says how many were taken.
        """
        replies: dict[int, list[Any]] = {}
        error: BaseException | None = None
        for _ in range(2):
            missing = [i for i in range(len(calls)) if i not in replies]
            try:
                answers = run(self.client, [calls[i].commands for i in missing])
            except RedisError as failure:
                error = failure
                if surely_not_applied(failure):
                    break
                continue
            for i, answer in zip(missing, answers, strict=True):
                failed = first_error(answer)
                if failed is None:
                    replies[i] = answer
                else:
                    error = failed
            if len(replies) == len(calls):
                break
        if len(replies) < len(calls):
            done = sum(len(calls[i].rows) for i in replies)
            raise Unavailable(
                f"the store took {done} of {len(batch.stream)} rows for certain; send the same "
                "batch again, rows with an identity are not counted twice"
            ) from error
        return _appended(calls, replies, batch)

    def read(self, where: Sequence[tuple[Partition, str]]) -> list[Blobs]:
        """Read snapshots and logs of streams, each pair in one command so that it is not torn."""
        by_partition: dict[Partition, list[int]] = {}
        for i, (partition, _) in enumerate(where):
            by_partition.setdefault(partition, []).append(i)
        groups = [
            [_read(partition, [where[i][1] for i in indices])]
            for partition, indices in by_partition.items()
        ]
        out: dict[int, Blobs] = {}
        for (partition, indices), reply in zip(
            by_partition.items(), checked(run(self.client, groups)), strict=True
        ):
            pairs = _pairs(partition, [where[i][1] for i in indices], reply[0])
            out.update(zip(indices, pairs, strict=True))
        return [out[i] for i in range(len(where))]

    def ids(self, partition: Partition, path: str) -> tuple[bytes | None, list[str | None]]:
        """Return a stream's log and the ids of its rows, read in one command."""
        reply: Any = self.client.mget([partition.log(path), partition.ids(path)])
        log, texts = reply
        out: list[str | None] = []
        at = 0
        while texts and at < len(texts):
            size = texts[at]
            out.append(texts[at + 1 : at + 1 + size].decode("ascii") if size else None)
            at += 1 + size
        return log, out

    def compact(
        self,
        blobs: Sequence[Blobs],
        snapshots: Sequence[bytes],
        records: Sequence[int],
        outbox: Sequence[dict[str, bytes]],
    ) -> list[bool]:
        """Put snapshots in place of what they were folded from; False for a lost race.

        Parameters
        ----------
        blobs, snapshots, records, outbox : sequences of one length
            What was folded, the new snapshot, the records it holds, and the crossings by outbox
            field.
        """
        groups = []
        for blob, snapshot, count, crossings in zip(blobs, snapshots, records, outbox, strict=True):
            assert blob.log is not None
            p = blob.partition
            temporary = f"{p.tag}new/{os.urandom(8).hex()}"
            arguments: list[str | bytes | int] = [
                p.tag,
                blob.log[4:16],
                count,
                EVIDENCE_ROWS,
                self.horizon_s,
            ]
            for name, document in crossings.items():
                arguments += [name, document]
            keys = [p.log(blob.path), p.snapshot(blob.path), temporary, p.ids(blob.path), p.outbox]
            groups.append(
                [
                    ("SET", temporary, snapshot, "PX", _TEMPORARY_MS),
                    COMPACT.call(keys, arguments),
                ]
            )
        return [reply[1] == 1 for reply in checked(run(self.client, groups))]

    def judged(self, calls: Iterable[Call]) -> None:
        """Note calls whose streams were folded and published; the next append forgets them."""
        with self._lock:
            for call in calls:
                self._judged[call.partition.number].append(call.token)

    def flush_judged(self) -> None:
        """Forget judged calls now, for partitions that see no further append."""
        groups: list[list[Command]] = []
        for p in self.partitions:
            tokens = self._take_judged(p.number)
            if tokens:
                split = [tokens[i : i + 16] for i in range(0, len(tokens), 16)]
                groups.append([("HDEL", p.calls, *split), ("ZREM", p.pending, *split)])
        if groups:
            run(self.client, groups)

    def _take_judged(self, number: int) -> bytes:
        with self._lock:
            tokens, self._judged[number] = self._judged[number], []
        return b"".join(tokens)


def _records(
    batch: Batch, versions: IntArray, order: IntArray, now: int, historic: bool
) -> Records:
    records = np.zeros(len(order), RECORD)
    at = batch.at[order]
    records["amount"] = batch.amount[order]
    records["ident"] = batch.ident[order]
    records["at_s"], records["at_ms"] = np.divmod(at, 1000)
    records["arrived_s"], records["arrived_ms"] = divmod(now, 1000)
    records["policy"] = versions[batch.stream[order]]
    records["kind"] = ROW
    records["flags"] = HISTORIC if historic else 0
    return records


def _counted(text: str | None) -> str:
    return chr(len(text)) + text if text else "\0"


def _places(batch: Batch, rows: IntArray) -> bytes:
    if not batch.sources:
        return b""
    places = np.zeros(len(rows), _PLACE)
    places["source"] = batch.source[rows] + 1
    places["offset"] = batch.offset[rows]
    return places.tobytes()


def _read(partition: Partition, paths: Sequence[str]) -> Command:
    keys: list[str] = []
    for name in paths:
        keys += (partition.snapshot(name), partition.log(name))
    return ("MGET", *keys)


def _pairs(
    partition: Partition, paths: Sequence[str], reply: Sequence[bytes | None]
) -> list[Blobs]:
    return [Blobs(name, partition, reply[2 * i], reply[2 * i + 1]) for i, name in enumerate(paths)]


def checked(replies: list[list[Any]]) -> list[list[Any]]:
    """Return replies of a pipeline; raise the first error among them."""
    for group in replies:
        error = first_error(group)
        if error is not None:
            raise error
    return replies


def _appended(calls: Sequence[Call], replies: dict[int, list[Any]], batch: Batch) -> Appended:
    taken = np.zeros(len(batch.stream), bool)
    first = np.full(len(batch.streams), -1, np.int64)
    blobs: dict[int, Blobs] = {}
    for i, call in enumerate(calls):
        (mask, rows), pairs = replies[i]
        taken[call.rows] = np.frombuffer(mask, np.uint8) == ord("1")
        first[call.streams] = rows
        blobs.update(zip(call.streams, _pairs(call.partition, call.paths, pairs), strict=True))
    return Appended(
        taken,
        first,
        np.bincount(batch.stream[taken], minlength=len(first)),
        [blobs[s] for s in range(len(batch.streams))],
    )
