"""fold(state, log) -> state, crossings: the only way a stream's state comes about.

All streams are folded together, in passes. A pass takes from every stream the rows up to its next
*event* (the policy changes, the baseline completes, the evidence crosses its threshold), evaluates
every detector after every row, applies what was taken, handles the events, and goes on.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

from service.detection.cells import CELLS
from service.detection.policy import Policy
from service.digits.significand import IntArray
from service.streams.crossing import PAUSE_ROWS, Crossing, cross, follow, paused
from service.streams.learning import decide, learn, learn_limits, until_complete
from service.streams.record import Records
from service.streams.repeats import remember
from service.streams.rows import Rows, columns
from service.streams.rules import Kind, Rules, adopt, refresh
from service.streams.running import Cells, Joint, Running, Shapes, evaluate, uses_repeats
from service.streams.runs import opens_run, place_in_run
from service.streams.state import Folded, States, is_learning
from service.streams.window import tally

PASS_ROWS = 2 * PAUSE_ROWS
"""Most rows of one stream in one pass, so that a crossing costs little work done twice."""


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
        Stream of each record, ascending.
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
    state = folded.state
    rows = columns(state, records, slot)
    tally(folded, rows)
    if not np.all(rows.amount):
        rows = rows.take(np.flatnonzero(rows.amount))
    rules = Rules.empty(len(state))
    fresh = np.unique(rows.slot)
    adopt(state, fresh, state["policy"][fresh], rules, policies, kinds)
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
            adopt(state, left[changed], first_policy[changed], rules, policies, kinds)
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
        for i in complete[consumed[complete]].tolist():
            s = int(part.slot[i])
            policy = policies[int(state["policy"][s])]
            decide(folded, s, policy, rules, int(part.at[i]))
            refresh(state, np.array([s]), rules, policy, kinds)
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
        over &= ~paused(state, rules, part, _row_numbers(state, part))
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
    n = len(state)
    rows = np.flatnonzero(consumed)
    slot = part.slot[rows]
    starts = np.flatnonzero(opens_run(slot))
    last = rows[np.concatenate([starts[1:] - 1, [len(rows) - 1]])]
    streams = part.slot[last]
    number = _row_numbers(state, part)
    state["sums"][streams] = path.sums[:, last].T.reshape(-1, 3, 3)
    _apply_shapes(state, part, path.shapes, number, streams, last)
    if path.joint is not None:
        _apply_joint(state, part, path.joint, number, streams, last)
    used = consumed[path.cells.row]
    _apply_cells(state, part, path.cells, number, used)
    clock = np.stack(
        [np.bincount(slot[part.cell[v, rows] >= 0], minlength=n) for v in range(3)], axis=1
    )
    state["circle"][streams] += np.add.reduceat(part.wave[:, rows], starts, axis=1).T
    if path.repeated is not None:
        remember(state, part, rows, uses_repeats(state, rules))
    learn(folded, part, rows, streams, starts, path.repeated)
    learn_limits(state, rules, part, rows)
    _compare_neighbours(state, part, rows)
    follow(state, part, rows, path.cells.row[used], path.cells.key[used], clock)
    state["rows"] += np.bincount(slot, minlength=n)
    state["clock"] += clock


def _row_numbers(state: States, part: Rows) -> IntArray:
    """Return each row's number among its stream's rows with an amount, from 1."""
    return np.asarray(state["rows"][part.slot] + place_in_run(part.slot) + 1)


def _compare_neighbours(state: States, part: Rows, rows: IntArray) -> None:
    """Count how often a row has the lead pair of the one before, in streams that have learned."""
    learned = ~is_learning(state)
    seen = rows[(part.cell[1, rows] >= 0) & learned[part.slot[rows]]]
    if not seen.size:
        return
    slot, pair = part.slot[seen], part.cell[1, seen]
    first = opens_run(slot)
    before = np.where(first, state["neighbour"][slot], np.roll(pair, 1))
    n = len(state)
    state["neighbours"] += np.bincount(slot[before > 0], minlength=n)
    state["repeats"] += np.bincount(slot[before == pair], minlength=n)
    last = np.concatenate([slot[1:] != slot[:-1], [True]])
    state["neighbour"][slot[last]] = pair[last]


def _apply_shapes(
    state: States,
    part: Rows,
    shapes: Shapes,
    number: IntArray,
    streams: IntArray,
    last: IntArray,
) -> None:
    state["shape"][streams] = shapes.value[:, last].T
    state["shape_cusum"][streams] = shapes.cusum[:, last].T
    rest = shapes.rest[:, last].T
    _write_onset(state, "shape", streams, part, number, rest)


def _apply_joint(
    state: States,
    part: Rows,
    joint: Joint,
    number: IntArray,
    streams: IntArray,
    last: IntArray,
) -> None:
    begin = np.searchsorted(part.slot, streams)
    for j, place in enumerate(joint.place):
        rest = joint.rest[j, last]
        rested = rest >= 0
        since = np.where(rested, rest, begin - 1)  # rows after this one are new to the run
        for name, amount in (
            ("joint_hits", joint.member[j].astype(np.int64)),
            ("joint_spent", joint.member[j] * part.amount.astype(np.float64)),
            ("joint_seen", joint.seen[j].astype(np.int64)),
        ):
            so_far = np.concatenate([[0], np.cumsum(amount)])
            before = np.where(rested, 0, state[name][streams, place])
            state[name][streams, place] = before + so_far[last + 1] - so_far[since + 1]
        state["joint_value"][streams, place] = joint.value[j][:, last].T
        state["joint_cusum"][streams, place] = joint.cusum[j, last]
        _write_onset(state, "joint", (streams, place), part, number, rest)


def _write_onset(
    state: States, what: str, where: Any, part: Rows, number: IntArray, rest: IntArray
) -> None:
    """Set the onset to the row after the last rest, where there was one in this pass."""
    rested = rest >= 0
    onset, onset_at = state[f"{what}_onset"], state[f"{what}_onset_at"]
    onset[where] = np.where(rested, number[rest] + 1, onset[where])
    onset_at[where] = np.where(rested, part.at[rest], onset_at[where])


def _apply_cells(
    state: States, part: Rows, cells: Cells, number: IntArray, used: npt.NDArray[np.bool_]
) -> None:
    key = cells.key
    goes_on = np.concatenate([(key[1:] == key[:-1]) & used[1:], [False]])
    final = np.flatnonzero(used & ~goes_on)
    at = key[final] // CELLS, key[final] % CELLS
    begin, carried = cells.start[final], cells.carried[final]
    first = cells.row[begin]
    amount = part.amount[cells.row]
    so_far = np.cumsum(amount)  # may wrap around; differences within a pass do not
    spent = so_far[final] - so_far[begin] + amount[begin]
    state["value"][at] = cells.value[:, final].T
    state["hit"][at] = cells.clock[final]
    state["cusum"][at] = cells.cusum[final]
    state["run"][at] = np.where(carried, state["run"][at], 0) + final - begin + 1
    state["spent"][at] = np.where(carried, state["spent"][at], 0) + spent
    state["onset"][at] = np.where(carried, state["onset"][at], number[first])
    state["onset_clock"][at] = np.where(carried, state["onset_clock"][at], cells.clock[begin])
    state["onset_at"][at] = np.where(carried, state["onset_at"][at], part.at[first])
    np.add.at(state["count"], (key[used] // CELLS, key[used] % CELLS), 1)
