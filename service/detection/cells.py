"""Cells that detectors watch: those of the views, and coarse ones, which are ranges of lead pairs.

Amounts that crowd a range without favouring one pair in it, say those just under a round number,
are spread too thin for the pairs' own detectors. Three partitions of the 90 pairs into ranges catch
them: halves of a digit (10-14, 15-19, ... 95-99); 10-19, 20-49, 50-79, 80-99; and 10-29, 30-59,
60-99. A coarse cell is read, bounded and learned just as a pair is, and counts with the lead pair.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from service.digits import views
from service.digits.significand import IntArray
from service.digits.views import LEAD_PAIR

_PAIRS = np.arange(10, 100)
_PARTITIONS = (
    _PAIRS // 5 - 2,
    np.searchsorted([20, 50, 80], _PAIRS, side="right"),
    np.searchsorted([30, 60], _PAIRS, side="right"),
)
_SIZES = tuple(int(p.max()) + 1 for p in _PARTITIONS)
_STARTS = views.CELLS + np.concatenate([[0], np.cumsum(_SIZES)[:-1]])

HALVES, QUARTERS, THIRDS = (
    slice(int(start), int(start) + size) for start, size in zip(_STARTS, _SIZES, strict=True)
)
COARSE = slice(HALVES.start, THIRDS.stop)
CELLS = COARSE.stop
"""All cells: 199 of the views, then 25 coarse ones."""

COARSE_OF_PAIR: IntArray = np.stack(
    [p + start for p, start in zip(_PARTITIONS, _STARTS, strict=True)]
)
"""The coarse cells of each lead pair, (3, 90)."""

VIEW_OF_CELL: IntArray = np.concatenate(
    [views.VIEW_OF_CELL, np.ones(COARSE.stop - COARSE.start, int)]
)
"""Place in ``WATCHED_VIEWS`` of each cell's view."""


def with_coarse(counts: npt.ArrayLike) -> npt.NDArray[np.float64]:
    """Return counts or shares of the views' cells (..., 199) with those of the coarse cells.

    Raises
    ------
    ValueError
        If counts has not 199 values.
    """
    fine = np.asarray(counts, dtype=np.float64)
    if fine.shape[-1:] != (views.CELLS,):
        raise ValueError(f"counts must have {views.CELLS} values, got shape {fine.shape}")
    pairs = fine[..., LEAD_PAIR]
    belongs = np.zeros((90, COARSE.stop - COARSE.start))
    belongs[np.arange(90), COARSE_OF_PAIR - COARSE.start] = 1
    return np.concatenate([fine, pairs @ belongs], axis=-1)


def pairs_of(cell: int) -> list[int]:
    """Return the lead-pair cells of a coarse cell; ValueError for another cell."""
    if not COARSE.start <= cell < COARSE.stop:
        raise ValueError(f"cell must be {COARSE.start} to {COARSE.stop - 1}, got {cell}")
    inside = np.isin(COARSE_OF_PAIR, [cell]).any(axis=0)
    return (LEAD_PAIR.start + np.flatnonzero(inside)).tolist()
