"""Having the compiled code at hand before the first row comes."""

from __future__ import annotations

import numpy as np

from service.batches.identity import position_idents
from service.batches.limits import Defaults, Limits
from service.batches.read import read_batch
from service.detection.policy import Policy
from service.store.layout import lay_out, unfolded
from service.streams.entries import entries
from service.streams.fit import excess_of_learned
from service.streams.fold import fold
from service.streams.folded import Folded
from service.streams.record import RECORD
from service.streams.rules import Kind
from service.streams.snapshots import read_snapshots, write_snapshots


def get_ready() -> None:
    """Take one row of nobody's all the way, so that whatever is compiled is compiled.

    Takes half a second where the code is kept on disk, and a quarter of a minute where it is made.
    """
    row = b'"id": "1", "merchant": "nobody", "amount": 1, "at": "1970-01-01T00:00:00Z"'
    body = b'{"transactions": [{"currency": "EUR", %s}]}' % row
    batch = read_batch(
        body,
        ndjson=False,
        limits=Limits(),
        defaults=Defaults(),
        now=1,
        ident_key=(1, 2),
        idempotency_key=None,
        skip_invalid=False,
    )
    position_idents("once", np.zeros(1, np.int64), (1, 2))
    slots, policy = np.zeros(1, np.int64), Policy()
    layout = lay_out(batch, slots, np.array([policy.version]), now=1, historic=False)
    streams, edges, rows, own, _ = layout
    yes, tails = np.ones(1, bool), np.frombuffer(b"", RECORD)
    unfolded(streams, edges, rows, yes, yes, slots, tails, own, own.copy(), slots.copy())
    folded, nobody = Folded.new(1), batch.streams[0]
    kinds = [Kind(nobody.flow, nobody.currency)]
    fold(folded, own, slots, {policy.version: policy}, kinds, [b"nobody"])
    read_snapshots(folded, slots, write_snapshots(folded, slots))
    entries(folded, slots, [nobody], 0)
    excess_of_learned([[1, 2]], [[3, 4]], [True])
