"""Following the feed: nothing is missed, nothing repeated, whatever is left out."""

from __future__ import annotations

from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.tallies import Document
from service.web import following
from service.web.following import Wanted, read, wants


def _alarm(number: int, merchant: str, **more: Any) -> Document:
    return {
        "cursor": f"{number}-0",
        "merchant": merchant,
        "flow": "sale",
        "currency": "EUR",
        "state": "open",
        "view": "lead_pair",
        "cells": ["49"],
        "findings": [],
        **more,
    }


def _feed(alarms: list[Document]) -> following.Feed:
    def feed(after: str | None, limit: int) -> tuple[list[Document], str]:
        start = int(after.split("-")[0]) + 1 if after is not None else 0
        found = alarms[start : start + limit]
        return found, found[-1]["cursor"] if found else after or "0-0"

    return feed


@given(
    st.lists(st.sampled_from("ab"), max_size=40),
    st.integers(1, 7),
    st.integers(1, 5),
    st.integers(1, 3),
)
def test_a_follower_sees_each_wanted_alarm_once_and_in_order(
    merchants: list[str], limit: int, chunk: int, chunks: int
) -> None:
    alarms = [_alarm(i, m) for i, m in enumerate(merchants)]
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(following, "CHUNK", chunk)
        patch.setattr(following, "CHUNKS", chunks)
        seen: list[Document] = []
        position = None
        for _ in range(100):
            found, reached = read(_feed(alarms), Wanted(merchant="a"), position, limit)
            assert len(found) <= limit
            seen += found
            if not found and reached == position:
                break
            position = reached
    assert seen == [a for a in alarms if a["merchant"] == "a"]
    if alarms:
        assert position == alarms[-1]["cursor"]  # also past those left out


def test_an_empty_page_keeps_the_position() -> None:
    assert read(_feed([]), Wanted(), "5-0", 10) == ([], "5-0")


def test_view_and_cell_meet_in_one_finding() -> None:
    alarm = _alarm(
        0,
        "a",
        findings=[
            {"view": "lead_pair", "cells": ["49"]},
            {"view": "tail_pair", "cells": ["00", "99"]},
        ],
    )
    assert wants(Wanted(view="tail_pair", cell="99"), alarm)
    assert wants(Wanted(cell="49"), alarm)
    assert wants(Wanted(view="lead_pair"), alarm)
    assert not wants(Wanted(view="tail_pair", cell="49"), alarm)
    assert not wants(Wanted(view="lead_digit"), alarm)
    assert not wants(Wanted(cell="9"), alarm)


@pytest.mark.parametrize(
    "other", [{"merchant": "b"}, {"flow": "refund"}, {"currency": "JPY"}, {"state": "dismissed"}]
)
def test_each_filter_leaves_out(other: dict[str, str]) -> None:
    assert not wants(Wanted(**other), _alarm(0, "a"))
