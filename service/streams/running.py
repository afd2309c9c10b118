"""Every detector of every stream, after every row of a pass."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from service.detection import bank
from service.detection.cells import CELLS, VIEW_OF_CELL, all_hits
from service.detection.paths import affine_path, cusum_path
from service.digits.significand import FloatArray, IntArray
from service.digits.views import LEAD_PAIR
from service.streams.repeats import repeated
from service.streams.rows import Rows
from service.streams.rules import JOINT_VIEWS, Rules, below_limits, bounds
from service.streams.runs import opens_run
from service.streams.state import BY_OWN, States, is_learning

_EPS = bank.EPSILONS[:, None]
_KEEP = bank.RETAINED[:, None]
_SHARE = bank.EPSILON_SHARES[:, None]
_POWERS = _KEEP ** np.arange(4096.0)


@dataclass(frozen=True)
class Cells:
    """Hits of cells, sorted by (stream, cell, row); h = all hits of a pass.

    Attributes
    ----------
    row : int64 array (h,)
        Index of the row.
    key : int64 array (h,)
        ``slot * 224 + cell``.
    value : float64 array (3, h)
        Of the cell's detectors right after the hit.
    weight : float64 array (3, h)
        What the hit adds to the weighted sum of its view.
    clock : int64 array (h,)
        The view's clock at the hit.
    cusum : float64 array (h,)
    start : int64 array (h,)
        Index of the hit that began the run.
    carried : bool array (h,)
        Whether the run began before this pass.
    """

    row: IntArray
    key: IntArray
    value: FloatArray
    weight: FloatArray
    clock: IntArray
    cusum: FloatArray
    start: IntArray
    carried: npt.NDArray[np.bool_]


@dataclass(frozen=True)
class Shapes:
    """Shape detectors after every row.

    Attributes
    ----------
    value, cusum : float64 arrays (14, n)
    rest : int64 array (14, n)
        Index of the last row of the stream at which the CUSUM was zero, -1 for none in this pass.
    """

    value: FloatArray
    cusum: FloatArray
    rest: IntArray


@dataclass(frozen=True)
class Joint:
    """Joint detectors after every row; J of them are in force in some stream of the pass.

    Attributes
    ----------
    place : list of int
        Which ones they are, length J.
    value : float64 array (J, 2, n)
        By contamination.
    cusum : float64 array (J, n)
    rest : int64 array (J, n)
        As of `Shapes`.
    seen, member : bool arrays (J, n)
        Rows that a detector sees, and those of them in its cells.
    """

    place: list[int]
    value: FloatArray
    cusum: FloatArray
    rest: IntArray
    seen: npt.NDArray[np.bool_]
    member: npt.NDArray[np.bool_]


@dataclass(frozen=True)
class Running:
    """Every detector after every row of a pass.

    Attributes
    ----------
    total : float64 array (n,)
        Weighted sum of the detectors that count.
    sums : float64 array (9, n)
        Weighted sums of the cells, by view and contamination.
    cells : Cells
    shapes : Shapes
    joint : Joint or None
        None where no stream of the pass has such detectors in force.
    repeated : bool array (n,) or None
        Rows whose amount was there a moment before; None where no stream learns or watches them.
    """

    total: FloatArray
    sums: FloatArray
    cells: Cells
    shapes: Shapes
    joint: Joint | None
    repeated: npt.NDArray[np.bool_] | None


def evaluate(state: States, rules: Rules, part: Rows) -> Running:
    """Compute all detectors after every row of a pass.

    Parameters
    ----------
    state : array of ``STATE``
        As of the row before each stream's first one here.
    rules : Rules
    part : Rows
        n > 0 rows, sorted by stream.
    """
    n = len(part.slot)
    first = opens_run(part.slot)
    begin = np.maximum.accumulate(np.where(first, np.arange(n), 0))
    longest = int((np.arange(n) - begin).max()) + 1
    cells = _cells(state, rules, part, begin)
    ratio = _shape_ratios(state, rules, part)
    values = _values(state, part, first, longest, cells, ratio)
    sums, shape = values[:9], values[9:]
    by_view = sums.reshape(3, 3, n).sum(axis=1)
    total = (by_view * rules.active[part.slot].T).sum(axis=0)
    total += (shape * rules.shapes[part.slot].T).sum(axis=0)
    stored = state["shape_cusum"].T[:, part.slot[first]]
    cusum = _cusum(stored, first, longest, np.log(ratio))
    shapes = Shapes(shape, cusum, _last_rest(cusum, begin))
    joint, repeats = None, None
    if uses_repeats(state, rules)[part.slot[first]].any():
        repeats = repeated(state, part)
    places = np.flatnonzero(rules.joint[part.slot[first]].any(axis=0)).tolist()
    if places:
        joint = _joint(state, rules, part, first, begin, longest, places, repeats)
        weight = rules.joint[part.slot][:, places].T
        total += (joint.value.mean(axis=1) * weight).sum(axis=0)
    return Running(total, sums, cells, shapes, joint, repeats)


def _cells(state: States, rules: Rules, part: Rows, begin: IntArray) -> Cells:
    """Run the cells' detectors: one map per hit, since misses act in closed form."""
    seen = part.cell >= 0
    clock: IntArray = np.cumsum(seen, axis=1)
    clock += state["clock"][part.slot].T - (clock - seen)[:, begin]
    hit = all_hits(part.cell)
    which, row = np.nonzero(hit >= 0)
    cell = hit[which, row]
    key = part.slot[row] * CELLS + cell
    order = _sorted(key)
    row, cell, key = row[order], cell[order], key[order]
    at_hit = clock[VIEW_OF_CELL[cell], row]
    hits = np.arange(len(key))
    first = opens_run(key)
    longest = int((hits - np.maximum.accumulate(np.where(first, hits, 0))).max()) + 1
    opening = np.flatnonzero(first)
    at_opening = part.slot[row[opening]], cell[opening]
    previous = np.roll(at_hit, 1)
    previous[opening] = state["hit"][at_opening]
    misses = at_hit - previous - 1
    # what does not change from hit to hit is computed once a cell
    group = np.cumsum(first) - 1
    u = bounds(state, rules, *at_opening)
    factor = _KEEP + _EPS / u
    share = bank.CELL_WEIGHTS[at_opening[1]] * _SHARE * (_EPS / u) / factor
    up = np.log(bank.CUSUM_RETAINED + bank.CUSUM_GAIN / u)[group]
    gain = np.take(factor, group, axis=1)
    kept = _retained(misses)
    a = kept * gain
    b = gain * (1 - kept * _KEEP) / _EPS
    b[:, opening] += a[:, opening] * state["value"][at_opening].T
    a[:, opening] = 0
    value = affine_path(a, b, longest)

    # the CUSUM, from which onset and severity are read, is touched at hits only, too
    decay = misses * np.log(bank.CUSUM_RETAINED)
    step = decay + up
    level = up.copy()
    before = state["cusum"][at_opening]
    level[opening] = np.maximum(before + step[opening], up[opening])
    step[opening] = -np.inf
    cusum = cusum_path(step, level, longest)
    preceding = np.roll(cusum, 1)
    preceding[opening] = before
    begins = preceding + decay <= 0
    start = np.maximum.accumulate(np.where(begins | first, hits, 0))
    return Cells(
        row=row,
        key=key,
        value=value,
        weight=np.take(share, group, axis=1) * value,
        clock=at_hit,
        cusum=cusum,
        start=start,
        carried=~begins[start],
    )


def _retained(misses: IntArray) -> FloatArray:
    """Return ``r**n`` for every contamination, (3, h); few misses are looked up."""
    if misses.size and int(misses.max()) < _POWERS.shape[1]:
        return np.take(_POWERS, misses, axis=1)
    return np.asarray(_KEEP ** misses.astype(np.float64))


def _sorted(key: IntArray) -> IntArray:
    """Return the stable order of non-negative keys; short keys are sorted by radix."""
    if key.size and int(key.max()) < 1 << 16:
        return np.argsort(key.astype(np.uint16), kind="stable")
    return np.argsort(key, kind="stable")


def _values(
    state: States,
    part: Rows,
    first: npt.NDArray[np.bool_],
    longest: int,
    cells: Cells,
    ratio: FloatArray,
) -> FloatArray:
    """Run the sums of cells and the shapes, one map per row: float64 (9 + 14, n).

    A view's sum over its cells obeys ``S <- r (S + W) + w_k (1 + R_k) eps / u_k``.
    """
    n = len(part.slot)
    seen = part.cell >= 0
    keep = np.tile(bank.RETAINED, 3)[:, None]
    entering = (bank.VIEW_WEIGHTS[:, None] * bank.EPSILON_SHARES).reshape(9, 1) * keep
    watched = np.repeat(seen, 3, axis=0)
    a = np.concatenate([np.where(watched, keep, 1.0), ratio])
    b = np.concatenate([np.where(watched, entering, 0.0), np.where(seen[1], ratio, 0.0)])
    view = VIEW_OF_CELL[cells.key % CELLS]
    for e in range(3):
        b[e:9:3] += np.bincount(view * n + cells.row, cells.weight[e], 3 * n).reshape(3, n)
    stored = np.concatenate([state["sums"].reshape(-1, 9).T, state["shape"].T])
    b[:, first] += a[:, first] * stored[:, part.slot[first]]
    a[:, first] = 0
    return affine_path(a, b, longest)


def _joint(
    state: States,
    rules: Rules,
    part: Rows,
    first: npt.NDArray[np.bool_],
    begin: IntArray,
    longest: int,
    places: list[int],
    repeats: npt.NDArray[np.bool_] | None,
) -> Joint:
    """Run the joint detectors: ``L = (1 - eps) + eps 1{member} / u`` with a joint bound u."""
    slot = part.slot
    in_force = rules.joint[slot][:, places].T > 0
    seen, member = _membership(state, rules, part, repeats)
    seen = seen[places] & in_force
    member = member[places] & seen
    tolerance = rules.tolerance[slot][:, [JOINT_VIEWS[p] for p in places]].T
    bound = state["joint_bound"][slot][:, places].T.astype(np.float64)
    u = np.where(seen, np.minimum(bound * (1 + tolerance), 1.0), 1.0)
    eps = bank.JOINT_EPSILONS[None, :, None]
    ratio = (1 - eps) + eps * (member / u)[:, None, :]
    a = np.where(seen[:, None, :], ratio, 1.0)
    b = np.where(seen[:, None, :], ratio, 0.0)
    stored = np.moveaxis(state["joint_value"][slot[first]][:, places], 0, -1)
    b[..., first] += a[..., first] * stored
    a[..., first] = 0
    value = affine_path(a, b, longest)
    step = np.log(bank.CUSUM_RETAINED + bank.CUSUM_GAIN * member / u) * seen
    cusum = _cusum(state["joint_cusum"][slot[first]][:, places].T, first, longest, step)
    rest = np.where(in_force, _last_rest(cusum, begin), -1)
    return Joint(places, value, cusum, rest, seen, member)


def uses_repeats(state: States, rules: Rules) -> npt.NDArray[np.bool_]:
    """Return which streams learn how often amounts repeat, or watch it."""
    return np.asarray(is_learning(state) | (rules.joint[:, bank.REPEATS] > 0))


def _membership(
    state: States, rules: Rules, part: Rows, repeats: npt.NDArray[np.bool_] | None
) -> tuple[npt.NDArray[np.bool_], npt.NDArray[np.bool_]]:
    """Return which rows each joint detector sees, and which are in its cells, (7, n) each."""
    cell = part.cell[list(bank.RARE_VIEWS)]
    rare = (cell >= 0) & (state["rare"][part.slot, np.maximum(cell, 0)] > 0)
    below = below_limits(rules, part)
    again = np.zeros((1, len(part.slot)), bool) if repeats is None else repeats[None]
    seen = np.concatenate([cell >= 0, np.ones_like(again), np.ones_like(below)])
    return seen, np.concatenate([rare, again, below])


def _cusum(
    stored: FloatArray, first: npt.NDArray[np.bool_], longest: int, step: FloatArray
) -> FloatArray:
    """Run CUSUMs over rows: ``stored`` (J, streams) are their values before, ``step`` (J, n)."""
    floor = np.zeros_like(step)
    floor[:, first] = np.maximum(stored + step[:, first], 0)
    step[:, first] = -np.inf
    return cusum_path(step, floor, longest)


def _last_rest(cusum: FloatArray, begin: IntArray) -> IntArray:
    """Return for every row the last one of its stream, so far, at which the CUSUM was zero."""
    rest = np.maximum.accumulate(np.where(cusum <= 0, np.arange(cusum.shape[1]), -1), axis=1)
    return np.where(rest >= begin, rest, -1)


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
