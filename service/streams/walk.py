"""The fold's inner loop: a stream's rows one by one, every detector after every row.

It stops a stream at its next *event*, which plain Python then handles: the policy changes, the
evidence reaches its threshold, something that was being learned is complete. Nothing depends on
where a log was cut.

Whatever the loop needs from elsewhere it is handed as an argument (see `compiled`).
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np

from service.detection import bank
from service.detection.cells import CELLS, COARSE_OF_PAIR, VIEW_OF_CELL
from service.digits.compiled import compiled
from service.digits.significand import FloatArray, IntArray
from service.digits.views import LEAD_PAIR, LEAD_PAIR_FROM, TAIL_PAIR, TAIL_PAIR_FROM
from service.streams import pages, record
from service.streams.state import BY_LAW, BY_OWN, NO_VIEW, UNDECIDED

BUCKET_MS = 6 * 3600 * 1000
BUCKETS = 28
WINDOW_MS = BUCKETS * BUCKET_MS
"""The rolling window: 7 days of event time in 28 buckets."""

HOUR_BLOCK_MS = 3 * 3600 * 1000
"""Baseline blocks of the time of day (UTC), so that lunch and dinner are told apart."""
DAY_MS = 24 * 3600 * 1000
FIRST_BLOCK_LEVEL = 6

FEW_CROSSINGS = 16
"""Crossings of one alarm that are all told; after them it is looked at every ``PAUSE_ROWS``."""
PAUSE_ROWS = 128
"""Rows that an alarm which has crossed often rests between crossings: one that crosses every five
rows says nothing new each time, and would cost as much as a thousand other streams."""

CEILING = 1e100
"""Values are held at this ceiling, far above any alarm threshold, so that nothing overflows."""

NEW_POLICY, CROSSED, COMPLETE, NO_PAGE = 1, 2, 4, 8
"""Events, as bits: before a row the first and last, after it the others, also both."""

MOST_PAGES = 4
"""Pages that one row may need."""


class Tables(NamedTuple):
    """What the loop needs to know of detectors, views and places."""

    law: FloatArray
    view_of_cell: IntArray
    coarse: IntArray
    cell_weights: FloatArray
    view_weights: FloatArray
    epsilons: FloatArray
    per_epsilon: FloatArray  # their reciprocals
    shares: FloatArray
    powers: FloatArray  # (4096, 3) of the retained parts
    invented: FloatArray
    rho: FloatArray
    waves: FloatArray  # (90, 12)
    joint_epsilons: FloatArray
    joint_views: IntArray  # whose tolerance serves each joint detector
    numbers: tuple[tuple[int, int, int, int], ...]  # see `_NUMBERS`
    cusum: int  # the contamination of the CUSUMs


JOINT_VIEWS = (*bank.RARE_VIEWS, 1, *([1] * bank.LIMITS))
"""The view whose tolerance serves each joint detector; without a view, the lead pair's."""

_NUMBERS = (
    (LEAD_PAIR.start, LEAD_PAIR_FROM, TAIL_PAIR.start, TAIL_PAIR_FROM),
    (bank.REPEATS, bank.FIRST_LIMIT, bank.JOINT, bank.REACH),
    (pages.FIRST_RUN, pages.FIRST_HOUR, pages.FIRST_WEEKDAY, pages.REPEAT_CELL),
    (pages.WINDOW_PLACES, pages.RUN_BLOCKS, record.HISTORIC, NO_VIEW),
    (UNDECIDED, BY_LAW, BY_OWN, CELLS),
)

TABLES = Tables(
    law=bank.LAW,
    view_of_cell=VIEW_OF_CELL,
    coarse=COARSE_OF_PAIR,
    cell_weights=bank.CELL_WEIGHTS,
    view_weights=bank.VIEW_WEIGHTS.astype(np.float64),
    epsilons=bank.EPSILONS,
    per_epsilon=1 / bank.EPSILONS,
    shares=bank.EPSILON_SHARES,
    powers=bank.RETAINED ** np.arange(4096.0)[:, None],
    invented=bank.INVENTED,
    rho=bank.SHIFT_RHO,
    waves=np.ascontiguousarray(bank.SHIFT_WAVES.T),
    joint_epsilons=bank.JOINT_EPSILONS,
    joint_views=np.array(JOINT_VIEWS),
    numbers=_NUMBERS,
    cusum=bank.CUSUM_EPSILON,
)


@compiled
def _page(table: Any, free: Any, slot: int, place: int) -> int:
    """Return the page of a place; the caller has seen to it that one is free."""
    number = table[slot, place]
    if number == 0:
        number = free[free[0]]
        free[0] -= 1
        table[slot, place] = number
    return int(number)


@compiled
def _give_back(table: Any, count: Any, free: Any, slot: int, place: int) -> None:
    number = table[slot, place]
    if number != 0:
        count[number, :] = 0
        free[0] += 1
        free[free[0]] = number
        table[slot, place] = 0


@compiled
def _pair_up(
    state: Any, table: Any, count: Any, free: Any, slot: int, first: int, blocks: int
) -> None:
    """Join neighbouring blocks of rows, so that their number halves."""
    state.block_level += 1
    for to in range(blocks // 2):
        for half in range(2):
            place = first + 2 * to + half
            source = table[slot, place]
            if source == 0 or place == first + to:
                continue
            if table[slot, first + to] == 0:
                table[slot, first + to] = source
                table[slot, place] = 0
            else:
                into = table[slot, first + to]
                for c in range(count.shape[1]):
                    count[into, c] += count[source, c]
                _give_back(table, count, free, slot, place)


@compiled
def _bound(state: Any, rules: Any, tables: Tables, number: int, by_law: int, by_own: int) -> float:
    """Return the bound u of a cell, tolerance included."""
    view, cell = tables.view_of_cell[number], state.cell[number]
    u = tables.law[number]
    if state.reference[view] == by_own:
        u = np.float64(cell.bound)
    elif cell.excepted > 0 and state.reference[view] == by_law:
        u = np.float64(cell.excepted)
    return float(min(u * (1 + rules.tolerance[view]), 1.0))


@compiled
def _is_learning(state: Any, undecided: int) -> bool:
    return bool(
        state.reference[0] == undecided
        or state.reference[1] == undecided
        or state.reference[2] == undecided
    )


@compiled
def _learns_limits(state: Any, first: int, end: int) -> bool:
    if state.limits == 0:
        return False
    unknown = True
    for place in range(first, end):
        unknown = unknown and state.joint_bound[place] == 0
    return unknown


@compiled
def _evidence(state: Any, rules: Any) -> float:
    total = 0.0
    for view in range(3):
        part = 0.0
        for e in range(3):
            part += state.sums[view, e]
        total += part * rules.active[view]
    for j in range(rules.shapes.shape[0]):
        total += state.shape[j] * rules.shapes[j]
    for j in range(rules.joint.shape[0]):
        if rules.joint[j] > 0:
            total += (state.joint_value[j, 0] + state.joint_value[j, 1]) / 2 * rules.joint[j]
    return total


@compiled
def evidence_of(states: Any, rules: Any, slots: IntArray) -> FloatArray:
    """Return the weighted sum of all detectors in force, for each of some streams."""
    totals = np.empty(len(slots))
    for i in range(len(slots)):
        totals[i] = _evidence(states[slots[i]], rules[slots[i]])
    return totals


@compiled
def _tally(state: Any, row_at: int, arrived: int, amount: int) -> bool:
    """Count what no detector needs; return whether the row belongs to the rolling window."""
    state.records += 1
    if state.first_at == 0 or row_at < state.first_at:
        state.first_at = row_at
    state.last_at = max(state.last_at, row_at)
    state.last_arrived = max(state.last_arrived, arrived)
    if amount == 0:
        state.zero += 1
        return False
    if row_at < arrived - WINDOW_MS:
        state.late += 1
        return False
    return True


@compiled
def _cells(
    state: Any,
    rules: Any,
    tables: Tables,
    hits: IntArray,
    amount: int,
    row_at: int,
    number: int,
    by_law: int,
    by_own: int,
) -> None:
    """Detectors of the cells that a row hits; misses act in closed form at the next hit."""
    epsilons, per_epsilon, powers = tables.epsilons, tables.per_epsilon, tables.powers
    for view in range(3):
        if hits[view] < 0:
            continue
        state.clock[view] += 1
        for e in range(3):
            entering = tables.view_weights[view] * tables.shares[e]
            state.sums[view, e] = (1 - epsilons[e]) * (state.sums[view, e] + entering)
    for h in range(6):
        if hits[h] < 0:
            continue
        view, cell = tables.view_of_cell[hits[h]], state.cell[hits[h]]
        per_u = 1 / _bound(state, rules, tables, hits[h], by_law, by_own)
        misses = state.clock[view] - cell.hit - 1
        for e in range(3):
            keep, gain = 1 - epsilons[e], epsilons[e] * per_u
            kept = powers[misses, e] if misses < len(powers) else keep**misses
            factor = keep + gain
            before = kept * cell.value[e] + (1 - kept * keep) * per_epsilon[e]  # and 1 added
            cell.value[e] = min(factor * before, CEILING)
            added = tables.cell_weights[hits[h]] * tables.shares[e] * gain * before
            state.sums[view, e] = min(state.sums[view, e] + added, CEILING)
            if e == tables.cusum:  # from which onset and severity are read
                ratio = kept * cell.ratio
                if ratio <= 1:
                    ratio = 1.0
                    cell.run = 0
                    cell.spent = 0
                    cell.onset = number
                    cell.onset_clock = state.clock[view]
                    cell.onset_at = row_at
                cell.ratio = min(ratio * factor, CEILING)
        cell.run += 1
        cell.spent += amount
        cell.hit = state.clock[view]
        cell.count += 1


@compiled
def _shapes(
    state: Any,
    rules: Any,
    tables: Tables,
    pair: int,
    row_at: int,
    number: int,
    by_law: int,
    by_own: int,
) -> None:
    """Shape detectors, at a row that has a lead pair."""
    k = pair - tables.numbers[0][0]
    per_u = 1 / _bound(state, rules, tables, pair, by_law, by_own)
    share = tables.law[pair]
    if state.reference[1] == by_own:
        share = (state.cell[pair].base + 0.5) / (rules.pairs + 45.0)
    some = len(tables.invented)
    for j in range(state.shape.shape[0]):
        ratio = 1.0
        if rules.shape_least[j] > 0:
            if j < some:
                q = (1 - tables.invented[j]) * share + tables.invented[j] / 90
            else:
                q = share * (1 + tables.rho[j - some] * tables.waves[k, j - some])
            ratio = max(q * rules.shape_per_norm[j] * per_u, rules.shape_least[j])
            before = state.shape_ratio[j]
            after = max(before, 1.0) * ratio
            if after <= 1:
                after = 0.0
            elif before <= 1:
                state.shape_onset[j] = number
                state.shape_onset_at[j] = row_at
            state.shape_ratio[j] = min(after, CEILING)
        state.shape[j] = min(ratio * (state.shape[j] + 1), CEILING)


@compiled
def _is_member(
    state: Any, rules: Any, tables: Tables, place: int, hits: IntArray, amount: int, again: bool
) -> int:
    """Return 1 for a row in a joint detector's cells, 0 for one outside, -1 if it sees none."""
    repeats = tables.numbers[1][0]
    if place < repeats:
        cell = hits[place + 1]  # lead pair, tail pair
        return -1 if cell < 0 else int(state.cell[cell].rare > 0)
    if place == repeats:
        return int(again)
    k = place - repeats - 1
    return int(rules.low[k] <= amount and amount < rules.high[k])


@compiled
def _joint(
    state: Any,
    rules: Any,
    tables: Tables,
    hits: IntArray,
    amount: int,
    again: bool,
    row_at: int,
    number: int,
) -> None:
    """Joint detectors in force: ``L = (1 - eps) + eps 1{member} / u`` with a joint bound u."""
    retained = 1 - tables.epsilons[tables.cusum]
    for j in range(rules.joint.shape[0]):
        if rules.joint[j] <= 0:
            continue
        member = _is_member(state, rules, tables, j, hits, amount, again)
        if member < 0:
            continue
        tolerance = rules.tolerance[tables.joint_views[j]]
        u = min(np.float64(state.joint_bound[j]) * (1 + tolerance), 1.0)
        for e in range(2):
            eps = tables.joint_epsilons[e]
            ratio = (1 - eps) + eps * member / u
            state.joint_value[j, e] = min(ratio * (state.joint_value[j, e] + 1), CEILING)
        before = state.joint_ratio[j]
        after = max(before, 1.0) * (retained + (1 - retained) * member / u)
        if after <= 1:
            after = 0.0
            state.joint_seen[j] = 0
            state.joint_hits[j] = 0
            state.joint_spent[j] = 0
        else:
            if before <= 1:
                state.joint_onset[j] = number
                state.joint_onset_at[j] = row_at
            state.joint_seen[j] += 1
            state.joint_hits[j] += member
            state.joint_spent[j] += member * amount
        state.joint_ratio[j] = min(after, CEILING)


@compiled
def _follow(state: Any, hits: IntArray, amount: int, row_at: int, no_view: int) -> None:
    """Count what goes on in the cells of an open alarm."""
    times = int(state.alarm_low <= amount and amount < state.alarm_high)
    for h in range(6):
        if hits[h] >= 0 and state.cell[hits[h]].alarmed > 0:
            times += 1
    if times > 0:
        state.alarm_hits += times
        state.alarm_spent += times * amount
        state.alarm_hit_at = row_at
    if state.alarm_view == no_view or hits[state.alarm_view] >= 0:
        state.alarm_seen += 1


@compiled
def _learn(
    state: Any,
    tables: Tables,
    table: Any,
    count: Any,
    free: Any,
    slot: int,
    hits: IntArray,
    wave: FloatArray,
    row_at: int,
    again: bool,
) -> None:
    """Add a row to a baseline: its counts, and those of its blocks."""
    first_run, first_hour, first_weekday, repeat = tables.numbers[2]
    blocks = tables.numbers[3][1]
    if state.base_rows == 0:
        state.base_first_at = row_at
        state.base_last_at = row_at
    state.base_first_at = min(state.base_first_at, row_at)
    state.base_last_at = max(state.base_last_at, row_at)
    for i in range(4):
        state.base_circle[i] += wave[i]
    state.block_level = max(state.block_level, FIRST_BLOCK_LEVEL)
    while state.base_rows >> state.block_level >= blocks:
        _pair_up(state, table, count, free, slot, first_run, blocks)
    for kind in range(3):
        if kind == 0:
            place = first_run + (state.base_rows >> state.block_level)
        elif kind == 1:
            place = first_hour + row_at % DAY_MS // HOUR_BLOCK_MS
        else:
            place = first_weekday + row_at // DAY_MS % 7
        page = _page(table, free, slot, place)
        for h in range(6):
            if hits[h] >= 0:
                count[page, hits[h]] += 1
        if again:
            count[page, repeat] += 1
    for h in range(6):
        if hits[h] >= 0:
            state.cell[hits[h]].base += 1
    state.base_rows += 1


@compiled
def _learn_limits(state: Any, rules: Any, amount: int, row_at: int) -> None:
    """Count a row just below review limits whose bounds are still learned."""
    if state.limit_rows == 0:
        state.limit_first_at = row_at
        state.limit_last_at = row_at
    state.limit_first_at = min(state.limit_first_at, row_at)
    state.limit_last_at = max(state.limit_last_at, row_at)
    state.limit_rows += 1
    for k in range(rules.low.shape[0]):
        if rules.low[k] <= amount and amount < rules.high[k]:
            state.limit_base[k] += 1


@compiled
def _rests(state: Any, rules: Any, number: int, historic: bool) -> bool:
    """Return whether a row may not cross.

    A stream rests after a crossing if it raises no alarms, or if its open alarm has crossed often.
    An alarm of history does not rest from the first live row that would bring it to the feed.
    """
    if state.crossed_row <= 0 or number - state.crossed_row >= PAUSE_ROWS:
        return False
    told = historic or state.alarm_live > 0
    return bool((state.alarm_crossings >= FEW_CROSSINGS and told) or rules.watching == 0)


@compiled
def _is_long(rows: int, first_at: int, last_at: int, rules: Any) -> bool:
    return bool(rows >= rules.size and last_at - first_at >= rules.span)


@compiled
def walk(
    all_states: Any,
    all_rules: Any,
    table: Any,
    count: Any,
    free: Any,
    records: Any,
    slots: IntArray,
    begin: IntArray,
    end: IntArray,
    events: IntArray,
    totals: FloatArray,
    tables: Tables,
) -> int:
    """Fold each stream's records up to its next event; return how many streams had one.

    Parameters
    ----------
    all_states, all_rules : structured arrays (slots of a worker,)
    table, count, free : arrays of `Pages`
    records : array of ``RECORD``
    slots : int64 array (k,)
    begin, end : int64 arrays (k,)
        Records of each stream; ``begin`` is moved to the first one that is left.
    events : int64 array (k,)
        What stopped each stream, 0 for nothing. After ``CROSSED`` and ``COMPLETE`` the record
        before ``begin`` is the one.
    totals : float64 array (k,)
        Evidence after the last record folded.
    tables : Tables
    """
    first_pair, pair_from, first_tail, tail_from = tables.numbers[0]
    repeats, first_limit, joints, reach = tables.numbers[1]
    places, _, historic_flag, no_view = tables.numbers[3]
    undecided, by_law, by_own, _ = tables.numbers[4]
    hits = np.empty(6, np.int64)
    wave = np.empty(6)
    stopped = 0
    for i in range(len(slots)):
        slot = slots[i]
        state, rules = all_states[slot], all_rules[slot]
        learning = _is_learning(state, undecided)
        limits = _learns_limits(state, first_limit, joints)
        uses_repeats = learning or rules.joint[repeats] > 0
        events[i] = 0
        at = begin[i]
        while at < end[i]:
            row = records[at]
            amount: Any = np.int64(row.amount)
            row_at: Any = np.int64(row.at_s) * 1000 + np.int64(row.at_ms)
            arrived: Any = np.int64(row.arrived_s) * 1000 + np.int64(row.arrived_ms)
            if amount > 0 and row.policy != state.policy:
                events[i] = NEW_POLICY
                break
            if free[0] < MOST_PAGES:
                events[i] = NO_PAGE
                break
            at += 1
            timely = _tally(state, row_at, arrived, amount)
            if amount == 0:
                continue
            number = state.rows + 1

            # digits
            scale, tenth = 1, 1
            while 10 * scale <= amount:
                tenth = scale
                scale *= 10
            pair = amount // tenth
            hits[0] = pair - 1 if scale == 1 else pair // 10 - 1
            hits[1] = pair - 10 + first_pair if amount >= pair_from else -1
            hits[2] = first_tail + amount % 100 if amount >= tail_from else -1
            for c in range(3):
                hits[3 + c] = tables.coarse[c, hits[1] - first_pair] if hits[1] >= 0 else -1

            if timely:
                bucket = row_at // BUCKET_MS
                place = bucket % places
                if state.window[place] < bucket:
                    _give_back(table, count, free, slot, place)
                    state.window[place] = bucket
                if state.window[place] == bucket:
                    page = _page(table, free, slot, place)
                    for v in range(3):
                        if hits[v] >= 0:
                            count[page, hits[v]] += 1

            turn = 2 * math.pi * math.log10(amount / scale)
            wave[0] = math.cos(turn)
            wave[1] = math.sin(turn)
            wave[2] = 2 * wave[0] * wave[0] - 1
            wave[3] = 2 * wave[0] * wave[1]
            wave[4] = math.log10(float(amount))
            wave[5] = wave[4] * wave[4]
            for w in range(6):
                state.circle[w] += wave[w]

            again = False
            if uses_repeats:
                for r in range(reach):
                    if state.recent[r] == amount:
                        again = True
                        break
                state.recent[state.recent_rows % reach] = amount
                state.recent_rows += 1

            _cells(state, rules, tables, hits, amount, row_at, number, by_law, by_own)
            if hits[1] >= 0:
                _shapes(state, rules, tables, hits[1], row_at, number, by_law, by_own)
            _joint(state, rules, tables, hits, amount, again, row_at, number)
            if not learning and hits[1] >= 0:
                if state.neighbour > 0:
                    state.neighbours += 1
                if state.neighbour == hits[1]:
                    state.repeats += 1
                state.neighbour = hits[1]
            if state.alarm_crossings > 0:
                _follow(state, hits, amount, row_at, no_view)
            if learning:
                _learn(state, tables, table, count, free, slot, hits, wave, row_at, again)
            if limits:
                _learn_limits(state, rules, amount, row_at)
            state.rows = number

            total = _evidence(state, rules)
            historic = (row.flags & historic_flag) > 0
            if total >= rules.threshold and not _rests(state, rules, number, historic):
                events[i] |= CROSSED
            if (
                learning
                and _is_long(state.base_rows, state.base_first_at, state.base_last_at, rules)
            ) or (
                limits
                and _is_long(state.limit_rows, state.limit_first_at, state.limit_last_at, rules)
            ):
                events[i] |= COMPLETE
            if events[i] != 0:
                break
        begin[i] = at
        totals[i] = _evidence(state, rules)
        stopped += events[i] != 0
    return stopped
