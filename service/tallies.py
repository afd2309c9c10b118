"""What the web asks of the tallies: one short function per question, read top to bottom."""

from __future__ import annotations

import hashlib
import logging
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager, suppress
from dataclasses import dataclass, replace
from typing import Any, cast

import numpy as np
import redis
from redis.exceptions import RedisError

from service.batches.batch import Batch
from service.digits.significand import IntArray
from service.settings import Settings
from service.store.catalogue import Catalogue, Policies
from service.store.charter import Charter, charter, mark_of
from service.store.connection import CarefulPool, StoreFacts, connect, inspect
from service.store.directory import Directory
from service.store.errors import Conflict, StoreError, Stranger, Unavailable, Unknown
from service.store.feed import Feed, Stored
from service.store.judge import Judge, Judged
from service.store.keys import Tenant, path, stream_of
from service.store.loading import kept_records
from service.store.logs import Appended, Logs
from service.store.sweep import LATE_MS, Sweep
from service.store.warm import Warm
from service.streams import record
from service.streams.detail import detail
from service.streams.entries import entries
from service.streams.notation import moment
from service.streams.record import Stream
from service.streams.table import digits
from service.streams.walk import WINDOW_MS

__all__ = ["Conflict", "Posted", "StoreError", "Tallies", "Unavailable", "Unknown"]

Document = dict[str, Any]
"""A JSON-ready mapping, with the names of the API."""

log = logging.getLogger(__name__)

CATEGORIES_KNOWN = 100_000
"""Merchants whose category a worker remembers, so as not to write it again with every batch."""
CATEGORIES_SECONDS = 60.0
"""... and for how long: another worker may have written another one since."""

KEEPING = ("noeviction", "unknown")
"""Eviction policies under which a store keeps what it has; some servers do not tell."""

STREAMS_AT_ONCE = 500
"""Streams read and folded at a time, of a batch with more than a worker keeps."""

QUARANTINED = "this stream is in quarantine; the operators are told by readiness"


@dataclass(frozen=True)
class Posted:
    """Outcome of one batch.

    Attributes
    ----------
    accepted, duplicates, late, zero, unverified : int
        Rows, as in the API.
    alarms : list of Document
        Alarms raised by rows counted in this request.
    entries : list of Document
        One per stream touched (``reply=merchants``), or its full form (``reply=full``); else [].
    """

    accepted: int
    duplicates: int
    late: int
    zero: int
    unverified: int
    alarms: list[Document]
    entries: list[Document]


class Tallies:
    """The tallies of all tenants in one store.

    Parameters
    ----------
    settings : Settings
        ``redis_url`` names the store. It may be away: a worker that is replaced during an outage
        has to come up, or the whole service would end. Until it answers, everything asked of it
        is Unavailable.

    Raises
    ------
    StoreError
        If the store was made with other partitions, or by another format.
    """

    def __init__(self, settings: Settings) -> None:
        assert settings.redis_url is not None
        threads = settings.max_posting + settings.threads + 8
        self.client: redis.Redis = connect(settings.redis_url, settings.store_timeout, threads)
        self.horizon_s = settings.horizon_days * 86_400
        self.sweep_seconds = settings.sweep_seconds
        self._partitions = settings.partitions
        self._charter: Charter | None = None
        self.catalogue = Catalogue(self.client)
        self.feed = Feed(self.client)
        self.logs = Logs(
            self.client,
            settings.partitions,
            self.horizon_s,
            call_rows=settings.call_rows,
            replicas=settings.replicas,
            replica_ms=int(800 * settings.store_timeout),
        )
        self.warm = Warm(settings.kept_streams)
        self._patience = 2 * settings.store_timeout
        self.judge = Judge(self.client, self.logs, self.feed, self.catalogue)
        self.directory = Directory(self.client, self.logs, self.judge, self.catalogue)
        self.sweep = Sweep(
            self.client,
            self.logs,
            self.judge,
            self.feed,
            self.directory,
            self.sweep_seconds,
            late_ms=max(LATE_MS, int(3000 * settings.store_timeout)),
            usable=self._fixed,
        )
        self._facts: tuple[float, int, StoreFacts] | None = None
        self._categories: dict[tuple[str, str], str] = {}
        self._categories_until = 0.0
        with suppress(Unavailable), self._answering():
            pass

    def _fixed(self) -> Charter:
        """Return what is fixed in the store, once it has answered."""
        return self._charter or self._read_charter()

    def _read_charter(self) -> Charter:
        self._charter = charter(self.client, self._partitions)
        self.logs.mark, self.logs.shard = self._charter.mark, self._charter.shard
        return self._charter

    @contextmanager
    def _answering(self) -> Iterator[None]:
        """Use the store, if it is ours; turn what the client raises into Unavailable."""
        try:
            self._fixed()
            yield
        except (RedisError, OSError) as error:
            raise Unavailable("the store does not answer; send the same again later") from error

    def facts(self, fresh_seconds: float = 5.0) -> StoreFacts:
        """Return what the store says about itself, at most some seconds and one connection old.

        Its charter is read again, too: a store that came back empty has another ident key, and
        all workers must hash identities by the same one.
        """
        now, pool = time.monotonic(), cast(CarefulPool, self.client.connection_pool)
        if (
            self._facts is None
            or self._facts[0] < now - fresh_seconds
            or pool.made != self._facts[1]
        ):
            found = inspect(self.client)
            self._facts = (now, pool.made, found)
            with suppress(RedisError):  # a replica may not be asked to write one
                self._read_charter()
        return self._facts[2]

    @property
    def durability(self) -> str:
        """What a 200 means: ``none``, ``everysec``, ``always``, ``replicas`` or ``unknown``.

        Raises
        ------
        Unavailable
            Also if the store may drop keys when its memory is full.
        """
        with self._answering():
            facts = self.facts()
        if facts.maxmemory_policy not in KEEPING:
            raise Unavailable(
                f"under the store's maxmemory-policy, {facts.maxmemory_policy}, it may drop "
                "tallies; it must be noeviction"
            )
        return "replicas" if self.logs.replicas else facts.durability

    def ident_key(self) -> tuple[int, int]:
        """Return the random key of identities (two 64-bit integers), kept in the store.

        Asked of the store once; raises Unavailable until then.
        """
        with self._answering():
            return self._fixed().ident_key

    def claim(self, tenant: str, idempotency_key: str, body_digest: str) -> None:
        """Remember the body of an Idempotency-Key; raise Conflict when it had another body."""
        name = hashlib.blake2b(idempotency_key.encode(), digest_size=16).hexdigest()
        with self._answering():
            before: Any = self.client.set(
                Tenant(tenant).claim(name),
                body_digest,
                nx=True,
                get=True,
                ex=self.horizon_s + 86_400,
            )
        if before is not None and before.decode() != body_digest:
            raise Conflict("this Idempotency-Key came with another body before")

    def post(
        self,
        tenant: str,
        batch: Batch,
        *,
        historic: bool,
        reply: str,
        now: int,
        ident_key: tuple[int, int] | None = None,
    ) -> Posted:
        """Count a batch exactly once and judge its streams.

        Parameters
        ----------
        ident_key : tuple of two int, optional
            By which its identities were hashed; by default that of the store as known now.
        historic : bool
            Rows of the past: alarms they cause stay off the feed.
        reply : {'alarms', 'merchants', 'full'}
        now : int
            Arrival, ms since 1970 UTC.

        Raises
        ------
        Unavailable
            If the store did not take everything; sending the batch again completes it.
        """
        if not batch.streams:
            return Posted(0, 0, 0, 0, 0, [], [])
        with self._answering():
            policies = self.catalogue.of(tenant)
            self._remember_categories(tenant, batch.categories)
            versions = policies.versions_for([s.merchant for s in batch.streams])
        with self.warm.turn(self._patience):
            mark = None if ident_key is None else mark_of(ident_key)
            return self._post(tenant, batch, versions, mark, historic, reply, now)

    def _post(
        self,
        tenant: str,
        batch: Batch,
        versions: Sequence[int],
        mark: str | None,
        historic: bool,
        reply: str,
        now: int,
    ) -> Posted:
        fits = len(batch.streams) <= self.warm.room
        with self._answering():
            slots, known = np.empty(0, np.int64), None
            if fits:
                slots = self.warm.slots([path(tenant, s) for s in batch.streams])
                known = self.warm.known(slots)
            calls = self.logs.calls(
                tenant, batch, versions, now=now, historic=historic, known=known, mark=mark
            )
            try:
                appended = self.logs.append(calls, batch)
            except Stranger:
                self._charter = None  # nor were the identities hashed by the key of this store
                raise
        alarms: list[Document] = []
        found: list[Document] = []
        try:
            for part in self._judged(tenant, batch, appended, slots if fits else None):
                alarms += self._raised(tenant, part, appended)
                found += self._entries(tenant, part, reply, now)
            self.logs.judged(calls)
        except Exception:
            # The rows are counted, and whatever fails now must not say that they are not: the
            # sweep judges them, and the feed tells their alarms.
            log.warning("a batch was counted and is judged later", exc_info=True)
            alarms, found = [], []
        return _posted(batch, appended, alarms, found, now)

    def _judged(
        self, tenant: str, batch: Batch, appended: Appended, slots: IntArray | None
    ) -> Iterator[Judged]:
        """Judge a batch's streams: all at once where they are kept, else some at a time."""
        if slots is not None:
            yield self.judge.go_on(tenant, self.warm, slots, batch.streams, appended)
            return
        blobs = appended.blobs
        for first in range(0, len(blobs), STREAMS_AT_ONCE):
            part = self.judge.judge(tenant, blobs[first : first + STREAMS_AT_ONCE])
            yield replace(part, index=[first + i for i in part.index])

    def _raised(self, tenant: str, judged: Judged, appended: Appended) -> list[Document]:
        """Return the alarms that rows of one call raised, or brought from history to the feed."""
        if not judged.crossings:
            return []
        first = appended.first[judged.index]
        end = first + appended.count[judged.index]
        position = {slot: i for i, slot in enumerate(judged.slots.tolist())}
        mine = [
            c.alarm.hex()
            for c in judged.crossings
            if (c.ordinal == 0 or c.live)
            and 0 <= first[position[c.slot]] <= c.record < end[position[c.slot]]
        ]
        counts = judged.folded.state["rows"][judged.slots].tolist()
        rows = {path(tenant, s): count for s, count in zip(judged.streams, counts, strict=True)}
        return [
            a.document(rows.get(a.path))
            for a in self.feed.stored(tenant, list(dict.fromkeys(mine)))
        ]

    def _entries(self, tenant: str, judged: Judged, reply: str, now: int) -> list[Document]:
        if reply == "merchants":
            return entries(judged.folded, judged.slots, judged.streams, now)
        if reply == "full":
            return [
                self._detail(tenant, stream, judged.folded.only([slot]), False, now)
                for slot, stream in zip(judged.slots.tolist(), judged.streams, strict=True)
            ]
        return []

    def _remember_categories(self, tenant: str, categories: dict[str, str]) -> None:
        if not categories:
            return
        now = time.monotonic()
        if now > self._categories_until or len(self._categories) > CATEGORIES_KNOWN:
            self._categories.clear()
            self._categories_until = now + CATEGORIES_SECONDS
        known = self._categories
        new = {m: c for m, c in categories.items() if known.get((tenant, m)) != c}
        if new:
            self._write_categories(tenant, new)

    def _write_categories(self, tenant: str, categories: dict[str, str]) -> None:
        pipe: Any = self.client.pipeline(transaction=False)
        for merchant, category in categories.items():
            pipe.hset(self.logs.partition(tenant, merchant).categories(tenant), merchant, category)
        pipe.execute()
        self._categories.update({(tenant, m): c for m, c in categories.items()})

    def stream_of(self, tenant: str, merchant: str, flow: str, currency: str | None) -> Stream:
        """Return the named stream, or the merchant's busiest one of a flow; raises Unknown."""
        with self._answering():
            known = self.directory.streams(tenant, merchant)
            if not known:
                raise Unknown(f"there is no merchant {merchant!r}")
            there = ", ".join(f"{f} in {c}" for f, c in known)
            mine = [Stream(merchant, f, c) for f, c in known if f == flow and currency in (None, c)]
            if not mine:
                wanted = f"{flow!r}" + (f" in {currency}" if currency else "")
                raise Unknown(f"merchant {merchant!r} has no flow {wanted}; it has {there}")
            if len(mine) == 1:
                return mine[0]
            judged = self._read(tenant, mine)
            if not judged.index:
                raise Unavailable(QUARANTINED)
            rows = judged.folded.state["rows"]
            return judged.streams[int(np.argmax(rows))]

    def _read(self, tenant: str, streams: Sequence[Stream]) -> Judged:
        return self.judge.judge(tenant, self.logs.read(self.logs.located(tenant, streams)))

    def _one(self, tenant: str, stream: Stream) -> Judged:
        judged = self._read(tenant, [stream])
        if not judged.index:
            raise Unavailable(QUARANTINED)
        return judged

    def _detail(
        self, tenant: str, stream: Stream, folded: Any, measures: bool, now: int
    ) -> Document:
        partition = self.logs.partition(tenant, stream.merchant)
        category: Any = self.client.hget(partition.categories(tenant), stream.merchant)
        return detail(
            folded,
            stream,
            self.catalogue.of(tenant).by_version,
            now,
            category=category.decode() if category else None,
            all_measures=measures,
        )

    def detail(self, tenant: str, stream: Stream, *, measures: bool, now: int) -> Document:
        """Return what GET /v1/merchants/{merchant} says."""
        with self._answering():
            judged = self._one(tenant, stream)
            return self._detail(tenant, stream, judged.folded, measures, now)

    def digits(self, tenant: str, stream: Stream, view: str, span: str, *, now: int) -> Document:
        """Return what GET /v1/merchants/{merchant}/digits says."""
        with self._answering():
            judged = self._one(tenant, stream)
            return digits(judged.folded, self.catalogue.of(tenant).by_version, view, span, now)

    def rows(self, tenant: str, stream: Stream) -> list[Document]:
        """Return the last rows kept, oldest first: id, amount, currency, at."""
        partition = self.logs.partition(tenant, stream.merchant)
        with self._answering():
            kept, ids = self.logs.ids(partition, path(tenant, stream))
        try:
            records = kept_records(kept or b"")
        except ValueError as error:  # torn
            raise Unavailable(QUARANTINED) from error
        at = record.at(records).tolist()
        return [
            {"id": i, "amount": int(amount), "currency": stream.currency, "at": moment(t)}
            for i, amount, t, kind in zip(ids, records["amount"], at, records["kind"], strict=True)
            if kind == record.ROW
        ]

    def merchants(self, tenant: str, *, now: int | None = None) -> list[Document]:
        """Return the entries of all streams of a tenant, with ``category`` and ``updated``."""
        with self._answering():
            return self.directory.entries(tenant, now=now or time.time_ns() // 1_000_000)

    def as_of_now(self, tenant: str, listed: Sequence[Document], *, now: int) -> list[Document]:
        """Return entries of a listing as their streams are now: a window ages by itself."""
        if not listed:
            return []
        streams = [Stream(e["merchant"], e["flow"], e["currency"]) for e in listed]
        with self._answering():
            judged = self._read(tenant, streams)
            found = entries(judged.folded, judged.slots, judged.streams, now)
        fresh = dict(zip(judged.index, found, strict=True))
        return [
            {**fresh.get(i, entry), "category": entry["category"]} for i, entry in enumerate(listed)
        ]

    def alarms(self, tenant: str, *, after: str | None, limit: int) -> tuple[list[Document], str]:
        """Return alarms of the feed after a cursor, oldest first, and the last position read.

        Raises ValueError for a cursor that was never given out.
        """
        with self._answering():
            stored, position = self.feed.after(tenant, after, limit)
            return self._documents(tenant, stored), position

    def alarm(self, tenant: str, alarm_id: str) -> Document:
        """Return one alarm; raises Unknown."""
        with self._answering():
            return self._documents(tenant, [self.feed.one(tenant, alarm_id)])[0]

    def _documents(self, tenant: str, stored: Sequence[Stored]) -> list[Document]:
        """Return alarms in the names of the API, as their streams are now."""
        streams = list(dict.fromkeys(stream_of(a.path)[1] for a in stored))
        if not streams:
            return []
        judged = self._read(tenant, streams)
        rows = dict(zip(judged.streams, judged.folded.state["rows"].tolist(), strict=True))
        return [a.document(rows.get(stream_of(a.path)[1])) for a in stored]

    def policies(self, tenant: str) -> dict[str, Document]:
        """Return all policies by name; ``standard`` always exists."""
        with self._answering():
            known: Policies = self.catalogue.of(tenant, fresh=True)
        return {
            name: known.by_version[version].document()
            for name, version in sorted(known.newest.items())
        }

    def put_policy(self, tenant: str, name: str, settings: Document) -> Document:
        """Store a policy (already checked by its schema) as a new version and return it."""
        with self._answering():
            return self.catalogue.put(tenant, name, settings).document()

    def assign(
        self, tenant: str, merchant: str, *, policy: str | None, category: str | None
    ) -> Document:
        """Assign a merchant's policy or category; raises Unknown for a policy that is not there."""
        with self._answering():
            if policy is not None:
                self.catalogue.assign(tenant, merchant, policy)
            if category is not None:
                self._write_categories(tenant, {merchant: category})
            partition = self.logs.partition(tenant, merchant)
            stored: Any = self.client.hget(partition.categories(tenant), merchant)
            known = self.catalogue.of(tenant, fresh=True)
        return {
            "merchant": merchant,
            "policy": known.assigned.get(merchant, "standard"),
            "category": stored.decode() if stored else None,
        }

    def checks(self) -> Sequence[Document]:
        """Return readiness checks: ``name``, ``status`` (pass, warn, fail), ``detail``."""
        return list(self._checks())

    def _checks(self) -> Iterator[Document]:
        began = time.perf_counter()
        try:
            facts = self.facts(0)
            self._fixed()
        except (RedisError, OSError) as error:
            yield _check("store", "fail", f"does not answer ({type(error).__name__})")
            return
        except StoreError as error:
            yield _check("store", "fail", str(error))
            return
        took = (time.perf_counter() - began) * 1000
        yield _check("store", "pass", f"{facts.server} {facts.version} answers in {took:.1f} ms")
        master = facts.role == "master" and not facts.loading
        yield _check(
            "role",
            "pass" if master else "fail",
            f"role {facts.role}" + (", still loading" if facts.loading else ""),
        )
        keeps = facts.maxmemory_policy in KEEPING
        yield _check(
            "eviction",
            "pass" if facts.maxmemory_policy == "noeviction" else "warn" if keeps else "fail",
            f"maxmemory-policy is {facts.maxmemory_policy}, must be noeviction",
        )
        yield _check(
            "durability",
            "fail" if not facts.persisting else "pass" if facts.durability != "none" else "warn",
            f"{facts.durability}" + ("" if facts.persisting else ", the last write failed"),
        )
        wanted = self.logs.replicas
        yield _check(
            "replicas",
            "pass" if facts.replicas >= wanted else "fail",
            f"{facts.replicas} connected, {wanted} must have each batch",
        )
        used = facts.used_memory / facts.maxmemory if facts.maxmemory else 0.0
        yield _check(
            "memory",
            "fail" if used > 0.98 else "warn" if used > 0.85 else "pass",
            f"{facts.used_memory >> 20} MiB used"
            + (f" of {facts.maxmemory >> 20}" if facts.maxmemory else ", no limit set"),
        )
        yield from self._backlog()

    def _backlog(self) -> Iterator[Document]:
        pipe: Any = self.client.pipeline(transaction=False)
        for p in self.logs.partitions:
            pipe.hlen(p.quarantine)
            pipe.zrange(p.pending, 0, 0, withscores=True)
        pipe.time()
        try:
            *replies, (seconds, _) = pipe.execute()
        except (RedisError, OSError) as error:
            yield _check("backlog", "fail", f"cannot be read ({type(error).__name__})")
            return
        quarantined = sum(replies[::2])
        oldest = min((z[0][1] for z in replies[1::2] if z), default=seconds * 1000)
        age = max(seconds - oldest / 1000, 0)
        yield _check(
            "quarantine",
            "warn" if quarantined else "pass",
            f"{quarantined} streams cannot be folded",
        )
        yield _check(
            "unjudged",
            "warn" if age > 60 else "pass",
            f"the oldest unjudged call is {age:.0f} s old",
        )


def _check(name: str, status: str, detail: str) -> Document:
    return {"name": name, "status": status, "detail": detail}


def _posted(
    batch: Batch, appended: Appended, alarms: list[Document], found: list[Document], now: int
) -> Posted:
    taken = appended.taken
    accepted = int(taken.sum())
    positive = batch.amount > 0
    return Posted(
        accepted=accepted,
        duplicates=len(taken) - accepted,
        late=int((taken & positive & (batch.at < now - WINDOW_MS)).sum()),
        zero=int((taken & ~positive).sum()),
        unverified=int((taken & batch.unverified).sum()),
        alarms=alarms,
        entries=found,
    )
