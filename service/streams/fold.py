"""fold(state, log) -> state, crossings: the only way a stream's state comes about.

All streams are folded together, in passes. A pass takes from every stream the rows up to its next
*event* (the policy changes, the baseline completes, the evidence crosses its threshold), evaluates
every detector after every row, applies what was taken, handles the events, and goes on.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import cache

import numpy as np
import numpy.typing as npt

from service.detection import bank
from service.detection.baseline import law_verdict, own_bounds, own_shares, spent_alpha
from service.detection.paths import affine_path, cusum_path
from service.detection.policy import Policy
from service.digits.significand import FloatArray, IntArray, circle
from service.digits.views import (
    CELLS,
    LEAD_PAIR,
    VIEW_OF_CELL,
    WATCHED,
    WATCHED_VIEWS,
    cells_hit,
)
from service.streams import record
from service.streams.findings import Finding, findings
from service.streams.record import Records
from service.streams.state import (
    BY_LAW,
    BY_OWN,
    HOUR_BLOCK,
    REFUTED_BY_BANK,
    REFUTED_BY_CELL,
    REFUTED_BY_CIRCLE,
    RUN_BLOCK,
    UNDECIDED,
    Buckets,
    Folded,
    States,
)

BUCKET_MS = 6 * 3600 * 1000
BUCKETS = 28
WINDOW_MS = BUCKETS * BUCKET_MS
"""The rolling window: 7 days of event time in 28 buckets."""

PASS_ROWS = 256
"""Most rows of one stream in one pass, so that a crossing costs little work done twice."""

RUN_BLOCKS = 32
"""A baseline has at most so many blocks of consecutive rows; they pair up as it grows."""
FIRST_BLOCK_LEVEL = 5
HOUR_BLOCK_MS = 3 * 3600 * 1000

_DAY_MS = 86_400_000
_EPS = bank.EPSILONS[:, None]
_KEEP = bank.RETAINED[:, None]
_SHARE = bank.EPSILON_SHARES[:, None]


@dataclass(frozen=True)
class Crossing:
    """The evidence of a stream reached its threshold.

    Attributes
    ----------
    slot : int
    alarm : bytes
        Id of the alarm that this crossing raised or that absorbed it.
    ordinal : int
        0 for the crossing that raised the alarm, then 1, 2, ... .
    record : int
        Row number of the record in the log.
    rows : int
        The stream's rows with an amount, this one included.
    arrived, at : int
        Times of the row, ms since 1970 UTC.
    historic : bool
    evidence : float
        log10 of the weighted sum of the detectors.
    threshold : float
        Transactions per false alarm.
    severity : float
        Log-likelihood gathered since onset, over all crossings of the alarm.
    findings : list of Finding
        Strongest first.
    """

    slot: int
    alarm: bytes
    ordinal: int
    record: int
    rows: int
    arrived: int
    at: int
    historic: bool
    evidence: float
    threshold: float
    severity: float
    findings: list[Finding] = field(default_factory=list)


@dataclass
class _Rules:
    """Per stream, what the policy in force means for the detectors; refreshed between passes."""

    tolerance: FloatArray  # (n, 3), by view
    threshold: FloatArray  # (n,)
    watching: npt.NDArray[np.bool_]  # (n,) flows that may raise alarms
    active: FloatArray  # (n, 3), 1 for a view that counts
    shapes: FloatArray  # (n, 14), weights of the shape detectors
    size: IntArray  # (n,) rows and span of a complete baseline
    span: IntArray

    @classmethod
    def empty(cls, n: int) -> _Rules:
        return cls(
            np.zeros((n, 3)),
            np.full(n, np.inf),
            np.zeros(n, bool),
            np.zeros((n, 3)),
            np.zeros((n, bank.SHAPES)),
            np.zeros(n, np.int64),
            np.zeros(n, np.int64),
        )


@dataclass
class _Rows:
    """The rows of a log tail as columns, sorted by slot and, within it, in log order."""

    slot: IntArray
    number: IntArray  # row number of the record
    policy: IntArray
    amount: IntArray
    at: IntArray
    arrived: IntArray
    historic: npt.NDArray[np.bool_]
    cell: IntArray  # (3, n) by view, -1 where not seen
    wave: FloatArray  # (6, n) circle sums, see STATE
    raw: Records

    def take(self, rows: IntArray) -> _Rows:
        return _Rows(
            self.slot[rows],
            self.number[rows],
            self.policy[rows],
            self.amount[rows],
            self.at[rows],
            self.arrived[rows],
            self.historic[rows],
            self.cell[:, rows],
            self.wave[:, rows],
            self.raw[rows],
        )


@dataclass
class _Path:
    """Every detector after every row of a pass."""

    total: FloatArray  # (n,) weighted sum of what counts
    sums: FloatArray  # (9, n)
    shape: FloatArray  # (14, n)
    shape_cusum: FloatArray  # (14, n)
    shape_rest: IntArray  # (14, n) index of the last row at which the CUSUM was zero, or -1
    hit_row: IntArray  # (h,) index of the row of each hit, hits sorted by (slot, cell, row)
    hit_key: IntArray  # (h,) slot * 199 + cell
    value: FloatArray  # (3, h) right after the hit
    clock: IntArray  # (h,) the view's clock at the hit
    cusum: FloatArray  # (h,)
    run_start: IntArray  # (h,) index of the hit that began the run
    run_carried: npt.NDArray[np.bool_]  # (h,) the run began before this pass


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
    rows = _columns(state, records, slot)
    _tally_all(folded, rows)
    rows = rows.take(np.flatnonzero(rows.amount > 0))
    rules = _Rules.empty(len(state))
    fresh = np.unique(rows.slot)
    _adopt(state, fresh, state["policy"][fresh], rules, policies, flows)
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
            _adopt(state, left[changed], first_policy[changed], rules, policies, flows)
        taken = _take(rows, left, start, end)
        part = rows.take(taken)
        part, complete = _until_complete(state, rules, part)
        path = _evaluate(state, rules, part)
        crossed, consumed = _until_crossed(rules, part, path)
        _apply(folded, rules, part, path, consumed)
        start += np.bincount(part.slot[consumed], minlength=len(state))
        for i in crossed.tolist():
            crossing = _cross(state, rules, part, path, i, names)
            if crossing is not None:
                crossings.append(crossing)
        done = complete[np.isin(complete, np.flatnonzero(consumed))]
        for i in done.tolist():
            s = int(part.slot[i])
            version = int(state["policy"][s])
            _decide(folded, s, policies[version], int(part.at[i]))
            _refresh(state, np.array([s]), rules, policies[version], flows)
    crossings.sort(key=lambda c: (c.slot, c.record))
    return crossings


def _columns(state: States, records: Records, slot: IntArray) -> _Rows:
    """Read the records into columns; row numbers go on from what was folded before."""
    first = np.searchsorted(slot, slot)
    amount = records["amount"].astype(np.int64)
    turn = 2 * np.pi * circle(np.maximum(amount, 1))
    log = np.log10(np.maximum(amount, 1).astype(np.float64))
    return _Rows(
        slot=slot,
        number=state["records"][slot] + np.arange(len(slot)) - first,
        policy=records["policy"].astype(np.int64),
        amount=amount,
        at=record.at(records),
        arrived=record.arrived(records),
        historic=(records["flags"] & record.HISTORIC) > 0,
        cell=np.stack(cells_hit(amount)),
        wave=np.stack(
            [np.cos(turn), np.sin(turn), np.cos(2 * turn), np.sin(2 * turn), log, log * log]
        ),
        raw=records,
    )


def _tally_all(folded: Folded, rows: _Rows) -> None:
    """Count what no detector needs: records, zero, late, times and the window's buckets."""
    state = folded.state
    n = len(state)
    touched = np.unique(rows.slot)
    state["records"] += np.bincount(rows.slot, minlength=n)
    seen = rows.amount > 0
    state["zero"] += np.bincount(rows.slot[~seen], minlength=n)
    late = seen & (rows.at < rows.arrived - WINDOW_MS)
    state["late"] += np.bincount(rows.slot[late], minlength=n)
    starts = np.searchsorted(rows.slot, touched)
    new = state["first_at"][touched] == 0
    low = np.minimum.reduceat(rows.at, starts)
    high = np.maximum.reduceat(rows.at, starts)
    state["first_at"][touched] = np.where(new, low, np.minimum(low, state["first_at"][touched]))
    state["last_at"][touched] = np.maximum(high, state["last_at"][touched])
    state["last_arrived"][touched] = np.maximum(
        np.maximum.reduceat(rows.arrived, starts), state["last_arrived"][touched]
    )
    counted = np.flatnonzero(seen & ~late)
    folded.buckets = _counted(
        folded.buckets, rows.slot[counted], rows.at[counted] // BUCKET_MS, rows.cell[:, counted]
    )
    bucket = folded.buckets.bucket
    newest = state["last_arrived"][folded.buckets.slot] // BUCKET_MS
    folded.buckets = folded.buckets.where((bucket >= RUN_BLOCK) | (bucket >= newest - BUCKETS))


def _counted(buckets: Buckets, slot: IntArray, bucket: IntArray, cell: IntArray) -> Buckets:
    """Add rows to buckets: one count per cell hit."""
    view, row = np.nonzero(cell >= 0)
    ones = np.ones(len(row), np.int64)
    return buckets.plus(slot[row], bucket[row], cell[view, row], ones)


def _adopt(
    state: States,
    slots: IntArray,
    versions: IntArray,
    rules: _Rules,
    policies: Mapping[int, Policy],
    flows: Sequence[str],
) -> None:
    """Put policy versions into force for some streams (version 0: none yet)."""
    for version in np.unique(versions[versions > 0]).tolist():
        mine = slots[versions == version]
        changed = mine[np.not_equal(state["policy"][mine], version)]
        if changed.size:
            state["policy"][changed] = version
            _choose_references(state, changed, policies[version])
        _refresh(state, mine, rules, policies[version], flows)


def _choose_references(state: States, slots: IntArray, policy: Policy) -> None:
    """Set what the views are compared with, and the shape detectors that follow from it."""
    learned = np.any(state["bound"][slots], axis=1)[:, None]
    own = (policy.reference == "own") | (state["refuted"][slots] > 0)
    state["reference"][slots] = (
        BY_LAW
        if policy.reference == "law"
        else np.where(learned, np.where(own, BY_OWN, BY_LAW), UNDECIDED)
    )
    tolerance = policy.tolerances()[1]
    state["shape_scale"][slots], state["shape_norm"][slots] = _law_shapes(tolerance)
    for s in slots[state["reference"][slots, 1] == BY_OWN].tolist():
        shares = own_shares(state["base"][s])[LEAD_PAIR]
        bounds = state["bound"][s, LEAD_PAIR].astype(np.float64)
        state["shape_scale"][s], state["shape_norm"][s] = _shapes(shares, bounds, tolerance)


def _shapes(
    shares: FloatArray, bounds: FloatArray, tolerance: float
) -> tuple[FloatArray, FloatArray]:
    """Return scale and norm of the shape detectors; an infinite scale drops a detector."""
    bounds = np.minimum(bounds * (1 + tolerance), 1)
    q, norm = bank.alternatives(shares)
    inside = np.all(q <= bounds, axis=-1)
    return np.where(inside, np.inf, bank.projection(q, bounds)), norm


@cache
def _law_shapes(tolerance: float) -> tuple[FloatArray, FloatArray]:
    return _shapes(bank.LAW[LEAD_PAIR], bank.LAW[LEAD_PAIR], tolerance)


def _refresh(
    state: States, slots: IntArray, rules: _Rules, policy: Policy, flows: Sequence[str]
) -> None:
    """Recompute the rules of streams under one policy."""
    learning = np.any(state["reference"][slots] == UNDECIDED, axis=1)
    silenced = learning[:, None] & ((state["refuted"][slots] & REFUTED_BY_BANK) > 0)
    named = np.array([view in policy.views for view in WATCHED_VIEWS])
    rules.tolerance[slots] = policy.tolerances()
    rules.threshold[slots] = policy.transactions_per_false_alarm
    rules.watching[slots] = [policy.watches(flows[s]) for s in slots.tolist()]
    rules.active[slots] = named & ~silenced
    rules.shapes[slots] = np.where(
        np.isfinite(state["shape_scale"][slots]) & (named & ~silenced)[:, 1:2],
        bank.SHAPE_WEIGHTS,
        0,
    )
    rules.size[slots] = policy.baseline_size
    rules.span[slots] = int(policy.baseline_days * _DAY_MS)


def _take(rows: _Rows, left: IntArray, start: IntArray, end: IntArray) -> IntArray:
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


def _until_complete(state: States, rules: _Rules, part: _Rows) -> tuple[_Rows, IntArray]:
    """Cut each learning stream's rows after the one that completes its baseline.

    Returns the rows kept and the indices among them of the completing rows.
    """
    learning = np.any(state["reference"] == UNDECIDED, axis=1)[part.slot]
    if not learning.any():
        return part, np.empty(0, np.int64)
    first = np.searchsorted(part.slot, part.slot)
    index = np.arange(len(part.slot))
    rank = index - first + 1
    wide = np.int64(1) << 44  # above any time in ms, so that streams do not mix in the scan
    known = state["base_rows"][part.slot] > 0
    low = np.where(known, np.minimum(part.at, state["base_first_at"][part.slot]), part.at)
    high = np.where(known, np.maximum(part.at, state["base_last_at"][part.slot]), part.at)
    oldest = np.minimum.accumulate(low - part.slot * wide) + part.slot * wide
    newest = np.maximum.accumulate(high + part.slot * wide) - part.slot * wide
    complete = (
        learning
        & (state["base_rows"][part.slot] + rank >= rules.size[part.slot])
        & (newest - oldest >= rules.span[part.slot])
    )
    if not complete.any():
        return part, np.empty(0, np.int64)
    done_before = np.cumsum(complete) - complete
    kept = np.flatnonzero(done_before == done_before[first])
    return part.take(kept), np.flatnonzero(complete[kept])


def _bounds(state: States, rules: _Rules, slot: IntArray, cell: IntArray) -> FloatArray:
    """Return the bound u of (stream, cell) pairs, tolerance included."""
    view = VIEW_OF_CELL[cell]
    own = state["reference"][slot, view] == BY_OWN
    reference = np.where(own, state["bound"][slot, cell], bank.LAW[cell])
    return np.minimum(reference * (1 + rules.tolerance[slot, view]), 1.0)


def _evaluate(state: States, rules: _Rules, part: _Rows) -> _Path:
    """Compute all detectors after every row of a pass."""
    n = len(part.slot)
    slot = part.slot
    first_row = np.concatenate([[True], slot[1:] != slot[:-1]])
    begin = np.maximum.accumulate(np.where(first_row, np.arange(n), 0))
    longest = int((np.arange(n) - begin).max()) + 1
    seen = part.cell >= 0
    clock: IntArray = np.cumsum(seen, axis=1)
    clock += state["clock"][slot].T - (clock - seen)[:, begin]

    # cells: one map per hit, hits sorted by (stream, cell), rows in order
    view, row = np.nonzero(seen)
    cell = part.cell[view, row]
    key = slot[row] * CELLS + cell
    order = np.argsort(key, kind="stable")
    view, row, cell, key = view[order], row[order], cell[order], key[order]
    hits = np.arange(len(key))
    first_hit = np.concatenate([[True], key[1:] != key[:-1]]) if len(key) else np.empty(0, bool)
    group = np.maximum.accumulate(np.where(first_hit, hits, 0))
    at_hit = clock[view, row]
    stored = slot[row], cell
    previous = np.where(first_hit, state["hit"][stored], np.roll(at_hit, 1))
    misses = (at_hit - previous - 1).astype(np.float64)
    u = _bounds(state, rules, *stored)
    gain = _KEEP + _EPS / u
    kept = _KEEP**misses
    a = kept * gain
    b = gain * (1 - kept * _KEEP) / _EPS
    b[:, first_hit] += (a * state["value"][stored].T)[:, first_hit]
    a[:, first_hit] = 0
    longest_hit = int((hits - group).max()) + 1 if len(key) else 0
    value = affine_path(a, b, longest_hit)

    # onset and severity: the cell's CUSUM, touched only at hits
    up = np.log(bank.CUSUM_RETAINED + bank.CUSUM_GAIN / u)
    decay = misses * np.log(bank.CUSUM_RETAINED)
    step = decay + up
    level = up.copy()
    level[first_hit] = np.maximum(state["cusum"][stored] + step, up)[first_hit]
    step[first_hit] = -np.inf
    cusum = cusum_path(step, level, longest_hit)
    before = np.where(first_hit, state["cusum"][stored], np.roll(cusum, 1))
    begins = before + decay <= 0
    run_start = np.maximum.accumulate(np.where(begins | first_hit, hits, 0))

    # sums of a view's cells, and shapes: one map per row
    channels = np.ones((9 + bank.SHAPES, n))
    offsets = np.zeros((9 + bank.SHAPES, n))
    r9 = np.tile(bank.RETAINED, 3)[:, None]
    entering = (bank.VIEW_WEIGHTS[:, None] * bank.EPSILON_SHARES).reshape(9, 1) * r9
    seen9 = np.repeat(seen, 3, axis=0)
    channels[:9] = np.where(seen9, r9, 1)
    offsets[:9] = np.where(seen9, entering, 0)
    bonus = bank.CELL_WEIGHTS[cell] * _SHARE * (value / gain) * (_EPS / u)
    for e in range(3):
        offsets[view * 3 + e, row] += bonus[e]
    ratio = _shape_ratios(state, rules, part)
    channels[9:] = ratio
    offsets[9:] = np.where(seen[1], ratio, 0)
    log_ratio = np.log(ratio)
    at_start = np.concatenate([state["sums"].reshape(-1, 9).T, state["shape"].T])[
        :, slot[first_row]
    ]
    offsets[:, first_row] += channels[:, first_row] * at_start
    channels[:, first_row] = 0
    values = affine_path(channels, offsets, longest)
    sums, shape = values[:9], values[9:]
    total = (sums.reshape(3, 3, n).sum(axis=1) * rules.active[slot].T).sum(axis=0) + (
        shape * rules.shapes[slot].T
    ).sum(axis=0)

    floor = np.zeros_like(log_ratio)
    floor[:, first_row] = np.maximum(
        state["shape_cusum"].T[:, slot[first_row]] + log_ratio[:, first_row], 0
    )
    step = log_ratio
    step[:, first_row] = -np.inf
    shape_cusum = cusum_path(step, floor, longest)
    resting = np.where(shape_cusum <= 0, np.arange(n), -1)
    shape_rest = np.maximum.accumulate(resting, axis=1)
    shape_rest = np.where(shape_rest >= begin, shape_rest, -1)

    return _Path(
        total=total,
        sums=sums,
        shape=shape,
        shape_cusum=shape_cusum,
        shape_rest=shape_rest,
        hit_row=row,
        hit_key=key,
        value=value,
        clock=at_hit,
        cusum=cusum,
        run_start=run_start,
        run_carried=~begins[run_start] if len(key) else np.empty(0, bool),
    )


def _shape_ratios(state: States, rules: _Rules, part: _Rows) -> FloatArray:
    """Return q/p* of every shape detector at every row, 1 where a row or detector is out."""
    cell = part.cell[1]
    seen = cell >= 0
    pair = np.where(seen, cell - LEAD_PAIR.start, 0)
    slot = part.slot
    where = np.where(seen, cell, LEAD_PAIR.start)
    own = state["reference"][slot, 1] == BY_OWN
    share = bank.LAW[where]
    if own.any():
        base = state["base"][:, LEAD_PAIR]
        share = np.where(own, (base[slot, pair] + 0.5) / (base.sum(axis=1)[slot] + 45.0), share)
    u = _bounds(state, rules, slot, where)
    invented = (1 - bank.INVENTED[:, None]) * share + bank.INVENTED[:, None] / 90
    waves = share * (1 + bank.SHIFT_RHO[:, None] * bank.SHIFT_WAVES[:, pair])
    q = np.concatenate([invented, waves]) / state["shape_norm"][slot].T
    ratio = q / np.minimum(u, state["shape_scale"][slot].T * q)
    return np.where(seen & np.isfinite(state["shape_scale"][slot].T), ratio, 1.0)


def _until_crossed(
    rules: _Rules, part: _Rows, path: _Path
) -> tuple[IntArray, npt.NDArray[np.bool_]]:
    """Return the first crossing row of each stream, and which rows come no later than it."""
    first = np.searchsorted(part.slot, part.slot)
    over = (path.total >= rules.threshold[part.slot]) & rules.watching[part.slot]
    if not over.any():
        return np.empty(0, np.int64), np.ones(len(part.slot), bool)
    over_before: IntArray = np.cumsum(over) - over
    consumed: npt.NDArray[np.bool_] = over_before == over_before[first]
    return np.flatnonzero(over & consumed), consumed


def _apply(
    folded: Folded,
    rules: _Rules,
    part: _Rows,
    path: _Path,
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
    _learn(folded, part, rows, streams, starts)
    state["rows"] += per_stream
    state["clock"] += clock


def _learn(
    folded: Folded, part: _Rows, rows: IntArray, streams: IntArray, starts: IntArray
) -> None:
    """Add consumed rows to the baselines of the streams that are still learning."""
    state = folded.state
    learning = np.any(state["reference"] == UNDECIDED, axis=1)
    if not learning[streams].any():
        return
    slot = part.slot[rows]
    which = learning[streams]
    pupils = streams[which]
    at = part.at[rows]
    low = np.minimum.reduceat(at, starts)[which]
    high = np.maximum.reduceat(at, starts)[which]
    new = state["base_rows"][pupils] == 0
    state["base_first_at"][pupils] = np.where(
        new, low, np.minimum(low, state["base_first_at"][pupils])
    )
    state["base_last_at"][pupils] = np.where(
        new, high, np.maximum(high, state["base_last_at"][pupils])
    )
    sums = np.add.reduceat(part.wave[:4][:, rows], starts, axis=1).T
    state["base_circle"][pupils] += sums[which]
    rank = np.arange(len(slot)) - np.searchsorted(slot, slot)
    position = state["base_rows"][slot] + rank
    grown = state["base_rows"] + np.bincount(slot, minlength=len(state)) * learning
    _pair_up(folded, pupils, grown)
    mine = learning[slot]
    chosen = rows[mine]
    cell = part.cell[:, chosen]
    run = RUN_BLOCK + (position[mine] >> state["block_level"][slot[mine]].astype(np.int64))
    hour = HOUR_BLOCK + part.at[chosen] % _DAY_MS // HOUR_BLOCK_MS
    folded.buckets = _counted(folded.buckets, slot[mine], run, cell)
    folded.buckets = _counted(folded.buckets, slot[mine], hour, cell)
    view, row = np.nonzero(cell >= 0)
    np.add.at(state["base"], (slot[mine][row], cell[view, row]), 1)
    state["base_rows"] = grown


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


def _decide(folded: Folded, s: int, policy: Policy, at: int) -> None:
    """Complete a baseline: accept the law for a view, or bound the merchant's own cells."""
    state = folded.state
    alpha = spent_alpha(policy.baseline_confidence, int(state["relearns"][s]))
    count = state["base"][s].astype(np.int64)
    rows = np.array([int(count[cells].sum()) for cells in WATCHED.values()])
    mine = folded.buckets.slot == s
    blocks = mine & (folded.buckets.bucket >= RUN_BLOCK)
    table, number = np.unique(folded.buckets.bucket[blocks], return_inverse=True)
    per_block = np.zeros((len(table), CELLS), np.int64)
    per_block[number, folded.buckets.cell[blocks]] = folded.buckets.count[blocks]
    seen = np.stack([per_block[:, cells].sum(axis=1) for cells in WATCHED.values()], axis=1)
    bounds = own_bounds(count, rows, per_block, seen, alpha)
    rounded = bounds.astype(np.float32)
    state["bound"][s] = np.where(rounded < bounds, np.nextafter(rounded, np.float32(2)), rounded)
    verdict = law_verdict(
        count,
        rows,
        state["base_circle"][s],
        int(state["base_rows"][s]),
        policy.tolerances(),
        alpha,
    )
    state["refuted"][s] |= (
        REFUTED_BY_CIRCLE * verdict.circle + REFUTED_BY_CELL * verdict.cell
    ).astype(np.uint8)
    folded.buckets = folded.buckets.where(~blocks)
    _choose_references(state, np.array([s]), policy)
    _restart(state, s, at)


def _restart(state: States, s: int, at: int) -> None:
    """Set every detector of a stream back to zero, after a row with event time ``at``."""
    state["sums"][s] = 0
    state["shape"][s] = 0
    state["shape_cusum"][s] = 0
    state["shape_onset"][s] = state["rows"][s] + 1
    state["shape_onset_at"][s] = at
    state["value"][s] = 0
    state["hit"][s] = state["clock"][s][VIEW_OF_CELL]
    state["cusum"][s] = 0
    state["run"][s] = 0
    state["spent"][s] = 0
    state["onset"][s] = 0
    state["onset_at"][s] = 0


def _cross(
    state: States, rules: _Rules, part: _Rows, path: _Path, i: int, names: Sequence[bytes]
) -> Crossing | None:
    """Handle a crossing: refute the law while learning, else raise an alarm or add to it."""
    s = int(part.slot[i])
    learning = bool(np.any(state["reference"][s] == UNDECIDED))
    if learning:
        sums = state["sums"][s].sum(axis=1) * rules.active[s]
        sums[1] += float((state["shape"][s] * rules.shapes[s]).sum())
        strongest = int(np.argmax(sums))
        state["refuted"][s, strongest] |= REFUTED_BY_BANK
        rules.active[s, strongest] = 0
        if strongest == 1:
            rules.shapes[s] = 0
        _restart(state, s, int(part.at[i]))
        return None
    found = findings(state[s], rules.tolerance[s], rules.active[s], rules.shapes[s])
    severity = max((f.severity for f in found), default=0.0)
    number = int(part.number[i])
    raised = not bytes(state["alarm"][s])
    if raised:
        state["alarm"][s] = _alarm_id(names[s], int(state["incarnation"][s]), number, part.raw[i])
        state["alarm_crossings"][s] = 0
        state["alarm_severity"][s] = 0.0
    ordinal = int(state["alarm_crossings"][s])
    state["alarm_crossings"][s] = ordinal + 1
    state["alarm_severity"][s] += severity
    crossing = Crossing(
        slot=s,
        alarm=bytes(state["alarm"][s]).ljust(16, b"\0"),
        ordinal=ordinal,
        record=number,
        rows=int(state["rows"][s]),
        arrived=int(part.arrived[i]),
        at=int(part.at[i]),
        historic=bool(part.historic[i]),
        evidence=float(np.log10(path.total[i])),
        threshold=float(rules.threshold[s]),
        severity=float(state["alarm_severity"][s]),
        findings=found,
    )
    _restart(state, s, int(part.at[i]))
    return crossing


def _alarm_id(name: bytes, incarnation: int, number: int, raw: np.void) -> bytes:
    digest = hashlib.blake2b(digest_size=16, person=b"tallyward alarm")
    digest.update(name + b"\0" + incarnation.to_bytes(8, "little") + number.to_bytes(8, "little"))
    digest.update(raw.tobytes())
    return digest.digest()
