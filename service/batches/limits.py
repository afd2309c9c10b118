"""What a request may hold, and what a row means where it leaves a field out."""

from __future__ import annotations

from dataclasses import dataclass

AHEAD_MS = 5 * 60 * 1000
"""How far ahead of the clock an event time may be, in milliseconds."""


@dataclass(frozen=True)
class Limits:
    """Bounds of one batch.

    Attributes
    ----------
    max_rows : int
        Transactions.
    max_body : int
        Bytes of the body as sent.
    max_expanded : int
        Bytes of the body after decompression.
    max_streams : int
        Distinct streams that the rows belong to.
    horizon_ms : int
        How long an ``id`` is remembered, in milliseconds (default 8 days).
    """

    max_rows: int = 5000
    max_body: int = 8 << 20
    max_expanded: int = 32 << 20
    max_streams: int = 5000
    horizon_ms: int = 8 * 24 * 3600 * 1000


@dataclass(frozen=True)
class Defaults:
    """What a transaction has where it does not say.

    Attributes
    ----------
    currency : str or None
        ISO 4217 code with a minor unit; with None, ``currency`` is required in every row.
    flow : str
        Flow of an amount of zero or more; a negative one is a ``refund``.
    """

    currency: str | None = None
    flow: str = "sale"
