"""How an amount's digits are read, and the numbering of the watched cells.

The 199 cells are 0-8 ``lead_digit`` 1-9, 9-98 ``lead_pair`` 10-99, 99-198 ``tail_pair`` 00-99.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from service.digits.significand import IntArray, leading, trailing

LEAD_DIGIT = slice(0, 9)
LEAD_PAIR = slice(9, 99)
TAIL_PAIR = slice(99, 199)
CELLS = 199

WATCHED = {"lead_digit": LEAD_DIGIT, "lead_pair": LEAD_PAIR, "tail_pair": TAIL_PAIR}
"""The views that detectors watch, in the order of their cells."""

WATCHED_VIEWS = tuple(WATCHED)
VIEWS = ("lead_digit", "second_digit", "lead_pair", "tail_pair", "circle")

LEAD_PAIR_FROM = 10
"""Smallest amount, in minor units, that has a lead pair."""

TAIL_PAIR_FROM = 1000
"""Smallest amount whose last two digits are not also leading digits."""

VIEW_OF_CELL: npt.NDArray[np.int64] = np.repeat(np.arange(3), (9, 90, 100))


class ViewCells(NamedTuple):
    """Cells hit by each amount: int64 arrays (n,), -1 where the view does not see the amount."""

    lead_digit: IntArray
    lead_pair: IntArray
    tail_pair: IntArray


def cells_hit(amounts: IntArray) -> ViewCells:
    """Return the global cell numbers hit by each amount, one per watched view.

    Parameters
    ----------
    amounts : int64 array (n,)
        Minor units, 0 to 10**15; zero is seen by no view.

    Raises
    ------
    ValueError
        If an amount is negative or no integer.
    """
    amounts = np.asarray(amounts)
    lead = leading(amounts, 1)
    pair = leading(amounts, 2)
    return ViewCells(
        lead_digit=np.where(amounts > 0, lead - 1, -1),
        lead_pair=np.where(pair >= 0, pair - 10 + LEAD_PAIR.start, -1),
        tail_pair=np.where(amounts >= TAIL_PAIR_FROM, trailing(amounts, 2) + TAIL_PAIR.start, -1),
    )


def cell_label(cell: int) -> str:
    """Return a cell's name within its view: ``"1"``, ``"49"``, ``"05"``.

    Parameters
    ----------
    cell : int
        Number among all watched cells, 0 to 198.

    Raises
    ------
    ValueError
        If there is no such cell.
    """
    if not 0 <= cell < CELLS:
        raise ValueError(f"cell must be 0 to {CELLS - 1}, got {cell}")
    if cell < LEAD_PAIR.start:
        return str(cell + 1)
    if cell < TAIL_PAIR.start:
        return str(cell - LEAD_PAIR.start + 10)
    return f"{cell - TAIL_PAIR.start:02d}"
