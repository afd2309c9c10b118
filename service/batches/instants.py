"""A column of RFC 3339 times to milliseconds."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

from schemas.transaction import instant
from service.digits.compiled import compiled

IntArray = npt.NDArray[np.int64]

_FIRST_YEAR, _LAST_YEAR = 1970, 2100


def _calendar() -> IntArray:
    """Return the day number since 1970 by (year, month, day) in a flat table; -1 for no day."""
    days = np.arange(f"{_FIRST_YEAR}-01-01", f"{_LAST_YEAR + 1}-01-01", dtype="M8[D]")
    months = days.astype("M8[M]")
    month = months.astype(np.int64)  # months since 1970
    day = (days - months.astype("M8[D]")).astype(np.int64)  # from 0
    table = np.full((_LAST_YEAR - _FIRST_YEAR + 1) * 12 * 32, -1, dtype=np.int64)
    table[month * 32 + day] = days.astype(np.int64)
    return table


_CALENDAR = _calendar()


def instants(texts: Sequence[str]) -> tuple[IntArray, npt.NDArray[np.bool_]]:
    """Read a column of times exactly as `schemas.transaction.instant` reads one.

    Parameters
    ----------
    texts : sequence of str, length n
        RFC 3339 times. Those in UTC with ``Z`` and with no fraction or 3 to 9 digits of one are
        read together; any other costs about a microsecond.

    Returns
    -------
    milliseconds : int64 array (n,)
        Since 1970 UTC; 0 where not ok.
    ok : bool array (n,)
        Whether `instant` would take the text.
    """
    n = len(texts)
    milliseconds, ok = np.zeros(n, dtype=np.int64), np.zeros(n, dtype=np.bool_)
    try:
        joined = np.frombuffer("".join(texts).encode("ascii"), np.uint8)
    except UnicodeEncodeError:
        pass
    else:
        lengths = np.fromiter(map(len, texts), np.int64, n)
        _read(joined, lengths, _CALENDAR, _FIRST_YEAR, milliseconds, ok)
    return _settle(texts, milliseconds, ok)


def _settle(
    texts: Sequence[str], milliseconds: IntArray, ok: npt.NDArray[np.bool_]
) -> tuple[IntArray, npt.NDArray[np.bool_]]:
    """Read one by one what has another shape, or is wrong."""
    if not ok.all():
        for row in np.flatnonzero(~ok).tolist():
            try:
                milliseconds[row] = instant(texts[row])
            except ValueError:
                milliseconds[row] = 0
            else:
                ok[row] = True
    return milliseconds, ok


@compiled
def _number(text: Any, at: int, digits: int) -> int:
    """Return the number that some digits make, -1 if they are none."""
    number: Any = 0
    for i in range(at, at + digits):
        digit = np.int64(text[i]) - 48
        if digit < 0 or digit > 9:
            return -1
        number = 10 * number + digit
    return int(number)


@compiled
def _read(
    joined: Any, lengths: Any, calendar: Any, first_year: int, milliseconds: Any, ok: Any
) -> None:
    """Read what has the usual shape."""
    start = 0
    for i in range(len(lengths)):
        width, text = lengths[i], joined[start : start + lengths[i]]
        start += width
        if not (width == 20 or 24 <= width <= 30) or text[width - 1] != 90:  # Z
            continue
        if not (text[4] == 45 and text[7] == 45 and text[10] == 84):  # - - T
            continue
        if not (text[13] == 58 and text[16] == 58):  # : :
            continue
        year, month, day = _number(text, 0, 4), _number(text, 5, 2), _number(text, 8, 2)
        hour, minute, second = _number(text, 11, 2), _number(text, 14, 2), _number(text, 17, 2)
        if not (0 <= hour < 24 and 0 <= minute < 60 and 0 <= second < 60):
            continue
        index = ((year - first_year) * 12 + month - 1) * 32 + day - 1
        if not (0 < month <= 12 and 0 < day <= 31 and 0 <= index < len(calendar)):
            continue
        days, fraction = calendar[index], 0
        if width > 20:
            fraction = _number(text, 20, 3)
            if text[19] != 46 or _number(text, 20, width - 21) < 0:
                continue
        if days >= 0:
            seconds = ((days * 24 + hour) * 60 + minute) * 60 + second
            milliseconds[i] = seconds * 1000 + fraction
            ok[i] = True
