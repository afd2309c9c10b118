"""The time at which a request is answered."""

from __future__ import annotations

import time


def now() -> int:
    """Return the time in milliseconds since 1970 UTC."""
    return time.time_ns() // 1_000_000
