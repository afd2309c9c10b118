"""Bytes a stream in the store: short streams with ids, and a busy one with a full window.

Every kind of stream is posted to a store of its own. `used_memory` is read with the service
stopped, once the store has nothing left to do, and less what it is after a first batch of one row,
which brings settings and scripts. What single kinds of keys take is summed by `MEMORY USAGE`.
"""

from __future__ import annotations

import argparse
import re
import tempfile
import time
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import redis

from loadtests.bodies import Traffic
from loadtests.contest import TALLYWARD, running, store
from loadtests.report import facts, show
from loadtests.wrk import Stock

KINDS = ("log", "snap", "ids", "seen", "marks", "of", "dir")
"""Kinds of keys of streams; see `service.store.keys`."""

IDS = ("ids", "seen", "marks")
KIND = re.compile(rb"\{tw\d+\}([a-z]+)")
ROWS = 1000  # a batch
LIVE_DAYS = 7.0
FIRST = np.zeros(1, np.int64)


@dataclass(frozen=True)
class Kind:
    """A kind of stream, and how many of it are measured.

    Attributes
    ----------
    each : int
        Rows of one stream.
    days : float
        Over which they spread. What is older than the window is posted as history.
    bar, bar_apart : int
        Most bytes that a stream may take in ``used_memory``, or its keys without those of ids;
        0 for no bar.
    """

    name: str
    streams: int
    each: int
    days: float
    bar: int = 0
    bar_apart: int = 0


BUSY = Kind("400 rows a day for 35 days", 50, 14_000, 35, bar_apart=24 * 1024)
FULL = (
    Kind("10 rows", 20_000, 10, 1),
    Kind("30 rows", 10_000, 30, 1, bar=1536),
    Kind("100 rows", 5_000, 100, 1),
    Kind("1000 rows", 500, 1_000, 3),
    Kind("100 000 rows", 5, 100_000, 5),
    BUSY,
)
QUICK = (
    Kind("10 rows", 500, 10, 1),
    Kind("30 rows", 500, 30, 1, bar=1536),
    Kind("1000 rows", 20, 1_000, 3),
    Kind("400 rows a day for 35 days", 4, 14_000, 35, bar_apart=24 * 1024),
)


def posts(kind: Kind, seed: int) -> Iterator[tuple[str, Iterator[bytes]]]:
    """Yield queries and batches: history first, then the present window."""
    traffic = Traffic(np.random.default_rng(seed), kind.streams)
    live_days = min(kind.days, LIVE_DAYS)
    live = round(kind.each * live_days / kind.days)
    if live < kind.each:
        past, past_days = traffic.dealt(kind.each - live), kind.days - live_days
        yield "?mode=history", traffic.batches(past, ROWS, days=past_days, until=live_days)
    yield "", traffic.batches(traffic.dealt(live), ROWS, days=live_days)


def bytes_by_kind(client: redis.Redis) -> Counter[str]:
    """Sum what each kind of key takes."""
    taken: Counter[str] = Counter()
    keys = list(client.scan_iter(count=1000))
    for first in range(0, len(keys), 1000):
        part = keys[first : first + 1000]
        pipeline = client.pipeline(transaction=False)
        for key in part:
            pipeline.memory_usage(key, samples=0)
        for key, size in zip(part, pipeline.execute(), strict=True):
            found = KIND.match(key)
            taken[found[1].decode() if found else "tenant"] += size or 0  # it may have expired
    return taken


def measure(kind: Kind, seed: int) -> tuple[float, Counter[str]]:
    """Return ``used_memory`` in bytes, and bytes by kind of key, of all streams of a kind."""
    with tempfile.TemporaryDirectory() as base, store(Path(base) / "store") as url:
        client = redis.Redis.from_url(url)
        stock = Stock(Path(base) / "bodies")
        with running(TALLYWARD, url, sweep_seconds=0.5) as server:
            stock.fill(Traffic(np.random.default_rng(seed), 1, label="first").batches(FIRST, 1))
            server.post(stock, connections=1)
            server.settle()
        before = used(client)
        with running(TALLYWARD, url, sweep_seconds=0.5) as server:
            for query, batches in posts(kind, seed):
                stock.fill(batches)
                server.post(stock, query, connections=1)  # in the order of time
            server.settle()
        return used(client) - before, bytes_by_kind(client)


def used(client: redis.Redis) -> int:
    """Return ``used_memory`` once the file is written and other connections are gone."""
    while client.info("persistence")["aof_rewrite_in_progress"] or len(client.client_list()) > 1:
        time.sleep(0.05)
    time.sleep(1.2)  # the append-only buffer is flushed every second
    return int(client.info("memory")["used_memory"])


def within(size: float, bar: int) -> str:
    """Say a size and, if there is a bar, whether it is kept."""
    if not bar:
        return f"{size:,.0f}"
    return f"{size:,.0f} ({'within' if size <= bar else 'ABOVE'} {bar:,})"


def line(kind: Kind, memory: float, keys: Counter[str]) -> list[str]:
    """Return the line of a kind of stream."""
    apart = sum(keys[name] for name in KINDS if name not in IDS)
    return [
        kind.name,
        f"{kind.streams:,}",
        within(memory / kind.streams, kind.bar),
        within(apart / kind.streams, kind.bar_apart),
        *(f"{keys[name] / kind.streams:,.0f}" for name in KINDS),
        f"{sum(keys[name] for name in keys if name not in KINDS) / kind.streams:,.0f}",
    ]


def main() -> None:
    """Print one table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--quick", action="store_true", help="fewer streams, in seconds")
    given = parser.parse_args()
    print(f"# Memory\n\n{facts('memory')}\n- seed: {given.seed}\n")
    print(
        "Bytes a stream. *ids apart* is the sum of its keys without `ids/`, `seen/` and `marks/`; "
        "`used_memory` is all that the store takes more, ids and allocator included.\n"
    )
    heads = ["streams of", "how many", "used_memory", "ids apart", *(f"{name}/" for name in KINDS)]
    kinds = QUICK if given.quick else FULL
    show([*heads, "other keys"], (line(kind, *measure(kind, given.seed)) for kind in kinds))


if __name__ == "__main__":
    main()
