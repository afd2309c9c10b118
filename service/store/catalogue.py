"""Policies and which merchant has which, cached for a second.

A version of a policy never changes and is never removed, since log records name it. Version 1 is
the ``standard`` policy as the software defines it.
"""

from __future__ import annotations

import os
import threading
import time
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import msgspec
import redis

from service.detection.policy import Policy
from service.store.errors import Conflict, Unknown
from service.store.keys import Tenant

STANDARD = "standard"
FRESH_SECONDS = 1.0
MAX_VERSION = 65_535


@dataclass(frozen=True)
class Policies:
    """A tenant's policies at one moment.

    Attributes
    ----------
    revision : bytes
        Random at every change.
    by_version : dict of int to Policy
    newest : dict of str to int
        Name to version.
    assigned : dict of str to str
        Merchant to policy name, for those that have not the standard one.
    """

    revision: bytes
    by_version: dict[int, Policy] = field(default_factory=lambda: {1: Policy()})
    newest: dict[str, int] = field(default_factory=lambda: {STANDARD: 1})
    assigned: dict[str, str] = field(default_factory=dict)

    def version_for(self, merchant: str) -> int:
        """Return the version in force for a merchant."""
        return self.newest[self.assigned.get(merchant, STANDARD)]

    def versions_for(self, merchants: Sequence[str]) -> list[int]:
        """Return the versions in force for merchants."""
        if not self.assigned:
            return [self.newest[STANDARD]] * len(merchants)
        return [self.version_for(m) for m in merchants]


class Catalogue:
    """Policies of all tenants."""

    def __init__(self, client: redis.Redis) -> None:
        self.client = client
        self._cache: dict[str, tuple[float, Policies]] = {}
        self._lock = threading.Lock()

    def of(self, tenant: str, *, fresh: bool = False) -> Policies:
        """Return a tenant's policies, at most a second old, or as of now if ``fresh``."""
        now = time.monotonic()
        with self._lock:
            known = self._cache.get(tenant)
        if known is not None and not fresh and now - known[0] < FRESH_SECONDS:
            return known[1]
        keys = Tenant(tenant)
        reply: Any = self.client.get(keys.revision)
        revision: bytes = reply or b""
        if known is not None and known[1].revision == revision:
            policies = known[1]
        else:
            policies = self._load(keys)
        with self._lock:
            known = self._cache.get(tenant)
            if known is None or known[0] <= now:  # a slow thread does not bring back what was
                self._cache[tenant] = (now, policies)
        return policies

    def _load(self, keys: Tenant) -> Policies:
        pipe: Any = self.client.pipeline(transaction=True)
        pipe.get(keys.revision)
        pipe.hgetall(keys.versions)
        pipe.hgetall(keys.policies)
        pipe.hgetall(keys.assignments)
        revision, versions, newest, assigned = pipe.execute()
        empty = Policies(b"")
        return Policies(
            revision=revision or b"",
            by_version=empty.by_version
            | {int(v): Policy.from_document(msgspec.json.decode(d)) for v, d in versions.items()},
            newest=empty.newest | {n.decode(): int(v) for n, v in newest.items()},
            assigned={m.decode(): n.decode() for m, n in assigned.items()},
        )

    def put(self, tenant: str, name: str, settings: dict[str, Any]) -> Policy:
        """Store a new version of a policy and return it.

        Raises
        ------
        Conflict
            If the tenant has used up its version numbers.
        """
        keys = Tenant(tenant)
        version = int(self.client.hincrby(keys.policies + "/counter", "last", 1)) + 1
        if version > MAX_VERSION:
            raise Conflict(f"a tenant can have {MAX_VERSION} policy versions; none is left")
        policy = replace(Policy.from_document(settings), name=name, version=version)
        pipe: Any = self.client.pipeline(transaction=True)
        pipe.hset(keys.versions, str(version), msgspec.json.encode(policy.document()))
        pipe.hset(keys.policies, name, version)
        pipe.set(keys.revision, os.urandom(8))  # a number could come again after a fall-back
        pipe.execute()
        self.of(tenant, fresh=True)
        return policy

    def assign(self, tenant: str, merchant: str, policy: str) -> None:
        """Give a merchant a policy; raises Unknown for one that is not there."""
        keys = Tenant(tenant)
        names = self.of(tenant, fresh=True).newest
        if policy not in names:
            raise Unknown(f"there is no policy {policy!r}; there are {', '.join(sorted(names))}")
        pipe: Any = self.client.pipeline(transaction=True)
        if policy == STANDARD:
            pipe.hdel(keys.assignments, merchant)
        else:
            pipe.hset(keys.assignments, merchant, policy)
        pipe.set(keys.revision, os.urandom(8))  # a number could come again after a fall-back
        pipe.execute()
        self.of(tenant, fresh=True)
