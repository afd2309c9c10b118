"""What is fixed when a store is first used, and checked at every start."""

from __future__ import annotations

import hashlib
import secrets
from dataclasses import dataclass
from typing import Any

import redis

from service.store.errors import StoreError
from service.store.keys import SETTINGS, Partition

FORMAT = 2


@dataclass(frozen=True)
class Charter:
    """Facts of one store.

    Attributes
    ----------
    partitions : int
        Number of partitions; a merchant's place follows from it, so it never changes.
    ident_key : tuple of int
        Two random 64-bit integers that key the hashes of identities.
    """

    partitions: int
    ident_key: tuple[int, int]

    @property
    def mark(self) -> str:
        """Name of the store, which each of its partitions bears."""
        key = b"".join(half.to_bytes(8, "big") for half in self.ident_key)
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
    mine = Charter(partitions, (int.from_bytes(key[:8], "big"), int.from_bytes(key[8:], "big")))
    for number in range(partitions):
        pipe.set(Partition(number).mark, mine.mark, nx=True)
        pipe.get(Partition(number).mark)
    marks = pipe.execute()[1::2]
    if any(mark.decode() != mine.mark for mark in marks):
        raise StoreError("a partition of the store belongs to another store")
    return mine
