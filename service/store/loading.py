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
    generation : int64 array (n,)
        Compactions so far, by the logs.
    records : array of RECORD (m,)
        Not yet folded, by slot and in log order.
    slot : int64 array (m,)
    """

    folded: Folded
    generation: IntArray
    records: Records
    slot: IntArray


def load(blobs: Sequence[Blobs]) -> Loaded:
    """Read snapshots and log tails of streams.

    Raises
    ------
    CorruptStream
        If one of them is torn, of an unknown format, or its snapshot and log do not fit together.
    """
    try:
        folded = Folded.new(len(blobs))
        read_snapshots(folded, range(len(blobs)), [b.snapshot for b in blobs])
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
    old = state["incarnation"] != 0
    if np.any(old & (state["incarnation"] != header["incarnation"])):
        raise CorruptStream("a snapshot belongs to another incarnation of its log")
    if np.any((state["records"] < base) | (state["records"] > base + length)):
        raise CorruptStream("a log lacks records that its snapshot does not hold, or the reverse")
    state["incarnation"] = header["incarnation"]
    skip = state["records"] - base
    tails = [log[HEADER.itemsize * (1 + s) :] for log, s in zip(logs, skip.tolist(), strict=True)]
    return Loaded(
        folded,
        header["generation"].astype(np.int64),
        np.frombuffer(b"".join(tails), RECORD),
        np.repeat(np.arange(len(blobs)), length - skip),
    )


def kept_records(log: bytes) -> Records:
    """Return the records that a log still holds, oldest first."""
    return np.frombuffer(log[HEADER.itemsize :], RECORD)
