"""What a batch costs as the store fills: other streams by the million, rows by the ten million.

The same traffic over 500 merchants is measured again and again while other merchants' streams,
and then history of these very merchants, are posted in between. Every run is paired with one of a
second service whose store holds nothing else, since a machine's pace changes over minutes; flat
ratios are the goal.
"""

from __future__ import annotations

import argparse
import contextlib
import tempfile
from collections.abc import Iterator
from dataclasses import dataclass
from functools import partial
from pathlib import Path

import numpy as np

from loadtests.bodies import Traffic
from loadtests.contest import Server
from loadtests.report import facts, short, show
from loadtests.series import Series
from loadtests.speed import ENTRIES, HISTORY, STEADY, batches, ratio, warm
from loadtests.wrk import Stock

LOADED = 10_000  # rows a batch while loading
LOADERS = 4  # connections
SWEEP = 1.0  # seconds between sweeps instead of 5, so that what was loaded is ranked sooner
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
    parser.add_argument("--seconds", type=float, default=2.0, help="of each run")
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
        "reply=merchants. CPU: µs a row. *÷ empty*: by the paired runs of a service that stores "
        "nothing else, median over the rounds.\n"
    )
    heads = ["stored", "store MiB", "rows a batch", "rows/s", "p50 ms", "p99 ms", "CPU workers"]
    heads += ["CPU store", "CPU both", "rows/s ÷ empty", "p50 ÷ empty", "CPU ÷ empty"]
    show(heads, lines(given))


def lines(given: argparse.Namespace) -> Iterator[list[str]]:
    """Fill the store step by step, and yield the lines of the table."""
    with contextlib.ExitStack() as stack:
        folder = Path(stack.enter_context(tempfile.TemporaryDirectory()))
        filled, empty = (
            Side(
                *stack.enter_context(
                    warm(STEADY, given.merchants, given.seed, folder / name, SWEEP)
                ),
                folder / f"{name}-bodies",
            )
            for name in ("filled", "empty")
        )
        have = 0
        for want in given.streams:
            add_streams(filled.server, given.seed, have, want, folder)
            yield from measure(filled, empty, given, f"{want:,} other streams")
            have = want
        add_history(filled.server, filled.traffic, given.history, folder)
        yield from measure(filled, empty, given, f"and {given.history:,} rows of history")


@dataclass(frozen=True)
class Side:
    """A service under measurement, and the file of what is posted to it."""

    server: Server
    traffic: Traffic
    file: Path

    def series(self, rows: int, connections: int) -> Series:
        """Return a series of one batch size."""
        return Series(
            self.server,
            partial(batches, self.traffic, rows),
            self.file.with_suffix(f".{rows}"),
            query="?reply=merchants",
            connections=connections,
            wanted=ENTRIES,
        )


def measure(
    filled: Side, empty: Side, given: argparse.Namespace, stored: str
) -> Iterator[list[str]]:
    """Measure every batch size on both sides in turn, once the service has caught up."""
    filled.server.settle()
    pairs = {
        rows: [side.series(rows, given.connections) for side in (filled, empty)]
        for rows in given.sizes
    }
    for turn in range(given.rounds):
        for pair in pairs.values():
            for series in reversed(pair) if turn % 2 else pair:
                series.measure(given.seconds)
    memory = filled.server.store.info("memory")["used_memory"] / 2**20
    for rows, (ours, control) in pairs.items():
        median = ours.median()
        figures = (median.p50, median.p99, median.workers, median.store, median.both)
        yield [
            stored,
            f"{memory:,.0f}",
            f"{rows}",
            f"{median.rate:,.0f}",
            *map(short, figures),
            ratio(ours, control, lambda run: run.rate),
            ratio(ours, control, lambda run: run.p50),
            ratio(ours, control, lambda run: run.both),
        ]


if __name__ == "__main__":
    main()
