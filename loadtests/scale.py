"""What a batch costs as the store fills: other streams by the million, rows by the ten million.

The same traffic over 500 merchants is measured again and again while other merchants' streams,
and then history of these very merchants, are posted in between. Flat figures are the goal.
"""

from __future__ import annotations

import argparse
import tempfile
from collections.abc import Iterator
from functools import partial
from pathlib import Path

import numpy as np

from loadtests.bodies import Traffic
from loadtests.contest import Server
from loadtests.report import facts, short, show
from loadtests.series import Series
from loadtests.speed import ENTRIES, HISTORY, STEADY, batches, warm
from loadtests.wrk import Stock

LOADED = 5000  # rows a batch while loading
LOADERS = 4  # connections; a worker takes such batches one at a time
LOADED_AT_ONCE = 1_000_000  # rows
HISTORY_DAYS = 30.0


def load(server: Server, batches_of_rows: Iterator[bytes], folder: Path, query: str) -> None:
    """Post batches over several connections."""
    stock = Stock(folder / "loading")
    stock.fill(batches_of_rows)
    server.post(stock, query, LOADERS)


def add_streams(server: Server, seed: int, have: int, want: int, folder: Path) -> None:
    """Post a row of each of so many streams more."""
    for first in range(have, want, LOADED_AT_ONCE):
        many = min(LOADED_AT_ONCE, want - first)
        traffic = Traffic(np.random.default_rng(seed), many, label=f"other{first}-")
        load(server, traffic.batches(traffic.dealt(1), LOADED), folder, "")


def add_history(server: Server, traffic: Traffic, rows: int, folder: Path) -> None:
    """Post rows of the past, of the merchants that are measured."""
    for first in range(0, rows, LOADED_AT_ONCE):
        who = traffic.zipf(min(LOADED_AT_ONCE, rows - first))
        left = 1 - first / rows
        span = HISTORY_DAYS * who.size / rows
        past = traffic.batches(who, LOADED, days=span, until=HISTORY_DAYS * left - span)
        load(server, past, folder, HISTORY)


def main() -> None:
    """Print one table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--streams", type=int, nargs="+", default=[1_000, 100_000, 1_000_000])
    parser.add_argument("--history", type=int, default=10_000_000, help="rows")
    parser.add_argument("--sizes", type=int, nargs="+", default=[10, 1000])
    parser.add_argument("--merchants", type=int, default=500)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--seconds", type=float, default=3.0, help="of each run")
    parser.add_argument("--connections", type=int, default=8)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--quick", action="store_true", help="small stores, in seconds")
    given = parser.parse_args()
    if given.quick:
        given.merchants = 50
        given.streams, given.history = [1_000, 5_000], 50_000
        given.rounds, given.seconds = 1, 1.0
    print(f"# Scale\n\n{facts('scale')}\n- seed: {given.seed}\n")
    print(
        f"Medians of {given.rounds} runs of {given.seconds:g} s; {given.connections} kept-alive "
        f"connections, {given.merchants} merchants by Zipf's law, baselines learned, "
        "reply=merchants. CPU: µs a row.\n"
    )
    heads = ["stored", "store MiB", "rows a batch", "rows/s", "p50 ms", "p99 ms"]
    show([*heads, "CPU workers", "CPU store", "CPU both"], lines(given))


def lines(given: argparse.Namespace) -> Iterator[list[str]]:
    """Fill the store step by step, and yield the lines of the table."""
    with (
        tempfile.TemporaryDirectory() as base,
        warm(STEADY, given.merchants, given.seed, Path(base)) as (server, traffic),
    ):
        folder, have = Path(base), 0
        for want in given.streams:
            add_streams(server, given.seed, have, want, folder)
            yield from measure(server, traffic, given, folder, f"{want:,} other streams")
            have = want
        add_history(server, traffic, given.history, folder)
        stored = f"and {given.history:,} rows of history"
        yield from measure(server, traffic, given, folder, stored)


def measure(
    server: Server, traffic: Traffic, given: argparse.Namespace, folder: Path, stored: str
) -> Iterator[list[str]]:
    """Measure every batch size in turn, once the service has caught up."""
    server.settle()
    series = {
        rows: Series(
            server,
            partial(batches, traffic, rows),
            folder / f"{rows}",
            query="?reply=merchants",
            connections=given.connections,
            wanted=ENTRIES,
        )
        for rows in given.sizes
    }
    for _ in range(given.rounds):
        for runs in series.values():
            runs.measure(given.seconds)
    memory = server.store.info("memory")["used_memory"] / 2**20
    for rows, runs in series.items():
        median = runs.median()
        figures = (median.p50, median.p99, median.workers, median.store, median.both)
        yield [stored, f"{memory:,.0f}", f"{rows}", f"{median.rate:,.0f}", *map(short, figures)]


if __name__ == "__main__":
    main()
