"""fold(state, log) -> state, crossings: the only way a stream's state comes about.

All streams are folded together, in passes. A pass takes from every stream the rows up to its next
*event* (the policy changes, the baseline completes, the evidence crosses its threshold), evaluates
every detector after every row, applies what was taken, handles the events, and goes on.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import numpy.typing as npt

from service.detection.policy import Policy
from service.digits.significand import IntArray
from service.digits.views import CELLS
from service.streams.crossing import PAUSE_ROWS, Crossing, cross, follow, paused
from service.streams.learning import decide, learn, until_complete
from service.streams.record import Records
from service.streams.rows import Rows, columns
from service.streams.rules import Rules, adopt, refresh
from service.streams.running import Running, evaluate
from service.streams.state import Folded, States
from service.streams.window import tally

PASS_ROWS = 2 * PAUSE_ROWS
"""Most rows of one stream in one pass, so that a crossing costs little work done twice."""


def fold(
    folded: Folded,
    records: Records,
    slot: IntArray,
    policies: Mapping[int, Policy],
    flows: Sequence[str],
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
        Stream of each record, ascending.
    policies : mapping
        Every policy version that the records name.
    flows : sequence of str, length n
        Flow of each stream.
    names : sequence of bytes, length n
        A name of each stream that no other stream of any tenant bears; enters alarm ids.

    Raises
    ------
    KeyError
        If a policy version is missing.
    """
    if not len(records):
        return []
    state = folded.state
    rows = columns(state, records, slot)
    tally(folded, rows)
    rows = rows.take(np.flatnonzero(rows.amount > 0))
    rules = Rules.empty(len(state))
    fresh = np.unique(rows.slot)
    adopt(state, fresh, state["policy"][fresh], rules, policies, flows)
    start = np.searchsorted(rows.slot, np.arange(len(state)))
    end = np.searchsorted(rows.slot, np.arange(len(state)), side="right")
    crossings: list[Crossing] = []
    while True:
        left = np.flatnonzero(start < end)
        if not left.size:
            break
        first_policy = rows.policy[start[left]]
        changed = state["policy"][left] != first_policy
        if changed.any():
            adopt(state, left[changed], first_policy[changed], rules, policies, flows)
        taken = _take(rows, left, start, end)
        part = rows.take(taken)
        part, complete = until_complete(state, rules, part)
        path = evaluate(state, rules, part)
        crossed, consumed = _until_crossed(state, rules, part, path)
        _apply(folded, rules, part, path, consumed)
        start += np.bincount(part.slot[consumed], minlength=len(state))
        for i in crossed.tolist():
            crossing = cross(state, rules, part, i, float(path.total[i]), names)
            if crossing is not None:
                crossings.append(crossing)
        done = complete[np.isin(complete, np.flatnonzero(consumed))]
        for i in done.tolist():
            s = int(part.slot[i])
            version = int(state["policy"][s])
            decide(folded, s, policies[version], int(part.at[i]))
            refresh(state, np.array([s]), rules, policies[version], flows)
    crossings.sort(key=lambda c: (c.slot, c.record))
    return crossings


def _take(rows: Rows, left: IntArray, start: IntArray, end: IntArray) -> IntArray:
    """Choose the rows of a pass: per stream, up to the next policy change or ``PASS_ROWS``."""
    length = np.minimum(end[left] - start[left], PASS_ROWS)
    offset = np.repeat(start[left] - np.concatenate([[0], np.cumsum(length)[:-1]]), length)
    chosen = np.arange(int(length.sum())) + offset
    same = rows.policy[chosen] == np.repeat(rows.policy[start[left]], length)
    if not same.all():
        begin = np.repeat(np.cumsum(length) - length, length)
        so_far = np.concatenate([[0], np.cumsum(~same)])
        chosen = chosen[so_far[1:] - so_far[begin] == 0]
    return np.asarray(chosen)


def _until_crossed(
    state: States, rules: Rules, part: Rows, path: Running
) -> tuple[IntArray, npt.NDArray[np.bool_]]:
    """Return the first crossing row of each stream, and which rows come no later than it."""
    first = np.searchsorted(part.slot, part.slot)
    over = path.total >= rules.threshold[part.slot]
    if over.any():
        number = state["rows"][part.slot] + np.arange(len(part.slot)) - first + 1
        over &= ~paused(state, rules, part.slot, number)
    if not over.any():
        return np.empty(0, np.int64), np.ones(len(part.slot), bool)
    over_before: IntArray = np.cumsum(over) - over
    consumed: npt.NDArray[np.bool_] = over_before == over_before[first]
    return np.flatnonzero(over & consumed), consumed


def _apply(
    folded: Folded,
    rules: Rules,
    part: Rows,
    path: Running,
    consumed: npt.NDArray[np.bool_],
) -> None:
    """Write what the consumed rows did to the states."""
    state = folded.state
    rows = np.flatnonzero(consumed)
    slot = part.slot[rows]
    last = rows[np.concatenate([slot[1:] != slot[:-1], [True]])]
    streams = part.slot[last]
    rank = np.arange(len(part.slot)) - np.searchsorted(part.slot, part.slot)
    number = state["rows"][part.slot] + rank + 1
    rest = path.shape_rest[:, last].T
    rested = rest >= 0
    state["shape_onset"][streams] = np.where(
        rested, number[rest] + 1, state["shape_onset"][streams]
    )
    state["shape_onset_at"][streams] = np.where(
        rested, part.at[rest], state["shape_onset_at"][streams]
    )
    state["sums"][streams] = path.sums[:, last].T.reshape(-1, 3, 3)
    state["shape"][streams] = path.shape[:, last].T
    state["shape_cusum"][streams] = path.shape_cusum[:, last].T

    used = consumed[path.hit_row]
    key = path.hit_key
    stays = np.concatenate([key[1:] == key[:-1], [False]]) if len(key) else np.empty(0, bool)
    follows = np.concatenate([used[1:], [False]]) if len(key) else np.empty(0, bool)
    final = np.flatnonzero(used & ~(stays & follows))
    at = key[final] // CELLS, key[final] % CELLS
    begin = path.run_start[final]
    carried = path.run_carried[final]
    amount = part.amount[path.hit_row]
    so_far = np.cumsum(amount)  # may wrap around; differences within a pass do not
    state["value"][at] = path.value[:, final].T
    state["hit"][at] = path.clock[final]
    state["cusum"][at] = path.cusum[final]
    state["run"][at] = np.where(carried, state["run"][at], 0) + final - begin + 1
    state["spent"][at] = (
        np.where(carried, state["spent"][at], 0) + so_far[final] - so_far[begin] + amount[begin]
    )
    state["onset"][at] = np.where(carried, state["onset"][at], number[path.hit_row[begin]])
    state["onset_clock"][at] = np.where(carried, state["onset_clock"][at], path.clock[begin])
    state["onset_at"][at] = np.where(carried, state["onset_at"][at], part.at[path.hit_row[begin]])

    counts = state["count"]
    np.add.at(counts, (key[used] // CELLS, key[used] % CELLS), 1)
    n = len(state)
    per_stream = np.bincount(slot, minlength=n)
    clock = np.stack(
        [np.bincount(slot[part.cell[v, rows] >= 0], minlength=n) for v in range(3)], axis=1
    )
    waves = part.wave[:, rows]
    starts = np.flatnonzero(np.concatenate([[True], slot[1:] != slot[:-1]]))
    state["circle"][streams] += np.add.reduceat(waves, starts, axis=1).T
    learn(folded, part, rows, streams, starts)
    follow(state, part, path.hit_row[used], key[used], clock)
    state["rows"] += per_stream
    state["clock"] += clock
