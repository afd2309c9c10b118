"""The feed of alarms: crossings go from the outboxes to the tenant's slot, once each."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import msgspec
import redis

from service.batches.currencies import exponent
from service.store.errors import Unknown
from service.store.keys import Partition, Tenant, stream_of
from service.store.logs import checked
from service.store.script import PUBLISH, run
from service.streams.alarms import alarm_document, crossing_document
from service.streams.crossing import Crossing

ALARM = re.compile("[0-9a-f]{32}")
CURSOR = re.compile(r"(\d{1,20})-(\d{1,20})", re.ASCII)
START = "0-0"
LAST_NUMBER = 2**64 - 1

Document = dict[str, Any]


@dataclass(frozen=True)
class Outgoing:
    """A crossing on its way to the feed.

    Attributes
    ----------
    path : str
        The stream.
    alarm : str
        Alarm id, hex.
    ordinal : int
    historic : bool
    document : bytes
        JSON of the crossing.
    """

    path: str
    alarm: str
    ordinal: int
    historic: bool
    document: bytes

    @classmethod
    def of(cls, path: str, crossing: Crossing) -> Outgoing:
        """Write a crossing down."""
        return cls(
            path,
            crossing.alarm.hex(),
            crossing.ordinal,
            crossing.historic,
            msgspec.json.encode(crossing_document(crossing)),
        )

    @property
    def field(self) -> str:
        """Name in an outbox."""
        return f"{self.alarm}:{self.ordinal}"

    def boxed(self) -> bytes:
        """Return what an outbox holds."""
        return msgspec.msgpack.encode(
            (self.path, self.alarm, self.ordinal, self.historic, self.document)
        )

    @classmethod
    def unboxed(cls, boxed: bytes) -> Outgoing:
        """Read what an outbox holds."""
        return cls(*msgspec.msgpack.decode(boxed))


@dataclass(frozen=True)
class Stored:
    """An alarm as stored.

    Attributes
    ----------
    alarm : str
        Id, hex.
    path : str
        The stream.
    cursor : str or None
        Place in the feed; None while all crossings are of history.
    crossings : list of Document
        The first ones and the last, ordinals ascending.
    """

    alarm: str
    path: str
    cursor: str | None
    crossings: list[Document]

    @classmethod
    def read(cls, alarm: str, pairs: dict[bytes, bytes]) -> Stored:
        """Read an alarm's hash."""
        crossings = {int(k): v for k, v in pairs.items() if k.isdigit()}
        crossings[int(pairs[b"latest_ordinal"])] = pairs[b"latest"]
        cursor = pairs.get(b"cursor")
        return cls(
            alarm,
            pairs[b"path"].decode(),
            cursor.decode() if cursor else None,
            [msgspec.json.decode(crossings[k]) for k in sorted(crossings)],
        )

    def document(self, rows: int | None) -> Document:
        """Return the alarm in the names of the API.

        Parameters
        ----------
        rows : int or None
            The stream's rows with an amount by now, None where unknown.
        """
        stream = stream_of(self.path)[1]
        return alarm_document(
            self.alarm,
            stream,
            self.crossings,
            cursor=self.cursor,
            exponent=exponent(stream.currency),
            rows=rows,
        )


class Feed:
    """Alarms of all tenants."""

    def __init__(self, client: redis.Redis) -> None:
        self.client = client

    def publish(self, partition: Partition, outgoing: Sequence[Outgoing]) -> None:
        """Publish crossings of one partition, then clear them from its outbox.

        Published before is not published again, whoever does it.
        """
        by_tenant: dict[str, list[Outgoing]] = {}
        for crossing in outgoing:
            by_tenant.setdefault(stream_of(crossing.path)[0], []).append(crossing)
        for tenant, mine in by_tenant.items():
            keys = Tenant(tenant)
            arguments: list[str | bytes | int] = []
            for c in mine:
                arguments += [c.alarm, c.ordinal, int(c.historic), c.document, c.path]
            script = PUBLISH.call([keys.feed, *(keys.alarm(c.alarm) for c in mine)], arguments)
            checked(run(self.client, [[script]]))
        if outgoing:
            self.client.hdel(partition.outbox, *(c.field for c in outgoing))

    def empty(self, partition: Partition) -> None:
        """Publish what a partition's outbox holds."""
        left = self.left(partition)
        if left:
            self.publish(partition, left)

    def left(self, partition: Partition) -> list[Outgoing]:
        """Return what an outbox holds."""
        boxed: Any = self.client.hvals(partition.outbox)
        return [Outgoing.unboxed(b) for b in boxed]

    def stored(self, tenant: str, ids: Sequence[str]) -> list[Stored]:
        """Return those of some alarms that exist."""
        keys = Tenant(tenant)
        groups = [[("HGETALL", keys.alarm(i))] for i in ids]
        replies = checked(run(self.client, groups)) if groups else []
        return [
            Stored.read(alarm_id, flat)
            for alarm_id, (flat,) in zip(ids, replies, strict=True)
            if flat
        ]

    def one(self, tenant: str, alarm_id: str) -> Stored:
        """Return one alarm; raises Unknown."""
        found = self.stored(tenant, [alarm_id]) if ALARM.fullmatch(alarm_id) else []
        if not found:
            raise Unknown(f"there is no alarm {alarm_id!r}")
        return found[0]

    def after(self, tenant: str, cursor: str | None, limit: int) -> tuple[list[Stored], str]:
        """Return alarms after a cursor, oldest first, and the last position read.

        Raises
        ------
        ValueError
            For a cursor that no feed can have given out.
        """
        if cursor is not None:
            parts = CURSOR.fullmatch(cursor)
            if parts is None or max(map(int, parts.groups())) >= LAST_NUMBER:
                raise ValueError(
                    f"{cursor!r} is not a cursor of the feed, such as '1790000000000-0'"
                )
        position = cursor or START
        entries: Any = self.client.xrange(
            Tenant(tenant).feed, min=f"({position}", max="+", count=limit
        )
        if not entries:
            return [], position
        ids = [fields[b"alarm"].decode() for _, fields in entries]
        return self.stored(tenant, ids), entries[-1][0].decode()
