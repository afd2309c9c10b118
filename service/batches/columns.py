"""Typed rows to the columns of a batch; every check looks at a column or at its distinct values."""

from __future__ import annotations

from array import array
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from schemas.transaction import CATEGORY, MAX_OFFSET
from service.batches.batch import Batch, Rejection
from service.batches.currencies import EXPONENTS, minor_units_column
from service.batches.errors import TooLarge
from service.batches.identity import MAX_ID, position_idents, row_idents
from service.batches.instants import instants
from service.batches.limits import AHEAD_MS, Defaults, Limits
from service.batches.rows import Row
from service.digits.significand import MAX_AMOUNT
from service.streams.record import FLOW, MERCHANT, Stream

IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]


class Doubt(Exception):
    """A check over a column failed; which row and why, `service.batches.rowcheck` says."""


@dataclass(frozen=True)
class Request:
    """What all rows of a request share.

    Attributes
    ----------
    limits, defaults
        Bounds, and what rows leave out.
    now : int
        Time of arrival, milliseconds since 1970 UTC.
    ident_key : tuple of two int
        Random 64-bit integers, for identities.
    idempotency_key : str or None
        Identifies rows by position where they have no identity of their own.
    """

    limits: Limits
    defaults: Defaults
    now: int
    ident_key: tuple[int, int]
    idempotency_key: str | None


@dataclass(frozen=True)
class Presence:
    """How many names and strings the rows had, to be compared with the quotes of the body."""

    names: int
    texts: int


def batch_of(
    rows: Sequence[Row],
    request: Request,
    *,
    positions: IntArray | None = None,
    rejected: Sequence[Rejection] = (),
) -> tuple[Batch, Presence]:
    """Return the batch of rows that are all valid.

    Parameters
    ----------
    rows : sequence of Row, length n
        With the right types.
    request : Request
        What they share.
    positions : int64 array (n,), optional
        Places in the request; by default 0 to n - 1.
    rejected : sequence of Rejection
        One for each row of the request that is not among ``rows``.

    Returns
    -------
    Batch
        Its columns, in the order given.
    Presence
        Counts for `service.batches.rows.unrepeated`.

    Raises
    ------
    Doubt
        If a row is not valid.
    TooLarge
        If the rows belong to more streams than a batch may touch.
    """
    n = len(rows)
    merchants = [row.merchant for row in rows]
    currencies, currencies_given = _filled([row.currency for row in rows], _currency(request))
    amount, amount_texts = _amounts([row.amount for row in rows], currencies)
    flows, flows_given = _flows([row.flow for row in rows], amount, request.defaults.flow)
    _check(merchants, _is_merchant)
    streams, stream = _streams(merchants, flows, currencies)
    if len(streams) > request.limits.max_streams:
        limit = request.limits.max_streams
        raise TooLarge(
            "max_streams", limit, f"a batch may touch at most {limit} streams; send several"
        )
    at, at_given = _times([row.at for row in rows], request.now)
    sources, source, offset, sources_given = _sources(
        [row.source for row in rows], [row.offset for row in rows]
    )
    ids: list[str | None] = [row.id for row in rows]
    ident, by_id = _row_idents(ids, request.ident_key)
    known = by_id if not sources else by_id | (source >= 0)
    if sources:
        ident[source >= 0] = 0
        by_id = by_id & (source < 0)
    exactly_once = bool(known.all())
    if request.idempotency_key is not None and not exactly_once:
        nameless = np.flatnonzero(~known)
        places = nameless if positions is None else positions[nameless]
        ident[nameless] = position_idents(request.idempotency_key, places, request.ident_key)
        exactly_once = True
    categories, categories_given = _categories(merchants, [row.category for row in rows])
    ids_given = n - ids.count(None)
    texts = n + currencies_given + flows_given + at_given + ids_given
    texts += categories_given + sources_given
    batch = Batch(
        sent=n + len(rejected),
        streams=streams,
        stream=stream,
        amount=np.abs(amount),
        at=at,
        ident=ident,
        unverified=by_id & (at < request.now - request.limits.horizon_ms),
        ids=ids,
        sources=sources,
        source=source,
        offset=offset,
        exactly_once=exactly_once,
        categories=categories,
        rejected=list(rejected),
    )
    # Every name has one value, strings but for amounts and offsets; every source has an offset.
    return batch, Presence(names=n + texts + sources_given, texts=texts + amount_texts)


def _check(values: Sequence[str], valid: Callable[[str], bool]) -> set[str]:
    """Return the distinct values, all of them valid."""
    distinct = set(values)
    if not all(map(valid, distinct)):
        raise Doubt
    return distinct


def _is_merchant(name: str) -> bool:
    return MERCHANT.fullmatch(name) is not None


def _is_flow(name: str) -> bool:
    return FLOW.fullmatch(name) is not None


def _is_currency(code: str) -> bool:
    return EXPONENTS.get(code) is not None


def _is_category(code: str) -> bool:
    return CATEGORY.fullmatch(code) is not None


def _is_label(text: str) -> bool:
    return 1 <= len(text) <= MAX_ID and text.isascii() and text.isprintable()


def _currency(request: Request) -> str:
    return request.defaults.currency or ""  # which is no currency: rows must name theirs


def _filled(given: Sequence[str | None], default: str) -> tuple[list[str] | str, int]:
    """Return a column of currencies, or the one that all rows have; and how many were given."""
    distinct = set(given)
    missing = None in distinct
    distinct.discard(None)
    named = len(given) - given.count(None) if missing else len(given)
    if missing:
        distinct.add(default)
    if not all(code is not None and _is_currency(code) for code in distinct):
        raise Doubt
    if len(distinct) == 1:
        return str(distinct.pop()), named
    return [default if code is None else code for code in given], named


def _amounts(given: list[int | str], currencies: list[str] | str) -> tuple[IntArray, int]:
    """Return minor units, signs kept, and how many amounts were decimal strings."""
    try:
        # Unlike NumPy, an array of machine integers refuses digits in a string.
        amount = np.array(array("q", given), dtype=np.int64)  # type: ignore[type-var]
        texts = 0
    except OverflowError:
        raise Doubt from None
    except TypeError:
        amount, texts = _mixed_amounts(given, currencies)
    if ((amount > MAX_AMOUNT) | (amount < -MAX_AMOUNT)).any():
        raise Doubt
    return amount, texts


def _mixed_amounts(given: list[int | str], currencies: list[str] | str) -> tuple[IntArray, int]:
    where = [row for row, value in enumerate(given) if isinstance(value, str)]
    texts = [value for value in given if isinstance(value, str)]
    whole = [0 if isinstance(value, str) else value for value in given]
    try:
        amount = np.array(array("q", whole), dtype=np.int64)
    except OverflowError:
        raise Doubt from None
    decimals: IntArray | int
    if isinstance(currencies, str):
        decimals = EXPONENTS[currencies] or 0
    else:
        decimals = np.array([EXPONENTS[currencies[row]] for row in where], dtype=np.int64)
    amount[where], ok = minor_units_column(texts, decimals)
    if not ok.all():
        raise Doubt
    return amount, len(texts)


def _flows(
    given: Sequence[str | None], amount: IntArray, default: str
) -> tuple[list[str] | str, int]:
    """Return a column of flows, or the one that all rows have; and how many were given."""
    distinct = set(given)
    if not all(name is None or _is_flow(name) for name in distinct):
        raise Doubt
    negative = amount < 0
    if not negative.any():
        if distinct <= {None, default}:
            return default, len(given) - given.count(None)
        if len(distinct) == 1:
            return str(distinct.pop()), len(given)
        return (
            [default if name is None else name for name in given],
            len(given) - given.count(None),
        )
    flows = []
    for name, is_negative in zip(given, negative.tolist(), strict=True):
        if is_negative and name is not None:
            raise Doubt
        flows.append(name if name is not None else "refund" if is_negative else default)
    return flows, len(given) - given.count(None)


def _streams(
    merchants: list[str], flows: list[str] | str, currencies: list[str] | str
) -> tuple[list[Stream], IntArray]:
    """Return the distinct streams in order of appearance, and each row's index."""
    n = len(merchants)
    if isinstance(flows, str) and isinstance(currencies, str):
        number = {name: i for i, name in enumerate(dict.fromkeys(merchants))}
        streams = [Stream(name, flows, currencies) for name in number]
        return streams, np.fromiter(map(number.__getitem__, merchants), np.int64, n)
    flow_column = [flows] * n if isinstance(flows, str) else flows
    currency_column = [currencies] * n if isinstance(currencies, str) else currencies
    keys = list(zip(merchants, flow_column, currency_column, strict=True))
    numbers = {key: i for i, key in enumerate(dict.fromkeys(keys))}
    return [Stream(*key) for key in numbers], np.fromiter(
        map(numbers.__getitem__, keys), np.int64, n
    )


def _times(given: list[str | None], now: int) -> tuple[IntArray, int]:
    """Return event times, and how many were given."""
    at = np.full(len(given), now, dtype=np.int64)
    texts = [text for text in given if text is not None]
    if not texts:
        return at, 0
    read, ok = instants(texts)
    if not ok.all() or (read > now + AHEAD_MS).any():
        raise Doubt
    if len(texts) == len(given):
        return read, len(texts)
    at[[row for row, text in enumerate(given) if text is not None]] = read
    return at, len(texts)


def _row_idents(
    ids: list[str | None], key: tuple[int, int]
) -> tuple[npt.NDArray[np.uint64], BoolArray]:
    """Return identities by id, 0 for none, and which rows have one."""
    n = len(ids)
    texts = [text for text in ids if text is not None]
    if not texts:
        return np.zeros(n, dtype=np.uint64), np.zeros(n, dtype=np.bool_)
    lengths = set(map(len, texts))
    joined = "".join(texts)
    if min(lengths) < 1 or max(lengths) > MAX_ID:
        raise Doubt
    if not joined.isascii() or not joined.isprintable():
        raise Doubt
    hashed = row_idents(texts, key)
    if len(texts) == n:
        return hashed, np.ones(n, dtype=np.bool_)
    has = np.array([text is not None for text in ids])
    ident = np.zeros(n, dtype=np.uint64)
    ident[has] = hashed
    return ident, has


def _sources(
    given: list[str | None], offsets: list[int | None]
) -> tuple[list[str], IntArray, IntArray, int]:
    """Return distinct sources, each row's index or -1, offsets or 0, and how many were given."""
    n = len(given)
    absent = given.count(None)
    source, offset = np.full(n, -1, dtype=np.int64), np.zeros(n, dtype=np.int64)
    if absent == n and offsets.count(None) == n:
        return [], source, offset, 0
    if any((name is None) != (place is None) for name, place in zip(given, offsets, strict=True)):
        raise Doubt
    number: dict[str | None, int] = {None: -1}
    names = [name for name in dict.fromkeys(given) if name is not None]
    if not all(map(_is_label, names)):
        raise Doubt
    number.update((name, i) for i, name in enumerate(names))
    source = np.fromiter(map(number.__getitem__, given), np.int64, n)
    try:
        offset = np.array(
            array("q", [0 if place is None else place for place in offsets]), dtype=np.int64
        )
    except OverflowError:
        raise Doubt from None
    if ((offset < 0) | (offset > MAX_OFFSET)).any():
        raise Doubt
    return names, source, offset, n - absent


def _categories(merchants: list[str], given: list[str | None]) -> tuple[dict[str, str], int]:
    """Return the last category given of each merchant, and how many rows gave one."""
    distinct = set(given)
    if distinct <= {None}:
        return {}, 0
    if not all(code is None or _is_category(code) for code in distinct):
        raise Doubt
    pairs = zip(merchants, given, strict=True)
    categories = {merchant: code for merchant, code in pairs if code is not None}
    return categories, len(given) - given.count(None)
