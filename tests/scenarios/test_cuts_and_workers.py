"""Whoever posts, however it is cut and whatever is sent twice: the state is one fold of the log."""

from __future__ import annotations

import random
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Any

import numpy as np
import pytest
import redis

from service.settings import Settings
from service.store.feed import Feed
from service.store.keys import Partition, path, stream_of
from service.store.loading import kept_records
from service.streams.fold import Crossing, fold
from service.streams.folded import Folded
from service.streams.record import HEADER, Records, Stream
from service.streams.rules import Kind
from service.streams.snapshots import tidy
from service.tallies import Tallies
from tests.processes import eventually
from tests.scenarios import oracle
from tests.scenarios.aof import whole_logs
from tests.scenarios.conftest import Business
from tests.scenarios.running import Service
from tests.scenarios.together import run_together
from tests.streams.test_fold import assert_same

TENANT = "main"
KINDS = ("law", "auto", "own")
ROWS = 900
Row = dict[str, Any]


def amounts_of(kind: str, i: int, rng: np.random.Generator) -> np.ndarray:
    """Return what a merchant takes; number 0 of a kind cheats, and number 1 often sells nothing."""
    if kind == "own":
        amounts = rng.choice([199, 299, 499, 999, 1499, 2499, 4999, 9999], ROWS)
    else:
        amounts = (10 ** rng.uniform(1, 6, ROWS)).astype(np.int64)
    if i == 0:
        cheated = (np.arange(ROWS) > ROWS // 2) & (rng.random(ROWS) < 0.5)
        amounts[cheated] = rng.integers(4900, 5000, int(cheated.sum()))
    if i == 1:
        amounts[rng.random(ROWS) < 0.1] = 0
    return amounts


def business_of(kind: str, i: int, seed: int) -> list[Row]:
    """Return a merchant's rows in order: some refunds, some without a time, some long ago."""
    rng = np.random.default_rng([seed, KINDS.index(kind), i])
    merchant = f"cut-{kind}-{i}"
    now = datetime.now(UTC)
    rows: list[Row] = []
    for k, amount in enumerate(amounts_of(kind, i, rng).tolist()):
        row: Row = {"merchant": merchant, "amount": amount, "currency": "EUR"}
        if i % 2:
            row |= {"source": f"till-{k % 2}", "offset": k}
        else:
            row["id"] = f"{merchant}-{k}"
        chance = rng.random()
        if chance < 0.15 and amount:
            row["amount"] = -amount
        if chance < 0.6:
            ago = timedelta(hours=float(rng.choice([1, 30, 165, 200, 400])))
            row["at"] = (now - ago).isoformat()
        rows.append(row)
    return rows


@dataclass
class Poster:
    """One client that owns some merchants: it keeps their order, cuts at will, sends again."""

    service: Service
    rows: list[list[Row]]
    seed: int

    def run(self) -> Counter[str]:
        told: Counter[str] = Counter()
        chance = random.Random(self.seed)
        waiting = [list(reversed(rows)) for rows in self.rows]
        sent: list[list[Row]] = []
        while any(waiting):
            batch: list[Row] = []
            for _ in range(chance.choice([1, 1, 3, 20, 90])):
                for rows in waiting:
                    batch += [rows.pop() for _ in range(min(chance.randrange(4), len(rows)))]
            told += self._post(batch)
            sent.append(batch)
            if chance.random() < 0.2:
                self.service.reconnect()
            if chance.random() < 0.3:
                again = chance.choice(sent)
                cut = chance.randrange(len(again) + 1)
                # rows known before in front of new ones, in one batch
                fresh = [rows.pop() for rows in waiting if rows]
                told += self._post(again[cut:] + fresh)
                sent.append(fresh)
        return told

    def _post(self, batch: list[Row]) -> Counter[str]:
        receipt = self.service.post(batch)
        assert receipt["exactly_once"] is True or not batch
        names = ("accepted", "duplicates", "late", "zero", "unverified")
        return Counter({name: receipt[name] for name in names}) + Counter(sent=len(batch))


@pytest.fixture
def tallies(business: Business) -> Iterator[Tallies]:
    """The store's contents, read beside the service."""
    tallies = Tallies(Settings(redis_url=business.service.store_url))
    yield tallies
    tallies.client.close()


def written(business: Business, tallies: Tallies) -> dict[str, tuple[int, Records]]:
    """Return whole logs once the store has handed its file to the operating system."""
    client: redis.Redis = tallies.client

    def handed_over() -> bool:
        info: Any = client.info("persistence")
        return info["aof_buffer_length"] == 0

    eventually(handed_over, "an empty buffer of the append-only file")
    return whole_logs(business.store_folder, len(tallies.logs.partitions))


def pure_fold(
    logs: dict[str, tuple[int, Records]], paths: list[str], tallies: Tallies
) -> tuple[Folded, list[Crossing]]:
    """Fold whole logs from nothing, all at once."""
    folded = Folded.new(len(paths))
    folded.state["incarnation"] = [logs[p][0] for p in paths]
    records = [logs[p][1] for p in paths]
    crossings = fold(
        folded,
        np.concatenate(records),
        np.repeat(np.arange(len(paths)), [len(r) for r in records]),
        tallies.catalogue.of(TENANT, fresh=True).by_version,
        [Kind(s.flow, s.currency) for _, s in map(stream_of, paths)],
        [p.encode() for p in paths],
    )
    return folded, crossings


def located(tallies: Tallies, paths: list[str]) -> list[tuple[Partition, str]]:
    return [(tallies.logs.partition(TENANT, stream_of(p)[1].merchant), p) for p in paths]


def read_state(tallies: Tallies, paths: list[str]) -> Folded:
    """Return the state that the service answers from: snapshot and the log's tail."""
    judged = tallies.judge.judge(TENANT, tallies.logs.read(located(tallies, paths)))
    assert judged.index == list(range(len(paths)))
    assert judged.crossings == []  # all of them are in snapshots, and so were published
    return judged.folded


def assert_same_state(mine: Folded, whole: Folded) -> None:
    slots = range(len(whole.state))
    for folded in (mine, whole):
        tidy(folded, slots)
    assert_same(mine.state, whole.state)
    for slot in slots:
        np.testing.assert_array_equal(mine.pages.of(slot), whole.pages.of(slot))


def assert_same_alarms(
    service: Service, tallies: Tallies, paths: list[str], crossings: list[Crossing]
) -> None:
    """Every crossing is told once, in the feed and in its alarm, and none is made up."""
    expected: dict[str, list[Crossing]] = {}
    for crossing in crossings:
        expected.setdefault(crossing.alarm.hex(), []).append(crossing)
    merchants = {stream_of(p)[1].merchant for p in paths}
    feed = [a for a in whole_feed(service) if a["merchant"] in merchants]
    assert sorted(a["id"] for a in feed) == sorted(expected)
    stored = {a.alarm: a for a in Feed(tallies.client).stored(TENANT, list(expected))}
    for alarm in feed:
        mine = expected[alarm["id"]]
        first = mine[0]
        assert [c.ordinal for c in mine] == list(range(len(mine)))
        assert (alarm["merchant"], alarm["flow"]) == stream_of(paths[first.slot])[1][:2]
        assert alarm["count"] == first.rows
        assert alarm["repeats"] == len(mine) - 1
        assert alarm["view"] == first.findings[0].view
        assert alarm["cells"] == list(first.findings[0].cells)
        assert alarm["onset_count"] == first.findings[0].onset_row
        assert alarm["evidence"] == pytest.approx(first.evidence, abs=0.0051)
        assert alarm["severity"] == pytest.approx(mine[-1].severity, abs=0.051)
        kept = stored[alarm["id"]].crossings
        by_ordinal = {c.ordinal: c for c in mine}
        assert [k["ordinal"] for k in kept] == [c.ordinal for c in mine[:16]] + (
            [mine[-1].ordinal] if len(mine) > 16 else []
        )
        for known in kept:
            one = by_ordinal[known["ordinal"]]
            assert (known["record"], known["rows"]) == (one.record, one.rows)
            assert known["evidence"] == pytest.approx(one.evidence, rel=1e-9)
            assert [f["onset_row"] for f in known["findings"]] == [
                f.onset_row for f in one.findings
            ]


def whole_feed(service: Service) -> list[dict[str, Any]]:
    found: list[dict[str, Any]] = []
    after = ""
    while True:
        page = service.get(f"/v1/alarms?limit=50{after}")
        found += page["alarms"]
        if not page["alarms"]:
            return found
        after = f"&after={page['next']}"


def path_of(row: Row) -> str:
    """Return the stream of a row; a negative amount is a refund."""
    flow = "refund" if row["amount"] < 0 else "sale"
    return path(TENANT, Stream(row["merchant"], flow, row["currency"]))


def test_cuts_workers_and_duplicates_change_nothing(business: Business, tallies: Tallies) -> None:
    service = business.service
    owned = [[(kind, i) for kind in KINDS] for i in range(4)]
    books = [[business_of(kind, i, seed=7) for kind, i in mine] for mine in owned]
    told = sum(
        run_together([Poster(service, rows, seed=i).run for i, rows in enumerate(books)]),
        Counter(),
    )
    rows = [row for poster in books for merchant in poster for row in merchant]
    zeros = sum(row["amount"] == 0 for row in rows)
    assert told["accepted"] == len(rows) == 12 * ROWS
    assert told["accepted"] + told["duplicates"] == told["sent"]
    assert told["duplicates"] > 100
    assert told["zero"] == zeros > 0

    expected: dict[str, list[Row]] = {}
    for row in rows:
        expected.setdefault(path_of(row), []).append(row)
    paths = sorted(expected)
    logs = written(business, tallies)
    for name in paths:  # one poster a stream: the log is in the order of posting
        assert logs[name][1]["amount"].tolist() == [abs(row["amount"]) for row in expected[name]]

    whole, crossings = pure_fold(logs, paths, tallies)
    assert len(crossings) > 10
    assert told["late"] == whole.state["late"].sum() > 0
    service.get("/v1/merchants")  # judges what a worker may have left to the sweep
    assert_same_state(read_state(tallies, paths), whole)
    assert_same_alarms(service, tallies, paths, crossings)
    for slot, name in enumerate(paths):
        assert_same_counts(service, name, expected[name], whole, slot)


def assert_same_counts(
    service: Service, name: str, rows: list[Row], whole: Folded, slot: int
) -> None:
    """Hold counts over HTTP against the rows as posted; 200 hours and more ago is late."""
    stream = stream_of(name)[1]
    address = f"/v1/merchants/{stream.merchant}"
    query = f"flow={stream.flow}&currency={stream.currency}"
    found = service.get(f"{address}?{query}")
    assert found["zero"] == sum(row["amount"] == 0 for row in rows)
    lifetime = [str(abs(row["amount"])) for row in rows]
    window = [d for d, row in zip(lifetime, rows, strict=True) if not was_long_ago(row)]
    for span, digits in (("lifetime", lifetime), ("window", window)):
        for view in oracle.CELLS:
            shown = service.get(f"{address}/digits?view={view}&span={span}&{query}")
            counts = tuple(cell["count"] for cell in shown["cells"])
            assert counts == oracle.tally(view, digits), (name, view, span)
    assert found["count"] == int(whole.state["rows"][slot])
    alarm = whole.state["alarm"][slot].ljust(16, b"\0").hex()
    assert found["open_alarm"] == (alarm if whole.state["alarm"][slot] else None)


def was_long_ago(row: Row) -> bool:
    if "at" not in row:
        return False
    return datetime.now(UTC) - datetime.fromisoformat(row["at"]) > timedelta(days=8)


@pytest.mark.parametrize("by", ["id", "source"])
def test_two_posters_race_on_one_stream(business: Business, tallies: Tallies, by: str) -> None:
    """Short streams: every record is still in the log, so the log itself is the order."""
    service = business.service
    names = [f"race-{by}-{k}" for k in range(8)]
    rng = np.random.default_rng(11)
    amounts = {name: (10 ** rng.uniform(2, 6, 120)).astype(int).tolist() for name in names}

    def rows(poster: int) -> list[Row]:
        """By id both posters send all rows, one from the end; by source each has its own."""
        out = []
        for k in range(120):
            for name in names:
                row = {"merchant": name, "currency": "EUR"}
                if by == "id":
                    n = k if poster == 0 else 119 - k
                    row |= {"amount": amounts[name][n], "id": f"{name}-{n}"}
                elif k % 2 == poster:
                    row |= {"amount": amounts[name][k], "source": f"p{poster}", "offset": k}
                else:
                    continue
                out.append(row)
        return out

    def run(poster: int) -> int:
        chance, mine, taken = random.Random(poster), rows(poster), 0
        while mine:
            n = chance.choice([1, 5, 40, 100])
            part, mine = mine[:n], mine[n:]
            taken += service.post(part)["accepted"]
            if chance.random() < 0.3:
                service.reconnect()
                assert service.post(part)["accepted"] == 0
        return taken

    taken = run_together([lambda: run(0), lambda: run(1)])
    assert sum(taken) == 120 * len(names)
    if by == "id":
        assert min(taken) > 0

    paths = [path(TENANT, Stream(name, "sale", "EUR")) for name in names]
    service.get("/v1/merchants")
    logs: dict[str, tuple[int, Records]] = {}
    for blob in tallies.logs.read(located(tallies, paths)):
        assert blob.log is not None
        header = np.frombuffer(blob.log[: HEADER.itemsize], HEADER)[0]
        assert header["base"] == 0
        logs[blob.path] = int(header["incarnation"]), kept_records(blob.log)
    for name, p in zip(names, paths, strict=True):
        assert sorted(logs[p][1]["amount"].tolist()) == sorted(amounts[name])
        found = service.get(f"/v1/merchants/{name}")
        assert found["count"] == found["window_count"] == 120
    whole, _ = pure_fold(logs, paths, tallies)
    assert_same_state(read_state(tallies, paths), whole)


def test_two_posters_race_on_the_stream_of_a_cheat(business: Business, tallies: Tallies) -> None:
    """Both workers fold, compact and publish the same stream; no crossing is lost or doubled."""
    service = business.service
    rng = np.random.default_rng(5)
    cheat = rng.integers(4900, 5000, 1500).tolist()

    def run(poster: int) -> None:
        chance, mine = random.Random(poster), list(enumerate(cheat))[poster::2]
        while mine:
            n = chance.choice([1, 2, 9, 30])
            part, mine = mine[:n], mine[n:]
            if chance.random() < 0.1:
                service.reconnect()
            service.post(
                [
                    {"merchant": "raced-cheat", "amount": a, "currency": "EUR", "id": f"r{k}"}
                    for k, a in part
                ]
            )

    run_together([lambda: run(0), lambda: run(1)])
    paths = [path(TENANT, Stream("raced-cheat", "sale", "EUR"))]
    service.get("/v1/merchants")
    logs = written(business, tallies)
    assert Counter(logs[paths[0]][1]["amount"].tolist()) == Counter(cheat)
    whole, crossings = pure_fold(logs, paths, tallies)
    assert len(crossings) > 16  # more than an alarm keeps
    assert_same_state(read_state(tallies, paths), whole)
    assert_same_alarms(service, tallies, paths, crossings)
