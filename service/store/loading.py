"""From what the store holds of streams to states and the records not yet in them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from service.digits.significand import IntArray
from service.store.logs import Blobs
from service.streams.folded import Folded
from service.streams.record import FORMAT, HEADER, RECORD, Records
from service.streams.snapshots import CorruptSnapshot, read_snapshots


class CorruptStream(ValueError):
    """A stream's snapshot and log do not fit together; ``args[0]`` says how."""


@dataclass
class Loaded:
    """Streams as read.

    Attributes
    ----------
    folded : Folded
        As of the snapshots.
    slots : int64 array (n,)
        Of the streams in ``folded``.
    tail_from : int64 array (n,)
        Row number up to which the snapshots hold the streams.
    records : array of RECORD (m,)
        Not yet folded, by stream and in log order.
    slot : int64 array (m,)
        Of each record's stream.
    """

    folded: Folded
    slots: IntArray
    tail_from: IntArray
    records: Records
    slot: IntArray


def load(
    blobs: Sequence[Blobs], folded: Folded | None = None, slots: IntArray | None = None
) -> Loaded:
    """Read snapshots and log tails of streams, into slots of folded states if these are given.

    Raises
    ------
    CorruptStream
        If one of them is torn, of an unknown format, or its snapshot and log do not fit together.
    """
    if folded is None or slots is None:
        folded, slots = Folded.new(len(blobs)), np.arange(len(blobs))
    try:
        read_snapshots(folded, slots, [b.snapshot for b in blobs])
    except CorruptSnapshot as error:
        raise CorruptStream(*error.args) from error
    logs = [b.log or b"" for b in blobs]
    header = np.zeros(len(blobs), HEADER)
    size = np.fromiter(map(len, logs), np.int64, len(logs))
    has = np.flatnonzero(size > 0)
    if np.any(size[has] < HEADER.itemsize) or np.any(size % RECORD.itemsize):
        raise CorruptStream("a log is torn: its length is not a whole number of records")
    header[has] = np.frombuffer(b"".join(log[: HEADER.itemsize] for log in logs), HEADER)
    if np.any(header["format"][has] != FORMAT):
        raise CorruptStream("a log has a format that this version does not know")
    state = folded.state
    base = header["base"].astype(np.int64)
    length = np.maximum(size // RECORD.itemsize - 1, 0)
    incarnation, done = state["incarnation"][slots], state["records"][slots]
    if np.any((incarnation != 0) & (incarnation != header["incarnation"])):
        raise CorruptStream("a snapshot belongs to another incarnation of its log")
    if np.any((done < base) | (done > base + length)):
        raise CorruptStream("a log lacks records that its snapshot does not hold, or the reverse")
    state["incarnation"][slots] = header["incarnation"]
    skip = done - base
    tails = [log[HEADER.itemsize * (1 + s) :] for log, s in zip(logs, skip.tolist(), strict=True)]
    return Loaded(
        folded,
        slots,
        done,
        np.frombuffer(b"".join(tails), RECORD),
        np.repeat(slots, length - skip),
    )


def kept_records(log: bytes) -> Records:
    """Return the records that a log still holds, oldest first."""
    return np.frombuffer(log[HEADER.itemsize :], RECORD)
