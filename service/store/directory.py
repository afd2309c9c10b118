"""Entries of all streams for listing and ranking, brought up to date lazily."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import msgspec
import redis

from service.store.catalogue import Catalogue
from service.store.judge import Judge
from service.store.keys import Partition
from service.store.logs import Logs, checked
from service.store.script import SETTLE, run
from service.streams.entries import entries

BATCH = 500
"""Most streams folded at a time."""

Document = dict[str, Any]


class Directory:
    """Per tenant and partition, a hash of stream to entry."""

    def __init__(self, client: redis.Redis, logs: Logs, judge: Judge, catalogue: Catalogue) -> None:
        self.client = client
        self.logs = logs
        self.judge = judge
        self.catalogue = catalogue

    def refresh(self, partition: Partition, *, now: int, most: int = 10 * BATCH) -> int:
        """Bring at most ``most`` changed streams of a partition up to date; return how many."""
        done = cursor = 0
        while done < most:  # one pass: streams touched all the time do not hold it up
            reply: Any = self.client.hscan(partition.dirty, cursor, count=BATCH)
            dirty: dict[bytes, bytes]
            cursor, dirty = reply
            by_tenant: dict[str, list[str]] = {}
            for name in dirty:
                path = name.decode()
                by_tenant.setdefault(path.split("/", 1)[0], []).append(path)
            for tenant, paths in by_tenant.items():
                for i in range(0, len(paths), BATCH):
                    part = paths[i : i + BATCH]
                    self._write(partition, tenant, part, dirty, now)
            done += len(dirty)
            if cursor == 0:  # a server may return nothing and still have more
                break
        return done

    def _write(
        self,
        partition: Partition,
        tenant: str,
        paths: Sequence[str],
        seen: dict[bytes, bytes],
        now: int,
    ) -> None:
        blobs = self.logs.read([(partition, p) for p in paths])
        judged = self.judge.judge(tenant, blobs)
        found = entries(judged.folded, judged.slots, judged.streams, now)
        documents = dict(zip(judged.index, found, strict=True))
        arguments: list[str | bytes | int] = []
        for i, path in enumerate(paths):
            if i in documents:
                field = path.split("/", 1)[1]
                arguments += [path, seen[path.encode()], field, msgspec.json.encode(documents[i])]
            else:  # in quarantine: the sweep tries again later
                self.client.hdel(partition.dirty, path)
        if arguments:
            script = SETTLE.call([partition.dirty, partition.directory(tenant)], arguments)
            checked(run(self.client, [[script]]))

    def entries(self, tenant: str, *, now: int) -> list[Document]:
        """Return the entries of all streams of a tenant, with ``category``."""
        for partition in self.logs.partitions:
            self.refresh(partition, now=now)
        groups = [
            [("HVALS", p.directory(tenant)), ("HGETALL", p.categories(tenant))]
            for p in self.logs.partitions
        ]
        out: list[Document] = []
        for values, categories in checked(run(self.client, groups)):
            for value in values:
                entry = msgspec.json.decode(value)
                category = categories.get(entry["merchant"].encode())
                entry["category"] = category.decode() if category else None
                out.append(entry)
        return out

    def streams(self, tenant: str, merchant: str) -> list[tuple[str, str]]:
        """Return flow and currency of a merchant's streams."""
        partition = self.logs.partition(tenant, merchant)
        members: Any = self.client.smembers(partition.streams(tenant, merchant))
        pairs = [m.decode().split("/") for m in members]
        return sorted((flow, currency) for flow, currency in pairs)
