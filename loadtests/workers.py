"""Rows a second and latency by gunicorn's worker class, workers and batches at a time in each.

Threads follow from the latter (`TALLYWARD_MAX_POSTING`) as the service itself reckons. Every
setting serves the same store in turn, which is warm before the first. A worker of class `sync`
closes each connection after an answer, so that every batch pays for a new one.
"""

from __future__ import annotations

import argparse
import itertools
import tempfile
from collections import defaultdict
from collections.abc import Iterator
from functools import partial
from pathlib import Path

import numpy as np

from loadtests.bodies import Traffic
from loadtests.contest import TALLYWARD, running, store
from loadtests.report import facts, short, show
from loadtests.series import Figures, Series, medians
from loadtests.speed import ENTRIES, HISTORY, STEADY, batches
from loadtests.wrk import Stock

SERVED = "served"
Setting = tuple[str, int, int]


def settings(classes: list[str], workers: list[int], posting: list[int]) -> Iterator[Setting]:
    """Yield worker class, workers and batches at a time; `sync` takes one."""
    for chosen in classes:
        yield from itertools.product([chosen], workers, [1] if chosen == "sync" else posting)


def main() -> None:
    """Print one table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--classes", nargs="+", default=[SERVED, "sync"])
    parser.add_argument("--workers", type=int, nargs="+", default=[1, 2, 3, 4])
    parser.add_argument("--posting", type=int, nargs="+", default=[1, 2, 4, 16])
    parser.add_argument("--sizes", type=int, nargs="+", default=[10, 1000])
    parser.add_argument("--merchants", type=int, default=500)
    parser.add_argument("--rounds", type=int, default=2)
    parser.add_argument("--seconds", type=float, default=2.0, help="of each run")
    parser.add_argument("--connections", type=int, default=16)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--quick", action="store_true", help="few settings, in seconds")
    given = parser.parse_args()
    if given.quick:
        given.merchants = 50
        given.workers, given.posting, given.rounds, given.seconds = [2], [2], 1, 1.0
    print(f"# Workers\n\n{facts('workers')}\n- seed: {given.seed}\n")
    print(
        f"Medians of {given.rounds} runs of {given.seconds:g} s, the order of settings turned "
        f"round each time; {given.connections} connections, {given.merchants} merchants by Zipf's "
        f"law, reply=merchants. *served* is the class that `tallyward serve` uses.\n"
    )
    found: dict[tuple[Setting, int], list[Figures]] = defaultdict(list)
    with tempfile.TemporaryDirectory() as base, store(Path(base) / "store") as url:
        folder = Path(base)
        traffic = Traffic(np.random.default_rng(given.seed), given.merchants)
        with running(TALLYWARD, url) as server:
            stock = Stock(folder / "history")
            stock.fill(traffic.batches(traffic.dealt(STEADY.each), 5000, days=STEADY.days))
            server.post(stock, HISTORY, connections=1)
        order = list(settings(given.classes, given.workers, given.posting))
        for _ in range(given.rounds):
            for setting in order:
                worker_class, workers, posting = setting
                chosen = "" if worker_class == SERVED else worker_class
                with running(
                    TALLYWARD,
                    url,
                    worker_class=chosen,
                    workers=workers,
                    max_posting=posting,
                    max_waiting=given.connections,  # all may be with one worker
                ) as server:
                    for rows in given.sizes:
                        runs = Series(
                            server,
                            partial(batches, traffic, rows),
                            folder / "bodies",
                            query="?reply=merchants",
                            connections=given.connections,
                            wanted=ENTRIES,
                        )
                        found[setting, rows].append(runs.measure(given.seconds))
            order.reverse()
        said = []
        for setting in sorted(order):
            line = [*map(str, setting)]
            for rows in given.sizes:
                median = medians(found[setting, rows])
                line += [f"{median.rate:,.0f}", short(median.p99), short(median.both)]
            said.append(line)
    heads = ["class", "workers", "batches at a time"]
    for rows in given.sizes:
        heads += [f"{rows} a batch: rows/s", "p99 ms", "CPU µs a row"]
    show(heads, said)


if __name__ == "__main__":
    main()
