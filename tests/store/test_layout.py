"""The order and the bytes in which rows go to their logs, against plain sorting and formatting."""

from __future__ import annotations

from dataclasses import replace

import msgspec
import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from service.store.layout import lay_out, unfolded
from service.streams import record
from service.streams.record import HISTORIC, RECORD
from tests.store.batches import NOW, batch

row = st.tuples(st.sampled_from("abcdef"), st.integers(0, 10**15), st.integers(0, 12))


@settings(deadline=None)  # the first example may wait for a compiler
@given(st.lists(row, min_size=1, max_size=60), st.integers(1, 4), st.booleans())
def test_rows_go_by_partition_and_stream_as_they_were_given(rows, partitions, historic) -> None:
    merchants, amounts, idents = zip(*rows, strict=True)
    at = NOW - 7 * np.arange(len(rows))
    given_ = replace(
        batch(list(merchants), list(amounts)),
        ident=np.array([i and 10**18 + i for i in idents], np.uint64),
        at=at,
    )
    home = np.array([ord(s.merchant) % partitions for s in given_.streams])
    versions = 1 + np.arange(len(home))
    layout = lay_out(given_, home, versions, now=NOW, historic=historic)
    assert layout.streams.tolist() == sorted(range(len(home)), key=lambda s: (home[s], s))
    seen: set[tuple[int, int]] = set()
    taken: dict[int, list[int]] = {}
    for i, (stream, ident) in enumerate(zip(given_.stream.tolist(), idents, strict=True)):
        if not ident or (stream, ident) not in seen:
            seen.add((stream, ident))
            taken.setdefault(stream, []).append(i)
    expected = [taken[s] for s in layout.streams.tolist()]
    assert np.diff(layout.edges).tolist() == [len(rows) for rows in expected]
    order = [i for rows in expected for i in rows]
    assert layout.rows.tolist() == order
    assert layout.records["amount"].tolist() == [amounts[i] for i in order]
    assert layout.records["policy"].tolist() == [versions[given_.stream[i]] for i in order]
    assert record.at(layout.records).tolist() == at[order].tolist()
    assert set(record.arrived(layout.records).tolist()) == {NOW}
    assert set(layout.records["flags"].tolist()) == {HISTORIC if historic else 0}
    assert layout.decimals.tobytes().decode("latin-1") == "".join(
        f"\xb3{int(i):019d}" for i in given_.ident[order]
    )


def test_the_largest_ident_keeps_all_its_digits() -> None:
    idents = np.array([2**63 - 1, 10**18, 0], np.uint64)
    given_ = replace(batch(["a", "b", "c"], [1, 2, 3]), ident=idents)
    layout = lay_out(given_, np.zeros(3, np.int64), np.ones(3, np.int64), now=NOW, historic=False)
    texts = msgspec.msgpack.decode(b"\x93" + layout.decimals.tobytes())
    assert texts == ["9223372036854775807", "1000000000000000000", 19 * "0"]


def test_others_rows_come_before_the_own_ones_that_were_taken() -> None:
    given_ = batch(["b", "a", "b", "a", "c"], [1, 2, 3, 4, 5])
    home = np.array([1, 0, 0])  # b, a, c
    layout = lay_out(given_, home, np.ones(3, np.int64), now=NOW, historic=False)
    tails = np.zeros(2, RECORD)
    tails["amount"] = [80, 90]
    records, slot = np.empty(7, RECORD), np.empty(7, np.int64)
    streams, edges, rows, own, _ = layout
    taken = np.array([True, True, False, True, True])
    warm = np.array([True, True, False])
    others = np.array([2, 0, 0])
    end = unfolded(streams, edges, rows, taken, warm, others, tails, own, records, slot)
    assert slot[:end].tolist() == [1, 1, 0, 0, 0]
    assert records["amount"][:end].tolist() == [2, 4, 80, 90, 1]
