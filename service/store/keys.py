"""The names of all keys, in one place.

Everything of a merchant lies in one *partition*, so that one script can treat it as a whole; the
partition's tag ``{tw7}`` decides the slot in a cluster. What belongs to a tenant as a whole lies
under the tag ``{tw/tenant}``.
"""

from __future__ import annotations

import zlib
from dataclasses import dataclass

from service.streams.record import Stream

SETTINGS = "{tw}settings"
"""Hash of what is fixed at the first start: format, partitions, ident keys."""


def path(tenant: str, stream: Stream) -> str:
    """Return the name of a stream among all tenants' streams; ``/`` occurs in no part of it."""
    return f"{tenant}/{stream.merchant}/{stream.flow}/{stream.currency}"


def stream_of(path: str) -> tuple[str, Stream]:
    """Return tenant and stream of a path."""
    tenant, merchant, flow, currency = path.split("/")
    return tenant, Stream(merchant, flow, currency)


def partition_of(tenant: str, merchant: str, partitions: int) -> int:
    """Return the partition that holds all streams of a merchant."""
    return zlib.crc32(f"{tenant}/{merchant}".encode()) % partitions


@dataclass(frozen=True)
class Partition:
    """Keys of one partition."""

    number: int

    @property
    def tag(self) -> str:
        """Prefix of all its keys."""
        return f"{{tw{self.number}}}"

    def log(self, path: str) -> str:
        """Log of a stream: a header, then records."""
        return f"{self.tag}log/{path}"

    def snapshot(self, path: str) -> str:
        """Snapshot of a stream's state."""
        return f"{self.tag}snap/{path}"

    def ids(self, path: str) -> str:
        """Ids of the rows in a stream's log, each after its length in one byte."""
        return f"{self.tag}ids/{path}"

    def seen(self, path: str) -> str:
        """Index of the sets of a stream's idents, whose names begin with this one."""
        return f"{self.tag}seen/{path}"

    def streams(self, tenant: str, merchant: str) -> str:
        """Set of a merchant's ``flow/currency``."""
        return f"{self.tag}of/{tenant}/{merchant}"

    def directory(self, tenant: str) -> str:
        """Hash of stream to its entry, for ranking; refreshed from ``dirty``."""
        return f"{self.tag}dir/{tenant}"

    def categories(self, tenant: str) -> str:
        """Hash of merchant to its category."""
        return f"{self.tag}category/{tenant}"

    @property
    def mark(self) -> str:
        """Name of the store that the partition belongs to, as its charter says."""
        return f"{self.tag}mark"

    @property
    def calls(self) -> str:
        """Hash of call to its registered reply, until the call is judged."""
        return f"{self.tag}calls"

    @property
    def pending(self) -> str:
        """Sorted set of calls not judged yet, by server time in ms."""
        return f"{self.tag}pending"

    @property
    def dirty(self) -> str:
        """Hash of streams whose directory entry is behind, to the call that made it so."""
        return f"{self.tag}dirty"

    @property
    def outbox(self) -> str:
        """Hash of crossings not yet published: ``alarm:ordinal`` to the document."""
        return f"{self.tag}outbox"

    @property
    def lease(self) -> str:
        """Held by the worker that sweeps."""
        return f"{self.tag}lease"

    @property
    def quarantine(self) -> str:
        """Hash of streams that cannot be folded to the reason."""
        return f"{self.tag}quarantine"


@dataclass(frozen=True)
class Tenant:
    """Keys of one tenant as a whole."""

    name: str

    @property
    def tag(self) -> str:
        """Prefix of all its keys."""
        return f"{{tw/{self.name}}}"

    @property
    def feed(self) -> str:
        """Redis stream of alarms in the order of their first publication."""
        return f"{self.tag}feed"

    def alarm(self, alarm_id: str) -> str:
        """Hash of one alarm: ``path``, ``cursor``, crossings by ordinal, ``latest``."""
        return f"{self.tag}alarm/{alarm_id}"

    @property
    def policies(self) -> str:
        """Hash of policy name to its newest version number."""
        return f"{self.tag}policies"

    @property
    def versions(self) -> str:
        """Hash of policy version number to its document; never changed, never removed."""
        return f"{self.tag}versions"

    @property
    def assignments(self) -> str:
        """Hash of merchant to its policy and category."""
        return f"{self.tag}merchants"

    @property
    def revision(self) -> str:
        """Random name of the present policies and assignments; another one with every change."""
        return f"{self.tag}revision"

    def claim(self, digest: str) -> str:
        """Digest of the body that first bore an Idempotency-Key."""
        return f"{self.tag}claim/{digest}"
