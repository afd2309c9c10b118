"""Exact digits of integer amounts: find the decade by comparison, then divide.

Never ``log10`` then floor, which fails near powers of ten.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

MAX_AMOUNT = 10**15
"""Largest amount, in minor units, that the service accepts."""

_POWERS = 10 ** np.arange(19, dtype=np.int64)

IntArray = npt.NDArray[np.int64]
FloatArray = npt.NDArray[np.float64]


def decade(amounts: IntArray) -> IntArray:
    """Return the exponent of the largest power of ten not above each amount.

    Parameters
    ----------
    amounts : int64 array, any shape
        Minor units, 1 to 10**15.

    Returns
    -------
    int64 array
        ``floor(log10(amount))``, exact; -1 where the amount is 0.

    Raises
    ------
    ValueError
        If an amount is negative.
    """
    amounts = np.asarray(amounts, dtype=np.int64)
    if amounts.size and int(amounts.min()) < 0:
        raise ValueError("amounts must be 0 to 10**15 minor units, got a negative one")
    return np.searchsorted(_POWERS, amounts, side="right").astype(np.int64) - 1


def leading(amounts: IntArray, digits: int) -> IntArray:
    """Return the first ``digits`` significant digits as one integer.

    Parameters
    ----------
    amounts : int64 array
        Minor units, 1 to 10**15.
    digits : int
        How many leading digits, 1 to 15.

    Returns
    -------
    int64 array
        For 2 digits 10 to 99; -1 where the amount has fewer digits.
    """
    if not 1 <= digits <= 15:
        raise ValueError(f"digits must be 1 to 15, got {digits}")
    shift = decade(amounts) - (digits - 1)
    return np.where(shift >= 0, amounts // _POWERS[np.maximum(shift, 0)], -1)


def trailing(amounts: IntArray, digits: int) -> IntArray:
    """Return the last ``digits`` digits of the integer, 0 to ``10**digits - 1``."""
    if not 1 <= digits <= 15:
        raise ValueError(f"digits must be 1 to 15, got {digits}")
    return np.asarray(np.asarray(amounts, dtype=np.int64) % _POWERS[digits])


def circle(amounts: IntArray) -> FloatArray:
    """Return the fractional part of ``log10(amount)``, in [0, 1); amounts must be positive.

    The amount is first scaled into [1, 10) by its exact decade, so a power of ten gives 0.
    """
    amounts = np.asarray(amounts, dtype=np.int64)
    if amounts.size and int(amounts.min()) < 1:
        raise ValueError("amounts must be 1 to 10**15 minor units for the circle view")
    return np.asarray(np.log10(amounts / _POWERS[decade(amounts)].astype(np.float64)))
