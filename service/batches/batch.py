"""A batch: the columns of one request's valid rows, in the order given."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from service.streams.record import Stream


@dataclass(frozen=True)
class Rejection:
    """One reason why a row was not taken.

    Attributes
    ----------
    index : int
        Position of the row in the request, from 0.
    id : str or None
        The row's own ``id``, where it could be read.
    pointer : str
        RFC 6901 JSON Pointer to the field, e.g. ``/transactions/17/amount``.
    detail : str
        What was expected.
    retryable : bool
        Whether the same row may be valid later (its ``at`` is ahead of the clock).
    """

    index: int
    id: str | None
    pointer: str
    detail: str
    retryable: bool = False


@dataclass(frozen=True)
class Batch:
    """Valid rows as columns; n rows over ``len(streams)`` streams.

    Attributes
    ----------
    sent : int
        Rows in the request, rejected ones included.
    streams : list of Stream
        Distinct streams, in order of first appearance.
    stream : int64 array (n,)
        Index into ``streams``.
    amount, at : int64 arrays (n,)
        Minor units (0 to 10**15) and event time in ms since 1970 UTC (arrival where not given).
    ident : uint64 array (n,)
        Keyed hash of the row's ``id``, or of ``Idempotency-Key`` and position; exactly 19 decimal
        digits (10**18 to 2**63 - 1); 0 where the row has a source or no identity at all.
    unverified : bool array (n,)
        Identified only by ``id`` and older than the horizon.
    ids : list of (str or None), length n
        The rows' own ids, as given.
    sources : list of str
        Distinct sources.
    source : int64 array (n,)
        Index into ``sources``, -1 for none.
    offset : int64 array (n,)
        Position within the source, 0 where there is none.
    categories : dict
        Merchant to category, the last one given.
    exactly_once : bool
        Whether every row has an identity.
    rejected : list of Rejection
        With ``invalid=skip``: the rows left out.
    """

    sent: int
    streams: list[Stream]
    stream: npt.NDArray[np.int64]
    amount: npt.NDArray[np.int64]
    at: npt.NDArray[np.int64]
    ident: npt.NDArray[np.uint64]
    unverified: npt.NDArray[np.bool_]
    ids: list[str | None]
    sources: list[str]
    source: npt.NDArray[np.int64]
    offset: npt.NDArray[np.int64]
    exactly_once: bool
    categories: dict[str, str] = field(default_factory=dict)
    rejected: list[Rejection] = field(default_factory=list)
