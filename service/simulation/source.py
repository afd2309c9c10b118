"""Where simulated rows come from: many independent streams, any number of rows at a time.

Each stream draws from its own child seed, row after row, so that a stream's rows depend neither on
the other streams nor on how many rows are asked for at a time.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass
from typing import ClassVar, Protocol

import numpy as np

from service.digits.significand import MAX_AMOUNT, FloatArray, IntArray
from service.simulation.cells import shares_of_rows

START_MS = 946_684_800_000
"""Event time of a stream's first day: 1 January 2000, 00:00 UTC."""
DAY_MS = 86_400_000
HOUR_MS = 3_600_000

MONTH_DAYS = 30
"""A month of the simulation: every pattern repeats itself after it."""

_OPENS_MS, _OPEN_MS = 8 * HOUR_MS, 14 * HOUR_MS

SAMPLED_STREAMS = 8
SAMPLED_ROWS = 250_000
"""Streams and rows of each from which shares without a closed form are counted."""


class Source(Protocol):
    """Rows of many streams in order."""

    def rows(self, n: int) -> tuple[IntArray, IntArray]:
        """Return the next n rows of every stream.

        Returns
        -------
        amounts : int64 array (streams, n)
            Minor units, 1 to 10**15.
        at : int64 array (streams, n) or (1, n)
            Event times, ms since 1970 UTC.
        """
        ...

    def keep(self, streams: IntArray) -> None:
        """Go on with some of the streams only, given by their present positions."""
        ...


@dataclass(frozen=True, kw_only=True)
class Honest(ABC):
    """Ordinary business, of many merchants.

    Attributes
    ----------
    per_day : int
        Rows a day, 1 to 100 000.
    """

    per_day: int = 100

    independent: ClassVar[bool] = False
    """Whether rows are independent and alike, in all streams: then `cells` are the probabilities
    of a row whatever came before it, and a policy's bounds can be held against them."""

    def __post_init__(self) -> None:
        within("per_day", self.per_day, 1, 100_000)

    @abstractmethod
    def source(self, seeds: Sequence[np.random.SeedSequence]) -> Source:
        """Return the rows of one stream per seed."""

    def rows_a_day(self) -> float:
        """Return how many rows a day has on average."""
        return self.per_day

    def cells(self, seed: int = 0) -> FloatArray:
        """Return the shares of the watched cells over the long run, of some typical merchants.

        A view's shares sum to the share of rows that the view sees. Counted from
        `SAMPLED_STREAMS` streams of `SAMPLED_ROWS` rows (whole months) unless the pattern knows
        its shares exactly; then there is one merchant, and the seed is not used.

        Returns
        -------
        float64 array (merchants, 199)
        """
        month = MONTH_DAYS * self.per_day
        rows = -(-SAMPLED_ROWS // month) * month
        children = np.random.SeedSequence(seed).spawn(SAMPLED_STREAMS)
        return np.stack([shares_of_rows(self.source([c]).rows(rows)[0]) for c in children])


@dataclass(frozen=True, kw_only=True)
class Pattern(Honest):
    """Business by a rule.

    A row is a function of uniform variates, of the row's number, and of what is particular to the
    merchant (its *traits*: uniform variates, too, drawn once a stream).
    """

    draws: ClassVar[int] = 1
    traits: ClassVar[int] = 0

    def source(self, seeds: Sequence[np.random.SeedSequence]) -> Source:
        """Return the rows of one stream per seed."""
        return _Drawn(self, seeds)

    def merchants(self, traits: FloatArray) -> IntArray:
        """Turn traits (streams, T) into what is particular to each merchant, (streams, P)."""
        return np.empty((len(traits), 0), np.int64)

    @abstractmethod
    def amounts(self, u: FloatArray, row: IntArray, merchant: IntArray) -> IntArray:
        """Return the amounts of some rows.

        Parameters
        ----------
        u : float64 array (streams, n, draws)
            Uniform variates, 0 to below 1.
        row : int64 array (n,)
            Row numbers from 0, the same in all streams.
        merchant : int64 array (streams, P)
            What `merchants` returned.

        Returns
        -------
        int64 array (streams, n)
            Minor units, at least 1.
        """

    def at(self, row: IntArray) -> IntArray:
        """Return the event times of rows: evenly over opening hours, 8 to 22 o'clock UTC."""
        day, rank = row // self.per_day, row % self.per_day
        return START_MS + day * DAY_MS + _OPENS_MS + rank * _OPEN_MS // self.per_day


class _Drawn:
    """Rows drawn from a pattern's uniform variates."""

    def __init__(self, pattern: Pattern, seeds: Sequence[np.random.SeedSequence]) -> None:
        self._pattern = pattern
        self._rngs = [np.random.Generator(np.random.SFC64(s)) for s in seeds]
        traits = np.stack([r.random(pattern.traits) for r in self._rngs])
        self._merchant = pattern.merchants(traits)
        self._row = 0

    def rows(self, n: int) -> tuple[IntArray, IntArray]:
        u = uniforms(self._rngs, n, self._pattern.draws)
        row = np.arange(self._row, self._row + n)
        self._row += n
        amounts = self._pattern.amounts(u, row, self._merchant)
        return amounts, self._pattern.at(row)[None]

    def keep(self, streams: IntArray) -> None:
        self._rngs = [self._rngs[s] for s in streams.tolist()]
        self._merchant = self._merchant[streams]


def uniforms(rngs: Sequence[np.random.Generator], n: int, draws: int) -> FloatArray:
    """Return (streams, n, draws) uniform variates; row by row, so that n may be cut anyhow."""
    u = np.empty((len(rngs), n, draws))
    for one, rng in zip(u, rngs, strict=True):
        rng.random(out=one)
    return u


def whole(amounts: FloatArray) -> IntArray:
    """Round to whole minor units within what the service accepts, 1 to 10**15."""
    return np.clip(np.rint(amounts), 1, MAX_AMOUNT).astype(np.int64)


def within(name: str, value: float, low: float, high: float) -> None:
    """Raise ValueError unless ``low <= value <= high`` (so NaN is refused too)."""
    if not low <= value <= high:
        raise ValueError(f"{name} must be {low:g} to {high:g}, got {value:g}")
