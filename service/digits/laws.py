"""Reference laws of digits: logarithmic for leading digits, uniform for the tail pair.

Newcomb (1881), *Am. J. Math.* 4, 39-40; Benford (1938), *Proc. Am. Phil. Soc.* 78, 551-572.
"""

from __future__ import annotations

import numpy as np

from service.digits.significand import FloatArray
from service.digits.views import CELLS, LEAD_DIGIT, LEAD_PAIR, TAIL_PAIR


def leading_law(digits: int) -> FloatArray:
    """Return P(first ``digits`` digits = d) = log10(1 + 1/d) for d = 10**(digits-1), ... .

    Benford (1938) writes F_a for the share of the first digit a = d; for several digits it is his
    formula with the digits read as one number.

    Parameters
    ----------
    digits : int
        1 to 6.

    Returns
    -------
    float64 array (9 * 10**(digits-1),)
        Sums to 1 within 1e-15.

    Raises
    ------
    ValueError
        If digits is outside its range.
    """
    if digits not in range(1, 7):
        raise ValueError(f"digits must be 1 to 6, got {digits}")
    d = np.arange(10 ** (digits - 1), 10**digits)
    return np.asarray(np.log1p(1 / d) / np.log(10))


def position_law(position: int) -> FloatArray:
    """Return the law of the digit at one position: 9 values at position 1, 10 at later ones.

    P(D_k = d) = sum over all possible leading ``k-1`` digits j of log10(1 + 1/(10 j + d)), the
    marginal of the general law of digits (Newcomb 1881 gives k = 1, 2; Hill 1995, *Statist. Sci.*
    10, 354-363, any k).

    Parameters
    ----------
    position : int
        k, 1 to 6.

    Returns
    -------
    float64 array (9,) or (10,)

    Raises
    ------
    ValueError
        If position is outside its range.
    """
    if position not in range(1, 7):
        raise ValueError(f"position must be 1 to 6, got {position}")
    if position == 1:
        return leading_law(1)
    return np.asarray(leading_law(position).reshape(-1, 10).sum(axis=0))


def law_cells() -> FloatArray:
    """Return the law of all watched cells, float64 (199,); each view sums to 1."""
    law = np.empty(CELLS)
    law[LEAD_DIGIT] = leading_law(1)
    law[LEAD_PAIR] = leading_law(2)
    law[TAIL_PAIR] = 1 / 100
    return law
