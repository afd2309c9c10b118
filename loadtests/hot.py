"""One hot merchant in every batch from all workers, beside the same load spread over merchants.

Batches are composed alike: a fixed share of the rows is one merchant's, the rest anyone's. In the
hot load it is the same merchant in every batch, so that all workers meet in one stream; in the
spread load it is another one each time.
"""

from __future__ import annotations

import argparse
import tempfile
from collections.abc import Iterator
from functools import partial
from pathlib import Path

import numpy as np

from loadtests.bodies import Traffic
from loadtests.contest import TALLYWARD, running, store
from loadtests.report import facts, short, show
from loadtests.series import Series
from loadtests.speed import ENTRIES

BAR = 0.6


def batches(traffic: Traffic, rows: int, share: float, one: bool, count: int) -> Iterator[bytes]:
    """Return new batches of the present."""
    return traffic.batches(traffic.hot(count, rows, share, one=one), rows)


def main() -> None:
    """Print one table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--sizes", type=int, nargs="+", default=[10, 100, 1000])
    parser.add_argument("--share", type=float, default=0.2, help="of the one merchant's rows")
    parser.add_argument("--merchants", type=int, default=500)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--seconds", type=float, default=3.0, help="of each run")
    parser.add_argument("--connections", type=int, default=8)
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--quick", action="store_true", help="a look only, in seconds")
    given = parser.parse_args()
    if given.quick:
        given.merchants = 50
        given.sizes, given.rounds, given.seconds = [10, 1000], 1, 1.0
    print(f"# One hot merchant\n\n{facts('hot')}\n- seed: {given.seed}\n")
    print(
        f"Medians of {given.rounds} runs of {given.seconds:g} s, both loads in turn; "
        f"{given.workers} workers, {given.connections} kept-alive connections, "
        f"{given.merchants} merchants, {given.share:.0%} of a batch is one merchant's. "
        "CPU: µs a row.\n"
    )
    heads = ["load", "rows a batch", "rows/s", "p50 ms", "p99 ms", "CPU workers", "CPU store"]
    show([*heads, "rows/s ÷ spread"], lines(given))


def lines(given: argparse.Namespace) -> Iterator[list[str]]:
    """Measure, and yield the lines of the table."""
    traffic = Traffic(np.random.default_rng(given.seed), given.merchants)
    with (
        tempfile.TemporaryDirectory() as base,
        store(Path(base) / "store") as url,
        running(TALLYWARD, url, workers=given.workers) as server,
    ):
        for rows in given.sizes:
            loads = {
                one: Series(
                    server,
                    partial(batches, traffic, rows, given.share, one),
                    Path(base) / f"{one}",
                    query="?reply=merchants",
                    connections=given.connections,
                    wanted=ENTRIES,
                )
                for one in (True, False)
            }
            for turn in range(given.rounds):
                for one in (True, False) if turn % 2 else (False, True):
                    loads[one].measure(given.seconds)
            pairs = zip(loads[True].runs, loads[False].runs, strict=True)
            ratio = float(np.median([hot.rate / spread.rate for hot, spread in pairs]))
            told = f"{ratio:.0%} ({'meets' if ratio >= BAR else 'BELOW'} {BAR:.0%})"
            for one, name in ((False, "spread"), (True, "hot")):
                median = loads[one].median()
                figures = (median.p50, median.p99, median.workers, median.store)
                yield [
                    name,
                    f"{rows}",
                    f"{median.rate:,.0f}",
                    *map(short, figures),
                    told if one else "",
                ]


if __name__ == "__main__":
    main()
