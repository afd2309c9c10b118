"""How times, shares and other figures are written in documents: RFC 3339, rounded, never NaN."""

from __future__ import annotations

import math
from datetime import UTC, datetime
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from service.digits.significand import IntArray


@lru_cache(maxsize=4096)  # a batch's rows arrive at one time
def moment(ms: int) -> str | None:
    """Return a time as RFC 3339 in UTC with milliseconds; None for 0, a time never set."""
    if not ms:
        return None
    time = datetime.fromtimestamp(ms // 1000, UTC).replace(tzinfo=None)
    return f"{time.isoformat()}.{ms % 1000:03d}Z"


def moments(ms: IntArray) -> list[str | None]:
    """Return many times as `moment` does.

    Parameters
    ----------
    ms : int64 array (n,)
        Milliseconds since 1970 UTC.
    """
    return [moment(time) for time in ms.tolist()]


def share(value: npt.ArrayLike) -> float | None:
    """Return a share, statistic or p-value with 6 significant digits; None where not finite."""
    plain = float(np.asarray(value, dtype=np.float64))
    return float(f"{plain:.6g}") if math.isfinite(plain) else None


def decimal(value: npt.ArrayLike, places: int) -> float | None:
    """Return a value with so many decimal places; None where it is not finite."""
    plain = float(np.asarray(value, dtype=np.float64))
    return round(plain, places) + 0.0 if math.isfinite(plain) else None  # + 0.0: never -0.0


def decimals(rows: npt.NDArray[np.float64], places: int) -> list[list[float | None]]:
    """Return rows of values (m, n) as `decimal` does; None for those that are NaN."""
    rounded: list[list[float]] = (np.round(rows, places) + 0.0).tolist()
    return [[value if value == value else None for value in row] for row in rounded]
