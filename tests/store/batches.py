"""Batches for tests of the store, made without HTTP."""

from __future__ import annotations

import numpy as np

from service.batches.batch import Batch
from service.streams.record import Stream

NOW = 1_790_000_000_000  # ms since 1970 UTC, September 2026


def batch(
    merchants,
    amounts,
    *,
    ids=None,
    idents=None,
    source=None,
    offsets=None,
    at=None,
    flow="sale",
    currency="EUR",
) -> Batch:
    """Return a batch of one row per merchant and amount.

    Idents default to one per id text; rows with a source have none.
    """
    names = list(dict.fromkeys(merchants))
    n = len(amounts)
    ids = list(ids) if ids is not None else [None] * n
    if idents is None:
        idents = [0 if i is None else 10**18 + hash_of(i) for i in ids]
    return Batch(
        sent=n,
        streams=[Stream(m, flow, currency) for m in names],
        stream=np.array([names.index(m) for m in merchants], np.int64),
        amount=np.array(amounts, np.int64),
        at=np.full(n, NOW) if at is None else np.array(at, np.int64),
        ident=np.zeros(n, np.uint64) if source else np.array(idents, np.uint64),
        unverified=np.zeros(n, bool),
        ids=ids,
        sources=[source] if source else [],
        source=np.full(n, 0 if source else -1, np.int64),
        offset=np.array(offsets if source else [0] * n, np.int64),
        exactly_once=True,
    )


def hash_of(text: str) -> int:
    return int.from_bytes(text.encode()[-7:].rjust(7, b"\0"), "little") % (8 * 10**18)
