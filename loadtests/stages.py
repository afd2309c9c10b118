"""Cost of each stage of the write path, measured inside one process on an embedded store.

The bodies are those of a busy poster: merchants by Zipf's law, ids on every row, currency and time
given. Stages are timed in one run and interleaved, so their ratios mean something on any machine.
"""

from __future__ import annotations

import argparse
import tempfile
import time
from collections import defaultdict
from itertools import pairwise
from pathlib import Path

import msgspec
import numpy as np

from loadtests.bodies import bodies
from service.batches.limits import Defaults, Limits
from service.batches.read import read_batch
from service.settings import Settings
from service.store.embedded import EmbeddedStore
from service.store.keys import path
from service.streams.entries import entries
from service.tallies import Tallies


def measure(rows: int, merchants: int, rounds: int, seed: int) -> dict[str, list[float]]:
    """Return CPU seconds of every stage, one value a round; warm-up rounds are left out."""
    rng = np.random.default_rng(seed)
    spent: dict[str, list[float]] = defaultdict(list)
    with tempfile.TemporaryDirectory() as folder, EmbeddedStore(Path(folder) / "store") as store:
        tallies = Tallies(Settings(redis_url=store.url))
        now = time.time_ns() // 1_000_000
        key = tallies.ident_key()
        for turn, body in enumerate(bodies(rng, 2 * rounds, rows, merchants, now)):
            marks = [("", time.process_time())]

            def mark(name: str, marks=marks) -> None:
                marks.append((name, time.process_time()))

            batch = read_batch(
                body,
                ndjson=False,
                limits=Limits(),
                defaults=Defaults(),
                now=now,
                ident_key=key,
                idempotency_key=None,
                skip_invalid=False,
            )
            mark("read the body")
            policies = tallies.catalogue.of("main")
            versions = policies.versions_for([s.merchant for s in batch.streams])
            slots = tallies.warm.slots([path("main", s) for s in batch.streams])
            known = tallies.warm.known(slots)
            mark("find kept states")
            calls = tallies.logs.calls(
                "main", batch, versions, now=now, historic=False, known=known
            )
            mark("pack the calls")
            store_before = store_cpu(tallies)
            appended = tallies.logs.append(calls, batch)
            mark("append and read (client)")
            store_spent = store_cpu(tallies) - store_before
            judged = tallies.judge.go_on("main", tallies.warm, slots, batch.streams, appended)
            tallies.logs.judged(calls)
            mark("fold, compact, publish")
            found = entries(judged.folded, judged.slots, judged.streams, now)
            mark("entries of the reply")
            msgspec.json.encode(found)
            mark("write the reply")
            if turn >= rounds:
                spent["append (store)"].append(store_spent)
                spent["streams touched"].append(len(batch.streams))
                for (_, before), (name, after) in pairwise(marks):
                    spent[name].append(after - before)
    return spent


def store_cpu(tallies: Tallies) -> float:
    """Return CPU seconds that the store has used."""
    info = tallies.client.info("cpu")
    return float(info["used_cpu_user"]) + float(info["used_cpu_sys"])


def main() -> None:
    """Print one table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rows", type=int, nargs="*", default=[10, 100, 1000, 5000])
    parser.add_argument("--merchants", type=int, default=500)
    parser.add_argument("--rounds", type=int, default=20)
    parser.add_argument("--seed", type=int, default=1)
    given = parser.parse_args()
    for rows in given.rows:
        spent = measure(rows, given.merchants, given.rounds, given.seed)
        streams = float(np.median(spent.pop("streams touched")))
        print(f"\n{rows} rows a batch, {streams:.0f} streams touched, medians of {given.rounds}")
        print(f"{'stage':28s}{'µs a row':>10s}{'µs a stream':>13s}")
        for name, values in spent.items():
            micro = float(np.median(values)) * 1e6
            print(f"{name:28s}{micro / rows:10.2f}{micro / streams:13.1f}")


if __name__ == "__main__":
    main()
