"""Having the compiled code at hand before the first row comes."""

from __future__ import annotations

import numpy as np

from service.detection.policy import Policy
from service.streams.entries import entries
from service.streams.fit import excess_of_learned
from service.streams.fold import fold
from service.streams.folded import Folded
from service.streams.record import RECORD, Stream
from service.streams.rules import Kind
from service.streams.snapshots import read_snapshots, write_snapshots


def get_ready() -> None:
    """Take one row of nobody's all the way, so that whatever is compiled is compiled.

    Takes half a second where the code is kept on disk, and a quarter of a minute where it is made.
    """
    row = np.zeros(1, RECORD)
    row["amount"], row["policy"] = 1999, Policy().version
    folded, slots = Folded.new(1), np.zeros(1, np.int64)
    nobody = Stream("nobody", "sale", "EUR")
    kinds = [Kind(nobody.flow, nobody.currency)]
    fold(folded, row, slots, {Policy().version: Policy()}, kinds, [b"nobody"])
    read_snapshots(folded, slots, write_snapshots(folded, slots))
    entries(folded, slots, [nobody], 0)
    excess_of_learned([[1, 2]], [[3, 4]], [True])
