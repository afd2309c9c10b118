"""Patterns of made-up amounts that replace a share of a stream's honest ones.

Amounts are minor units of a currency with two decimals. None of them is proof of anything: they
are ways in which people are known, or thought, to invent amounts.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from service.digits.significand import FloatArray, IntArray
from service.digits.views import LEAD_DIGIT, LEAD_PAIR, TAIL_PAIR, TAIL_PAIR_FROM
from service.simulation.cells import shares_of_amounts, shares_of_range
from service.simulation.source import within

_HIGHEST = 10**12


@dataclass(frozen=True, kw_only=True)
class Fraud(ABC):
    """A way to make up amounts."""

    draws: ClassVar[int] = 1

    @abstractmethod
    def replace(self, u: FloatArray, honest: IntArray) -> IntArray:
        """Return what takes the place of honest amounts.

        Parameters
        ----------
        u : float64 array (..., draws)
            Uniform variates, 0 to below 1.
        honest : int64 array (...)
            Minor units.

        Returns
        -------
        int64 array (...)
            Minor units, at least 1.
        """

    @abstractmethod
    def cells(self, honest: FloatArray) -> FloatArray:
        """Return the shares of the watched cells, given those of the honest amounts replaced.

        Parameters
        ----------
        honest : float64 array (199,)
            A view's shares sum to the share of rows that the view sees; so do those returned.
        """


@dataclass(frozen=True, kw_only=True)
class Even(Fraud):
    """Amounts evenly from a range.

    Attributes
    ----------
    low, high : int
        Minor units, 1 <= low < high <= 10**12; high itself does not occur.
    """

    low: int = 4900
    high: int = 5000

    def __post_init__(self) -> None:
        within("low", self.low, 1, _HIGHEST)
        within("high", self.high, self.low + 1, _HIGHEST)

    def replace(self, u: FloatArray, honest: IntArray) -> IntArray:
        """Draw from the range."""
        return self.low + (u[..., 0] * (self.high - self.low)).astype(np.int64)

    def cells(self, honest: FloatArray) -> FloatArray:
        """Count the range."""
        return shares_of_range(self.low, self.high)


@dataclass(frozen=True, kw_only=True)
class UnderLimit(Fraud):
    """Amounts evenly from a band just under a round limit.

    Attributes
    ----------
    limit : int
        Minor units, 100 to 10**12.
    margin : float
        Width of the band as a share of the limit, 0.01 to 0.9.
    """

    limit: int = 10_000
    margin: float = 0.05

    def __post_init__(self) -> None:
        within("limit", self.limit, 100, _HIGHEST)
        within("margin", self.margin, 0.01, 0.9)

    def _band(self) -> Even:
        return Even(low=self.limit - round(self.limit * self.margin), high=self.limit)

    def replace(self, u: FloatArray, honest: IntArray) -> IntArray:
        """Draw from the band."""
        return self._band().replace(u, honest)

    def cells(self, honest: FloatArray) -> FloatArray:
        """Count the band."""
        return self._band().cells(honest)


@dataclass(frozen=True, kw_only=True)
class TwoAmounts(Fraud):
    """Two amounts, again and again, each as often as the other.

    Attributes
    ----------
    amount, other : int
        Minor units, 1 to 10**12.
    """

    amount: int = 3720
    other: int = 5860

    def __post_init__(self) -> None:
        within("amount", self.amount, 1, _HIGHEST)
        within("other", self.other, 1, _HIGHEST)

    def replace(self, u: FloatArray, honest: IntArray) -> IntArray:
        """Toss a coin."""
        return np.where(u[..., 0] < 0.5, self.amount, self.other)

    def cells(self, honest: FloatArray) -> FloatArray:
        """Count both."""
        return shares_of_amounts(np.array([self.amount, self.other]))


@dataclass(frozen=True, kw_only=True)
class OneAmount(Fraud):
    """One amount, again and again.

    Attributes
    ----------
    amount : int
        Minor units, 1 to 10**12.
    """

    amount: int = 4900

    def __post_init__(self) -> None:
        within("amount", self.amount, 1, _HIGHEST)

    def replace(self, u: FloatArray, honest: IntArray) -> IntArray:
        """Repeat it."""
        return np.full(honest.shape, self.amount)

    def cells(self, honest: FloatArray) -> FloatArray:
        """Count it."""
        return shares_of_amounts(np.array([self.amount]))


@dataclass(frozen=True, kw_only=True)
class RoundEndings(Fraud):
    """Honest amounts of at least 10.00 that lose their cents (39.51 becomes 39.00)."""

    def replace(self, u: FloatArray, honest: IntArray) -> IntArray:
        """Drop the cents."""
        return np.where(honest >= TAIL_PAIR_FROM, honest - honest % 100, honest)

    def cells(self, honest: FloatArray) -> FloatArray:
        """Move all endings to 00; leading digits stay as they are."""
        cells = honest.copy()
        cells[TAIL_PAIR] = 0
        cells[TAIL_PAIR.start] = honest[TAIL_PAIR].sum()
        return cells


@dataclass(frozen=True, kw_only=True)
class Digits(Fraud):
    """Amounts of 4, 5 or 6 digits, one after the other from a chain of digits.

    Attributes
    ----------
    first : tuple of float
        Weights of the first digit 1 to 9.
    later : tuple of float
        Weights of a later digit 0 to 9.
    repeat : float
        Factor on the weight of the digit just written, 0 to 10.
    """

    first: tuple[float, ...] = (1.0,) * 9
    later: tuple[float, ...] = (1.0,) * 10
    repeat: float = 1.0

    draws: ClassVar[int] = 7
    _LENGTHS: ClassVar[tuple[int, ...]] = (4, 5, 6)

    def __post_init__(self) -> None:
        if len(self.first) != 9 or len(self.later) != 10:
            raise ValueError("first must have 9 weights and later 10")
        for name, weights in (("first", self.first), ("later", self.later)):
            within(f"{name}, each", min(weights), 0, 1e6)
            within(f"the sum of {name}", sum(weights), 1e-6, 1e7)
        within("repeat", self.repeat, 0, 10)

    def _start(self) -> FloatArray:
        """Shares of the first digit, by digit 0 to 9."""
        weights = np.array((0.0, *self.first))
        return np.asarray(weights / weights.sum())

    def _steps(self) -> FloatArray:
        """Shares of the next digit given the last one, (10, 10)."""
        weights = np.array(self.later) * np.where(np.eye(10) > 0, self.repeat, 1.0)
        return np.asarray(weights / weights.sum(axis=1, keepdims=True))

    def replace(self, u: FloatArray, honest: IntArray) -> IntArray:
        """Write digit after digit."""
        length = np.array(self._LENGTHS)[(len(self._LENGTHS) * u[..., 0]).astype(np.int64)]
        start, steps = np.cumsum(self._start())[:-1], np.cumsum(self._steps(), axis=1)[:, :-1]
        digit = np.searchsorted(start, u[..., 1], side="right")
        amount = digit.copy()
        for place in range(1, max(self._LENGTHS)):
            digit = (u[..., place + 1, None] >= steps[digit]).sum(axis=-1)
            amount = np.where(place < length, amount * 10 + digit, amount)
        return np.asarray(amount, dtype=np.int64)

    def cells(self, honest: FloatArray) -> FloatArray:
        """Follow the chain."""
        start, steps = self._start(), self._steps()
        cells = np.zeros_like(honest)
        cells[LEAD_DIGIT] = start[1:]
        cells[LEAD_PAIR] = (start[1:, None] * steps[1:]).ravel()
        for length in self._LENGTHS:
            before_last = start @ np.linalg.matrix_power(steps, length - 2)
            cells[TAIL_PAIR] += (before_last[:, None] * steps).ravel() / len(self._LENGTHS)
        return cells


@dataclass(frozen=True, kw_only=True)
class HumanDigits(Digits):
    """Digits as people write them down when asked for random ones.

    They avoid 0 and the digit just written, and like 3 and 7. The first digits are those of six-
    digit numbers invented by students in Hill (1988, *Psychological Reports* 62, 967-971), quoted
    from memory; the weights of later digits are a rough choice of ours.
    """

    first: tuple[float, ...] = (0.147, 0.100, 0.104, 0.133, 0.097, 0.157, 0.120, 0.084, 0.058)
    later: tuple[float, ...] = (0.6, 0.9, 1.0, 1.2, 1.0, 1.0, 1.1, 1.3, 1.1, 0.8)
    repeat: float = 0.35


@dataclass(frozen=True, kw_only=True)
class Pair49(Even):
    """49.00 to 49.99: the lead pair 49."""


@dataclass(frozen=True, kw_only=True)
class Ones(Even):
    """1.00 to 1.99: the lead digit 1."""

    low: int = 100
    high: int = 200


@dataclass(frozen=True, kw_only=True)
class ColdCell(Even):
    """73.00 to 73.99: a lead pair to which the detectors give the least weight."""

    low: int = 7300
    high: int = 7400


@dataclass(frozen=True, kw_only=True)
class Uniform(Even):
    """20.00 to 79.99, all alike."""

    low: int = 2000
    high: int = 8000


FRAUD: dict[str, type[Fraud]] = {
    "pair_49": Pair49,
    "round_endings": RoundEndings,
    "invented": Digits,
    "ones": Ones,
    "one_amount": OneAmount,
    "two_amounts": TwoAmounts,
    "under_limit": UnderLimit,
    "cold_cell": ColdCell,
    "human_digits": HumanDigits,
    "uniform_20_80": Uniform,
}
"""Fraud patterns by the names of the command."""
