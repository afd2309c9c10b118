"""Loading: what is read of several streams at once stays apart, and nothing torn is read."""

from __future__ import annotations

import numpy as np
import pytest

from service.store.keys import Partition
from service.store.loading import CorruptStream, kept_records, load
from service.store.logs import Blobs
from service.streams.folded import Folded
from service.streams.record import FORMAT, HEADER, RECORD
from service.streams.snapshots import write_snapshots


def log(amounts, *, base: int = 0, incarnation: int = 7, generation: int = 0) -> bytes:
    header = np.zeros(1, HEADER)
    header["format"], header["generation"] = FORMAT, generation
    header["incarnation"], header["base"] = incarnation, base
    records = np.zeros(len(amounts), RECORD)
    records["amount"] = amounts
    return header.tobytes() + records.tobytes()


def snapshot(records: int, *, incarnation: int = 7) -> bytes:
    folded = Folded.new(1)
    folded.state["records"], folded.state["incarnation"] = records, incarnation
    return write_snapshots(folded, [0])[0]


def blob(held: bytes | None, of: bytes | None = None) -> Blobs:
    return Blobs("main/a/sale/EUR", Partition(0), of, held)


def test_streams_of_every_age_are_read_together() -> None:
    loaded = load(
        [
            blob(log([1, 2, 3], incarnation=1)),
            blob(None),
            blob(
                log([10, 11, 12, 13], base=5, incarnation=2, generation=3),
                snapshot(7, incarnation=2),
            ),
            blob(log([], incarnation=3)),
            blob(log([20], base=4, incarnation=4, generation=1), snapshot(5, incarnation=4)),
            blob(log([30, 31], incarnation=5)),
        ]
    )
    assert loaded.records["amount"].tolist() == [1, 2, 3, 12, 13, 30, 31]
    assert loaded.slot.tolist() == [0, 0, 0, 2, 2, 5, 5]
    assert loaded.tail_from.tolist() == [0, 0, 7, 0, 5, 0]
    assert loaded.folded.state["incarnation"].tolist() == [1, 0, 2, 3, 4, 5]
    assert loaded.folded.state["records"].tolist() == [0, 0, 7, 0, 5, 0]


def test_nothing_is_read_of_nothing() -> None:
    loaded = load([])
    assert len(loaded.records) == len(loaded.folded.state) == 0


@pytest.mark.parametrize(
    ("held", "of"),
    [
        (log([1])[:-1], None),
        (log([1])[:20], None),
        (b"", snapshot(0)),
        (None, snapshot(3)),
        (log([1, 2]), snapshot(3)),
        (log([1, 2], base=4), snapshot(3)),
        (log([1, 2], base=1), None),
        (log([1, 2, 3], incarnation=8), snapshot(3)),
        (b"\2" + log([1])[1:], None),
        (log([1, 2, 3]), snapshot(3)[:-1]),
        (log([1, 2, 3]), snapshot(3)[:10]),
        (log([1, 2, 3]), b""),
    ],
    ids=[
        "torn record",
        "torn header",
        "empty log",
        "no log",
        "log too short",
        "gap",
        "no snapshot",
        "incarnation",
        "format",
        "torn snapshot",
        "torn header of a snapshot",
        "empty snapshot",
    ],
)
def test_what_does_not_fit_is_refused(held: bytes | None, of: bytes | None) -> None:
    load([blob(log([1, 2, 3]), snapshot(3))])
    with pytest.raises(CorruptStream):
        load([blob(log([1])), blob(held, of)])


def test_all_records_that_a_log_holds_are_evidence() -> None:
    assert kept_records(log([4, 5], base=9))["amount"].tolist() == [4, 5]
    assert len(kept_records(b"")) == 0
