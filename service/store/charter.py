"""What is fixed when a store is first used, and checked at every start."""

from __future__ import annotations

import contextlib
import hashlib
import secrets
from dataclasses import dataclass
from typing import Any

import redis
from redis.exceptions import ResponseError

from service.store.errors import StoreError
from service.store.keys import SETTINGS, Partition

FORMAT = 2

_SETTING = "set-max-intset-entries"
ROOM = 512
"""Integers that every server keeps as an array in a set unless told otherwise."""
MOST_ROOM = 4096


@dataclass(frozen=True)
class Charter:
    """Facts of one store.

    Attributes
    ----------
    partitions : int
        Number of partitions; a merchant's place follows from it, so it never changes.
    shard : int
        Idents that a set is meant to hold, so that the server that made the store keeps it as an
        array of integers; on one that does not, it only takes more memory.
    ident_key : tuple of int
        Two random 64-bit integers that key the hashes of identities.
    """

    partitions: int
    shard: int
    ident_key: tuple[int, int]

    @property
    def mark(self) -> str:
        """Name of the store, which each of its partitions bears."""
        return mark_of(self.ident_key)


def _shard(client: redis.Redis) -> int:
    """Return how many idents a set should hold here; their digits spread them unevenly."""
    found: Any = {}
    with contextlib.suppress(ResponseError):  # hosted servers often forbid CONFIG
        found = client.config_get(_SETTING)
    return int(0.78 * min(int(found.get(_SETTING, ROOM)), MOST_ROOM))


def mark_of(ident_key: tuple[int, int]) -> str:
    """Return the name of the store whose identities are hashed by a key."""
    key = b"".join(half.to_bytes(8, "big") for half in ident_key)
    return hashlib.blake2b(key, digest_size=8, person=b"tallyward store").hexdigest()


def charter(client: redis.Redis, partitions: int) -> Charter:
    """Read the charter, or write it into a new store.

    Raises
    ------
    StoreError
        If the store was made with another number of partitions or by another format, or if one of
        its partitions belongs to another store.
    """
    pipe: Any = client.pipeline(transaction=True)
    pipe.hsetnx(SETTINGS, "format", FORMAT)
    pipe.hsetnx(SETTINGS, "partitions", partitions)
    pipe.hsetnx(SETTINGS, "shard", _shard(client))
    pipe.hsetnx(SETTINGS, "ident_key", secrets.token_bytes(16))
    pipe.hgetall(SETTINGS)
    found = pipe.execute()[-1]
    if int(found[b"format"]) != FORMAT:
        raise StoreError(
            f"the store has format {int(found[b'format'])}, this version reads {FORMAT}"
        )
    if int(found[b"partitions"]) != partitions:
        raise StoreError(
            f"the store was made with {int(found[b'partitions'])} partitions, which cannot change; "
            f"set TALLYWARD_PARTITIONS={int(found[b'partitions'])}"
        )
    key = found[b"ident_key"]
    halves = int.from_bytes(key[:8], "big"), int.from_bytes(key[8:], "big")
    mine = Charter(partitions, int(found[b"shard"]), halves)
    for number in range(partitions):
        pipe.set(Partition(number).mark, mine.mark, nx=True)
        pipe.get(Partition(number).mark)
    marks = pipe.execute()[1::2]
    if any(mark.decode() != mine.mark for mark in marks):
        raise StoreError("a partition of the store belongs to another store")
    return mine
