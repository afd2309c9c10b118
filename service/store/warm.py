"""States that a worker keeps folded between its calls, so that a call folds new rows only.

Disposable: whatever is missing or void here is read from the store. That a kept state still holds
is for the partition to say, with every append (`Known`).
"""

from __future__ import annotations

import threading
from collections import OrderedDict
from collections.abc import Iterator, Sequence
from contextlib import contextmanager

import numpy as np

from service.digits.significand import IntArray
from service.store.errors import Unavailable
from service.store.keys import stream_of
from service.store.logs import Appended, Known
from service.streams.folded import Folded
from service.streams.rules import Kind

NOTHING = -1
"""Era of a slot whose state is void."""


class Warm:
    """Kept states, one slot each; the least recently used give way to others.

    Parameters
    ----------
    room : int
        Most streams kept.

    Attributes
    ----------
    folded : Folded
    kinds, names
        By slot, as `fold` takes them.
    """

    def __init__(self, room: int) -> None:
        self.room = room
        self.folded = Folded.new(room)
        self.kinds = [Kind("", "")] * room
        self.names = [b""] * room
        self._slots: OrderedDict[str, int] = OrderedDict()  # least recently used first
        self._era = np.full(room, NOTHING)
        self._generation = np.zeros(room, np.int64)
        self._lock = threading.Lock()

    @contextmanager
    def turn(self, patience: float) -> Iterator[None]:
        """Be the only one who uses the states, and who appends.

        Raises
        ------
        Unavailable
            If others take longer than ``patience`` seconds.
        """
        if not self._lock.acquire(timeout=patience):
            raise Unavailable("other batches take too long; send the same batch again later")
        try:
            yield
        finally:
            self._lock.release()

    def slots(self, paths: Sequence[str]) -> IntArray:
        """Return the slots of different streams, at most ``room``, making room for new ones."""
        kept, missing = self._slots, []
        for path in paths:
            if path in kept:
                kept.move_to_end(path)
            else:
                missing.append(path)
        for path in missing:
            slot = len(kept) if len(kept) < self.room else kept.popitem(last=False)[1]
            kept[path] = slot
            _, stream = stream_of(path)
            self._era[slot] = NOTHING
            self.names[slot], self.kinds[slot] = path.encode(), Kind(stream.flow, stream.currency)
        return np.fromiter(map(kept.__getitem__, paths), np.int64, len(paths))

    def known(self, slots: IntArray) -> Known:
        """Return what is kept in slots."""
        state, era = self.folded.state, self._era[slots]
        incarnation = np.where(era == NOTHING, np.uint64(0), state["incarnation"][slots])
        return Known(incarnation, state["records"][slots], self._generation[slots], era)

    def keep(self, slots: IntArray, appended: Appended, compacted: Sequence[int]) -> None:
        """Keep what was folded from an append, where it may be kept.

        Parameters
        ----------
        compacted : sequence of int
            Streams, by position, whose logs were compacted with what was folded.
        """
        self._era[slots] = np.where(appended.may_keep, appended.era, NOTHING)
        self._generation[slots] = appended.generation
        self._generation[slots[list(compacted)]] += 1

    def drop(self, slots: IntArray) -> None:
        """Keep nothing in slots whose states may be half done."""
        self._era[slots] = NOTHING
