"""*Snapshots*: states written down, a header and then, packed, the record and its pages of counts.

Most bytes of a state are zero: counts, and detectors that have seen little. A word of 8 bytes is
packed as a mask of its non-zero bytes and these bytes; a run of zero words as a zero and its
length.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from service.detection import bank
from service.detection.cells import VIEW_OF_CELL
from service.digits.compiled import compiled
from service.digits.significand import IntArray
from service.streams.folded import Folded
from service.streams.pages import PLACES, WIDTH
from service.streams.state import WORDS
from service.streams.walk import BUCKET_MS, BUCKETS

FORMAT = 2

SNAPSHOT = np.dtype(
    [
        ("format", "<u4"),
        ("pages", "<u4"),
        ("incarnation", "<u8"),
        ("records", "<u8"),
        ("size", "<u8"),  # bytes that follow
    ]
)

_PLACE_WORDS = PLACES // 8
_PAGE_WORDS = 4 * -(-WIDTH // 8)  # planes of the counts' lowest bytes, of their second ones, ...
_LONGEST = SNAPSHOT.itemsize + 1 + 9 * (WORDS + _PLACE_WORDS + PLACES * _PAGE_WORDS)


class CorruptSnapshot(ValueError):
    """A snapshot that this version cannot read."""


def tidy(folded: Folded, slots: Sequence[int] | IntArray) -> None:
    """Leave out what has no effect any more.

    These are buckets that have left the window, and runs of cells whose CUSUM has come to rest.
    """
    chosen = np.asarray(slots, dtype=np.int64)
    pages, state = folded.pages, folded.state
    oldest = state["last_arrived"][chosen] // BUCKET_MS - BUCKETS
    counts = pages.table, pages.count, pages.free
    _tidy(state, *counts, chosen, oldest, bank.CUSUM_RETAINED, VIEW_OF_CELL)


def write_snapshots(folded: Folded, slots: Sequence[int] | IntArray) -> list[bytes]:
    """Return one snapshot for each of some slots, which are tidied first."""
    tidy(folded, slots)
    pages, states = folded.pages, folded.state
    words = states.view(np.uint64).reshape(len(states), WORDS)
    out = np.empty(_LONGEST, np.uint8)
    header = np.zeros((), SNAPSHOT)
    header["format"] = FORMAT
    written = []
    for slot in map(int, slots):
        end = _pack_stream(words[slot], pages.table[slot], pages.count, out, SNAPSHOT.itemsize)
        header["pages"] = np.count_nonzero(pages.table[slot])
        header["incarnation"] = states["incarnation"][slot]
        header["records"] = states["records"][slot]
        header["size"] = end - SNAPSHOT.itemsize
        out[: SNAPSHOT.itemsize] = np.frombuffer(header.tobytes(), np.uint8)
        written.append(out[:end].tobytes())
    return written


def read_snapshots(
    folded: Folded, slots: Sequence[int] | IntArray, snapshots: Sequence[bytes | None]
) -> None:
    """Put the states of snapshots into slots; None makes a stream that never saw a row.

    Raises
    ------
    CorruptSnapshot
        If a snapshot is torn, or of a format that this version does not know. The slots then hold
        anything.
    """
    chosen = np.asarray(slots, dtype=np.int64)
    folded.forget(chosen)
    there = [i for i, blob in enumerate(snapshots) if blob is not None]
    if not there:
        return
    blobs = [blob for blob in snapshots if blob is not None]
    sizes = np.array([len(b) for b in blobs])
    if sizes.min() < SNAPSHOT.itemsize:
        raise CorruptSnapshot("a snapshot is shorter than its header")
    header = np.frombuffer(b"".join(b[: SNAPSHOT.itemsize] for b in blobs), SNAPSHOT)
    if np.any(header["format"] != FORMAT):
        raise CorruptSnapshot(f"snapshot format {int(header['format'].max())} is not {FORMAT}")
    if np.any(header["size"] + SNAPSHOT.itemsize != sizes) or header["pages"].max() > PLACES:
        raise CorruptSnapshot("a snapshot is not as long as its header says")
    pages = folded.pages
    pages.make_room(int(header["pages"].sum()))
    words = folded.state.view(np.uint64).reshape(len(folded.state), WORDS)
    ends = np.cumsum(sizes)
    packed = np.frombuffer(b"".join(blobs), np.uint8)
    whole = _unpack_streams(
        packed,
        ends - sizes + SNAPSHOT.itemsize,
        ends,
        chosen[there],
        header["pages"].astype(np.int64),
        words,
        pages.table,
        pages.count,
        pages.free,
    )
    if not whole:
        raise CorruptSnapshot("a snapshot is torn")


@compiled
def _pack(words: Any, out: Any, at: int) -> int:
    """Write packed words into ``out`` from ``at`` on, and return where they end."""
    i, n = 0, len(words)
    while i < n:
        word = words[i]
        if word == 0:
            run = 1
            while i + run < n and run < 255 and words[i + run] == 0:
                run += 1
            out[at] = 0
            out[at + 1] = run
            at += 2
            i += run
            continue
        place, mask = at, 0
        at += 1
        for b in range(8):  # without branches: a zero byte is written, too, and written over
            byte = np.uint8(word >> np.uint64(8 * b))
            present = int(byte != 0)
            out[at] = byte
            at += present
            mask |= present << b
        out[place] = mask
        i += 1
    return at


@compiled
def _unpack(packed: Any, at: int, end: int, words: Any) -> int:
    """Read words from packed bytes, and return where they end; -1 if they are torn."""
    i, n = 0, len(words)
    while i < n:
        if at >= end:
            return -1
        mask = packed[at]
        at += 1
        if mask == 0:
            if at >= end or packed[at] == 0 or i + packed[at] > n:
                return -1
            for _ in range(packed[at]):
                words[i] = 0
                i += 1
            at += 1
            continue
        word = np.uint64(0)
        for b in range(8):
            if mask & (1 << b):
                if at >= end:
                    return -1
                word |= np.uint64(packed[at]) << np.uint64(8 * b)
                at += 1
        words[i] = word
        i += 1
    return at


@compiled
def _tidy(
    states: Any,
    table: Any,
    count: Any,
    free: Any,
    slots: IntArray,
    oldest: IntArray,
    retained: float,
    view_of_cell: IntArray,
) -> None:
    for i in range(len(slots)):
        slot = slots[i]
        state = states[slot]
        for place in range(state.window.shape[0]):
            if state.window[place] < oldest[i]:
                state.window[place] = 0
                page = table[slot, place]
                if page != 0:
                    count[page, :] = 0
                    table[slot, place] = 0
                    free[0] += 1
                    free[free[0]] = page
        for number in range(len(view_of_cell)):
            cell = state.cell[number]
            misses = state.clock[view_of_cell[number]] - cell.hit
            if cell.ratio * retained**misses <= 1:
                cell.ratio = 0
                cell.run = 0
                cell.spent = 0
                cell.onset = 0
                cell.onset_clock = 0
                cell.onset_at = 0


@compiled
def _pack_stream(words: Any, table: Any, count: Any, out: Any, at: int) -> int:
    at = _pack(words, out, at)
    used = np.zeros(len(table), np.uint8)
    for place in range(len(table)):
        used[place] = table[place] != 0
    at = _pack(used.view(np.uint64), out, at)
    planes = np.zeros((4, (count.shape[1] + 7) // 8 * 8), np.uint8)
    for place in range(len(table)):
        if table[place] != 0:
            page = count[table[place]].view(np.uint8)
            for c in range(len(page) // 4):
                for k in range(4):
                    planes[k, c] = page[4 * c + k]
            at = _pack(planes.reshape(-1).view(np.uint64), out, at)
    return at


@compiled
def _unpack_streams(
    packed: Any,
    starts: IntArray,
    ends: IntArray,
    slots: IntArray,
    pages: IntArray,
    words: Any,
    table: Any,
    count: Any,
    free: Any,
) -> bool:
    used = np.zeros(table.shape[1], np.uint8)
    planes = np.zeros((4, (count.shape[1] + 7) // 8 * 8), np.uint8)
    for i in range(len(slots)):
        slot = slots[i]
        at = _unpack(packed, starts[i], ends[i], words[slot])
        if at < 0:
            return False
        at = _unpack(packed, at, ends[i], used.view(np.uint64))
        if at < 0 or used.sum() != pages[i]:
            return False
        for place in range(len(used)):
            if used[place] != 0:
                page = free[free[0]]
                free[0] -= 1
                table[slot, place] = page
                at = _unpack(packed, at, ends[i], planes.reshape(-1).view(np.uint64))
                if at < 0:
                    return False
                counts = count[page].view(np.uint8)
                for c in range(len(counts) // 4):
                    for k in range(4):
                        counts[4 * c + k] = planes[k, c]
        if at != ends[i]:
            return False
    return True
