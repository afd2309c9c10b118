"""A listing of streams, a page at a time: filter, sort, and go on from where a cursor points.

A cursor carries the last entry's sort value and stream, not a position, so that a listing neither
repeats nor skips an entry that stands still while others change. Entries without a value come
last in either order; equal values are ordered by stream.
"""

from __future__ import annotations

import base64
import binascii
import hashlib
import heapq
from collections.abc import Callable, Iterable
from functools import total_ordering
from typing import Any, NamedTuple

import msgspec

Entry = dict[str, Any]

SORTS = ("evidence", "score", "misfit", "law_misfit", "count", "updated")
ORDERS = ("desc", "asc")
_CHECK = 6  # bytes of checksum in a cursor
_LONGEST = 1024


class Query(NamedTuple):
    """What a listing asks for; None filters nothing."""

    flow: str | None = None
    currency: str | None = None
    category: str | None = None
    standing: str | None = None
    search: str | None = None
    sort: str = "evidence"
    order: str = "desc"
    limit: int = 100
    cursor: str | None = None


class Page(NamedTuple):
    """Entries in order, and the cursor of what follows, or None at the end."""

    entries: list[Entry]
    next: str | None


@total_ordering
class _Place:
    """Where an entry stands in the listing; smaller comes first."""

    __slots__ = ("rising", "stream", "value")

    def __init__(self, value: Any, stream: tuple[str, str, str], rising: bool) -> None:
        self.value = value
        self.stream = stream
        self.rising = rising

    def __eq__(self, other: object) -> bool:
        return (
            isinstance(other, _Place) and self.value == other.value and self.stream == other.stream
        )

    def __lt__(self, other: _Place) -> bool:
        if self.value == other.value:
            return self.stream < other.stream
        if self.value is None or other.value is None:
            return other.value is None
        return bool(self.value < other.value) == self.rising

    __hash__ = None  # type: ignore[assignment]


def page(entries: Iterable[Entry], query: Query) -> Page:
    """Return one page of a listing.

    Parameters
    ----------
    entries : iterable of Entry
        Each with ``merchant``, ``flow``, ``currency``, the sort fields and the filter fields.
    query : Query
        ``limit`` at least 1.

    Raises
    ------
    ValueError
        For a cursor that was not given out for this sort and order.
    """
    rising = query.order == "asc"

    def place(entry: Entry) -> _Place:
        stream = (entry["merchant"], entry["flow"], entry["currency"])
        return _Place(entry.get(query.sort), stream, rising)

    wanted = [(place(e), e) for e in entries if _matches(e, query)]
    if query.cursor is not None:
        after = _after(query, rising)
        wanted = [pair for pair in wanted if after < pair[0]]
    first: Callable[[tuple[_Place, Entry]], _Place] = lambda pair: pair[0]  # noqa: E731
    found = heapq.nsmallest(query.limit + 1, wanted, key=first)
    if len(found) <= query.limit:
        return Page([entry for _, entry in found], None)
    found = found[: query.limit]
    last = found[-1][0]
    return Page([entry for _, entry in found], _cursor(query, last))


def _matches(entry: Entry, query: Query) -> bool:
    return (
        (query.flow is None or entry["flow"] == query.flow)
        and (query.currency is None or entry["currency"] == query.currency)
        and (query.category is None or entry.get("category") == query.category)
        and (query.standing is None or entry["standing"] == query.standing)
        and (query.search is None or query.search.casefold() in entry["merchant"].casefold())
    )


def _cursor(query: Query, last: _Place) -> str:
    body = msgspec.json.encode([query.sort, query.order, last.value, *last.stream])
    return base64.urlsafe_b64encode(_checksum(body) + body).rstrip(b"=").decode("ascii")


def _after(query: Query, rising: bool) -> _Place:
    cursor = query.cursor or ""
    garbage = ValueError("This cursor was not given out by this listing.")
    if len(cursor) > _LONGEST:
        raise garbage
    try:
        raw = base64.b64decode(
            cursor.encode("ascii") + b"=" * (-len(cursor) % 4), altchars=b"-_", validate=True
        )
    except (UnicodeEncodeError, binascii.Error) as error:
        raise garbage from error
    body = raw[_CHECK:]
    if raw[:_CHECK] != _checksum(body):
        raise garbage
    try:
        sort, order, value, *stream = msgspec.json.decode(
            body, type=tuple[str, str, float | int | str | None, str, str, str]
        )
    except msgspec.MsgspecError as error:
        raise garbage from error
    if isinstance(value, str) != (sort == "updated") and value is not None:
        raise garbage
    if (sort, order) != (query.sort, query.order):
        raise ValueError(f"This cursor goes on with sort={sort} and order={order} only.")
    return _Place(value, (stream[0], stream[1], stream[2]), rising)


def _checksum(body: bytes) -> bytes:
    # Against typing errors and guesses; a cursor grants nothing that its tenant could not list.
    return hashlib.blake2b(body, digest_size=_CHECK, person=b"cursor").digest()
