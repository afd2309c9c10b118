"""Currencies and their minor units (ISO 4217, from the maintained package ``iso4217``).

A decimal amount is written like a JSON number without an exponent: an optional minus sign, an
integer part without leading zeros (``0.5``, neither ``.5`` nor ``00.5``), and, after a point, at
least one decimal and at most as many as the currency has. Nothing is rounded, and trailing zeros
count as decimals: ``19.990`` EUR is refused, since its sender believes in a third decimal.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from types import MappingProxyType

import numpy as np
import numpy.typing as npt
from iso4217 import Currency

from schemas.transaction import DECIMAL, DECIMAL_EXPECTED, LIMIT_EXPECTED
from service.digits.significand import MAX_AMOUNT

EXPONENTS: Mapping[str, int | None] = MappingProxyType(
    {currency.code: currency.exponent for currency in Currency}
)
"""Decimals of every current currency; None where ISO 4217 says "N.A." (XAU, XXX …)."""

_WIDEST = 18  # sign, 16 digits of 10**15, point
_POWERS = 10 ** np.arange(8, dtype=np.int64)
_ZERO, _NINE, _POINT, _MINUS = (ord(character) for character in "09.-")

IntArray = npt.NDArray[np.int64]


def exponent(code: str) -> int:
    """Return the number of decimals of a currency.

    Parameters
    ----------
    code : str
        ISO 4217 letters, in capitals.

    Returns
    -------
    int
        0 to 4.

    Raises
    ------
    ValueError
        If there is no such currency, or it has no minor unit.
    """
    try:
        decimals = EXPONENTS[code]
    except KeyError:
        raise ValueError("Expected a current currency of ISO 4217; this is none.") from None
    if decimals is None:
        raise ValueError(f"Expected a currency with a minor unit; {code} has none in ISO 4217.")
    return decimals


def minor_units(text: str, decimals: int) -> int:
    """Return a decimal amount as an integer of minor units, exactly.

    Parameters
    ----------
    text : str
        Such as ``19.99``; grammar in the module's description.
    decimals : int
        Exponent of the currency, 0 to 4.

    Returns
    -------
    int
        -10**15 to 10**15.

    Raises
    ------
    ValueError
        If the text is no such amount; the message says what was expected.
    """
    if not DECIMAL.fullmatch(text):
        raise ValueError(DECIMAL_EXPECTED)
    whole, _, fraction = text.partition(".")
    if len(fraction) > decimals:
        raise ValueError(
            f"Expected at most {decimals} decimals, as the currency has; got {len(fraction)}."
        )
    digits = whole + fraction.ljust(decimals, "0")
    # Python refuses to read thousands of digits, and they are too many anyway.
    if len(digits) > 40 or abs(int(digits)) > MAX_AMOUNT:
        raise ValueError(LIMIT_EXPECTED)
    return int(digits)


def minor_units_column(
    texts: Sequence[str], decimals: IntArray | int
) -> tuple[IntArray, npt.NDArray[np.bool_]]:
    """Convert a column of decimal amounts as `minor_units` does, without a loop over rows.

    Parameters
    ----------
    texts : sequence of str, length n
        Decimal amounts.
    decimals : int or int64 array (n,)
        Exponents of the rows' currencies, 0 to 4.

    Returns
    -------
    values : int64 array (n,)
        Minor units; meaningless where not ok.
    ok : bool array (n,)
        Whether `minor_units` would take the text.
    """
    n = len(texts)
    lengths = np.fromiter(map(len, texts), np.int64, n)
    ok = (lengths > 0) & (lengths <= _WIDEST)
    try:
        fixed = np.array(texts, dtype=f"S{_WIDEST}")
    except UnicodeEncodeError:
        return np.zeros(n, dtype=np.int64), np.zeros(n, dtype=np.bool_)
    columns = np.ascontiguousarray(fixed.view(np.uint8).reshape(n, _WIDEST).T)
    negative = columns[0] == _MINUS
    value = np.zeros(n, dtype=np.int64)
    point = np.full(n, -1, dtype=np.int64)
    for place in range(min(_WIDEST, int(lengths.max(initial=0)))):
        column = columns[place]
        inside = place < lengths
        digit = inside & (column >= _ZERO) & (column <= _NINE)
        is_point = inside & (column == _POINT)
        value = np.where(digit, value * 10 + (column - np.uint8(_ZERO)), value)
        ok &= ~inside | digit | (is_point & (point < 0)) | ((column == _MINUS) & (place == 0))
        point = np.where(is_point & (point < 0), place, point)
    end = np.where(point < 0, lengths, point)
    first = negative.astype(np.int64)
    rows = np.arange(n)
    leading = columns[np.minimum(first, _WIDEST - 1), rows]
    ok &= (end > first) & ((leading != _ZERO) | (end == first + 1))
    given = np.where(point < 0, 0, lengths - point - 1)
    ok &= ((point < 0) | (given > 0)) & (given <= decimals)
    missing = np.clip(decimals - given, 0, 7)
    # 17 digits times 10**4 would overflow; such a value is out of range before it is scaled.
    ok &= value <= MAX_AMOUNT // _POWERS[missing]
    value = np.where(ok, value, 0) * _POWERS[missing]
    return np.where(negative, -value, value), ok
