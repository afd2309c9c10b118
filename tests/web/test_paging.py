"""A listing read page by page is the listing, also while it changes."""

from __future__ import annotations

import base64
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.web.paging import Entry, Query, page

values = st.one_of(st.none(), st.integers(-3, 3), st.floats(-3, 3))
streams = st.tuples(
    st.sampled_from(["a", "b", "c", "A"]),
    st.sampled_from(["sale", "refund"]),
    st.sampled_from(["EUR", "JPY"]),
)
listings = st.dictionaries(streams, values, max_size=16).map(
    lambda d: [_entry(m, f, c, score=v) for (m, f, c), v in d.items()]
)


def _entry(merchant: str, flow: str = "sale", currency: str = "EUR", **more: Any) -> Entry:
    return {
        "merchant": merchant,
        "flow": flow,
        "currency": currency,
        "standing": "steady",
        "category": None,
        "evidence": 0.0,
        "score": None,
        "misfit": None,
        "law_misfit": None,
        "count": 0,
        "updated": None,
        **more,
    }


def _stream(entry: Entry) -> tuple[str, str, str]:
    return entry["merchant"], entry["flow"], entry["currency"]


def _walk(entries: list[Entry], query: Query) -> list[Entry]:
    found: list[Entry] = []
    for _ in range(len(entries) + 1):
        got = page(entries, query)
        assert len(got.entries) <= query.limit
        found += got.entries
        if got.next is None:
            return found
        query = query._replace(cursor=got.next)
    raise AssertionError("the listing has no end")


@given(listings, st.sampled_from(["asc", "desc"]), st.integers(1, 5))
def test_pages_together_are_the_listing_in_order(
    entries: list[Entry], order: str, limit: int
) -> None:
    walked = _walk(entries, Query(sort="score", order=order, limit=limit))
    known = sorted((e for e in entries if e["score"] is not None), key=_stream)
    known.sort(key=lambda e: e["score"], reverse=order == "desc")
    unknown = sorted((e for e in entries if e["score"] is None), key=_stream)
    assert walked == known + unknown


@given(listings, st.data(), st.sampled_from(["asc", "desc"]))
def test_entries_that_stand_still_are_listed_once_while_others_change(
    entries: list[Entry], data: st.DataObject, order: str
) -> None:
    query = Query(sort="score", order=order, limit=2)
    moving = data.draw(st.sets(st.sampled_from([_stream(e) for e in entries]))) if entries else ()
    seen: list[tuple[str, str, str]] = []
    for _ in range(100):
        got = page(entries, query)
        seen += [_stream(e) for e in got.entries]
        if got.next is None:
            break
        query = query._replace(cursor=got.next)
        entries = [
            {**e, "score": data.draw(values)} if _stream(e) in moving else e for e in entries
        ]
    still = [_stream(e) for e in entries if _stream(e) not in moving]
    assert sorted(s for s in seen if s not in moving) == sorted(still)


def test_filters_meet() -> None:
    entries = [
        _entry("Harbour-Books", category="5942", standing="alarmed"),
        _entry("harbour-fish", category="5422"),
        _entry("harbour-fish", "refund", category="5422"),
        _entry("hill-books", currency="JPY", category="5942"),
    ]

    def names(**query: Any) -> list[str]:
        return [e["merchant"] for e in page(entries, Query(**query)).entries]

    assert names(search="BOOKS") == ["Harbour-Books", "hill-books"]
    assert names(category="5942", currency="EUR") == ["Harbour-Books"]
    assert names(flow="refund") == ["harbour-fish"]
    assert names(standing="alarmed") == ["Harbour-Books"]
    assert names(search="harbour", flow="sale", standing="steady") == ["harbour-fish"]


def test_times_are_sorted_as_times() -> None:
    entries = [
        _entry("a", updated="2026-01-02T00:00:00.000Z"),
        _entry("b", updated="2026-01-03T00:00:00.000Z"),
        _entry("c"),
    ]
    walked = _walk(entries, Query(sort="updated", limit=1))
    assert [e["merchant"] for e in walked] == ["b", "a", "c"]


def _cursor() -> str:
    got = page([_entry("a", count=2), _entry("b", count=1)], Query(sort="count", limit=1))
    assert got.next is not None
    return got.next


@pytest.mark.parametrize("cursor", ["", "x", "AAAA", "ä", "a b", "=", "A" * 5000])
def test_garbage_is_no_cursor(cursor: str) -> None:
    with pytest.raises(ValueError, match="not given out"):
        page([], Query(sort="count", cursor=cursor))


@given(st.integers(0, 10_000), st.integers(1, 255))
def test_a_cursor_with_any_byte_changed_is_refused(place: int, change: int) -> None:
    good = _cursor()
    raw = bytearray(base64.urlsafe_b64decode(good + "=" * (-len(good) % 4)))
    raw[place % len(raw)] ^= change
    bad = base64.urlsafe_b64encode(bytes(raw)).decode().rstrip("=")
    with pytest.raises(ValueError, match="not given out"):
        page([], Query(sort="count", cursor=bad))


@pytest.mark.parametrize("other", [{"sort": "score"}, {"sort": "count", "order": "asc"}])
def test_a_cursor_goes_on_with_its_own_order_only(other: dict[str, str]) -> None:
    with pytest.raises(ValueError, match="sort=count and order=desc"):
        page([], Query(cursor=_cursor(), **other))
