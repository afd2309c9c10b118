"""Whatever is sent, again, cut differently, between compactions: every row counts once."""

from __future__ import annotations

from typing import Any

import numpy as np
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from service.store.loading import kept_records, load
from service.store.logs import EVIDENCE_ROWS, Logs
from service.streams.record import HEADER
from tests.store.batches import NOW, batch
from tests.store.workers import HORIZON, blobs_of, compact

MERCHANTS = ["a", "b", "c"]

merchant = st.sampled_from(MERCHANTS)
by_id = st.tuples(
    st.just("ids"), st.lists(st.tuples(merchant, st.integers(0, 40)), min_size=1, max_size=45)
)
by_offset = st.tuples(
    st.just("offsets"),
    st.sampled_from(["till", "web"]),
    st.lists(st.tuples(merchant, st.integers(0, 30)), min_size=1, max_size=20),
)
bare = st.tuples(st.just("bare"), st.lists(merchant, min_size=1, max_size=60))
step = st.one_of(
    by_id,
    by_id,
    by_offset,
    bare,
    st.tuples(st.just("compact"), merchant),
    st.just(("lose scripts",)),
    st.just(("again",)),
)


class Plain:
    """What the store should hold, said with sets and lists."""

    def __init__(self) -> None:
        self.rows: dict[str, list[int]] = {m: [] for m in MERCHANTS}
        self.ids: set[tuple[str, int]] = set()
        self.marks: dict[tuple[str, str], int] = {}

    def post(self, merchants, amounts, idents, source, offsets) -> list[bool]:
        taken = []
        for m, amount, ident, offset in zip(merchants, amounts, idents, offsets, strict=True):
            if source:
                new = offset > self.marks.get((m, source), -1)
                self.marks[m, source] = max(offset, self.marks.get((m, source), -1))
            else:
                new = ident == 0 or (m, ident) not in self.ids
                self.ids.add((m, ident))
            if new:
                self.rows[m].append(amount)
            taken.append(new)
        return taken


def columns(kind: str, what: tuple[Any, ...]) -> tuple[list[str], list[int], str | None, list[int]]:
    """Return merchants, idents, source and offsets of a step."""
    if kind == "ids":
        merchants = [m for m, _ in what[0]]
        return merchants, [10**18 + i for _, i in what[0]], None, [0] * len(merchants)
    if kind == "offsets":
        source, places = what
        return [m for m, _ in places], [0] * len(places), source, [o for _, o in places]
    (merchants,) = what
    return merchants, [0] * len(merchants), None, [0] * len(merchants)


@settings(
    max_examples=120,
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
@example([("bare", ["a"] * 200), ("compact", "a"), ("ids", [("a", 1)]), ("again",)])
@example([("ids", [("a", i) for i in range(30)])] * 2 + [("compact", "a")] + [("again",)])
@given(st.lists(step, min_size=2, max_size=25))
def test_the_rows_counted_are_those_of_a_plain_model(client, steps) -> None:
    client.flushall()
    logs, plain = Logs(client, 2, HORIZON), Plain()
    amount, last = 0, None
    for kind, *what in steps:
        if kind == "compact":
            if blobs_of(logs, what[0])[0].log:
                assert compact(logs, what[0])
        elif kind == "lose scripts":
            client.script_flush()
        elif kind == "again":
            if last:
                calls, rows, before = last
                again = logs.append(calls, rows)
                assert again.taken.tolist() == before.taken.tolist()
                assert again.first.tolist() == before.first.tolist()
        else:
            merchants, idents, source, offsets = columns(kind, tuple(what))
            amounts = list(range(amount + 1, amount + len(merchants) + 1))
            amount += len(merchants)
            rows = batch(
                merchants,
                amounts,
                ids=[str(a) for a in amounts],
                idents=idents,
                source=source,
                offsets=offsets,
            )
            calls = logs.calls("main", rows, [1] * len(rows.streams), now=NOW, historic=False)
            done = logs.append(calls, rows)
            numbers = {m: len(plain.rows[m]) for m in merchants}
            assert done.taken.tolist() == plain.post(merchants, amounts, idents, source, offsets)
            for stream, first, count in zip(rows.streams, done.first, done.count, strict=True):
                assert first == (numbers[stream.merchant] if count else -1)
            last = calls, rows, done
    for name in MERCHANTS:
        (blob,) = blobs_of(logs, name)
        kept = kept_records(blob.log or b"")["amount"].tolist()
        counted = plain.rows[name]
        assert kept == counted[len(counted) - len(kept) :]
        assert len(kept) >= min(len(counted), EVIDENCE_ROWS)
        ids = logs.ids(blob.partition, blob.path)[1]
        assert ids == [str(a) for a in kept]
        if blob.log:
            base = int(np.frombuffer(blob.log[:32], HEADER)["base"][0])
            assert base + len(kept) == len(counted)
            loaded = load([blob])
            assert loaded.folded.state["records"][0] + len(loaded.records) == len(counted)
