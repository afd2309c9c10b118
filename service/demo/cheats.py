"""Three ways to cheat, planted into three merchants on the day of the fair."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from service.demo.amounts import IntArray

Invention = Callable[[np.random.Generator, int], IntArray]
"""(generator, n) to n made-up amounts, minor units."""


@dataclass(frozen=True)
class Plan:
    """What a merchant is going to do.

    Attributes
    ----------
    how : str
        What it does, in words.
    share : float
        Share of its sales that are made up once it has begun, 0 to 1.
    after : float
        Share of the last day's sales that are still all honest, 0 to 1.
    invention : Invention
        Where the made-up amounts come from.
    """

    how: str
    share: float
    after: float
    invention: Invention


def under_limit(limit: int, margin: int) -> Invention:
    """Stay just under an approval limit: whole minor units in [limit - margin, limit)."""

    def invent(rng: np.random.Generator, n: int) -> IntArray:
        return rng.integers(limit - margin, limit, n)

    return invent


def same_ticket(amount: int) -> Invention:
    """Ring up one and the same amount, in minor units, again and again."""

    def invent(rng: np.random.Generator, n: int) -> IntArray:
        return np.full(n, amount, dtype=np.int64)

    return invent


def made_up(lengths: dict[int, float]) -> Invention:
    """Make amounts up the way people do: every digit alike, and never the same one twice in a row.

    Parameters
    ----------
    lengths : dict
        Number of digits of the minor-unit integer to its share; shares sum to 1.
    """
    sizes, shares = np.array(list(lengths)), np.array(list(lengths.values()))

    def invent(rng: np.random.Generator, n: int) -> IntArray:
        digit = rng.integers(1, 10, n)
        amount = digit.copy()
        length = rng.choice(sizes, n, p=shares)
        for place in range(1, int(sizes.max())):
            digit = (digit + rng.integers(1, 10, n)) % 10  # any digit but the one before
            amount = np.where(place < length, amount * 10 + digit, amount)
        return amount

    return invent


PLANS: dict[str, Plan] = {
    "mole-end-timber": Plan(
        how="keeps many amounts just under its approval limit of 5000.00",
        share=0.28,
        after=0.40,
        invention=under_limit(500_000, 10_000),
    ),
    "seven-knots-toys": Plan(
        how="rings up one phantom sale of 64.20 over and over, a price it does not have",
        share=0.25,
        after=0.45,
        invention=same_ticket(6420),
    ),
    "tidewell-wholesale": Plan(
        how="makes up half of its invoices",
        share=0.50,
        after=0.35,
        invention=made_up({4: 0.2, 5: 0.5, 6: 0.3}),
    ),
}
