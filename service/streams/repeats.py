"""Amounts that repeat one of the few before them exactly: counted, learned and watched."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from service.detection.bank import REACH
from service.digits.significand import IntArray
from service.streams.rows import Rows
from service.streams.runs import opens_run, place_in_run
from service.streams.state import States


def repeated(state: States, part: Rows) -> npt.NDArray[np.bool_]:
    """Return which rows of a pass repeat one of the ``REACH`` amounts before them in their stream.

    The stream's last amounts lie in a ring, as of the row before its first one here.
    """
    n = len(part.slot)
    first = opens_run(part.slot)
    segment = np.cumsum(first) - 1
    streams = part.slot[first]
    opening = np.flatnonzero(first) + REACH * np.arange(len(streams))
    places = (state["recent_rows"][streams, None] + np.arange(REACH)) % REACH  # oldest first
    line = np.empty(n + REACH * len(streams), np.int64)
    line[opening[:, None] + np.arange(REACH)] = state["recent"][streams[:, None], places]
    before = np.arange(n) + REACH * segment
    line[before + REACH] = part.amount
    windows = np.lib.stride_tricks.sliding_window_view(line, REACH)
    return np.asarray((windows[before] == part.amount[:, None]).any(axis=1))


def remember(state: States, part: Rows, rows: IntArray, uses: npt.NDArray[np.bool_]) -> None:
    """Put consumed rows into the rings of the streams that use them."""
    rows = rows[uses[part.slot[rows]]]
    if not rows.size:
        return
    slot = part.slot[rows]
    count = np.bincount(slot, minlength=len(state))
    rank = place_in_run(slot)
    last = rank >= count[slot] - REACH
    place = (state["recent_rows"][slot] + rank) % REACH
    state["recent"][slot[last], place[last]] = part.amount[rows[last]]
    state["recent_rows"] += count
