"""Honest streams resampled from a merchant's own amounts, in whole blocks.

Blocks keep what holds within a day or a run of rows: mixes by the hour, series of one price. With
times, blocks are calendar days (UTC), and rows keep their time of day; without, they are runs of
consecutive rows. What holds over longer than a block (months, seasons, growth) is lost.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from decimal import Decimal

import numpy as np

from service.digits.significand import MAX_AMOUNT, FloatArray, IntArray
from service.simulation.cells import shares_of_rows
from service.simulation.source import DAY_MS, START_MS, Honest, Source, within

BLOCK_ROWS = 50

_MINOR = re.compile(r"[+-]?\d+")
_MAJOR = re.compile(r"[+-]?\d*\.\d+")
_TIMES = ("at", "time", "date", "timestamp", "datetime")


class UnreadableFile(ValueError):
    """A file of amounts that cannot be read; the message says where and why."""


@dataclass(frozen=True)
class Amounts:
    """A merchant's own amounts in order.

    Attributes
    ----------
    amount : int64 array (n,)
        Minor units, 1 to 10**15.
    at : int64 array (n,) or None
        Times, ms since 1970 UTC.
    skipped : int
        Rows left out since their amount is not above zero.
    """

    amount: IntArray
    at: IntArray | None = None
    skipped: int = 0


def read_amounts(lines: Iterable[str], decimals: int = 2) -> Amounts:
    """Read a CSV file with a column of amounts and perhaps one of times.

    The columns are those headed ``amount`` and ``at`` (or ``time``, ``date``, ``timestamp``,
    ``datetime``); a file without such a header has the amount first and the time second. Amounts
    are whole minor units, or, if any of them has a decimal point, major units. Times are ISO 8601;
    those without an offset are UTC.

    Parameters
    ----------
    lines : iterable of str
    decimals : int
        Decimals of the currency, 0 to 4.

    Raises
    ------
    UnreadableFile
        If a row cannot be read, or no row has an amount above zero.
    """
    within("decimals", decimals, 0, 4)
    rows = [(i, row) for i, row in enumerate(csv.reader(lines), 1) if any(f.strip() for f in row)]
    if not rows:
        raise UnreadableFile("the file is empty")
    head = [field.strip().lower().lstrip("\ufeff") for field in rows[0][1]]
    if "amount" in head:
        first, second = head.index("amount"), next((head.index(t) for t in _TIMES if t in head), -1)
        rows = rows[1:]
    elif _is_amount(head[0]):
        first, second = 0, 1 if len(head) > 1 else -1
    else:
        raise UnreadableFile("line 1: expected a column headed amount, or an amount")
    texts = [(i, _field(row, first, i)) for i, row in rows]
    for i, text in texts:
        if not _is_amount(text):
            raise UnreadableFile(f"line {i}: {text!r} is not an amount such as 1999 or 19.99")
    scale = decimals if any("." in text for _, text in texts) else 0
    exact = [_minor(text, scale, i) for i, text in texts]
    kept = [k for k, amount in enumerate(exact) if amount > 0]
    if not kept:
        raise UnreadableFile("no row has an amount above zero")
    amount = np.array([exact[k] for k in kept], np.int64)
    at = None
    if second >= 0:
        at = np.array([_time(_field(rows[k][1], second, rows[k][0]), rows[k][0]) for k in kept])
    return Amounts(amount, at, len(exact) - len(kept))


@dataclass(frozen=True, kw_only=True)
class Resampled(Honest):
    """Blocks of a merchant's own amounts, drawn with replacement.

    Attributes
    ----------
    amounts : Amounts
        At least two blocks of them.
    per_day : int
        Rows a day where the amounts have no times, 1 to 100 000; else each day has its own.
    """

    amounts: Amounts

    def __post_init__(self) -> None:
        super().__post_init__()
        if len(self.blocks()) < 2:
            unit = f"{BLOCK_ROWS} rows" if self.amounts.at is None else "one day (UTC)"
            raise ValueError(f"amounts must hold at least two blocks of {unit}")

    def blocks(self) -> list[IntArray]:
        """Return the rows of each block: indices into the amounts."""
        if self.amounts.at is None:
            whole = len(self.amounts.amount) // BLOCK_ROWS * BLOCK_ROWS
            return list(np.arange(whole).reshape(-1, BLOCK_ROWS))
        order = np.argsort(self.amounts.at, kind="stable")
        day = self.amounts.at[order] // DAY_MS
        return np.split(order, np.flatnonzero(np.diff(day)) + 1)

    def source(self, seeds: Sequence[np.random.SeedSequence]) -> Source:
        """Return the rows of one stream per seed."""
        return _Blocks(self, seeds)

    def rows_a_day(self) -> float:
        """Return how many rows a day has on average."""
        if self.amounts.at is None:
            return self.per_day
        return len(self.amounts.amount) / len(self.blocks())

    def cells(self, seed: int = 0) -> FloatArray:
        """Return the shares of the amounts given, (1, 199); exact for what is resampled."""
        return shares_of_rows(self.amounts.amount[np.concatenate(self.blocks())])[None]


class _Blocks:
    """Rows of resampled streams: what is left of each stream's last block, then further blocks."""

    def __init__(self, own: Resampled, seeds: Sequence[np.random.SeedSequence]) -> None:
        self._own = own
        self._blocks = own.blocks()
        self._rngs = [np.random.Generator(np.random.SFC64(s)) for s in seeds]
        self._left = [(np.empty(0, np.int64), np.empty(0, np.int64)) for _ in seeds]
        self._days = [0] * len(seeds)
        self._rows = [0] * len(seeds)

    def rows(self, n: int) -> tuple[IntArray, IntArray]:
        taken = [self._next(s, n) for s in range(len(self._rngs))]
        return np.stack([a for a, _ in taken]), np.stack([at for _, at in taken])

    def keep(self, streams: IntArray) -> None:
        chosen = streams.tolist()
        self._rngs = [self._rngs[s] for s in chosen]
        self._left = [self._left[s] for s in chosen]
        self._days = [self._days[s] for s in chosen]
        self._rows = [self._rows[s] for s in chosen]

    def _next(self, s: int, n: int) -> tuple[IntArray, IntArray]:
        parts = [self._left[s]]
        have = len(parts[0][0])
        while have < n:
            parts.append(self._block(s))
            have += len(parts[-1][0])
        amount = np.concatenate([a for a, _ in parts])
        at = np.concatenate([t for _, t in parts])
        self._left[s] = amount[n:], at[n:]
        return amount[:n], at[:n]

    def _block(self, s: int) -> tuple[IntArray, IntArray]:
        own = self._own.amounts
        rows = self._blocks[int(self._rngs[s].integers(len(self._blocks)))]
        if own.at is None:
            number = self._rows[s] + np.arange(len(rows))
            self._rows[s] += len(rows)
            return own.amount[rows], START_MS + number * DAY_MS // self._own.per_day
        at = START_MS + self._days[s] * DAY_MS + own.at[rows] % DAY_MS
        self._days[s] += 1
        return own.amount[rows], at


def _is_amount(text: str) -> bool:
    return bool(_MINOR.fullmatch(text) or _MAJOR.fullmatch(text))


def _field(row: Sequence[str], column: int, line: int) -> str:
    if column >= len(row):
        raise UnreadableFile(f"line {line}: has only {len(row)} columns")
    return row[column].strip()


def _minor(text: str, scale: int, line: int) -> int:
    exact = Decimal(text).scaleb(scale)
    if exact != exact.to_integral_value():
        raise UnreadableFile(f"line {line}: {text} has more than {scale} decimals")
    if exact > MAX_AMOUNT:
        raise UnreadableFile(f"line {line}: {text} is above 10**15 minor units")
    return int(exact)


def _time(text: str, line: int) -> int:
    try:
        at = datetime.fromisoformat(text)
    except ValueError as error:
        raise UnreadableFile(f"line {line}: {text!r} is not an ISO 8601 time") from error
    if at.tzinfo is None:
        at = at.replace(tzinfo=UTC)
    return round(at.timestamp() * 1000)
