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
BoolArray = npt.NDArray[np.bool_]


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
        If an amount is negative or no integer.
    """
    amounts = _whole(amounts, 0)
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

    Raises
    ------
    ValueError
        If an argument is outside its range.
    """
    _check_digits(digits)
    shift = decade(amounts) - (digits - 1)
    return np.where(shift >= 0, amounts // _POWERS[np.maximum(shift, 0)], -1)


def trailing(amounts: IntArray, digits: int) -> IntArray:
    """Return the last ``digits`` digits of the integer, 0 to ``10**digits - 1``.

    Parameters and errors as ``leading``, and an amount with fewer digits is padded with zeros.
    """
    _check_digits(digits)
    return np.asarray(_whole(amounts, 0) % _POWERS[digits])


def circle(amounts: IntArray) -> FloatArray:
    """Return the fractional part of ``log10(amount)``, in [0, 1).

    The amount is first scaled into [1, 10) by its exact decade, so a power of ten gives 0. The law
    of leading digits is the statement that this value is uniform (Newcomb 1881; Diaconis 1977,
    *Ann. Probab.* 5, 72-81).

    Parameters
    ----------
    amounts : int64 array, any shape
        Minor units, 1 to 10**15.

    Raises
    ------
    ValueError
        If an amount is below 1 or no integer.
    """
    amounts = _whole(amounts, 1)
    return np.asarray(np.log10(amounts / _POWERS[decade(amounts)].astype(np.float64)))


def _whole(amounts: npt.ArrayLike, least: int) -> IntArray:
    """Return amounts as int64; a fraction is refused rather than cut off."""
    given = np.asarray(amounts)
    if given.size and (given.dtype.kind not in "iu" or int(given.min()) < least):
        raise ValueError(f"amounts must be whole numbers from {least} to 10**15 minor units")
    return given.astype(np.int64, copy=False)


def _check_digits(digits: int) -> None:
    if digits not in range(1, 16):
        raise ValueError(f"digits must be 1 to 15, got {digits}")
