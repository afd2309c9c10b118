"""Rows a second, latency and processor time of the service, beside a floor and two plain builds.

All run on one machine in one run, under the same gunicorn, each over a store of its own whose
append-only file is flushed every second. The service answers with the entries of all streams
touched, with every detector, window and baseline of the default policy.
"""

from __future__ import annotations

import argparse
import contextlib
import itertools
import tempfile
from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import partial
from pathlib import Path

import numpy as np

from loadtests.bodies import Traffic
from loadtests.contest import FLOOR, PLAIN, PLAIN_SCIPY, TALLYWARD, Server, running, store
from loadtests.report import facts, short, show
from loadtests.series import Figures, Series
from loadtests.wrk import Stock

HISTORY = "?mode=history"
ENTRIES = '"merchants":[{'
"""Begins the entries of an answer that was asked for them."""


@dataclass(frozen=True)
class Contestant:
    """An application and what it has seen before: rows of every merchant over some days."""

    name: str
    app: str
    each: int = 0
    days: float = 0.0

    @property
    def is_tallyward(self) -> bool:
        return self.app == TALLYWARD


BASE = Contestant("floor: read, decode, reply", FLOOR)
SCIPY = Contestant("plain build, SciPy", PLAIN_SCIPY, each=100)
OWN = Contestant("plain build, own formula", PLAIN, each=100)
STEADY = Contestant("Tallyward, baselines learned", TALLYWARD, each=1150, days=16)
LEARNING = Contestant("Tallyward, learning", TALLYWARD, each=300, days=6)
CONTESTANTS = (BASE, SCIPY, OWN, STEADY, LEARNING)


@contextlib.contextmanager
def warm(
    contestant: Contestant, merchants: int, seed: int, folder: Path, sweep_seconds: float = 5.0
) -> Iterator[tuple[Server, Traffic]]:
    """Run a contestant that has seen rows of every merchant, in the order of time."""
    traffic = Traffic(np.random.default_rng(seed), merchants)
    folder.mkdir()
    with (
        store(folder / "store") as url,
        running(contestant.app, url, sweep_seconds=sweep_seconds) as server,
    ):
        if contestant.each:
            stock = Stock(folder / "history")
            who = traffic.dealt(contestant.each)
            stock.fill(traffic.batches(who, 5000, days=contestant.days))
            server.post(stock, HISTORY if contestant.is_tallyward else "", connections=1)
            stock.path.unlink()
        yield server, traffic


def standings(server: Server) -> str:
    """Say how many streams are learning, steady, alarmed."""
    count: Counter[str] = Counter()
    cursor = ""
    while cursor is not None:
        page = server.get(f"/v1/merchants?limit=200{cursor and '&cursor=' + cursor}")
        count.update(entry["standing"] for entry in page["merchants"])
        cursor = page["next"]
    return ", ".join(f"{many} {standing}" for standing, many in sorted(count.items()))


def batches(traffic: Traffic, rows: int, count: int) -> Iterator[bytes]:
    """Return new batches of the present."""
    return traffic.batches(traffic.zipf(rows * count), rows)


def ratio(ours: Series, other: Series, figure: Callable[[Figures], float]) -> str:
    """Return the median over the rounds of one figure by the other's of the same round."""
    pairs = zip(ours.runs, other.runs, strict=True)
    return short(float(np.median([figure(run) / figure(against) for run, against in pairs])))


def lines(rows: int, series: dict[Contestant, Series]) -> Iterator[list[str]]:
    """Yield a line of the table for every contestant at one batch size."""
    for contestant, ours in series.items():
        median = ours.median()
        against = [
            "" if other == contestant else ratio(ours, series[other], figure)
            for figure in (lambda run: run.rate, lambda run: run.both)
            for other in (BASE, SCIPY, OWN)
        ]
        yield [
            f"{rows}",
            contestant.name,
            f"{median.rate:,.0f}",
            *map(short, (median.p50, median.p99, median.workers, median.store, median.both)),
            *against,
        ]


def compare(
    servers: dict[Contestant, tuple[Server, Traffic]],
    rows: int,
    given: argparse.Namespace,
    folder: Path,
) -> Iterator[list[str]]:
    """Measure all contestants by turns, and yield their lines of the table."""
    series = {
        contestant: Series(
            server,
            partial(batches, traffic, rows),
            folder / f"{number}" / "bodies",
            query="?reply=merchants",
            connections=given.connections,
            wanted="" if contestant == BASE else ENTRIES,
            keeps_nothing=contestant == BASE,
        )
        for number, (contestant, (server, traffic)) in enumerate(servers.items())
    }
    for turn in range(given.rounds):
        for place in range(len(CONTESTANTS)):
            series[CONTESTANTS[(place + turn) % len(CONTESTANTS)]].measure(given.seconds)
    yield from lines(rows, series)


def main() -> None:
    """Print one table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--sizes", type=int, nargs="+", default=[1, 10, 100, 1000, 5000])
    parser.add_argument("--merchants", type=int, default=500)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--seconds", type=float, default=3.0, help="of each run")
    parser.add_argument("--connections", type=int, default=8)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--quick", action="store_true", help="a look only, in seconds")
    given = parser.parse_args()
    if given.quick:
        given.sizes, given.merchants, given.rounds, given.seconds = [10, 1000], 50, 1, 1.0
    print(f"# Speed\n\n{facts('speed')}\n- seed: {given.seed}\n")
    print(
        f"Medians of {given.rounds} runs of {given.seconds:g} s, contestants in rotated order; "
        f"{given.connections} kept-alive connections, {given.merchants} merchants by Zipf's law. "
        "CPU: µs a row, user and system. The store's share includes rewriting its file. Ratios "
        "are medians over the rounds.\n"
    )
    with contextlib.ExitStack() as stack:
        base = Path(stack.enter_context(tempfile.TemporaryDirectory()))
        servers = {}
        for number, contestant in enumerate(CONTESTANTS):
            servers[contestant] = stack.enter_context(
                warm(contestant, given.merchants, given.seed, base / f"{number}")
            )
            if contestant.is_tallyward:
                server, _ = servers[contestant]
                server.settle()
                print(
                    f"{contestant.name}: {contestant.each} rows a merchant over {contestant.days:g}"
                    f" days were posted before; then {standings(server)}.",
                    flush=True,
                )
        heads = ["rows a batch", "", "rows/s", "p50 ms", "p99 ms"]
        heads += ["CPU workers", "CPU store", "CPU both"]
        others = ("floor", "SciPy", "own")
        heads += [f"{what} ÷ {other}" for what in ("rows/s", "CPU") for other in others]
        print()
        show(heads, itertools.chain(*(compare(servers, rows, given, base) for rows in given.sizes)))
        print()
        for contestant, (server, _) in servers.items():
            if contestant.is_tallyward:
                server.settle()
                print(f"{contestant.name}, at the end: {standings(server)}.")


if __name__ == "__main__":
    main()
