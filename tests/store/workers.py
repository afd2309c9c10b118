"""Workers without HTTP, and what they post in these tests."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

from service.batches.batch import Batch
from service.settings import Settings
from service.store.keys import path
from service.store.loading import load
from service.store.logs import Blobs, Logs
from service.streams.record import Stream
from service.streams.snapshots import write_snapshots
from service.tallies import Posted, Tallies
from tests.store.batches import NOW, batch
from tests.web.business import WATCHFUL, fixed_price, ordinary

HORIZON = 8 * 86_400


def worker(url: str, **settings: Any) -> Tallies:
    """Return tallies as one worker process has them; its sweep regards every call as late."""
    tallies = Tallies(Settings(redis_url=url, partitions=2, **settings))
    tallies.sweep.late_ms = -1000
    return tallies


@contextmanager
def hiring(url: str) -> Iterator[Callable[[], Tallies]]:
    """Give a function that starts one more worker; all end with the block."""
    hired: list[Tallies] = []

    def hire() -> Tallies:
        hired.append(worker(url))
        return hired[-1]

    try:
        yield hire
    finally:
        for one in hired:
            one.client.close()


def watch(tallies: Tallies) -> None:
    """Watch every stream from its first row on."""
    tallies.put_policy("main", "standard", WATCHFUL)


def post(tallies: Tallies, rows: Batch, *, historic: bool = False, reply: str = "alarms") -> Posted:
    return tallies.post("main", rows, historic=historic, reply=reply, now=NOW)


def named(merchant: str, first: int, n: int) -> list[str]:
    return [f"{merchant}-{i:05d}" for i in range(first, first + n)]


def honest(merchant: str, n: int = 30, first: int = 0) -> Batch:
    """Return rows that raise nothing."""
    return batch([merchant] * n, ordinary(n, seed=first + 1), ids=named(merchant, first, n))


def one_price(merchant: str, n: int = 30, first: int = 0) -> Batch:
    """Return rows that raise one alarm, and cross again and again."""
    return batch([merchant] * n, fixed_price(n, seed=first + 2), ids=named(merchant, first, n))


def append(tallies: Tallies, rows: Batch, *, historic: bool = False) -> None:
    """Append as a worker does that dies right after."""
    versions = tallies.catalogue.of("main").versions_for([s.merchant for s in rows.streams])
    calls = tallies.logs.calls("main", rows, versions, now=NOW, historic=historic)
    tallies.logs.append(calls, rows)


def blobs_of(logs: Logs, *merchants: str) -> list[Blobs]:
    streams = [Stream(m, "sale", "EUR") for m in merchants]
    return logs.read([(logs.partition("main", s.merchant), path("main", s)) for s in streams])


def compact(logs: Logs, merchant: str) -> bool:
    """Compact a stream, taking its rows as folded."""
    blobs = blobs_of(logs, merchant)
    loaded = load(blobs)
    loaded.folded.state["records"] += len(loaded.records)
    snapshots = write_snapshots(loaded.folded, range(len(loaded.folded.state)))
    return logs.compact(blobs, snapshots, loaded.folded.state["records"].tolist(), [{}])[0]


def apart(tallies: Tallies, name: str) -> list[str]:
    """Return merchants, one in each partition."""
    found: dict[int, str] = {}
    for i in range(100):
        found.setdefault(tallies.logs.partition("main", f"{name}{i}").number, f"{name}{i}")
    return [found[p.number] for p in tallies.logs.partitions]


def feed(tallies: Tallies) -> list[dict[str, Any]]:
    return tallies.alarms("main", after=None, limit=10_000)[0]


def unjudged(tallies: Tallies) -> int:
    """Return how many calls are remembered as registered or pending."""
    partitions = tallies.logs.partitions
    calls = sum(tallies.client.hlen(p.calls) for p in partitions)
    return max(calls, sum(tallies.client.zcard(p.pending) for p in partitions))


def outboxes(tallies: Tallies) -> int:
    return sum(tallies.client.hlen(p.outbox) for p in tallies.logs.partitions)


def quarantine(tallies: Tallies) -> dict[bytes, bytes]:
    return {
        name: why
        for p in tallies.logs.partitions
        for name, why in tallies.client.hgetall(p.quarantine).items()
    }


def check(tallies: Tallies, name: str) -> str:
    """Return the status of a readiness check."""
    return next(c["status"] for c in tallies.checks() if c["name"] == name)
