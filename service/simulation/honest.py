"""Patterns of honest business, as seeded amounts of many independent merchants at once.

Every pattern takes its parameters by name and has a default for each. Amounts are minor units of a
currency with two decimals; times are UTC.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import ClassVar

import numpy as np
from scipy.special import ndtr, ndtri

from service.digits.laws import law_cells, leading_law
from service.digits.significand import FloatArray, IntArray, decade
from service.digits.views import LEAD_PAIR, TAIL_PAIR
from service.simulation.cells import shares_of_range, shares_of_smooth
from service.simulation.source import DAY_MS, HOUR_MS, MONTH_DAYS, START_MS, Pattern, whole, within

_LN10 = float(np.log(10))
_DECADES = range(16)


@dataclass(frozen=True, kw_only=True)
class Law(Pattern):
    """Exactly logarithmic leading digits over several decades, and exactly even endings.

    Attributes
    ----------
    decades : int
        How many decades from 100.00 on, 1 to 9; whole ones, so that the law holds exactly.
    """

    decades: int = 4
    independent: ClassVar[bool] = True
    draws: ClassVar[int] = 2

    def __post_init__(self) -> None:
        super().__post_init__()
        within("decades", self.decades, 1, 9)

    def amounts(self, u: FloatArray, row: IntArray, merchant: IntArray) -> IntArray:
        """Draw major units log-uniformly, and the cents apart from them."""
        major = np.exp(u[..., 0] * (self.decades * _LN10)) * 100
        return major.astype(np.int64) * 100 + (u[..., 1] * 100).astype(np.int64)

    def cells(self, seed: int = 0) -> FloatArray:
        """Return the law, exactly; see `Honest.cells`."""
        return law_cells()[None]


@dataclass(frozen=True, kw_only=True)
class NearNine(Law):
    """Follows the law, but for prices moved to a second digit 9 (39.51 instead of 34.51).

    Attributes
    ----------
    moved : float
        Share of them, 0 to 1.
    """

    moved: float = 0.10
    draws: ClassVar[int] = 3

    def __post_init__(self) -> None:
        super().__post_init__()
        within("moved", self.moved, 0, 1)

    def amounts(self, u: FloatArray, row: IntArray, merchant: IntArray) -> IntArray:
        """Draw by the law, then move."""
        amounts = super().amounts(u, row, merchant)
        place = 10 ** (decade(amounts) - 1)
        nine = amounts + (9 - amounts // place % 10) * place
        return np.where(u[..., 2] < self.moved, nine, amounts)

    def cells(self, seed: int = 0) -> FloatArray:
        """Return the exact shares; see `Honest.cells`."""
        cells = law_cells()
        cells[LEAD_PAIR] *= 1 - self.moved
        cells[LEAD_PAIR][9::10] += self.moved * leading_law(1)
        return cells[None]


@dataclass(frozen=True, kw_only=True)
class QuarterEndings(Law):
    """Follows the law, but for a share of endings on 00, 25, 50 and 75.

    Attributes
    ----------
    moved : float
        Share of them, 0 to 1.
    """

    moved: float = 0.30
    draws: ClassVar[int] = 3

    def __post_init__(self) -> None:
        super().__post_init__()
        within("moved", self.moved, 0, 1)

    def amounts(self, u: FloatArray, row: IntArray, merchant: IntArray) -> IntArray:
        """Draw by the law, then move."""
        amounts = super().amounts(u, row, merchant)
        quarter = amounts - amounts % 25
        return np.where(u[..., 2] < self.moved, quarter, amounts)

    def cells(self, seed: int = 0) -> FloatArray:
        """Return the exact shares; see `Honest.cells`."""
        cells = law_cells()
        cells[TAIL_PAIR] *= 1 - self.moved
        cells[TAIL_PAIR][::25] += self.moved / 4
        return cells[None]


@dataclass(frozen=True, kw_only=True)
class NearLimit(Law):
    """Follows the law, but for a habit of amounts just under a review limit.

    Attributes
    ----------
    limit : int
        Minor units, 10 000 to 10**12.
    margin : float
        Width of the band under the limit, as a share of it, 0.001 to 0.9.
    moved : float
        Share of such amounts, 0 to 1.
    """

    limit: int = 1_000_000
    margin: float = 0.05
    moved: float = 0.03
    draws: ClassVar[int] = 3

    def __post_init__(self) -> None:
        super().__post_init__()
        within("limit", self.limit, 10_000, 10**12)
        within("margin", self.margin, 0.001, 0.9)
        within("moved", self.moved, 0, 1)

    def amounts(self, u: FloatArray, row: IntArray, merchant: IntArray) -> IntArray:
        """Draw by the law, or evenly from the band."""
        width = int(self.limit * self.margin)
        moved = u[..., 2] < self.moved
        # what is left of the variate that chose is uniform again
        again = u[..., 2] / max(self.moved, 1e-12)
        under = self.limit - 1 - (np.where(moved, again, 0.0) * width).astype(np.int64)
        return np.where(moved, under, super().amounts(u, row, merchant))

    def cells(self, seed: int = 0) -> FloatArray:
        """Return the exact shares; see `Honest.cells`."""
        width = int(self.limit * self.margin)
        under = shares_of_range(self.limit - width, self.limit)
        return ((1 - self.moved) * law_cells() + self.moved * under)[None]


@dataclass(frozen=True, kw_only=True)
class LogNormal(Pattern):
    """Log-normal amounts: near the law if they spread widely.

    The h-th Fourier coefficient on the circle of log10 is ``exp(-2 pi^2 h^2 sigma^2)``.

    Attributes
    ----------
    sigma : float
        Standard deviation of log10 of the amount, 0.05 to 2.
    median : float
        Minor units, 1 to 10**9.
    """

    sigma: float = 0.5
    median: float = 12_000
    independent: ClassVar[bool] = True

    def __post_init__(self) -> None:
        super().__post_init__()
        within("sigma", self.sigma, 0.05, 2)
        within("median", self.median, 1, 1e9)

    def amounts(self, u: FloatArray, row: IntArray, merchant: IntArray) -> IntArray:
        """Draw by the inverse of the normal distribution function."""
        return whole(np.exp(_LN10 * (np.log10(self.median) + self.sigma * ndtri(u[..., 0]))))

    def cells(self, seed: int = 0) -> FloatArray:
        """Return the shares by the normal distribution function; see `Honest.cells`."""
        return shares_of_smooth(self._cumulative, _DECADES)[None]

    def _cumulative(self, x: FloatArray) -> FloatArray:
        return _normal_of_log10(x, float(np.log10(self.median)), self.sigma)


@dataclass(frozen=True, kw_only=True)
class Bimodal(Pattern):
    """Two kinds of sale, small and large: a wide spread that is nevertheless far from the law.

    By default log10 has standard deviation 0.51, and the density on its circle is off by up to
    45 %: a rule that looks at the spread alone would accept the law.

    Attributes
    ----------
    sigma : float
        Standard deviation of log10 within each kind, 0.05 to 2.
    gap : float
        Decades between the two medians, 0 to 4.
    median : float
        Geometric mean of the two medians, minor units, 1 to 10**9.
    """

    sigma: float = 0.266
    gap: float = 0.87
    median: float = 12_000
    independent: ClassVar[bool] = True
    draws: ClassVar[int] = 2

    def __post_init__(self) -> None:
        super().__post_init__()
        within("sigma", self.sigma, 0.05, 2)
        within("gap", self.gap, 0, 4)
        within("median", self.median, 1, 1e9)

    def amounts(self, u: FloatArray, row: IntArray, merchant: IntArray) -> IntArray:
        """Draw the kind, then the amount."""
        mean = np.log10(self.median) + self.gap * (np.where(u[..., 0] < 0.5, -0.5, 0.5))
        return whole(np.exp(_LN10 * (mean + self.sigma * ndtri(u[..., 1]))))

    def cells(self, seed: int = 0) -> FloatArray:
        """Return the shares by the normal distribution function; see `Honest.cells`."""
        return shares_of_smooth(self._cumulative, _DECADES)[None]

    def _cumulative(self, x: FloatArray) -> FloatArray:
        mean, half = float(np.log10(self.median)), self.gap / 2
        low = _normal_of_log10(x, mean - half, self.sigma)
        return (low + _normal_of_log10(x, mean + half, self.sigma)) / 2


@dataclass(frozen=True, kw_only=True)
class PricePoints(Pattern):
    """A shop: each merchant has its own short price list, and sells baskets of one to three.

    Attributes
    ----------
    prices : int
        Length of the list, 1 to 200; the n-th is bought in proportion to 1/n.
    """

    prices: int = 12
    draws: ClassVar[int] = 4
    traits: ClassVar[int] = 400

    _ENDINGS: ClassVar[IntArray] = np.array([99, 95, 90, 50, 0])
    _BASKETS: ClassVar[FloatArray] = np.array([0.70, 0.92])

    def __post_init__(self) -> None:
        super().__post_init__()
        within("prices", self.prices, 1, 200)

    def merchants(self, traits: FloatArray) -> IntArray:
        """Return price lists: log-normal major units around 15, with usual endings."""
        level, ending = traits[:, : self.prices], traits[:, 200 : 200 + self.prices]
        major = whole(np.exp(_LN10 * (1.2 + 0.35 * ndtri(level))))
        chosen = np.searchsorted(np.array([0.45, 0.60, 0.75, 0.88]), ending, side="right")
        return major * 100 + self._ENDINGS[chosen]

    def amounts(self, u: FloatArray, row: IntArray, merchant: IntArray) -> IntArray:
        """Fill the baskets."""
        liking = np.cumsum(1 / np.arange(1, self.prices + 1))
        items = np.searchsorted(liking[:-1] / liking[-1], u[..., 1:], side="right")
        price = np.take_along_axis(merchant, items.reshape(len(merchant), -1), axis=1)
        bought = np.searchsorted(self._BASKETS, u[..., :1], side="right") >= np.arange(3)
        return np.asarray(np.where(bought, price.reshape(items.shape), 0).sum(axis=2))


@dataclass(frozen=True, kw_only=True)
class Promotion(PricePoints):
    """A shop that drops the cents of many sales during some days of every month.

    Attributes
    ----------
    days : int
        Length of the promotion at the end of every 30 days, 0 to 30.
    dropped : float
        Share of the sales of those days that lose their cents, 0 to 1.
    """

    days: int = 7
    dropped: float = 0.5
    draws: ClassVar[int] = 5

    def __post_init__(self) -> None:
        super().__post_init__()
        within("days", self.days, 0, MONTH_DAYS)
        within("dropped", self.dropped, 0, 1)

    def amounts(self, u: FloatArray, row: IntArray, merchant: IntArray) -> IntArray:
        """Fill the baskets, then drop cents on the promotion's days."""
        amounts = super().amounts(u[..., :4], row, merchant)
        on = row // self.per_day % MONTH_DAYS >= MONTH_DAYS - self.days
        dropped = on & (u[..., 4] < self.dropped) & (amounts >= 100)
        return np.where(dropped, amounts - amounts % 100, amounts)


@dataclass(frozen=True, kw_only=True)
class LunchAndDinner(Pattern):
    """A restaurant with two menus of its own: lunch from 11:30 to 14:30, dinner from 18 to 22.

    Attributes
    ----------
    dinner : float
        Share of the day's bills that are dinners, 0 to 1.
    """

    dinner: float = 0.5
    draws: ClassVar[int] = 6
    traits: ClassVar[int] = 16

    def __post_init__(self) -> None:
        super().__post_init__()
        within("dinner", self.dinner, 0, 1)

    def merchants(self, traits: FloatArray) -> IntArray:
        """Return menus: 4 lunches (7.90 to 14.90), 8 dinner dishes (9 to 33, by halves) and 4
        drinks (3 to 8, by tenths)."""
        lunch = 790 + 100 * (8 * traits[:, :4]).astype(np.int64)
        dish = 900 + 50 * (49 * traits[:, 4:12]).astype(np.int64)
        drink = 300 + 10 * (51 * traits[:, 12:]).astype(np.int64)
        return np.concatenate([lunch, dish, drink], axis=1)

    def amounts(self, u: FloatArray, row: IntArray, merchant: IntArray) -> IntArray:
        """One lunch, perhaps with a drink; or two to four dishes and one or two drinks."""

        def pick(first: int, count: int, draw: FloatArray) -> IntArray:
            return np.take_along_axis(merchant, first + (count * draw).astype(np.int64), axis=1)

        drink = pick(12, 4, u[..., 0])
        lunch = pick(0, 4, u[..., 1]) + np.where(u[..., 2] < 0.4, drink, 0)
        dishes = pick(4, 8, u[..., 1]) + pick(4, 8, u[..., 2])
        dishes += np.where(u[..., 3] < 0.4, pick(4, 8, u[..., 4]), 0)
        dinner = dishes + drink * np.where(u[..., 5] < 0.5, 1, 2)
        return np.where(self._at_lunch(row), lunch, dinner)

    def at(self, row: IntArray) -> IntArray:
        """Return times spread evenly over the two openings."""
        day, rank = row // self.per_day, row % self.per_day
        lunches = self._lunches()
        noon = 23 * HOUR_MS // 2 + rank * 3 * HOUR_MS // max(lunches, 1)
        night = 18 * HOUR_MS + (rank - lunches) * 4 * HOUR_MS // max(self.per_day - lunches, 1)
        return START_MS + day * DAY_MS + np.where(self._at_lunch(row), noon, night)

    def _lunches(self) -> int:
        return round(self.per_day * (1 - self.dinner))

    def _at_lunch(self, row: IntArray) -> IntArray:
        return np.asarray(row % self.per_day < self._lunches())


@dataclass(frozen=True, kw_only=True)
class Recurring(Pattern):
    """A biller of three plans, each on its day of the month, with single purchases in between.

    Plans of 4.99, 9.99 and 19.99 are billed on the 1st, 10th and 20th of a 30-day month; single
    purchases (log-normal around 25.00) come evenly. A month has ``30 * per_day`` rows.

    Attributes
    ----------
    single : float
        Share of single purchases, 0.01 to 1; the rest is shared 4 : 4 : 2 by the plans.
    """

    single: float = 0.25
    draws: ClassVar[int] = 2

    _PRICES: ClassVar[IntArray] = np.array([499, 999, 1999])

    def __post_init__(self) -> None:
        super().__post_init__()
        within("single", self.single, 0.01, 1)

    def amounts(self, u: FloatArray, row: IntArray, merchant: IntArray) -> IntArray:
        """Bill the plans, now and then with a single purchase in between."""
        single = whole(np.exp(_LN10 * (3.4 + 0.4 * ndtri(u[..., 0]))))
        plan, _ = _month(self.per_day, self.single)
        billed = plan[row % len(plan)]
        return np.where((billed >= 0) & (u[..., 1] < 0.97), self._PRICES[billed], single)

    def at(self, row: IntArray) -> IntArray:
        """Return times; a plan's bills go out in the morning of its day."""
        _, within_month = _month(self.per_day, self.single)
        rows = len(within_month)
        return START_MS + row // rows * (MONTH_DAYS * DAY_MS) + within_month[row % rows]


HONEST: dict[str, type[Pattern]] = {
    "law": Law,
    "lognormal": LogNormal,
    "bimodal": Bimodal,
    "price_points": PricePoints,
    "lunch_and_dinner": LunchAndDinner,
    "recurring": Recurring,
    "promotion": Promotion,
    "near_nine": NearNine,
    "quarter_endings": QuarterEndings,
    "near_limit": NearLimit,
}
"""Honest patterns by the names of the command."""


def _normal_of_log10(x: FloatArray, mean: float, sigma: float) -> FloatArray:
    log = np.log10(np.maximum(x, 1e-300))
    return np.asarray(ndtr((log - mean) / sigma))


@cache
def _month(per_day: int, single: float) -> tuple[IntArray, IntArray]:
    """Return the plan (-1 for none) and the time within the month of each row of `Recurring`."""
    rows = MONTH_DAYS * per_day
    bills = np.rint((1 - single) * rows * np.array([0.4, 0.4, 0.2])).astype(np.int64)
    singles = rows - int(bills.sum())
    plan = np.concatenate([np.repeat(np.arange(3), bills), np.full(singles, -1)])
    evenly = np.arange(singles) * (MONTH_DAYS * DAY_MS) // max(singles, 1)
    morning = [
        day * DAY_MS + 6 * HOUR_MS + np.arange(n) * HOUR_MS // max(n, 1)
        for day, n in zip((0, 9, 19), bills.tolist(), strict=True)
    ]
    at = np.concatenate([*morning, evenly])
    order = np.argsort(at, kind="stable")
    return plan[order], at[order]
