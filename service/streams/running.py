"""Every detector of every stream, after every row of a pass."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from service.detection import bank
from service.detection.paths import affine_path, cusum_path
from service.digits.significand import FloatArray, IntArray
from service.digits.views import CELLS, LEAD_PAIR
from service.streams.rows import Rows
from service.streams.rules import Rules, bounds
from service.streams.state import BY_OWN, States

_EPS = bank.EPSILONS[:, None]
_KEEP = bank.RETAINED[:, None]
_SHARE = bank.EPSILON_SHARES[:, None]


@dataclass
class Running:
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


def evaluate(state: States, rules: Rules, part: Rows) -> Running:
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
    u = bounds(state, rules, *stored)
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

    return Running(
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


def _shape_ratios(state: States, rules: Rules, part: Rows) -> FloatArray:
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
    u = bounds(state, rules, slot, where)
    invented = (1 - bank.INVENTED[:, None]) * share + bank.INVENTED[:, None] / 90
    waves = share * (1 + bank.SHIFT_RHO[:, None] * bank.SHIFT_WAVES[:, pair])
    q = np.concatenate([invented, waves]) / state["shape_norm"][slot].T
    ratio = q / np.minimum(u, state["shape_scale"][slot].T * q)
    return np.where(seen & np.isfinite(state["shape_scale"][slot].T), ratio, 1.0)
