"""Logs of streams in their partitions: append a batch, read with snapshots, compact."""

from __future__ import annotations

import os
import threading
import time
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import msgspec
import numpy as np
import numpy.typing as npt
import redis
from redis.exceptions import RedisError

from service.batches.batch import Batch
from service.digits.significand import IntArray
from service.store.errors import Stranger, Unavailable, surely_not_applied
from service.store.keys import Partition, partition_of, path
from service.store.layout import Layout, lay_out, unfolded
from service.store.script import APPEND, COMPACT, Command, first_error, run
from service.streams.record import FORMAT, HEADER, RECORD, Records, Stream

EVIDENCE_ROWS = 128
"""Folded rows that a log keeps as evidence."""

COMPACT_ROWS = 128
"""A log is compacted when it holds so many records that its snapshot does not."""

SHARD = 399
"""Idents of a set where the store's charter says nothing else."""

_PLACE = np.dtype([("source", "<u2"), ("offset", "<f8")])
_TEMPORARY_MS = 60_000


_VERSION = np.dtype([("generation", "<u4"), ("incarnation", "<u8")])
_JUDGED_AT_ONCE = 8
_JUDGED_WITHIN_S = 1.0
_COLD, _NEW, _KEPT = 0, 1, 2
_LISTS = msgspec.msgpack.Decoder(tuple[list[int], list[int], list[int], list[int]])


@dataclass(frozen=True)
class Known:
    """What a worker keeps of the streams of a batch, all arrays by stream.

    Attributes
    ----------
    incarnation : uint64 array
        0 where nothing is kept.
    records : int64 array
        Log records folded.
    generation : int64 array
        Compactions of the log that the worker knows of.
    era : int64 array
        `Appended.era` when it was kept.
    """

    incarnation: npt.NDArray[np.uint64]
    records: IntArray
    generation: IntArray
    era: IntArray


@dataclass(frozen=True)
class Call:
    """A part of a batch that goes to one partition.

    Attributes
    ----------
    partition : Partition
    token : bytes
        Random name of the call; the partition answers a second try of it as the first.
    layout : Layout
        Of the whole batch.
    part : slice
        The call's streams in the layout.
    paths : list of str
    known : int64 array
        By stream: records that the worker has folded.
    command : Command
    """

    partition: Partition
    token: bytes
    layout: Layout
    part: slice
    paths: list[str]
    known: IntArray
    command: Command

    @property
    def streams(self) -> IntArray:
        """Return the call's streams, as indices into the batch's."""
        return self.layout.streams[self.part]

    @property
    def rows(self) -> int:
        """Return how many rows it brings."""
        return int(self.layout.edges[self.part.stop] - self.layout.edges[self.part.start])


@dataclass(frozen=True)
class Place:
    """A stream in the store, as it was folded.

    Attributes
    ----------
    version : bytes
        Generation and incarnation of its log, 12 bytes as in the header.
    last : bytes
        The last record folded.
    """

    path: str
    partition: Partition
    version: bytes
    last: bytes


@dataclass(frozen=True)
class Blobs:
    """What the store holds of one stream: its snapshot and its log, None where there is none."""

    path: str
    partition: Partition
    snapshot: bytes | None
    log: bytes | None

    @property
    def version(self) -> bytes:
        """Generation and incarnation of the log."""
        return (self.log or b"")[4:16]

    @property
    def last(self) -> bytes:
        """The log's last record."""
        return (self.log or b"")[-RECORD.itemsize :]


@dataclass
class Appended:
    """Outcome of appending a batch.

    A stream is *kept* where the worker's own state can go on, *new* where there was no log, and
    *cold* otherwise. Arrays are by stream of the batch where nothing else is said.

    Attributes
    ----------
    taken : bool array (n,)
        Rows that are new, in the order of the batch.
    first : int64 array
        Row number of each stream's first new row in its log, -1 for none.
    count : int64 array
        New rows.
    incarnation : uint64 array
    generation : int64 array
        Compactions of the log so far.
    folded : int64 array
        Row number up to which the stored snapshot holds the stream.
    start : int64 array
        Row number of the first of ``records``: as known for a kept stream, 0 for a new one, -1
        for a cold one.
    records : array of RECORD (m,)
        Of kept and new streams: what the worker has not folded, others' rows first and then the
        taken ones of this batch.
    slot : int64 array (m,)
        Stream of each record; those of one stream follow each other.
    cold : dict of int to Blobs
        Snapshot and log of each cold stream, right after the append.
    era : int64 array
        Era of the stream's partition; belongs to what is kept from now on. States of an earlier
        era are void, whatever their row numbers.
    may_keep : bool array
        Whether the state folded from this may be kept.
    """

    taken: npt.NDArray[np.bool_]
    first: IntArray
    count: IntArray
    incarnation: npt.NDArray[np.uint64]
    generation: IntArray
    folded: IntArray
    start: IntArray
    records: Records
    slot: IntArray
    cold: dict[int, Blobs]
    era: IntArray
    may_keep: npt.NDArray[np.bool_]
    calls: Sequence[Call]

    @property
    def blobs(self) -> list[Blobs]:
        """Return what the store holds of all streams; none of them may be a kept one."""
        out = dict(self.cold)
        for call in self.calls:
            for i, name in zip(call.streams.tolist(), call.paths, strict=True):
                if i in out:
                    continue
                assert self.start[i] == 0
                header = np.zeros(1, HEADER)
                header["format"], header["incarnation"] = FORMAT, self.incarnation[i]
                log = header.tobytes() + self.records[np.equal(self.slot, i)].tobytes()
                out[i] = Blobs(name, call.partition, None, log if self.count[i] else None)
        return [out[i] for i in range(len(self.first))]


class Logs:
    """The logs of all streams in one store.

    Parameters
    ----------
    client : redis.Redis
    partitions : int
        Number of partitions, fixed in the store.
    horizon_s : int
        Seconds for which ids are remembered at least.
    call_rows : int
        Rows after which a partition's part of a batch is cut, between streams, so that no script
        runs long.
    replicas : int
        Copies of the store that must have a batch before it is acknowledged.
    replica_ms : int
        Longest wait for them, less than the client waits for an answer.
    """

    def __init__(
        self,
        client: redis.Redis,
        partitions: int,
        horizon_s: int,
        call_rows: int = 2000,
        replicas: int = 0,
        replica_ms: int = 1000,
    ) -> None:
        self.client = client
        self.partitions = [Partition(i) for i in range(partitions)]
        self.horizon_s = horizon_s
        self.call_rows = call_rows
        self.replicas = replicas
        # on the connection of the writes, or it would not be about them
        self._copied: list[Command] = [("WAIT", replicas, replica_ms)] if replicas else []
        self.mark = ""  # name of the store by its charter
        self.shard = SHARD  # idents of a set by its charter
        self._worker = os.urandom(8).hex()
        self._last = [b""] * partitions  # name under which our previous call is remembered
        self._era = np.zeros(partitions, np.int64)
        self._judged: dict[int, list[bytes]] = {i: [] for i in range(partitions)}
        self._taken_at = [0.0] * partitions
        self._lock = threading.Lock()

    def partition(self, tenant: str, merchant: str) -> Partition:
        """Return the partition of a merchant's streams."""
        return self.partitions[partition_of(tenant, merchant, len(self.partitions))]

    def located(self, tenant: str, streams: Sequence[Stream]) -> list[tuple[Partition, str]]:
        """Return partition and path of streams, as `read` takes them."""
        return [(self.partition(tenant, s.merchant), path(tenant, s)) for s in streams]

    def calls(
        self,
        tenant: str,
        batch: Batch,
        versions: Sequence[int],
        *,
        now: int,
        historic: bool,
        known: Known | None = None,
        mark: str | None = None,
    ) -> list[Call]:
        """Pack a batch into calls, several for a partition that gets many rows.

        What is known counts only if nothing else is packed before these calls are appended.

        Parameters
        ----------
        versions : sequence of int
            Policy version in force, by stream of the batch.
        now : int
            Arrival, ms since 1970 UTC.
        known : Known, optional
            States that the worker keeps.
        mark : str, optional
            Name of the store that the identities were hashed for; by default `mark`.
        """
        n, partitions = len(batch.streams), len(self.partitions)
        home = np.fromiter(
            (partition_of(tenant, stream.merchant, partitions) for stream in batch.streams),
            np.int64,
            n,
        )
        layout = lay_out(batch, home, np.asarray(versions), now=now, historic=historic)
        by_home, edges, rows, records, decimals = layout
        texts = [_counted(batch.ids[i]) for i in rows.tolist()]
        id_bytes = np.add.reduceat(np.fromiter(map(len, texts), np.int64, len(texts)), edges[:-1])
        named = np.add.reduceat(np.not_equal(records["ident"], 0), edges[:-1], dtype=np.int64)
        incarnations = np.frombuffer(os.urandom(8 * n), np.uint64) | np.uint64(1)
        folded, versions_known = np.zeros(n, np.int64), np.zeros(n, _VERSION)
        if known is not None:
            current = known.era == self._era[home]
            versions_known["incarnation"] = np.where(current, known.incarnation, 0)[by_home]
            versions_known["generation"] = known.generation[by_home]
            folded = known.records[by_home]
        by_stream = (np.diff(edges), named, id_bytes, folded)
        sources = msgspec.msgpack.encode(batch.sources)
        out: list[Call] = []
        for a, b in pairwise(self._cuts(home[by_home], edges)):
            p = int(home[by_home[a]])
            partition = self.partitions[p]
            follows = bool(out) and out[-1].partition == partition
            part = slice(int(edges[a]), int(edges[b]))
            paths = [path(tenant, batch.streams[i]) for i in by_home[a:b].tolist()]
            token = os.urandom(16)
            command = APPEND.call(
                [partition.log(name) for name in paths],
                [
                    partition.tag,
                    token,
                    self._take_judged(p, _JUDGED_AT_ONCE),
                    msgspec.msgpack.encode([column[a:b].tolist() for column in by_stream]),
                    incarnations[a:b].tobytes(),
                    versions_known[a:b].tobytes(),
                    records[part].tobytes(),
                    _texts(decimals[part]) if named[a:b].any() else b"",
                    "".join(texts[part]).encode("latin-1"),
                    _places(batch, rows[part]),
                    sources,
                    self.horizon_s,
                    self._worker,
                    self.mark if mark is None else mark,
                    out[-1].token if follows else self._last[p],
                    self.shard,
                ],
            )
            out.append(Call(partition, token, layout, slice(a, b), paths, folded[a:b], command))
        return out

    def _cuts(self, home: IntArray, edges: IntArray) -> list[int]:
        """Return where calls begin among streams in order of ``home``, and where the last ends."""
        cuts = [0]
        while cuts[-1] < len(home):
            a = cuts[-1]
            full = int(np.searchsorted(edges, edges[a] + self.call_rows, "right")) - 1
            cuts.append(min(max(full, a + 1), int(np.searchsorted(home, home[a], "right"))))
        return cuts

    def append(self, calls: Sequence[Call], batch: Batch) -> Appended:
        """Append a batch, each call atomically, and read what its worker has not folded.

        A call whose outcome is unknown is sent once more under the same token.

        Raises
        ------
        Unavailable
            If a partition did not take its rows, or may not have; says how many were taken.
        Stranger
            If it did not since it belongs to another store than ``mark`` says.
        """
        for call in calls:
            self._last[call.partition.number] = b""
        replies: dict[int, Any] = {}
        error: BaseException | None = None
        for _ in range(2):
            missing = [i for i in range(len(calls)) if i not in replies]
            try:
                *answers, copies = run(
                    self.client, [*([calls[i].command] for i in missing), self._copied]
                )
            except RedisError as failure:
                error = failure
                if surely_not_applied(failure):
                    break
                continue
            for i, answer in zip(missing, answers, strict=True):
                failed = first_error(answer)
                if failed is None:
                    replies[i] = answer[0]
                else:
                    error = failed
            if len(replies) == len(calls):
                break
        if len(replies) < len(calls):
            done = sum(calls[i].rows for i in replies)
            refused = Stranger if str(error).startswith("STRANGER") else Unavailable
            raise refused(
                f"the store took {done} of {len(batch.stream)} rows for certain; send the same "
                "batch again, rows with an identity are not counted twice"
            ) from error
        failed = first_error(copies)
        if failed is not None or (copies and copies[0] < self.replicas):
            raise Unavailable(
                f"the rows are not yet on {self.replicas} replicas of the store; send the same "
                "batch again, rows with an identity are not counted twice"
            ) from failed
        return self._appended(calls, [replies[i] for i in range(len(calls))], batch)

    def _appended(self, calls: Sequence[Call], replies: Sequence[Any], batch: Batch) -> Appended:
        n, layout = len(batch.streams), calls[0].layout
        taken = np.zeros(len(batch.stream), bool)
        taken[layout.rows] = True
        lists = [_LISTS.decode(reply[0]) for reply in replies]
        for call, (absent, *_) in zip(calls, lists, strict=True):
            if absent:
                taken[layout.rows[layout.edges[call.part.start] + np.array(absent)]] = False
        before, folded, status = np.empty((3, n), np.int64)
        for k, column in enumerate((before, folded, status), 1):
            column[layout.streams] = [number for of_call in lists for number in of_call[k]]
        version = np.empty(n, _VERSION)
        version[layout.streams] = np.frombuffer(b"".join([r[1] for r in replies]), _VERSION)
        known, era = np.empty(n, np.int64), np.empty(n, np.int64)
        registered = np.zeros(n, bool)
        cold: dict[int, Blobs] = {}
        for call, (_, _, _, blobs, trust) in zip(calls, replies, strict=True):
            known[call.streams] = call.known
            era[call.streams] = self._remember(call, trust)
            registered[call.streams] = trust < 0
            if blobs:
                pairs = iter(blobs)
                for i, s in enumerate(call.streams.tolist()):
                    if status[s] == _COLD:
                        cold[s] = Blobs(call.paths[i], call.partition, next(pairs), next(pairs))
        kept, warm = np.equal(status, _KEPT), np.not_equal(status, _COLD)
        others = np.where(kept, before - known, 0)
        tails = np.frombuffer(b"".join([reply[2] for reply in replies]), RECORD)
        records = np.empty(len(tails) + len(layout.rows), RECORD)
        slot = np.empty(len(records), np.int64)
        streams, edges, rows, own, _ = layout
        end = unfolded(streams, edges, rows, taken, warm, others, tails, own, records, slot)
        count = np.bincount(batch.stream[taken], minlength=n)
        return Appended(
            taken=taken,
            first=np.where(count > 0, before, -1),
            count=count,
            incarnation=version["incarnation"],
            generation=version["generation"].astype(np.int64),
            folded=folded,
            start=np.where(kept, known, np.where(warm, 0, -1)),
            records=records[:end],
            slot=slot[:end],
            cold=cold,
            era=era,
            may_keep=~registered & (before + count > 0),
            calls=calls,
        )

    def _remember(self, call: Call, trust: int) -> int:
        """Note under which name the partition remembers a call; return the era that it is in."""
        p = call.partition.number
        if trust < 1:
            self._era[p] += 1
        self._last[p] = {1: call.token, 0: b"-" + call.token}.get(trust, b"")
        return int(self._era[p])

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
        places: Sequence[Place | Blobs],
        snapshots: Sequence[bytes],
        records: Sequence[int],
        outbox: Sequence[dict[str, bytes]],
    ) -> list[bool]:
        """Put snapshots in place of what they were folded from; False for a lost race.

        Parameters
        ----------
        places, snapshots, records, outbox : sequences of one length
            What was folded, the new snapshot, the records it holds, and the crossings by outbox
            field.
        """
        groups = []
        for place, snapshot, count, crossings in zip(
            places, snapshots, records, outbox, strict=True
        ):
            p = place.partition
            temporary = f"{p.tag}new/{os.urandom(8).hex()}"
            arguments: list[str | bytes | int] = [
                p.tag,
                place.version,
                count,
                EVIDENCE_ROWS,
                place.last,
            ]
            for field, document in crossings.items():
                arguments += [field, document]
            name = place.path
            keys = [p.log(name), p.snapshot(name), temporary, p.ids(name), p.outbox]
            keys.append(p.seen(name))
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

    def _take_judged(self, number: int, least: int = 1) -> bytes:
        """Return calls to forget, unless they are few and none has waited for long."""
        with self._lock:
            tokens, now = self._judged[number], time.monotonic()
            if len(tokens) < least and now - self._taken_at[number] < _JUDGED_WITHIN_S:
                return b""
            self._judged[number], self._taken_at[number] = [], now
        return b"".join(tokens)


def _texts(cells: npt.NDArray[np.uint8]) -> bytes:
    """Return texts, packed one by one, as a msgpack list."""
    return b"\xdd" + len(cells).to_bytes(4, "big") + cells.tobytes()


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
