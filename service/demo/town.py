"""The cast: the merchants of Quillhaven, a harbour town that does not exist.

Every name is invented. Categories are ISO 18245 merchant category codes.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import partial
from types import MappingProxyType

from service.demo.amounts import (
    Pricing,
    by_measure,
    fuel,
    lunch_and_dinner,
    price_list,
    wide_range,
)

EXPONENT: Mapping[str, int] = MappingProxyType(
    {"EUR": 2, "GBP": 2, "USD": 2, "JPY": 0, "KWD": 3, "TND": 3}
)
"""Decimal places of the currencies used here (ISO 4217)."""

Opening = tuple[tuple[float, float, float], ...]
"""Spans of town time with trade: (from hour, to hour, how busy relative to the others)."""

SHOP: Opening = ((8.0, 10.0, 1.0), (10.0, 17.0, 5.0), (17.0, 19.5, 2.0))
OFFICE: Opening = ((7.0, 12.0, 4.0), (13.0, 19.5, 5.0))
TABLES: Opening = ((11.5, 14.5, 1.0), (18.0, 22.0, 1.0))
ALWAYS: Opening = ((0.0, 24.0, 1.0),)


@dataclass(frozen=True)
class Merchant:
    """One merchant and its habits.

    Attributes
    ----------
    name : str
        As posted in ``merchant``.
    trade : str
        What it does, in words.
    category : str
        ISO 18245 code.
    pricing : Pricing
        How its honest amounts come about.
    follows_law : bool
        Whether its honest amounts follow the logarithmic law of digits.
    currency, flow : str
        Of its main stream.
    daily : float
        Mean rows a day in ordinary weeks.
    fair : float
        How many times busier it is on the last day, when the harbour fair is in town.
    opening : Opening
        When it trades; the same every day.
    refunds, zeros : float
        Share of its rows that give money back, or are free of charge, 0 to 1.
    names_flow : bool
        Whether its till names the ``flow`` of each row; else a refund is a negative amount.
    decimals : bool
        Whether its till sends decimal strings in major units instead of minor units.
    """

    name: str
    trade: str
    category: str
    pricing: Pricing
    follows_law: bool = False
    currency: str = "EUR"
    flow: str = "sale"
    daily: float = 75.0
    fair: float = 3.0
    opening: Opening = SHOP
    refunds: float = 0.0
    zeros: float = 0.0
    names_flow: bool = True
    decimals: bool = False


def _negotiated() -> tuple[Merchant, ...]:
    """Return those who bill what each order comes to, from pennies to fortunes."""

    trader = partial(Merchant, follows_law=True, opening=OFFICE)
    return (
        trader("tidewell-wholesale", "wholesaler", "5199", wide_range(42_000, 0.65),
               daily=220, fair=8.5),
        trader("mole-end-timber", "builders' merchant", "5211", wide_range(61_000, 0.70),
               daily=220, fair=8.5),
        trader("oakum-and-anchor", "ship chandler", "5551", wide_range(24_000, 0.75),
               refunds=0.02),
        trader("lantern-quay-brokers", "insurance broker", "6300", wide_range(38_000, 0.62),
               currency="GBP"),
        trader("saltmarsh-freight", "freight carrier", "4214", wide_range(95_000, 0.80),
               currency="USD"),
        trader("old-compass-antiques", "antiques", "5932", wide_range(18_000, 0.70),
               refunds=0.02, names_flow=False),
        trader("gullwing-auctions", "art auctions", "5971", wide_range(140_000, 0.85),
               currency="GBP", decimals=True),
        trader("far-shore-travel", "travel agency", "4722", wide_range(52_000, 0.63),
               refunds=0.04, names_flow=False, decimals=True),
        trader("harrow-lane-pipes", "plumbing supplies", "5074", wide_range(15_000, 0.66),
               refunds=0.01),
        trader("pearl-weir-gems", "jewellery wholesaler", "5094", wide_range(180_000, 0.68),
               currency="KWD", decimals=True),
    )  # fmt: skip


def _shops() -> tuple[Merchant, ...]:
    """Return those who sell at listed prices."""
    shelf = {
        79: 5, 99: 9, 119: 6, 149: 8, 179: 5, 199: 10, 229: 4, 249: 6, 279: 3, 299: 7,
        349: 4, 399: 5, 449: 2, 499: 4, 599: 3, 699: 2, 899: 1.5, 1199: 1,
    }  # fmt: skip
    return (
        Merchant("kestrel-market", "supermarket", "5411",
                 price_list(shelf, items=(8, 9, 9, 8, 7, 5, 4, 3, 2, 1)),
                 daily=110, refunds=0.01, names_flow=False),
        Merchant("rising-crust", "bakery", "5462",
                 price_list({65: 6, 120: 9, 185: 5, 240: 6, 320: 7, 390: 4, 450: 2},
                            items=(5, 5, 3, 2, 1)), daily=100),
        Merchant("lighthouse-screen", "cinema", "7832",
                 price_list({750: 3, 950: 6, 1150: 8, 1350: 3}, items=(3, 8, 2, 2), together=True),
                 opening=((14.0, 22.5, 1.0),), refunds=0.01),
        Merchant("foghorn-books", "bookshop", "5942",
                 price_list({599: 2, 799: 4, 999: 8, 1099: 5, 1249: 4, 1299: 7, 1495: 6, 1699: 4,
                             1999: 5, 2249: 3, 2495: 3, 2999: 2, 3495: 1}, items=(7, 2, 1)),
                 refunds=0.02, decimals=True),
        Merchant("seven-knots-toys", "toy shop", "5945",
                 price_list({449: 4, 799: 6, 995: 8, 1249: 5, 1499: 8, 1995: 7, 2499: 6, 2995: 5,
                             3999: 4, 4995: 2, 7999: 1}, items=(8, 2, 1)),
                 daily=220, fair=8.5, refunds=0.01),
        Merchant("gannet-fuel", "petrol station", "5541",
                 fuel(172.9, 34.0, 9.0, stop_at_round=0.22), daily=90, opening=ALWAYS),
        Merchant("blue-heron-pharmacy", "pharmacy", "5912",
                 price_list({295: 4, 500: 9, 645: 5, 795: 7, 949: 6, 1195: 5, 1449: 3, 1895: 3,
                             2649: 1}, items=(6, 3, 2)), daily=85, decimals=True),
        Merchant("signal-mast-tv", "television subscriptions", "4899",
                 price_list({599: 2, 999: 6, 1499: 5, 2499: 2, 3499: 1}), flow="recurring",
                 daily=80, fair=1.0, opening=ALWAYS),
        Merchant("bollard-bistro", "restaurant", "5812",
                 lunch_and_dinner(
                     price_list({1150: 3, 1290: 5, 1450: 4, 1650: 3, 1890: 2}, items=(5, 4, 2)),
                     price_list({1450: 2, 1690: 3, 1950: 4, 2250: 4, 2690: 3, 3150: 2},
                                items=(1, 6, 4, 3, 1))),
                 fair=1.5, opening=TABLES),
        Merchant("slack-tide-grill", "restaurant", "5812",
                 lunch_and_dinner(
                     price_list({995: 4, 1195: 5, 1395: 4, 1595: 2}, items=(5, 5, 2, 1)),
                     price_list({1695: 3, 1895: 4, 2195: 4, 2495: 3, 2895: 2},
                                items=(2, 6, 3, 3))),
                 currency="GBP", fair=1.5, opening=TABLES, decimals=True),
        Merchant("paper-crane-noodles", "noodle house", "5812",
                 lunch_and_dinner(
                     price_list({780: 4, 850: 5, 980: 5, 1100: 2}, items=(6, 3, 1)),
                     price_list({980: 4, 1280: 5, 1480: 4, 1850: 2}, items=(2, 5, 3, 1))),
                 currency="JPY", fair=1.5, opening=TABLES),
        Merchant("white-heron-crafts", "souvenirs", "5947",
                 price_list({380: 5, 550: 6, 980: 8, 1280: 6, 1980: 6, 2980: 4, 4800: 2},
                            items=(6, 3, 1)), currency="JPY"),
        Merchant("mint-lantern", "tea house", "5814",
                 price_list({1500: 5, 2500: 8, 3800: 5, 4500: 6, 6200: 3}, items=(4, 5, 3, 1)),
                 currency="TND", decimals=True),
        Merchant("long-swell-boards", "surf shop", "5941",
                 price_list({699: 4, 1499: 6, 2499: 7, 3999: 6, 5999: 4, 8999: 3, 17999: 1},
                            items=(7, 2)), currency="USD", refunds=0.02),
        Merchant("driftwood-clothing", "clothes", "5651",
                 price_list({1295: 5, 1995: 7, 2495: 6, 2995: 7, 3995: 5, 4995: 4, 6995: 2,
                             8995: 2}, items=(6, 3, 1)), refunds=0.05, names_flow=False),
        Merchant("cobble-and-welt", "shoes", "5661",
                 price_list({2999: 3, 3900: 4, 4999: 6, 5900: 5, 6999: 4, 8900: 3, 11900: 1},
                            items=(8, 1)), currency="GBP", refunds=0.04),
        Merchant("two-bells-ferry", "ferry", "4111",
                 price_list({380: 8, 640: 5, 760: 6, 1240: 2}, items=(5, 6, 2, 2), together=True),
                 daily=120, opening=((5.0, 22.0, 1.0),)),
        Merchant("inner-basin-marina", "marina", "4468", by_measure(385, 6, 19), fair=1.5),
        Merchant("ropewalk-parking", "car park", "7523",
                 price_list({150: 6, 300: 8, 450: 5, 600: 4, 900: 3, 1400: 2}), daily=110,
                 opening=((6.0, 23.0, 1.0),), zeros=0.01),
        Merchant("razor-and-reef", "barber", "7230",
                 price_list({1400: 3, 1800: 6, 2200: 6, 2700: 4, 3500: 2})),
        Merchant("hotel-bell-buoy", "hotel", "7011",
                 price_list({8900: 4, 10400: 5, 12900: 5, 15900: 2}, items=(6, 6, 3, 1),
                            together=True), refunds=0.02),
        Merchant("cod-and-capstan", "fish and chips", "5814",
                 price_list({350: 4, 575: 5, 850: 8, 1025: 5, 1250: 3}, items=(4, 5, 3, 1)),
                 currency="GBP", opening=((11.0, 22.0, 1.0),)),
        Merchant("brass-cleat-hardware", "hardware", "5251",
                 price_list({149: 4, 249: 5, 399: 6, 549: 5, 799: 6, 1199: 4, 1649: 3, 2499: 2,
                             3999: 1}, items=(6, 4, 2, 1)), refunds=0.02, names_flow=False),
        Merchant("whalebone-museum", "museum", "7991",
                 price_list({400: 3, 600: 4, 900: 8, 1100: 3}, items=(4, 8, 3, 3), together=True),
                 zeros=0.02),
    )  # fmt: skip


def _small() -> tuple[Merchant, ...]:
    """Return two whose trade is too small to be learned in five weeks."""
    return (
        Merchant("widow-hales-lace", "lace and cloth", "5949",
                 price_list({1250: 4, 1950: 5, 2800: 3, 4200: 2}, items=(4, 2, 1)), daily=9,
                 fair=2.0),
        Merchant("thimble-clocks", "clock repair", "7631", wide_range(6_500, 0.6),
                 follows_law=True, daily=4, fair=2.0),
    )  # fmt: skip


MERCHANTS = _negotiated() + _shops() + _small()
