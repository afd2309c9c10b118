"""A series of short runs with one kind of batch against one server, and its medians."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from loadtests.contest import Server
from loadtests.wrk import Run, Stock

LEAD_IN = 0.5  # seconds, not measured: code is compiled, caches are filled, the rate is guessed
LOPSIDED = 0.8
ATTEMPTS = 4


@dataclass(frozen=True)
class Figures:
    """What a run showed, or the medians of several.

    Attributes
    ----------
    rate : float
        Rows a second.
    p50, p99 : float
        Latency in ms; see `loadtests.wrk.Run`.
    workers, store : float
        Processor time a row, user and system, in µs.
    """

    rate: float
    p50: float
    p99: float
    workers: float
    store: float

    @property
    def both(self) -> float:
        """Processor time a row in all, in µs."""
        return self.workers + self.store


def medians(runs: Sequence[Figures]) -> Figures:
    """Return the median of each figure."""
    columns = zip(*(vars(run).values() for run in runs), strict=True)
    return Figures(*(float(np.median(column)) for column in columns))


class Series:
    """Runs of one kind.

    Parameters
    ----------
    server : Server
    batches : callable
        Returns so many new bodies.
    file : Path
        For the bodies; no other series' file.
    query : str
        Of the posts.
    connections : int
    wanted : str
        What every answer must hold.
    keeps_nothing : bool
        The server does not mind to get bodies again, so a few serve for a run of any length.
    """

    def __init__(
        self,
        server: Server,
        batches: Callable[[int], Iterator[bytes]],
        file: Path,
        *,
        query: str = "",
        connections: int = 8,
        wanted: str = "",
        keeps_nothing: bool = False,
    ) -> None:
        self.server = server
        self.batches = batches
        self.stock = Stock(file)
        self.again = keeps_nothing
        self.how = {"query": query, "connections": connections, "wanted": wanted}
        self.connections = connections
        self.runs: list[Figures] = []
        self._pace = 0.0  # batches a second, the fastest so far

    def measure(self, seconds: float) -> Figures:
        """Do a run, after a lead-in if it is the first.

        Connections stay with the worker that took them. A run in which one worker did nearly
        everything would measure that accident, so it is done again, a few times at most.
        """
        if not self._pace:
            self._pace = 100.0
            self._run(LEAD_IN)
        for _ in range(ATTEMPTS):
            worked, stored = self.server.worked(), self.server.stored()
            run = self._run(seconds)
            spent = np.subtract(self.server.worked(), worked)
            if len(spent) < 2 or spent.max() < LOPSIDED * spent.sum():
                break
        cost = 1e6 / run.rows
        stored = self.server.stored() - stored
        self.runs.append(
            Figures(run.rate, run.p50, run.p99, float(spent.sum()) * cost, stored * cost)
        )
        return self.runs[-1]

    def median(self) -> Figures:
        """Return the median of each figure over the runs."""
        return medians(self.runs)

    def _run(self, seconds: float) -> Run:
        needed = math.ceil(1.5 * self._pace * seconds) + self.connections
        if self.again:
            needed = min(needed, 200)
        if self.stock.left < needed:
            self.stock.fill(self.batches(needed))
        run = self.server.post(self.stock, seconds=seconds, again=self.again, **self.how)
        self._pace = max(self._pace, run.batches / run.seconds)
        return run
