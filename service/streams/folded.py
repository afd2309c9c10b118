"""Folded states of many streams, each in a slot."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from service.digits.significand import IntArray
from service.streams.pages import Pages
from service.streams.rules import RULES, AllRules
from service.streams.state import STATE, States


@dataclass
class Folded:
    """States of n streams, each in a slot.

    Attributes
    ----------
    state : structured array (n,) of ``STATE``
    rules : structured array (n,) of ``RULES``
        What follows from the state and the policy in force; put right by the fold.
    pages : Pages
        Counts of the window's buckets and of the baselines' blocks.
    """

    state: States
    rules: AllRules
    pages: Pages

    @classmethod
    def new(cls, n: int) -> Folded:
        """Return n streams that never saw a row."""
        return cls(np.zeros(n, STATE), np.zeros(n, RULES), Pages.new(n))

    def only(self, slots: Sequence[int] | IntArray) -> Folded:
        """Return some of the streams, renumbered from 0 in the order given."""
        chosen = np.asarray(slots, dtype=np.int64)
        table = self.pages.table[chosen]
        pages = Pages.new(len(chosen))
        used = table > 0
        pages.make_room(int(used.sum()))
        for where, source in zip(np.argwhere(used), table[used].tolist(), strict=True):
            pages.take(int(where[0]), int(where[1]))[:] = self.pages.count[source]
        return Folded(self.state[chosen].copy(), self.rules[chosen].copy(), pages)

    def forget(self, slots: IntArray) -> None:
        """Make slots those of streams that never saw a row."""
        self.state[slots] = np.zeros((), STATE)
        self.rules[slots] = np.zeros((), RULES)
        self.pages.forget(slots)
