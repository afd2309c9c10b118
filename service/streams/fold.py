"""fold(state, log) -> state, crossings: the only way a stream's state comes about.

A compiled loop takes every stream's rows up to its next event (`walk`); the event is handled, and
the loop goes on.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from service.detection.policy import Policy
from service.digits.significand import IntArray
from service.streams.crossing import Crossing, cross
from service.streams.folded import Folded
from service.streams.learning import decide
from service.streams.record import Records
from service.streams.rules import Kind, adopt, put_right, refresh
from service.streams.runs import opens_run
from service.streams.walk import (
    COMPLETE,
    CROSSED,
    MOST_PAGES,
    NEW_POLICY,
    NO_PAGE,
    TABLES,
    walk,
)


def fold(
    folded: Folded,
    records: Records,
    slot: IntArray,
    policies: Mapping[int, Policy],
    kinds: Sequence[Kind],
    names: Sequence[bytes],
) -> list[Crossing]:
    """Fold log records into the states, in place, and return the crossings in order.

    Parameters
    ----------
    folded : Folded
        States of n streams; ``state["records"]`` records were folded before.
    records : array (m,) of ``RECORD``
        The logs' records not yet folded, each stream's in log order.
    slot : int64 array (m,)
        Slot of each record's stream; those of one stream follow each other.
    policies : mapping
        Every policy version that the records name.
    kinds : sequence of Kind, length n
        Flow and currency of each stream.
    names : sequence of bytes, length n
        A name of each stream that no other stream of any tenant bears; enters alarm ids.

    Raises
    ------
    KeyError
        If a policy version is missing.
    """
    if not len(records):
        return []
    state, rules, pages = folded.state, folded.rules, folded.pages
    begin = np.flatnonzero(opens_run(slot))
    end = np.append(begin[1:], len(slot))
    slots = slot[begin]
    put_right(state, slots, rules, policies, kinds)
    crossings: list[Crossing] = []
    while True:
        events, totals = np.zeros(len(slots), np.int64), np.zeros(len(slots))
        more = walk(
            state,
            rules,
            pages.table,
            pages.count,
            pages.free,
            records,
            slots,
            begin,
            end,
            events,
            totals,
            TABLES,
        )
        if not more:
            break
        if np.any(events == NO_PAGE):
            pages.make_room(max(MOST_PAGES, len(pages.count)))
        changed = np.flatnonzero(events == NEW_POLICY)
        versions = records["policy"][begin[changed]].astype(np.int64)
        adopt(state, slots[changed], versions, rules, policies, kinds)
        for i in np.flatnonzero(events & (CROSSED | COMPLETE)).tolist():
            s, row = int(slots[i]), records[begin[i] - 1]
            if events[i] & CROSSED:
                crossing = cross(state, rules, s, row, float(totals[i]), names[s])
                if crossing is not None:
                    crossings.append(crossing)
            if events[i] & COMPLETE:
                policy = policies[int(state["policy"][s])]
                decide(folded, s, policy)
                refresh(state, slots[i : i + 1], rules, policy, kinds)
        left = events > 0
        slots, begin, end = slots[left], begin[left], end[left]
    crossings.sort(key=lambda c: (c.slot, c.record))
    return crossings
