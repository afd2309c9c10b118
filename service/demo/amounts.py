"""How the invented merchants price: each way takes the hours of n sales and returns n amounts.

Amounts are int64 minor units of the merchant's currency, hours are town time in [0, 24). Only the
hour of the day may shape an amount, so that every day of an honest merchant has the same mix.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence

import numpy as np
import numpy.typing as npt

IntArray = npt.NDArray[np.int64]
FloatArray = npt.NDArray[np.float64]
Pricing = Callable[[np.random.Generator, FloatArray], IntArray]
"""(generator, hours (n,)) to amounts (n,), all above 0."""


def wide_range(median: int, sigma: float) -> Pricing:
    """Price by negotiation over a wide range: log-normal amounts, which follow the law.

    Parameters
    ----------
    median : int
        Median amount, minor units.
    sigma : float
        Standard deviation of log10 of the amount. The h-th Fourier coefficient on the circle of
        log10 is exp(-2 pi^2 h^2 sigma^2): below 0.001 from 0.6 on, so the law holds closely.
    """

    def price(rng: np.random.Generator, hours: FloatArray) -> IntArray:
        powers = rng.normal(np.log10(median), sigma, hours.size)
        return np.maximum(np.rint(10**powers), 1).astype(np.int64)

    return price


def price_list(
    prices: Mapping[int, float], *, items: Sequence[float] = (1.0,), together: bool = False
) -> Pricing:
    """Price from a list: the sum of one or more listed prices.

    Parameters
    ----------
    prices : mapping
        Price in minor units to how often it is bought, relative to the others.
    items : sequence of float
        How often a sale has 1, 2, ... items, relative to each other.
    together : bool
        Whether all items of a sale have the same price, as tickets have.
    """
    listed = np.array(list(prices), dtype=np.int64)
    liking = np.array(list(prices.values()), dtype=np.float64)
    liking = liking / liking.sum()
    crowd = np.asarray(items, dtype=np.float64)
    crowd = crowd / crowd.sum()

    def price(rng: np.random.Generator, hours: FloatArray) -> IntArray:
        count = 1 + rng.choice(crowd.size, hours.size, p=crowd)
        if together:
            ticket = listed[rng.choice(listed.size, hours.size, p=liking)]
            return np.asarray(ticket * count, dtype=np.int64)
        picked = listed[rng.choice(listed.size, (hours.size, crowd.size), p=liking)]
        bought = np.arange(crowd.size) < count[:, None]
        return np.asarray((picked * bought).sum(axis=1), dtype=np.int64)

    return price


def lunch_and_dinner(lunch: Pricing, dinner: Pricing, *, dinner_from: float = 16.0) -> Pricing:
    """Price by two menus, one until ``dinner_from`` (hour of the day) and one after it."""

    def price(rng: np.random.Generator, hours: FloatArray) -> IntArray:
        midday, evening = lunch(rng, hours), dinner(rng, hours)
        return np.where(hours < dinner_from, midday, evening)

    return price


def fuel(per_litre: float, litres: float, spread: float, *, stop_at_round: float) -> Pricing:
    """Price by the litre, with some drivers stopping the pump at a round amount.

    Parameters
    ----------
    per_litre : float
        Minor units a litre.
    litres, spread : float
        Mean and standard deviation of a filling, litres.
    stop_at_round : float
        Share of sales that stop at 10, 20, 30, 40 or 50 major units, 0 to 1.
    """
    rounds = np.array([1000, 2000, 3000, 4000, 5000])

    def price(rng: np.random.Generator, hours: FloatArray) -> IntArray:
        filling = np.clip(rng.normal(litres, spread, hours.size), 4.0, 90.0)
        metered = np.rint(filling * per_litre).astype(np.int64)
        stopped = rng.random(hours.size) < stop_at_round
        return np.where(stopped, rng.choice(rounds, hours.size), metered)

    return price


def by_measure(per_unit: int, lowest: int, highest: int) -> Pricing:
    """Price by whole units (metres of boat, nights, kilometres), evenly from lowest to highest."""

    def price(rng: np.random.Generator, hours: FloatArray) -> IntArray:
        return per_unit * rng.integers(lowest, highest + 1, hours.size)

    return price
