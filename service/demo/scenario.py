"""The demo scenario: five weeks of Quillhaven's payments and one day of its harbour fair.

The same seed gives the same amounts in the same order, whatever the time: the town's clock is tied
to ``now``, and only ``at`` moves with it.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime, timedelta

import numpy as np
import numpy.typing as npt

from service.demo.amounts import FloatArray, IntArray
from service.demo.cheats import PLANS
from service.demo.town import EXPONENT, MERCHANTS, Merchant, Opening

SEED = 20_261_130
HISTORY_DAYS = 35
DAY = 86_400
NOW_IN_TOWN = 20.0
"""Hour of the town's clock at ``now``: wherever the demo runs, the fair is just closing."""

SOURCE_PREFIX = "quillhaven-1-"
"""Change the number with the scenario: an offset must mean the same row for ever."""

Row = dict[str, str | int]
"""One transaction, JSON-ready, with the names of the API."""


@dataclass(frozen=True)
class Cheat:
    """Ground truth about one merchant that cheats.

    Attributes
    ----------
    merchant, flow, currency : str
        The stream.
    how : str
        What it does, in words.
    offset : int
        ``offset`` of the first made-up row.
    row : int
        Number of that row in its stream, from 0; rows of amount zero are not numbered.
    share : float
        Share of its sales that are made up from there on.
    planted : frozenset of int
        Offsets of all made-up rows.
    """

    merchant: str
    flow: str
    currency: str
    how: str
    offset: int
    row: int
    share: float
    planted: frozenset[int]


@dataclass(frozen=True)
class Scenario:
    """The rows of a demo in posting order, and the truth about them.

    Attributes
    ----------
    now : datetime
        UTC; no row is later.
    merchants : tuple of Merchant
        The cast.
    history, live : list of Row
        Rows before the last day, and of it; each in the order of time.
    cheats : tuple of Cheat
        Who cheats, how and from where.
    """

    now: datetime
    merchants: tuple[Merchant, ...]
    history: list[Row]
    live: list[Row]
    cheats: tuple[Cheat, ...]


@dataclass(frozen=True)
class _Ledger:
    """One merchant's rows as columns, in the order of time.

    ``second`` counts from the first second of history; ``amount`` is negative for a refund.
    """

    merchant: Merchant
    second: IntArray
    amount: IntArray
    cheat: Cheat | None


def scenario(now: datetime, seed: int = SEED) -> Scenario:
    """Return the demo's rows, about 120 000, ending at ``now``.

    Parameters
    ----------
    now : datetime
        With a time zone. History covers the 35 days that end a day before it.
    seed : int
        Another seed gives another town; the sources are meant for the default only.

    Raises
    ------
    ValueError
        If ``now`` has no time zone.
    """
    if now.tzinfo is None:
        raise ValueError("now must have a time zone, e.g. datetime.now(UTC)")
    now = now.astimezone(UTC).replace(microsecond=0)
    start = now - timedelta(days=HISTORY_DAYS + 1)
    ledgers = [_ledger(merchant, seed) for merchant in MERCHANTS]
    second = np.concatenate([ledger.second for ledger in ledgers])
    order = np.argsort(second, kind="stable")  # ties keep each merchant's own order
    rows = [row for ledger in ledgers for row in _rows(ledger, start)]
    ordered = [rows[index] for index in order.tolist()]
    past = int(np.count_nonzero(second < HISTORY_DAYS * DAY))
    cheats = tuple(ledger.cheat for ledger in ledgers if ledger.cheat is not None)
    return Scenario(now, MERCHANTS, ordered[:past], ordered[past:], cheats)


def _ledger(merchant: Merchant, seed: int) -> _Ledger:
    """Draw a merchant's rows from a generator of its own, so that the cast may change freely."""
    rng = np.random.default_rng([seed, *merchant.name.encode()])
    second = _seconds(merchant, rng)
    hours = (NOW_IN_TOWN + second / 3600) % 24
    amount = merchant.pricing(rng, hours)
    chance = rng.random(second.size)
    refund = chance < merchant.refunds
    zero = (chance >= merchant.refunds) & (chance < merchant.refunds + merchant.zeros)
    cheat = None
    if merchant.name in PLANS:
        amount, cheat = _cheated(merchant, second, amount, ~(refund | zero), rng)
    for index in np.flatnonzero(refund).tolist():
        sold = int(rng.integers(0, index)) if index else index
        amount[index] = -abs(amount[sold])  # money back for something sold before
    amount[zero] = 0
    return _Ledger(merchant, second, amount, cheat)


def _seconds(merchant: Merchant, rng: np.random.Generator) -> IntArray:
    """Return event times in seconds since the start of history, ascending."""
    days = np.arange(HISTORY_DAYS + 1)
    busy = np.where(days == HISTORY_DAYS, merchant.daily * merchant.fair, merchant.daily)
    count = rng.poisson(busy)
    hour = _hours(merchant.opening, int(count.sum()), rng)
    since_now_in_town = ((hour - NOW_IN_TOWN) % 24) * 3600
    within = np.minimum(since_now_in_town.astype(np.int64), DAY - 1)
    return np.sort(np.repeat(days * DAY, count) + within)


def _hours(opening: Opening, n: int, rng: np.random.Generator) -> FloatArray:
    """Return n hours of the day, (n,), within the opening hours."""
    begin, end, weight = np.array(opening).T
    span = rng.choice(begin.size, n, p=weight / weight.sum())
    return np.asarray(rng.uniform(begin[span], end[span]))


def _cheated(
    merchant: Merchant,
    second: IntArray,
    amount: IntArray,
    sale: npt.NDArray[np.bool_],
    rng: np.random.Generator,
) -> tuple[IntArray, Cheat]:
    """Return the amounts with the merchant's plan carried out, and the truth about it."""
    plan = PLANS[merchant.name]
    last_day = np.flatnonzero(sale & (second >= HISTORY_DAYS * DAY))
    tempted = last_day[int(plan.after * last_day.size) :]
    planted = rng.random(tempted.size) < plan.share
    planted[0] = True  # so that the truth can name one first row
    made_up = tempted[planted]
    amount = amount.copy()
    amount[made_up] = plan.invention(rng, made_up.size)
    first = int(made_up[0])
    return amount, Cheat(
        merchant=merchant.name,
        flow=merchant.flow,
        currency=merchant.currency,
        how=plan.how,
        offset=first,
        row=int(np.count_nonzero(sale[:first])),
        share=plan.share,
        planted=frozenset(made_up.tolist()),
    )


def _rows(ledger: _Ledger, start: datetime) -> list[Row]:
    """Return a merchant's rows as it would post them.

    The ``source`` and ``offset`` make a second run count nothing twice: they are remembered for
    ever. An ``id`` alone is remembered for days only, less than the history is long, and an
    ``Idempotency-Key`` would tie a row to how batches were cut. The ids are for people to read.
    """
    merchant = ledger.merchant
    first = int(start.timestamp())
    at = np.datetime_as_string((first + ledger.second).astype("datetime64[s]"), timezone="UTC")
    rows: list[Row] = []
    columns = zip(ledger.amount.tolist(), at.tolist(), strict=True)
    for offset, (amount, when) in enumerate(columns):
        row: Row = {"id": f"{merchant.name}-{offset:06d}", "merchant": merchant.name}
        if merchant.names_flow:
            row["flow"] = "refund" if amount < 0 else merchant.flow
            amount = abs(amount)
        exponent = EXPONENT[merchant.currency]
        row["amount"] = _major(amount, exponent) if merchant.decimals else amount
        row["currency"] = merchant.currency
        row["at"] = when
        row["category"] = merchant.category
        row["source"] = SOURCE_PREFIX + merchant.name
        row["offset"] = offset
        rows.append(row)
    return rows


def _major(amount: int, exponent: int) -> str:
    """Write minor units as a decimal string in major units, e.g. 1999 as ``"19.99"``."""
    if exponent == 0:
        return str(amount)
    whole, part = divmod(abs(amount), 10**exponent)
    return f"{'-' if amount < 0 else ''}{whole}.{part:0{exponent}d}"
