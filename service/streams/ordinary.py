"""What is ordinary for a stream: the bounds of its cells before tolerance.

Against its own baseline, the baseline's upper confidence bounds. Against the law, the law itself,
but for *excepted* cells: those that the baseline saw more often than the law lets one expect,
though not surely so. They get a bound of their own. Accepting the law for a view says that nothing
surely speaks against it, not that it holds in every cell.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from service.detection.bank import LAW
from service.detection.baseline import exceptions
from service.detection.cells import VIEW_OF_CELL
from service.digits.significand import FloatArray, IntArray
from service.digits.views import WATCHED, WATCHED_VIEWS
from service.streams.state import BY_LAW, BY_OWN, States


def bounds_of_view(state: States, view: int) -> FloatArray:
    """Return the bounds of a watched view's cells, float64 (..., K), tolerance not included."""
    cells = WATCHED[WATCHED_VIEWS[view]]
    return bounds_of_cells(state, np.arange(cells.start, cells.stop))


def bounds_of_cells(state: States, cells: IntArray) -> FloatArray:
    """Return the bounds of some cells of every stream, float64 (..., k), tolerance not included."""
    return _chosen(
        state["reference"][..., VIEW_OF_CELL[cells]],
        state["cell"]["excepted"][..., cells],
        state["cell"]["bound"][..., cells],
        LAW[cells],
    )


def except_cells(state: States, slots: IntArray) -> None:
    """Set the bounds of the cells that a complete baseline excepts from the law."""
    state["cell"]["excepted"][slots] = rounded_up(exceptions(state["cell"]["base"][slots]))


def rounded_up(bounds: FloatArray) -> npt.NDArray[np.float32]:
    """Return bounds in single precision, none below what it was."""
    rounded = bounds.astype(np.float32)
    return np.where(rounded < bounds, np.nextafter(rounded, np.float32(2)), rounded)


def _chosen(
    reference: npt.NDArray[np.uint8],
    excepted: npt.NDArray[np.float32],
    bound: npt.NDArray[np.float32],
    law: FloatArray,
) -> FloatArray:
    by_law = np.where((excepted > 0) & (reference == BY_LAW), excepted, law)
    return np.asarray(np.where(reference == BY_OWN, bound, by_law), dtype=np.float64)
