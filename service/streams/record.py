"""What a stream is and what its log holds: a header cell, then 32-byte records.

A log is the only source of a stream's state; every record carries all that decides a result.
"""

from __future__ import annotations

import re
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

MERCHANT = re.compile(r"[A-Za-z0-9][A-Za-z0-9._:@+-]{0,63}")
FLOW = re.compile(r"[a-z0-9_-]{1,16}")


class Stream(NamedTuple):
    """One merchant's one flow of money in one currency."""

    merchant: str
    flow: str
    currency: str


RECORD = np.dtype(
    [
        ("amount", "<i8"),  # minor units
        ("ident", "<u8"),  # 63-bit hash of the row's identity, 19 decimal digits; 0 for none
        ("at_s", "<u4"),  # event time, seconds since 1970 UTC, and milliseconds
        ("arrived_s", "<u4"),  # arrival at the service
        ("at_ms", "<u2"),
        ("arrived_ms", "<u2"),
        ("policy", "<u2"),  # policy version in force at arrival
        ("kind", "u1"),  # ROW or a control record
        ("flags", "u1"),  # HISTORIC
    ]
)
HEADER = np.dtype(
    [
        ("format", "<u4"),
        ("generation", "<u4"),  # number of compactions so far
        ("incarnation", "<u8"),  # random; a forgotten merchant that returns gets a new one
        ("base", "<u8"),  # row number of the first record in the log
        ("folded", "<u8"),  # row number up to which the snapshot holds the stream
    ]
)
assert RECORD.itemsize == HEADER.itemsize == 32

FORMAT = 1
ROW = 0
HISTORIC = 1

Records = npt.NDArray[np.void]


def at(records: Records) -> npt.NDArray[np.int64]:
    """Return event times in milliseconds since 1970 UTC."""
    return np.asarray(records["at_s"].astype(np.int64) * 1000 + records["at_ms"])


def arrived(records: Records) -> npt.NDArray[np.int64]:
    """Return arrival times in milliseconds since 1970 UTC."""
    return np.asarray(records["arrived_s"].astype(np.int64) * 1000 + records["arrived_ms"])
