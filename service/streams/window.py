"""What needs no detector: totals, and the rolling window of event time."""

from __future__ import annotations

import numpy as np

from service.digits.significand import IntArray
from service.streams.rows import Rows
from service.streams.state import RUN_BLOCK, Buckets, Folded

BUCKET_MS = 6 * 3600 * 1000
BUCKETS = 28
WINDOW_MS = BUCKETS * BUCKET_MS
"""The rolling window: 7 days of event time in 28 buckets."""


def tally(folded: Folded, rows: Rows) -> None:
    """Count what no detector needs: records, zero, late, times and the window's buckets."""
    state = folded.state
    n = len(state)
    touched = np.unique(rows.slot)
    state["records"] += np.bincount(rows.slot, minlength=n)
    seen = rows.amount > 0
    state["zero"] += np.bincount(rows.slot[~seen], minlength=n)
    late = seen & (rows.at < rows.arrived - WINDOW_MS)
    state["late"] += np.bincount(rows.slot[late], minlength=n)
    starts = np.searchsorted(rows.slot, touched)
    new = state["first_at"][touched] == 0
    low = np.minimum.reduceat(rows.at, starts)
    high = np.maximum.reduceat(rows.at, starts)
    state["first_at"][touched] = np.where(new, low, np.minimum(low, state["first_at"][touched]))
    state["last_at"][touched] = np.maximum(high, state["last_at"][touched])
    state["last_arrived"][touched] = np.maximum(
        np.maximum.reduceat(rows.arrived, starts), state["last_arrived"][touched]
    )
    timely = np.flatnonzero(seen & ~late)
    folded.buckets = counted(
        folded.buckets, rows.slot[timely], rows.at[timely] // BUCKET_MS, rows.cell[:, timely]
    )
    bucket = folded.buckets.bucket
    newest = state["last_arrived"][folded.buckets.slot] // BUCKET_MS
    folded.buckets = folded.buckets.where((bucket >= RUN_BLOCK) | (bucket >= newest - BUCKETS))


def counted(buckets: Buckets, slot: IntArray, bucket: IntArray, cell: IntArray) -> Buckets:
    """Add rows to buckets: one count per cell hit."""
    view, row = np.nonzero(cell >= 0)
    ones = np.ones(len(row), np.int64)
    return buckets.plus(slot[row], bucket[row], cell[view, row], ones)
