"""A merchant's own baseline: upper confidence bounds of its cells, and whether the law applies.

Learned frequencies plugged in as if they were known destroy the false-alarm promise; bounds that
hold with a stated confidence keep it. Time structure counts: a cell whose share differs between
blocks of the baseline gets the largest of its blocks' bounds.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import special

from service.detection.bank import JOINT, LAW, RARE_VIEWS
from service.detection.cells import CELLS, VIEW_OF_CELL
from service.digits.intervals import clopper_pearson_lower, clopper_pearson_upper
from service.digits.significand import FloatArray, IntArray
from service.digits.views import WATCHED, WATCHED_VIEWS

BOUNDS = CELLS + JOINT
"""Bounds that one baseline gives, over which its error is shared (Bonferroni)."""

DISPERSION_LEVEL = 0.0001
"""A cell is over-dispersed if some block of a partition holds more of it than chance explains at
this level, corrected for the number of blocks."""

BLOCK_ROWS = 50
"""Blocks with fewer rows say nothing."""

REFUTING_LEVEL = 0.05
"""Error at which a view's cells together may wrongly speak against the law. It is far larger than
the error of the bounds: to doubt the law costs little, to trust it wrongly costs false alarms."""

ROWS_FROM = 500
"""Rows of a view below which its cells say too little for the law to be accepted."""

EXCEPTION_LEVEL = 0.2
"""Single-cell error at which an accepted law still gives way to the merchant's own bound."""

EXCEPTION_ERROR = 0.01
"""Single-cell error of that bound."""

HARMONICS_FROM = 1000
"""Rows below which the circle says nothing about the law."""


def spent_alpha(confidence: float, relearns: int) -> float:
    """Return the error probability of one baseline: alpha / (i (i + 1)) for the i-th.

    Over all relearns the series sums to ``1 - confidence``.

    Raises
    ------
    ValueError
        If the confidence is not between 0 and 1, or relearns is negative.
    """
    if not 0 < confidence < 1:
        raise ValueError(f"confidence must be between 0 and 1, got {confidence}")
    if relearns < 0:
        raise ValueError(f"relearns must be 0 or more, got {relearns}")
    i = relearns + 1
    return (1 - confidence) / (i * (i + 1))


def own_bounds(
    count: IntArray,
    rows: IntArray,
    block_count: IntArray,
    block_rows: IntArray,
    block_partition: IntArray,
    alpha: float,
) -> FloatArray:
    """Return upper bounds of all cells that hold together with probability ``1 - alpha``.

    Clopper & Pearson (1934), *Biometrika* 26, 404-413, at an error shared by Bonferroni.

    Bonferroni over the cells of all views; a cell that is over-dispersed between blocks gets the
    largest of its blocks' bounds at the same level. Tolerance is not included.

    Parameters
    ----------
    count : int64 array (224,)
        The baseline's counts.
    rows : int64 array (3,)
        Baseline rows seen by each watched view.
    block_count : int64 array (B, 224)
        Counts per block.
    block_rows : int64 array (B, 3)
        Rows of each block seen by each view.
    block_partition : int64 array (B,)
        Which partition of the baseline each block belongs to: runs of rows, times of the day, days
        of the week.
    alpha : float
        Error probability of the baseline, 0 to 1.

    Returns
    -------
    float64 array (224,)
        In (0, 1]; 1 for every cell of a view without rows.

    Raises
    ------
    ValueError
        If alpha is not between 0 and 1, or an array has not the shape said above.
    """
    _check(alpha=alpha, count=count, rows=rows)
    _check_blocks(block_count, block_rows)
    n = rows[VIEW_OF_CELL]
    level = alpha / BOUNDS
    pooled = clopper_pearson_upper(count, n, level)
    share = np.divide(count, n, out=np.zeros(CELLS), where=n > 0)
    for partition in np.unique(block_partition):
        mine = block_partition == partition
        busiest = _burst_bound(block_count[mine], block_rows[mine][:, VIEW_OF_CELL], share, level)
        pooled = np.maximum(pooled, busiest)
    return pooled


def _check(**arguments: Any) -> None:
    """Raise ValueError for an argument out of its range; the names are those of the callers."""
    for name, value in arguments.items():
        if name == "alpha":
            if not 0 < value < 1:
                raise ValueError(f"alpha must be between 0 and 1, got {value}")
            continue
        width = 3 if name == "rows" else CELLS
        if np.shape(value)[-1:] != (width,):
            raise ValueError(f"{name} must have {width} values, got shape {np.shape(value)}")
        if np.size(value) and np.min(value) < 0:
            raise ValueError(f"{name} must be 0 or more, got {np.min(value)}")


def _check_blocks(block_count: IntArray, block_rows: IntArray) -> None:
    blocks = len(block_count)
    for name, value, width in (
        ("block_count", block_count, CELLS),
        ("block_rows", block_rows, 3),
    ):
        if np.shape(value) != (blocks, width):
            raise ValueError(f"{name} must have shape ({blocks}, {width}), got {np.shape(value)}")


def _burst_bound(count: IntArray, rows: IntArray, share: FloatArray, level: float) -> FloatArray:
    """Return the largest bound among the blocks of one partition for cells that come in bursts.

    Parameters
    ----------
    count, rows : int64 arrays (B, K)
        Per block: in the cell, and seen by its view.
    share : float64 array (K,)
        Of all blocks together.

    Returns
    -------
    float64 array (K,)
        0 for a cell in which no block holds more than chance explains.
    """
    says = rows >= BLOCK_ROWS
    chance = special.bdtrc(count - 1.0, np.maximum(rows, 1), share)  # P(as many or more)
    burst = (says & (count > 0) & (chance < DISPERSION_LEVEL / max(len(count), 1))).any(axis=0)
    bound = np.zeros(len(share))
    if burst.any():
        upper = clopper_pearson_upper(count[:, burst], rows[:, burst], level)
        bound[burst] = np.where(says[:, burst], upper, 0).max(axis=0)
    return bound


def rare_cells(
    block_count: IntArray, block_rows: IntArray, alpha: float
) -> tuple[npt.NDArray[np.bool_], FloatArray]:
    """Choose cells that the merchant hardly uses, and bound how often they come up together.

    Each rare cell alone has a bound far above its share, so that invented amounts, spread over
    all of them, stay below every one. Their joint share is small and is bounded well. The cells
    are chosen by the even blocks of rows and their share is bounded by the odd ones, so that the
    choice does not bias the bound. A view for which nothing is to be gained gets the bound 1.

    Parameters
    ----------
    block_count : int64 array (B, 224)
        Counts of blocks of consecutive rows, in order.
    block_rows : int64 array (B, 3)
        Rows of each block seen by each view.
    alpha : float
        Error probability of the baseline.

    Returns
    -------
    rare : bool array (224,)
    bound : float64 array (2,)
        Joint upper bounds for lead pair and tail pair, tolerance not included.

    Raises
    ------
    ValueError
        If alpha is not between 0 and 1, or an array has not the shape said above.
    """
    _check(alpha=alpha)
    _check_blocks(block_count, block_rows)
    rare = np.zeros(CELLS, dtype=bool)
    bound = np.ones(len(RARE_VIEWS))
    for place, view in enumerate(RARE_VIEWS):
        cells = WATCHED[WATCHED_VIEWS[view]]
        chosen = _rarest(block_count[::2, cells].sum(axis=0))
        held = block_count[1::2, cells][:, chosen].sum(axis=1)
        rows = block_rows[1::2, view]
        seen = int(rows.sum())
        if not chosen.any() or not seen:
            continue
        level = alpha / BOUNDS
        upper = clopper_pearson_upper(held.sum(), seen, level)
        share = np.array([held.sum() / seen])
        burst = _burst_bound(held[:, None], rows[:, None], share, level)
        bound[place] = max(float(upper), float(burst[0]))
        rare[cells] = chosen
    return rare, bound


def repeat_bound(
    block_count: IntArray, block_rows: IntArray, block_partition: IntArray, alpha: float
) -> float:
    """Return the upper bound of how often an amount repeats one of the few before it.

    Parameters
    ----------
    block_count, block_rows : int64 arrays (B,)
        Repeats and rows of each block; every partition covers the whole baseline.
    block_partition : int64 array (B,)
        As in `own_bounds`.
    alpha : float
        Error probability of the baseline.

    Returns
    -------
    float
        1 without rows.

    Raises
    ------
    ValueError
        If alpha is not between 0 and 1.
    """
    _check(alpha=alpha)
    bound = 0.0
    for partition in np.unique(block_partition):
        mine = block_partition == partition
        count, rows = block_count[mine], block_rows[mine]
        upper = clopper_pearson_upper(count.sum(), rows.sum(), alpha / BOUNDS)
        share = np.array([count.sum() / max(rows.sum(), 1)])
        burst = _burst_bound(count[:, None], rows[:, None], share, alpha / BOUNDS)
        bound = max(bound, float(upper), float(burst[0]))
    return bound or 1.0


def _rarest(count: IntArray) -> npt.NDArray[np.bool_]:
    """Return the cells, rarest first, on which an even spread of 30 % of the rows shows best."""
    order = np.argsort(count, kind="stable")
    size = np.arange(1, len(count))
    share = (np.cumsum(count[order])[:-1] + 2.0) / (count.sum() + 4.0)  # less sure of few rows
    mixed = 0.7 * share + 0.3 * size / len(count)
    gain = mixed * np.log(mixed / share) + (1 - mixed) * np.log((1 - mixed) / (1 - share))
    # cells of one count are alike, so they are taken together
    whole = np.diff(count[order]) > 0
    gain = np.where(whole & (mixed > share), gain, 0)
    chosen = np.zeros(len(count), dtype=bool)
    if gain.max() > 0:
        chosen[order[: int(np.argmax(gain)) + 1]] = True
    return chosen


@dataclass(frozen=True)
class LawVerdict:
    """Which parts of the acceptance of the law failed, per watched view (3,) bool."""

    circle: npt.NDArray[np.bool_]
    cell: npt.NDArray[np.bool_]
    few: npt.NDArray[np.bool_]


def law_verdict(
    count: IntArray,
    rows: IntArray,
    circle: FloatArray,
    circle_rows: int,
    tolerances: tuple[float, float, float],
) -> LawVerdict:
    """Say for which views a complete baseline speaks against the law.

    Two of the three parts of the acceptance: the harmonics of the circle
    (``|phi_h|^2 - 1/n > (tol/2)^2`` for h = 1 or 2, or fewer than 1000 rows), and cells whose
    lower confidence bound exceeds the law's bound; a view that saw too few rows is not judged
    for the law either. The third, a silent detector bank over the
    baseline's own rows, is kept by the fold.

    Parameters
    ----------
    count, rows
        As in `own_bounds`.
    circle : float64 array (4,)
        Sums of cos and sin of one turn, cos and sin of two turns, over the baseline.
    circle_rows : int
        Rows in those sums.
    tolerances : tuple of float
        Per watched view.

    Raises
    ------
    ValueError
        If count or rows has not the shape said above, or holds a negative number.
    """
    _check(count=count, rows=rows)
    tol = np.asarray(tolerances)
    n = rows[VIEW_OF_CELL]
    lower = clopper_pearson_lower(count, n, REFUTING_LEVEL / CELLS)
    too_much = lower > LAW * (1 + tol[VIEW_OF_CELL])
    cell = np.bincount(VIEW_OF_CELL, too_much) > 0
    off_circle = np.zeros(3, dtype=bool)
    if circle_rows < HARMONICS_FROM:
        off_circle[:2] = True
    else:
        power = (circle.reshape(2, 2) ** 2).sum(axis=1) / circle_rows**2 - 1 / circle_rows
        off_circle[:2] = power.max() > (tol[:2] / 2) ** 2
    return LawVerdict(circle=off_circle, cell=cell, few=np.asarray(rows) < ROWS_FROM)


def exceptions(count: npt.ArrayLike) -> FloatArray:
    """Return bounds for the cells that a baseline saw more often than the law lets one expect.

    A cell is excepted when its one-sided lower bound at ``EXCEPTION_LEVEL``, for that cell alone,
    is above the law's share: so mild a doubt that even a perfect merchant has some such cells. Its
    bound is mild for the same reason, the upper one at ``EXCEPTION_ERROR`` for that cell alone.

    Parameters
    ----------
    count : int array (..., 224)
        The baseline's counts.

    Returns
    -------
    float64 array (..., 224)
        0 where the law stands.
    """
    _check(count=count)
    counts = np.asarray(count, dtype=np.float64)
    rows = np.stack([counts[..., cells].sum(axis=-1) for cells in WATCHED.values()], axis=-1)
    seen = rows[..., VIEW_OF_CELL]
    above = clopper_pearson_lower(counts, seen, EXCEPTION_LEVEL) > LAW
    return np.where(above, clopper_pearson_upper(counts, seen, EXCEPTION_ERROR), 0.0)


def own_shares(count: npt.ArrayLike) -> FloatArray:
    """Return the baseline's shares of all cells with half a row added to each, (..., 224)."""
    _check(count=count)
    smoothed = np.asarray(count, dtype=np.float64) + 0.5
    for cells in WATCHED.values():
        smoothed[..., cells] /= smoothed[..., cells].sum(axis=-1, keepdims=True)
    return smoothed
