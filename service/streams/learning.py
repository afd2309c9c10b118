"""A stream learns its baseline, in blocks, until it is complete and decides what to trust."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from service.detection.bank import FIRST_LIMIT
from service.detection.baseline import (
    BOUNDS,
    law_verdict,
    own_bounds,
    rare_cells,
    repeat_bound,
    spent_alpha,
)
from service.detection.cells import CELLS, all_hits
from service.detection.policy import Policy
from service.digits.intervals import clopper_pearson_upper
from service.digits.significand import IntArray
from service.digits.views import WATCHED
from service.streams.ordinary import rounded_up
from service.streams.rows import Rows
from service.streams.rules import (
    DAY_MS,
    LIMIT_DETECTORS,
    Rules,
    below_limits,
    choose_references,
)
from service.streams.runs import opens_run, place_in_run
from service.streams.state import (
    HOUR_BLOCK,
    REFUTED_BY_CELL,
    REFUTED_BY_CIRCLE,
    REPEAT_CELL,
    RUN_BLOCK,
    TOO_FEW,
    WEEKDAY_BLOCK,
    Buckets,
    Folded,
    States,
    is_learning,
    restart,
)
from service.streams.window import counted

RUN_BLOCKS = 16
"""A baseline has at most so many blocks of consecutive rows; they pair up as it grows."""
FIRST_BLOCK_LEVEL = 6
HOUR_BLOCK_MS = 3 * 3600 * 1000
"""Blocks of the time of day (UTC), so that lunch and dinner are told apart at any volume."""


def until_complete(state: States, rules: Rules, part: Rows) -> tuple[Rows, IntArray]:
    """Cut each stream's rows after the first that completes something it learns.

    Returns the rows kept and the indices among them of the completing rows.
    """
    complete = _completes(
        part,
        rules,
        is_learning(state),
        state["base_rows"],
        state["base_first_at"],
        state["base_last_at"],
    ) | _completes(
        part,
        rules,
        learns_limits(state),
        state["limit_rows"],
        state["limit_first_at"],
        state["limit_last_at"],
    )
    if not complete.any():
        return part, np.empty(0, np.int64)
    first = np.searchsorted(part.slot, part.slot)
    done_before: IntArray = np.cumsum(complete) - complete
    kept = np.flatnonzero(done_before == done_before[first])
    return part.take(kept), np.flatnonzero(complete[kept])


def learns_limits(state: States) -> npt.NDArray[np.bool_]:
    """Return which streams have review limits whose bounds they still learn."""
    unknown = np.all(state["joint_bound"][..., LIMIT_DETECTORS] == 0, axis=-1)
    return np.asarray((state["limits"] > 0) & unknown)


def _completes(
    part: Rows,
    rules: Rules,
    learning: npt.NDArray[np.bool_],
    rows: IntArray,
    first_at: IntArray,
    last_at: IntArray,
) -> npt.NDArray[np.bool_]:
    """Return which rows, and all after them, have both the rows and the days that are needed."""
    slot = part.slot
    learns = learning[slot]
    if not learns.any():
        return np.zeros(len(slot), bool)
    place = place_in_run(slot)
    known = rows[slot] > 0
    low = np.where(known, np.minimum(part.at, first_at[slot]), part.at)
    high = np.where(known, np.maximum(part.at, last_at[slot]), part.at)
    # one scan for all streams: each is lifted above the one before
    lift = np.cumsum(place == 0) * (int(high.max()) - int(low.min()) + 1)
    oldest = np.minimum.accumulate(low - lift) + lift
    newest = np.maximum.accumulate(high + lift) - lift
    enough = rows[slot] + place + 1 >= rules.size[slot]
    return np.asarray(learns & enough & (newest - oldest >= rules.span[slot]))


def learn(
    folded: Folded,
    part: Rows,
    rows: IntArray,
    streams: IntArray,
    starts: IntArray,
    repeated: npt.NDArray[np.bool_] | None,
) -> None:
    """Add consumed rows to the baselines of the streams that are still learning.

    Parameters
    ----------
    rows : int64 array
        Rows of ``part`` that were consumed.
    streams, starts : int64 arrays
        Their streams, and where each begins among them.
    repeated : bool array or None
        Rows of ``part`` whose amount was there a moment before; None only if no stream learns.
    """
    state = folded.state
    learning = is_learning(state)
    if not learning[streams].any():
        return
    slot = part.slot[rows]
    which = learning[streams]
    pupils = streams[which]
    at = part.at[rows]
    low = np.minimum.reduceat(at, starts)[which]
    high = np.maximum.reduceat(at, starts)[which]
    _widen(state, "base", pupils, low, high)
    sums = np.add.reduceat(part.wave[:4][:, rows], starts, axis=1).T
    state["base_circle"][pupils] += sums[which]
    position = state["base_rows"][slot] + place_in_run(slot)
    grown = state["base_rows"] + np.bincount(slot, minlength=len(state)) * learning
    _pair_up(folded, pupils, grown)
    mine = learning[slot]
    chosen = rows[mine]
    cell = all_hits(part.cell[:, chosen])
    run = RUN_BLOCK + (position[mine] >> state["block_level"][slot[mine]].astype(np.int64))
    hour = HOUR_BLOCK + part.at[chosen] % DAY_MS // HOUR_BLOCK_MS
    weekday = WEEKDAY_BLOCK + part.at[chosen] // DAY_MS % 7
    again = np.zeros(len(chosen), bool) if repeated is None else repeated[chosen]
    every = np.concatenate([cell, np.where(again, REPEAT_CELL, -1)[None]])
    for block in (run, hour, weekday):
        folded.buckets = counted(folded.buckets, slot[mine], block, every)
    view, row = np.nonzero(cell >= 0)
    np.add.at(state["base"], (slot[mine][row], cell[view, row]), 1)
    state["base_rows"] = grown


def learn_limits(state: States, rules: Rules, part: Rows, rows: IntArray) -> None:
    """Count consumed rows just below review limits whose bounds are still learned."""
    mine = rows[learns_limits(state)[part.slot[rows]]]
    if not mine.size:
        return
    part = part.take(mine)
    starts = np.flatnonzero(opens_run(part.slot))
    pupils = part.slot[starts]
    low, high = np.minimum.reduceat(part.at, starts), np.maximum.reduceat(part.at, starts)
    _widen(state, "limit", pupils, low, high)
    state["limit_rows"] += np.bincount(part.slot, minlength=len(state))
    below = below_limits(rules, part).astype(np.int64)
    state["limit_base"][pupils] += np.add.reduceat(below, starts, axis=1).T


def _widen(state: States, what: str, slots: IntArray, low: IntArray, high: IntArray) -> None:
    """Widen the span of event times of a baseline, or of the limits'."""
    new = state[f"{what}_rows"][slots] == 0
    first, last = f"{what}_first_at", f"{what}_last_at"
    state[first][slots] = np.where(new, low, np.minimum(low, state[first][slots]))
    state[last][slots] = np.where(new, high, np.maximum(high, state[last][slots]))


def _pair_up(folded: Folded, pupils: IntArray, grown: IntArray) -> None:
    """Join neighbouring blocks of rows until a baseline has at most ``RUN_BLOCKS``."""
    state = folded.state
    level = np.maximum(state["block_level"][pupils].astype(np.int64), FIRST_BLOCK_LEVEL)
    needed = level.copy()
    while True:
        more = (grown[pupils] - 1) >> needed >= RUN_BLOCKS
        if not more.any():
            break
        needed += more
    state["block_level"][pupils] = needed
    shift = np.zeros(len(state), np.int64)
    shift[pupils] = needed - level
    if not shift.any():
        return
    buckets = folded.buckets
    bucket = buckets.bucket
    is_run = (bucket >= RUN_BLOCK) & (bucket < HOUR_BLOCK)
    moved = np.where(is_run, RUN_BLOCK + ((bucket - RUN_BLOCK) >> shift[buckets.slot]), bucket)
    folded.buckets = Buckets.empty().plus(buckets.slot, moved, buckets.cell, buckets.count)


def decide(folded: Folded, s: int, policy: Policy, rules: Rules, at: int) -> None:
    """Complete what a stream has learned: its baseline, the bounds of its review limits, or both.

    A limit's bound is as those of the cells, Clopper-Pearson at the same share of the error.
    """
    state = folded.state
    alpha = spent_alpha(policy.baseline_confidence, int(state["relearns"][s]))
    if learns_limits(state[s]) and _is_long(state[s], "limit", policy):
        upper = clopper_pearson_upper(
            state["limit_base"][s], np.array([state["limit_rows"][s]]), alpha / BOUNDS
        )
        named = rules.high[s] > 0  # places without a limit get the bound that finds nothing
        state["joint_bound"][s, LIMIT_DETECTORS] = rounded_up(np.where(named, upper, 1.0))
    if is_learning(state[s]) and _is_long(state[s], "base", policy):
        _decide_references(folded, s, policy, alpha)
        state["crossings"][s] = 0
        state["decided_row"][s] = state["rows"][s]
        restart(state, s, at)


def _is_long(state: States, what: str, policy: Policy) -> bool:
    span = int(state[f"{what}_last_at"]) - int(state[f"{what}_first_at"])
    return bool(
        state[f"{what}_rows"] >= policy.baseline_size and span >= policy.baseline_days * DAY_MS
    )


def _decide_references(folded: Folded, s: int, policy: Policy, alpha: float) -> None:
    """Accept the law for a view, or bound the merchant's own cells."""
    state = folded.state
    count = state["base"][s].astype(np.int64)
    rows = np.array([int(count[cells].sum()) for cells in WATCHED.values()])
    mine = folded.buckets.slot == s
    blocks = mine & (folded.buckets.bucket >= RUN_BLOCK)
    table, number = np.unique(folded.buckets.bucket[blocks], return_inverse=True)
    per_block = np.zeros((len(table), REPEAT_CELL + 1), np.int64)
    per_block[number, folded.buckets.cell[blocks]] = folded.buckets.count[blocks]
    repeats, per_block = per_block[:, REPEAT_CELL], per_block[:, :CELLS]
    seen = np.stack([per_block[:, cells].sum(axis=1) for cells in WATCHED.values()], axis=1)
    partition = np.searchsorted([HOUR_BLOCK, WEEKDAY_BLOCK], table, side="right")
    bounds = own_bounds(count, rows, per_block, seen, partition, alpha)
    runs = partition == 0
    rare, joint = rare_cells(per_block[runs], seen[runs], alpha)
    state["bound"][s] = rounded_up(bounds)
    state["rare"][s] = rare
    again = repeat_bound(repeats, seen[:, 0], partition, alpha)
    state["joint_bound"][s, :FIRST_LIMIT] = rounded_up(np.append(joint, again))
    state["repeat_share"][s] = repeats[runs].sum() / max(int(seen[runs, 0].sum()), 1)
    verdict = law_verdict(
        count,
        rows,
        state["base_circle"][s],
        int(state["base_rows"][s]),
        policy.tolerances(),
    )
    state["refuted"][s] |= (
        REFUTED_BY_CIRCLE * verdict.circle + REFUTED_BY_CELL * verdict.cell + TOO_FEW * verdict.few
    ).astype(np.uint8)
    folded.buckets = folded.buckets.where(~blocks)
    choose_references(state, np.array([s]), policy)
