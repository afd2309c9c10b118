"""The folded state of many streams: one record of arrays each, and sparse counts per bucket.

A *snapshot* is a state written down: a header, the record with its zero words left out, and the
stream's bucket counts. Reading and writing work on many streams at once.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from service.detection.bank import JOINT, LIMITS, REACH, SHAPES
from service.detection.cells import CELLS, VIEW_OF_CELL
from service.digits.significand import IntArray
from service.streams.runs import opens_run

FORMAT = 1

UNDECIDED, BY_LAW, BY_OWN = 0, 1, 2
"""What a view is compared with; undecided while its baseline is being learned."""

REFUTED_BY_CIRCLE, REFUTED_BY_CELL, REFUTED_BY_BANK, TOO_FEW = 1, 2, 4, 8
"""Why the law was not accepted for a view."""

REPEAT_CELL = CELLS
"""Pseudo-cell of baseline blocks: amounts that repeat one of the few before them."""

NO_VIEW = 3
"""Stands for a view that sees every amount above zero: the limits'."""

STATE = np.dtype(
    [
        # tallies
        ("incarnation", "<u8"),
        ("records", "<i8"),  # log records folded
        ("rows", "<i8"),  # rows with an amount above zero
        ("zero", "<i8"),
        ("late", "<i8"),
        ("first_at", "<i8"),
        ("last_at", "<i8"),
        ("last_arrived", "<i8"),
        ("clock", "<i8", 3),  # rows seen by each watched view
        ("circle", "<f8", 6),  # sums of cos, sin of 1 and 2 turns; log10 amount and its square
        ("count", "<i8", CELLS),
        # detectors
        ("sums", "<f8", (3, 3)),  # weighted values of a view's cells, per contamination
        ("shape", "<f8", SHAPES),
        ("shape_cusum", "<f8", SHAPES),
        ("shape_onset", "<i8", SHAPES),
        ("shape_onset_at", "<i8", SHAPES),  # event time of the row before it
        ("recent", "<i8", REACH),  # ring of the last amounts
        ("recent_rows", "<i8"),  # rows that went into it
        ("joint_value", "<f8", (JOINT, 2)),  # of the joint detectors, by contamination
        ("joint_cusum", "<f8", JOINT),
        ("joint_onset", "<i8", JOINT),
        ("joint_onset_at", "<i8", JOINT),
        ("joint_hits", "<i8", JOINT),  # since onset, their amounts, and rows seen
        ("joint_spent", "<f8", JOINT),
        ("joint_seen", "<i8", JOINT),
        ("value", "<f8", (CELLS, 3)),  # of a cell's detectors right after its last hit
        ("hit", "<i8", CELLS),  # the view's clock at the cell's last hit or the last restart
        ("cusum", "<f8", CELLS),  # after the last hit
        ("onset", "<u4", CELLS),  # row of the first hit since the CUSUM was last zero
        ("onset_clock", "<u4", CELLS),  # and the view's clock at it
        ("onset_at", "<i8", CELLS),
        ("run", "<i8", CELLS),  # hits since onset, and their amounts
        ("spent", "<f8", CELLS),
        # references
        ("policy", "<u4"),
        ("reference", "u1", 3),
        ("refuted", "u1", 3),
        ("block_level", "u1"),
        ("relearns", "u1"),
        ("base_rows", "<i8"),
        ("base_first_at", "<i8"),
        ("base_last_at", "<i8"),
        ("base_circle", "<f8", 4),
        ("base", "<u4", CELLS),  # the baseline's counts
        ("bound", "<f4", CELLS),  # own upper bounds, before tolerance
        ("excepted", "<f4", CELLS),  # bounds of single cells though the law was accepted, else 0
        ("rare", "u1", CELLS),  # cells hardly used in the baseline
        ("joint_bound", "<f4", JOINT),  # of joint shares; 0 before there is a baseline
        ("repeat_share", "<f8"),  # of the baseline's amounts
        ("limits", "<u8"),  # fingerprint of the review limits in force, 0 for none
        ("limit_rows", "<i8"),  # rows from which the bounds of the limits are learned
        ("limit_first_at", "<i8"),
        ("limit_last_at", "<i8"),
        ("limit_base", "<i8", LIMITS),  # those of them just below each limit
        ("shape_scale", "<f8", SHAPES),  # c of the projection; infinite for a dropped detector
        ("shape_norm", "<f8", SHAPES),  # z of the alternative
        # dependence between neighbours, counted once a baseline is complete
        ("neighbour", "<i8"),  # lead pair of the last row that has one, 0 for none
        ("neighbours", "<i8"),  # rows compared with the one before, and those of the same pair
        ("repeats", "<i8"),
        # the open alarm
        ("alarm", "S16"),  # id, binary; empty for none
        ("alarm_crossings", "<u4"),
        ("alarm_view", "u1"),  # place in ``WATCHED_VIEWS``; NO_VIEW for a limit's
        ("alarm_shape", "u1"),  # 1 if its pattern is a shape
        ("alarm_live", "u1"),  # 1 once a crossing was not historic
        ("alarm_severity", "<f8"),
        ("alarm_share", "<f8"),  # expected in its cells
        ("alarm_cells", "u1", CELLS),
        ("alarm_low", "<i8"),  # amounts from this to below that, for a limit's
        ("alarm_high", "<i8"),
        ("alarm_hits", "<i8"),  # rows in its cells since its onset, and their amounts
        ("alarm_spent", "<f8"),
        ("alarm_seen", "<i8"),  # rows its view saw since the onset
        ("alarm_hit_at", "<i8"),
        ("crossed_row", "<i8"),  # row of the last crossing
        ("crossings", "<u4"),  # since the references were decided, at a row of its own
        ("decided_row", "<i8"),
    ],
    align=True,
)
WORDS = STATE.itemsize // 8
assert STATE.itemsize == WORDS * 8

States = npt.NDArray[np.void]

SNAPSHOT = np.dtype(
    [
        ("format", "<u4"),
        ("generation", "<u4"),
        ("incarnation", "<u8"),
        ("records", "<u8"),
        ("words", "<u4"),  # non-zero words of the record
        ("buckets", "<u4"),  # entries of the bucket table
        ("present", "u1", -(-WORDS // 8)),  # bitmap of the non-zero words
    ]
)

_BUCKET_BITS, _CELL_BITS = 24, 8
RUN_BLOCK = 1 << 22
"""Bucket numbers from here on are baseline blocks of consecutive rows."""
HOUR_BLOCK = 1 << 23
"""Bucket numbers from here on are baseline blocks of the time of day."""
WEEKDAY_BLOCK = HOUR_BLOCK + 64
"""Bucket numbers from here on are baseline blocks of the day of the week."""


@dataclass
class Buckets:
    """Sparse counts of (stream slot, bucket, cell), sorted by that key.

    Attributes
    ----------
    key : int64 array (m,)
        ``slot << 32 | bucket << 8 | cell``.
    count : int64 array (m,)
    """

    key: IntArray
    count: IntArray

    @classmethod
    def empty(cls) -> Buckets:
        """Return a table without entries."""
        return cls(np.empty(0, np.int64), np.empty(0, np.int64))

    @property
    def slot(self) -> IntArray:
        """Slot of each entry."""
        return self.key >> (_BUCKET_BITS + _CELL_BITS)

    @property
    def bucket(self) -> IntArray:
        """Bucket of each entry."""
        return (self.key >> _CELL_BITS) & ((1 << _BUCKET_BITS) - 1)

    @property
    def cell(self) -> IntArray:
        """Cell of each entry."""
        return self.key & ((1 << _CELL_BITS) - 1)

    def plus(self, slot: IntArray, bucket: IntArray, cell: IntArray, count: IntArray) -> Buckets:
        """Return the table with counts added; equal keys merge."""
        key = (slot << (_BUCKET_BITS + _CELL_BITS)) | (bucket << _CELL_BITS) | cell
        return _merged(np.concatenate([self.key, key]), np.concatenate([self.count, count]))

    def where(self, keep: npt.NDArray[np.bool_]) -> Buckets:
        """Return the entries selected by a mask."""
        return Buckets(self.key[keep], self.count[keep])


def _merged(key: IntArray, count: IntArray) -> Buckets:
    if not key.size:
        return Buckets(key, count)
    order = np.argsort(key, kind="stable")
    key, count = key[order], count[order]
    first = np.flatnonzero(opens_run(key))
    return Buckets(key[first], np.add.reduceat(count, first))


@dataclass
class Folded:
    """States of n streams, in the order of their slots.

    Attributes
    ----------
    state : structured array (n,) of ``STATE``
    buckets : Buckets
    """

    state: States
    buckets: Buckets

    @classmethod
    def new(cls, n: int) -> Folded:
        """Return n streams that never saw a row."""
        return cls(np.zeros(n, STATE), Buckets.empty())

    def only(self, slots: Sequence[int]) -> Folded:
        """Return some of the streams, renumbered from 0 in the order given."""
        chosen = np.asarray(slots, dtype=np.int64)
        where = np.full(len(self.state), -1, np.int64)
        where[chosen] = np.arange(len(chosen))
        target = where[self.buckets.slot]
        kept = self.buckets.where(target >= 0)
        shift = _BUCKET_BITS + _CELL_BITS
        key = (target[target >= 0] << shift) | (kept.key & ((1 << shift) - 1))
        return Folded(self.state[chosen].copy(), _merged(key, kept.count))


class CorruptSnapshot(ValueError):
    """A snapshot that this version cannot read."""


def write_snapshots(folded: Folded, generation: IntArray) -> list[bytes]:
    """Return one snapshot per stream.

    Parameters
    ----------
    folded : Folded
    generation : int64 array (n,)
        Number of compactions, this one included.
    """
    n = len(folded.state)
    words = folded.state.view(np.uint64).reshape(n, WORDS)
    present = words != 0
    header = np.zeros(n, SNAPSHOT)
    header["format"] = FORMAT
    header["generation"] = generation
    header["incarnation"] = folded.state["incarnation"]
    header["records"] = folded.state["records"]
    header["words"] = present.sum(axis=1)
    edges = np.searchsorted(folded.buckets.slot, np.arange(n + 1))
    header["buckets"] = np.diff(edges)
    header["present"] = np.packbits(present, axis=1)
    narrow = (folded.buckets.key & 0xFFFFFFFF).astype("<u4")
    count = folded.buckets.count.astype("<u4")
    return [
        header[i].tobytes()
        + words[i, present[i]].tobytes()
        + narrow[edges[i] : edges[i + 1]].tobytes()
        + count[edges[i] : edges[i + 1]].tobytes()
        for i in range(n)
    ]


def read_snapshots(snapshots: Sequence[bytes | None]) -> tuple[Folded, IntArray]:
    """Return the states of snapshots (None for a stream without one) and their generations.

    Raises
    ------
    CorruptSnapshot
        If a snapshot is torn, or of a format that this version does not know.
    """
    folded = Folded.new(len(snapshots))
    generation = np.zeros(len(snapshots), np.int64)
    slots = [i for i, blob in enumerate(snapshots) if blob is not None]
    if not slots:
        return folded, generation
    blobs = [blob for blob in snapshots if blob is not None]
    if min(map(len, blobs)) < SNAPSHOT.itemsize:
        raise CorruptSnapshot("a snapshot is shorter than its header")
    header = np.frombuffer(b"".join(b[: SNAPSHOT.itemsize] for b in blobs), SNAPSHOT)
    if np.any(header["format"] != FORMAT):
        raise CorruptSnapshot(f"snapshot format {int(header['format'].max())} is not {FORMAT}")
    n_words = header["words"].astype(np.int64)
    n_buckets = header["buckets"].astype(np.int64)
    sizes = SNAPSHOT.itemsize + 8 * n_words + 8 * n_buckets
    if np.any(sizes != [len(b) for b in blobs]):
        raise CorruptSnapshot("a snapshot is not as long as its header says")
    present = np.unpackbits(header["present"], axis=1, count=WORDS).astype(bool)
    if np.any(present.sum(axis=1) != n_words):
        raise CorruptSnapshot("a snapshot's bitmap does not match its words")
    words = np.zeros((len(blobs), WORDS), np.uint64)
    start = SNAPSHOT.itemsize
    ends = start + 8 * n_words
    words[present] = np.frombuffer(
        b"".join(b[start:end] for b, end in zip(blobs, ends.tolist(), strict=True)), "<u8"
    )
    folded.state[slots] = words.view(STATE).reshape(-1)
    middles = ends + 4 * n_buckets
    parts = list(zip(blobs, ends.tolist(), middles.tolist(), strict=True))
    narrow = np.frombuffer(b"".join(b[end:middle] for b, end, middle in parts), "<u4")
    count = np.frombuffer(b"".join(b[middle:] for b, _, middle in parts), "<u4")
    slot = np.repeat(np.asarray(slots, dtype=np.int64), n_buckets)
    folded.buckets = Buckets(
        (slot << (_BUCKET_BITS + _CELL_BITS)) | narrow.astype(np.int64), count.astype(np.int64)
    )
    generation[slots] = header["generation"]
    return folded, generation


def is_learning(state: States) -> npt.NDArray[np.bool_]:
    """Return which streams still learn their baseline; for one record, whether it does."""
    return np.asarray(np.any(state["reference"] == UNDECIDED, axis=-1))


def restart(state: States, s: int, at: int) -> None:
    """Set every detector of a stream back to zero, after a row with event time ``at``."""
    state["sums"][s] = 0
    state["shape"][s] = 0
    state["shape_cusum"][s] = 0
    state["shape_onset"][s] = state["rows"][s] + 1
    state["shape_onset_at"][s] = at
    state["joint_value"][s] = 0
    state["joint_cusum"][s] = 0
    state["joint_onset"][s] = state["rows"][s] + 1
    state["joint_onset_at"][s] = at
    state["joint_hits"][s] = 0
    state["joint_spent"][s] = 0
    state["joint_seen"][s] = 0
    state["value"][s] = 0
    state["hit"][s] = state["clock"][s][VIEW_OF_CELL]
    state["cusum"][s] = 0
    state["run"][s] = 0
    state["spent"][s] = 0
    state["onset"][s] = 0
    state["onset_clock"][s] = 0
    state["onset_at"][s] = 0
