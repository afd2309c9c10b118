"""Counts per cell and place of many streams, on pages that are handed out when first needed.

A stream's places are the buckets of its rolling window and, while it learns, the blocks of its
baseline.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from service.detection.cells import CELLS
from service.digits.significand import IntArray

WINDOW_PLACES = 32
"""Buckets of the window have the place of their number modulo this: a few more than it spans."""
RUN_BLOCKS = 16
"""A baseline has at most so many blocks of consecutive rows; they pair up as it grows."""
FIRST_RUN = WINDOW_PLACES
FIRST_HOUR = FIRST_RUN + RUN_BLOCKS
FIRST_WEEKDAY = FIRST_HOUR + 8
PLACES = FIRST_WEEKDAY + 8
"""Places of a stream, one to spare."""

REPEAT_CELL = CELLS
"""Pseudo-cell of baseline blocks: amounts that repeat one of the few before them."""
WIDTH = CELLS + 2
"""Counts on a page, one to spare."""


@dataclass
class Pages:
    """Pages of n streams.

    Attributes
    ----------
    table : int32 array (n, PLACES)
        Page of each place, 0 for none.
    count : uint32 array (pages, WIDTH)
        Page 0 is never handed out.
    free : int64 array (pages + 1,)
        Number of free pages, then those pages.
    """

    table: npt.NDArray[np.int32]
    count: npt.NDArray[np.uint32]
    free: IntArray

    @classmethod
    def new(cls, n: int) -> Pages:
        """Return streams without a page."""
        pages = cls(
            np.zeros((n, PLACES), np.int32), np.zeros((1, WIDTH), np.uint32), np.zeros(2, np.int64)
        )
        pages.make_room(min(n, 64) * 4)
        return pages

    def make_room(self, needed: int) -> None:
        """Have at least so many free pages."""
        free, total = int(self.free[0]), len(self.count)
        if free >= needed:
            return
        more = max(needed - free, total)
        count = np.zeros((total + more, WIDTH), np.uint32)
        count[:total] = self.count
        stack = np.zeros(total + more + 1, np.int64)
        stack[0] = free + more
        stack[1 : free + 1] = self.free[1 : free + 1]
        stack[free + 1 : free + more + 1] = np.arange(total, total + more)
        self.count, self.free = count, stack

    def of(self, slot: int) -> npt.NDArray[np.uint32]:
        """Return the counts of one stream, (PLACES, WIDTH)."""
        return np.asarray(self.count[self.table[slot]])  # page 0 is all zero

    def forget(self, slots: IntArray | int, places: slice = slice(None)) -> None:
        """Give back pages of streams."""
        given = self.table[slots, places]
        pages = given[given > 0]
        self.count[pages] = 0
        free = int(self.free[0])
        self.free[free + 1 : free + 1 + len(pages)] = pages
        self.free[0] += len(pages)
        self.table[slots, places] = 0

    def take(self, slot: int, place: int) -> npt.NDArray[np.uint32]:
        """Hand a page to a place that has none, and return its counts."""
        self.make_room(1)
        page = int(self.free[self.free[0]])
        self.free[0] -= 1
        self.table[slot, place] = page
        return np.asarray(self.count[page])
