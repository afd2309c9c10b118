"""The rows of an episode: merchants, what they sell, how rows are named and cut into batches.

Everything follows from the seed. Each row has an event time that no other row of its stream has,
so that a record in a log says which row it is, whatever the row was identified by.
"""

from __future__ import annotations

import json
import random
import time
from dataclasses import dataclass, field
from datetime import UTC, datetime
from typing import Any

import numpy as np

from service.store.keys import path
from service.streams.record import Stream

TENANT = "main"
DAY_MS = 86_400_000
Document = dict[str, Any]

QUICK = {"transactions_per_false_alarm": 1000, "minimum_count": 50}
POLICIES: dict[str, Document] = {
    "by-law": {"reference": "law", **QUICK},
    "by-own": {
        "reference": "own",
        "baseline_size": 200,
        "baseline_days": 0,
        "baseline_confidence": 0.99,
        **QUICK,
    },
    "at-once": {"baseline_size": 200, "baseline_days": 0, **QUICK},
}

SHOPS = (  # identity, policy, (flow, currency) of its streams, share of the rows
    ("id", "by-law", (("sale", "EUR"), ("refund", "EUR")), 3),
    ("id", "by-own", (("sale", "EUR"),), 4),
    ("id", "at-once", (("sale", "USD"), ("sale", "JPY")), 4),
    ("id", "by-law", (("recurring", "KWD"),), 1),
    ("id", "standard", (("sale", "EUR"), ("payout", "CHF")), 1),
    ("source", "by-law", (("sale", "EUR"),), 2),
    ("source", "by-own", (("sale", "EUR"), ("sale", "GBP")), 4),
    ("key", "by-law", (("sale", "EUR"),), 2),
    ("key", "at-once", (("sale", "USD"),), 2),
    ("none", "by-law", (("sale", "EUR"),), 1),
)


@dataclass(frozen=True)
class Row:
    """One row: what is sent, and what it is known by in the end."""

    stream: Stream
    at: int  # ms since 1970 UTC, of no other row of the stream
    document: Document

    @property
    def path(self) -> str:
        return path(TENANT, self.stream)

    @property
    def name(self) -> tuple[str, int]:
        return self.path, self.at


@dataclass(frozen=True)
class Batch:
    """One request, the same bytes however often it is sent."""

    rows: list[Row]
    identity: str
    query: str
    headers: dict[str, str]
    body: bytes


@dataclass
class Plan:
    """All rows, and for each poster what it sends, in order."""

    rows: list[Row]
    posters: list[list[Batch]]
    identity: dict[str, str]  # of a merchant's rows

    expected: dict[str, dict[int, Row]] = field(init=False)

    def __post_init__(self) -> None:
        self.expected = {}
        for row in self.rows:
            self.expected.setdefault(row.path, {})[row.at] = row
        assert sum(map(len, self.expected.values())) == len(self.rows)


def merchant_of(prefix: str, i: int) -> str:
    return f"{prefix}{SHOPS[i][0]}-{i}"


def plan(seed: int, rows: int, prefix: str) -> Plan:
    chance = random.Random(f"plan {seed}")
    shares = sum(share for *_, share in SHOPS)
    everything: list[Row] = []
    identity = {}
    for i, (named_by, policy, streams, share) in enumerate(SHOPS):
        merchant = merchant_of(prefix, i)
        identity[merchant] = named_by
        each = max(rows * share // shares // len(streams), 4)
        for k, (flow, currency) in enumerate(streams):
            rng = np.random.default_rng([seed, i, k])
            everything += _rows(Stream(merchant, flow, currency), policy, named_by, each, rng)
    by_kind = {kind: [] for kind in ("id", "source", "key", "none")}
    for row in everything:
        by_kind[identity[row.stream.merchant]].append(row)
    posters = [
        *_by_id(by_kind["id"], 3, chance),
        *_by_source(by_kind["source"], chance),
        *_by_key(by_kind["key"], 2, chance),
        [
            _batch(part, "none", chance)
            for part in _cut(_mixed(by_kind["none"], chance), chance, sizes=(1, 2, 3))
        ],
    ]
    return Plan(everything, posters, identity)


def _rows(
    stream: Stream, policy: str, named_by: str, n: int, rng: np.random.Generator
) -> list[Row]:
    """Return a stream's rows in order; the second half cheats, some sell nothing."""
    if policy == "by-own":
        amounts = rng.choice([199, 299, 499, 999, 1499, 2499, 4999, 9999], n)
    else:
        amounts = (10 ** rng.uniform(1, 6, n)).astype(np.int64)
    cheated = (np.arange(n) > n // 2) & (rng.random(n) < 0.5)
    amounts[cheated] = rng.integers(4900, 5000, int(cheated.sum()))
    amounts[rng.random(n) < 0.03] = 0
    now = time.time_ns() // 1_000_000
    ages = rng.choice(6 * DAY_MS, n, replace=False) + 1000
    ages[rng.random(n) < 0.1] += 9 * DAY_MS  # late
    out = []
    for k, (amount, age) in enumerate(zip(amounts.tolist(), ages.tolist(), strict=True)):
        at = now - age
        moment = datetime.fromtimestamp(at / 1000, UTC).isoformat(timespec="milliseconds")
        document: Document = {
            "merchant": stream.merchant,
            "flow": stream.flow,
            "currency": stream.currency,
            "amount": amount,
            "at": moment,
        }
        if named_by == "id":
            document["id"] = f"{stream.flow}-{stream.currency}-{k}"
        elif named_by == "source":
            document |= {"source": f"till-{stream.merchant}", "offset": k}
        out.append(Row(stream, at, document))
    return out


def _by_id(rows: list[Row], posters: int, chance: random.Random) -> list[list[Batch]]:
    """Cut rows over the posters; some go to two of them at about the same time."""
    out: list[list[Batch]] = [[] for _ in range(posters)]
    parts = _cut(_mixed(rows, chance), chance)
    for i, part in enumerate(parts):
        mine = chance.randrange(posters)
        out[mine].append(_batch(part, "id", chance))
        if chance.random() < 0.3:  # the same rows cut differently, from another poster
            both = part + parts[max(i - 1, 0)] if i else part
            again = both[chance.randrange(len(both)) :]
            chance.shuffle(again)
            other = (mine + chance.randrange(1, posters)) % posters
            out[other].append(_batch(again, "id", chance))
    return out


def _by_source(rows: list[Row], chance: random.Random) -> list[list[Batch]]:
    """One poster a source, offsets ascending; now and then it begins somewhat earlier again."""
    by_source: dict[str, list[Row]] = {}
    for row in rows:
        by_source.setdefault(row.document["source"], []).append(row)
    out = []
    for mine in by_source.values():
        batches, before = [], []
        for part in _cut(_mixed(mine, chance), chance):
            back = before[chance.randint(0, len(before)) :] if chance.random() < 0.2 else []
            batches.append(_batch(back + part, "source", chance))
            before = part
        out.append(batches)
    return out


def _by_key(rows: list[Row], posters: int, chance: random.Random) -> list[list[Batch]]:
    """Rows known by their batch's key; some batches are sent by two posters at a time."""
    out: list[list[Batch]] = [[] for _ in range(posters)]
    for i, part in enumerate(_cut(_mixed(rows, chance), chance)):
        batch = _batch(part, "key", chance, f"{part[0].stream.merchant}/{i}")
        first = chance.randrange(posters)
        out[first].append(batch)
        if chance.random() < 0.3:
            out[1 - first].append(batch)
    return out


def _mixed(rows: list[Row], chance: random.Random) -> list[Row]:
    """Mix streams at random, each in its own order."""
    waiting: dict[Stream, list[Row]] = {}
    for row in reversed(rows):
        waiting.setdefault(row.stream, []).append(row)
    turns = [row.stream for row in rows]
    chance.shuffle(turns)
    return [waiting[stream].pop() for stream in turns]


def _cut(
    rows: list[Row], chance: random.Random, sizes: tuple[int, ...] = (1, 3, 10, 30, 90)
) -> list[list[Row]]:
    parts, left = [], rows
    while left:
        n = chance.choice(sizes)
        parts.append(left[:n])
        left = left[n:]
    return parts


def _batch(rows: list[Row], identity: str, chance: random.Random, key: str | None = None) -> Batch:
    documents = [row.document for row in rows]
    if chance.random() < 0.3:
        kind = "application/x-ndjson"
        body = "\n".join(map(json.dumps, documents)).encode()
    else:
        kind = "application/json"
        body = json.dumps({"transactions": documents}).encode()
    reply = chance.choice(["", "reply=merchants", "reply=full"])
    mode = "mode=history" if chance.random() < 0.15 else ""
    query = "&".join(part for part in (reply, mode) if part)
    headers = {"Content-Type": kind} | ({"Idempotency-Key": key} if key else {})
    return Batch(rows, identity, f"?{query}" if query else "", headers, body)


def again(plan: Plan, seed: int) -> list[Batch]:
    """Return the whole plan once more: ids cut anew, the others as they were sent."""
    chance = random.Random(f"again {seed}")
    by_id = [row for row in plan.rows if plan.identity[row.stream.merchant] == "id"]
    chance.shuffle(by_id)
    cut = [_batch(by_id[i : i + 300], "id", chance) for i in range(0, len(by_id), 300)]
    rest = [b for mine in plan.posters for b in mine if b.identity in ("source", "key")]
    return cut + rest
