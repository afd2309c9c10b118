"""The sweep: whatever a worker left half done is finished by another within seconds.

Every worker runs one; a lease per partition lets one of them work at a time. Calls not judged in
time are folded and published, outboxes are emptied, directory entries are brought up to date.
"""

from __future__ import annotations

import logging
import os
import random
import threading
import time
from collections.abc import Callable
from typing import Any

import msgspec
import redis
from redis.exceptions import RedisError

from service.store.directory import Directory
from service.store.errors import Unavailable
from service.store.feed import Feed
from service.store.judge import Judge
from service.store.keys import Partition
from service.store.logs import Logs

log = logging.getLogger(__name__)

LATE_MS = 5000
"""A call is swept when its worker has not judged it for so long, at least."""
CALLS_AT_ONCE = 50
STREAMS_AT_ONCE = 500
RETRY_QUARANTINE_S = 300


class Sweep:
    """Background work of one worker.

    Parameters
    ----------
    seconds : float
        Pause between rounds; the lease lasts ten rounds.
    late_ms : int
        Age at which a call is judged here and forgotten. Must be longer than a worker waits for
        an answer and then takes to send the call again.
    usable : callable
        Called before each round; raises while the store cannot be used.
    """

    def __init__(
        self,
        client: redis.Redis,
        logs: Logs,
        judge: Judge,
        feed: Feed,
        directory: Directory,
        seconds: float,
        late_ms: int = LATE_MS,
        usable: Callable[[], object] = lambda: None,
    ) -> None:
        self.client = client
        self.logs = logs
        self.judge = judge
        self.feed = feed
        self.directory = directory
        self.seconds = seconds
        self.late_ms = late_ms
        self.usable = usable
        self.last_round = time.monotonic()
        self._name = os.urandom(8).hex()
        self._stop = threading.Event()
        self._retry_quarantine_at = dict.fromkeys(logs.partitions, 0.0)

    def start(self) -> None:
        """Sweep in a thread until `stop`."""
        threading.Thread(target=self._run, name="sweep", daemon=True).start()

    def stop(self) -> None:
        """End the thread after its present round."""
        self._stop.set()

    def _run(self) -> None:
        while not self._stop.wait(self.seconds * random.uniform(0.5, 1.0)):
            try:
                self.round()
            except (RedisError, Unavailable) as error:
                log.warning("the sweep will try again: %s", error)
            except Exception:
                log.exception("the sweep failed")

    def round(self) -> None:
        """Sweep every partition whose lease is free."""
        self.usable()
        self.logs.flush_judged()
        for partition in self.logs.partitions:
            try:
                if self._leased(partition):
                    self.sweep(partition)
            except (redis.ConnectionError, redis.TimeoutError):
                raise
            except Exception:  # what is wrong with one partition is no matter of the others
                log.exception("the sweep of partition %d failed", partition.number)
        self.last_round = time.monotonic()

    def sweep(self, partition: Partition) -> None:
        """Finish what is left in one partition."""
        self.feed.empty(partition)
        self._judge_late(partition)
        self._retry_quarantined(partition)
        self.directory.refresh(partition, now=time.time_ns() // 1_000_000)

    def _leased(self, partition: Partition) -> bool:
        span = int(self.seconds * 10_000)
        if self.client.set(partition.lease, self._name, nx=True, px=span):
            return True
        if self.client.get(partition.lease) == self._name.encode():
            self.client.pexpire(partition.lease, span)
            return True
        return False

    def _judge_late(self, partition: Partition) -> None:
        now: Any = self.client.time()
        before = now[0] * 1000 + now[1] // 1000 - self.late_ms
        while True:
            tokens: Any = self.client.zrange(
                partition.pending, "-inf", before, byscore=True, offset=0, num=CALLS_AT_ONCE
            )
            if not tokens:
                return
            registered: Any = self.client.hmget(partition.calls, tokens)
            by_tenant: dict[str, set[str]] = {}
            for blob in registered:
                for path in _paths(blob) if blob else ():
                    by_tenant.setdefault(path.split("/", 1)[0], set()).add(path)
            for tenant, paths in by_tenant.items():
                self._judge(partition, tenant, sorted(paths))
            self.client.hdel(partition.calls, *tokens)
            self.client.zrem(partition.pending, *tokens)
            log.info("judged %d calls that their workers had left", len(tokens))

    def _judge(self, partition: Partition, tenant: str, paths: list[str]) -> None:
        for i in range(0, len(paths), STREAMS_AT_ONCE):
            blobs = self.logs.read([(partition, p) for p in paths[i : i + STREAMS_AT_ONCE]])
            self.judge.judge(tenant, blobs)

    def _retry_quarantined(self, partition: Partition) -> None:
        """Try some of the quarantined streams again, at the first round and then seldom."""
        if time.monotonic() < self._retry_quarantine_at[partition]:
            return
        self._retry_quarantine_at[partition] = time.monotonic() + RETRY_QUARANTINE_S
        held: Any = self.client.hrandfield(partition.quarantine, CALLS_AT_ONCE)
        for name in held:
            path = name.decode()
            blobs = self.logs.read([(partition, path)])
            if self.judge.judge(path.split("/", 1)[0], blobs).index:
                self.client.hdel(partition.quarantine, path)
                self.client.hsetnx(partition.dirty, path, "healed")
                log.warning("a stream is out of quarantine: it can be folded again")


def _paths(registered: bytes) -> list[str]:
    """Return the streams of a registered call: ``{mask, first, paths}`` as the script packed it."""
    paths = msgspec.msgpack.decode(registered, strict=False)[2]
    return [p if isinstance(p, str) else p.decode() for p in paths]
