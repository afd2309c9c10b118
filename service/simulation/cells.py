"""Shares of the watched cells of amounts whose distribution is known.

A view's shares sum to the share of amounts that the view sees: amounts below 10.00 have no tail
pair. Shares of mixtures are therefore mixtures of shares.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import numpy.typing as npt

from service.digits.significand import FloatArray, IntArray
from service.digits.views import CELLS, LEAD_DIGIT, LEAD_PAIR, TAIL_PAIR, TAIL_PAIR_FROM, cells_hit

Cumulative = Callable[[FloatArray], FloatArray]
"""P(the amount before rounding to minor units is at most x), for x >= 0."""

_TAILS_TO = 10**6
"""Beyond it endings of smooth distributions are even to better than 1e-5."""


def shares_of_amounts(amounts: IntArray, p: npt.ArrayLike | None = None) -> FloatArray:
    """Return the shares of cells of amounts that occur with given probabilities.

    Parameters
    ----------
    amounts : int64 array (n,)
        Minor units, 0 to 10**15.
    p : float array (n,), optional
        Their probabilities, of sum 1; by default all alike.

    Returns
    -------
    float64 array (199,)
    """
    weight = np.full(len(amounts), 1 / len(amounts)) if p is None else np.asarray(p, np.float64)
    shares = np.zeros(CELLS)
    for hit in cells_hit(amounts):
        seen = hit >= 0
        shares += np.bincount(hit[seen], weight[seen], minlength=CELLS)
    return shares


def shares_of_range(low: int, high: int) -> FloatArray:
    """Return the shares of cells of amounts evenly from low to high - 1, float64 (199,).

    Of a range wider than a million, a million amounts spread evenly over it are counted.
    """
    step = max((high - low) // 10**6, 1)
    while step > 1 and np.gcd(step, 100) > 1:  # it would miss some endings
        step += 1
    return shares_of_amounts(np.arange(low, high, step))


def shares_of_rows(amounts: IntArray) -> FloatArray:
    """Return the shares of cells counted over all amounts of an array of any shape, (199,)."""
    return shares_of_amounts(np.asarray(amounts).ravel())


def shares_of_smooth(cumulative: Cumulative, decades: range) -> FloatArray:
    """Return the shares of cells of a continuous amount rounded to the nearest minor unit.

    An amount below half a minor unit becomes one minor unit.

    Parameters
    ----------
    cumulative : function
        Of the amount in minor units before rounding.
    decades : range
        Exponents of ten that the amounts reach; what lies beyond them must be negligible.

    Returns
    -------
    float64 array (199,)
    """

    def at_least(x: IntArray) -> FloatArray:
        """P(rounded amount < x)."""
        return np.where(x <= 1, 0.0, cumulative(np.maximum(x - 0.5, 0.0)))

    shares = np.zeros(CELLS)
    for d in decades:
        shares[LEAD_DIGIT] += np.diff(at_least(np.arange(1, 11) * 10**d))
        if d >= 1:
            shares[LEAD_PAIR] += np.diff(at_least(np.arange(10, 101) * 10 ** (d - 1)))
    one_by_one = np.diff(at_least(np.arange(TAIL_PAIR_FROM, _TAILS_TO + 1)))
    shares[TAIL_PAIR] = one_by_one.reshape(-1, 100).sum(axis=0)
    shares[TAIL_PAIR] += (1 - float(at_least(np.array(_TAILS_TO)))) / 100
    return shares
