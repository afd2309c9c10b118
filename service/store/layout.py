"""Rows in the order of their logs: by partition, by stream, and as they were given."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from service.batches.batch import Batch
from service.digits.compiled import compiled
from service.digits.significand import IntArray
from service.streams.record import HISTORIC, RECORD, ROW, Records

DECIMALS = 19
"""Digits of an ident."""

_TEXT = 0xA0 + DECIMALS  # msgpack's first byte of a text of that length


class Layout(NamedTuple):
    """A batch's rows as they go to the logs; k streams, n rows.

    Attributes
    ----------
    streams : int64 array (k,)
        The batch's streams by partition.
    edges : int64 array (k + 1,)
        Where the rows of each begin among ``rows``.
    rows : int64 array (n,)
        The batch's rows by stream.
    records : array of RECORD (n,)
    decimals : uint8 array (n, 20)
        Idents in decimal digits as msgpack has texts; zeros for none.
    """

    streams: IntArray
    edges: IntArray
    rows: IntArray
    records: Records
    decimals: npt.NDArray[np.uint8]


def lay_out(
    batch: Batch, home: IntArray, versions: IntArray, *, now: int, historic: bool
) -> Layout:
    """Lay out a batch; of rows that repeat an ident of their stream only the first is taken.

    Parameters
    ----------
    home : int64 array (k,)
        Partition of each stream, below the number of partitions.
    versions : int64 array (k,)
        Policy version in force for each.
    now : int
        Arrival, ms since 1970 UTC.
    """
    chosen = _first_of_each(batch)
    n, k = len(chosen), len(home)
    out = Layout(
        np.empty(k, np.int64),
        np.empty(k + 1, np.int64),
        np.empty(n, np.int64),
        np.empty(n, RECORD),
        np.empty((n, 1 + DECIMALS), np.uint8),
    )
    constant = (now // 1000, now % 1000, ROW, HISTORIC if historic else 0, _TEXT)
    columns = batch.stream, batch.amount, batch.at, batch.ident
    _lay_out(chosen, *columns, home, versions, constant, *out)
    return out


def _first_of_each(batch: Batch) -> IntArray:
    """Return the rows that do not repeat an ident of their stream."""
    ident = batch.ident
    everything = np.arange(len(ident))
    named = np.flatnonzero(ident)
    if len(set(ident[named].tolist())) == len(named):
        return everything
    pairs = np.rec.fromarrays([batch.stream[named], ident[named]])
    first = named[np.unique(pairs, return_index=True)[1]]
    return np.sort(np.concatenate([np.flatnonzero(np.equal(ident, 0)), first]))


@compiled
def _lay_out(
    chosen: Any,
    stream: Any,
    amount: Any,
    at: Any,
    ident: Any,
    home: Any,
    versions: Any,
    constant: Any,
    streams: Any,
    edges: Any,
    rows: Any,
    records: Any,
    decimals: Any,
) -> None:
    arrived_s, arrived_ms, kind, flags, text = constant
    k = len(home)
    # counting sorts: streams by partition, rows by stream
    at_home = np.zeros(home.max() + 2, np.int64)
    for s in range(k):
        at_home[home[s] + 1] += 1
    at_home = np.cumsum(at_home)
    place = np.empty(k, np.int64)
    for s in range(k):
        place[s] = at_home[home[s]]
        at_home[home[s]] += 1
        streams[place[s]] = s
    edges[:] = 0
    for i in range(len(chosen)):
        edges[place[stream[chosen[i]]] + 1] += 1
    for s in range(k):
        edges[s + 1] += edges[s]
    following = edges[:-1].copy()
    for i in range(len(chosen)):
        row = chosen[i]
        s = stream[row]
        j = following[place[s]]
        following[place[s]] += 1
        rows[j] = row
        record = records[j]
        record.amount = amount[row]
        record.ident = ident[row]
        record.at_s = at[row] // 1000
        record.at_ms = at[row] % 1000
        record.arrived_s = arrived_s
        record.arrived_ms = arrived_ms
        record.policy = versions[s]
        record.kind = kind
        record.flags = flags
        rest = ident[row]
        decimals[j, 0] = text
        for d in range(decimals.shape[1] - 1, 0, -1):
            decimals[j, d] = np.uint8(48) + np.uint8(rest % np.uint64(10))
            rest //= np.uint64(10)


@compiled
def unfolded(
    streams: Any,
    edges: Any,
    rows: Any,
    taken: Any,
    warm: Any,
    others: Any,
    tails: Any,
    own: Any,
    records: Any,
    slot: Any,
) -> int:
    """Put together what a worker has not folded: others' records, then its own that were taken.

    Parameters
    ----------
    streams, edges, rows, own : arrays of a `Layout`
    taken : bool array
        By row of the batch.
    warm, others : arrays by stream of the batch
        Whether it is not cold, and how many of ``tails`` are its.
    records, slot : arrays
        Written; slot is the stream of the batch.
    """
    n, tail = 0, 0
    for i in range(len(streams)):
        s = streams[i]
        for _ in range(others[s]):
            records[n] = tails[tail]
            slot[n] = s
            n += 1
            tail += 1
        if warm[s]:
            for j in range(edges[i], edges[i + 1]):
                if taken[rows[j]]:
                    records[n] = own[j]
                    slot[n] = s
                    n += 1
    return n
