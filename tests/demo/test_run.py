"""The demo against a running service: who cheats is found, who is honest is left alone."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

import pytest

from service.demo.run import Found, run
from service.demo.town import MERCHANTS
from service.store.embedded import EmbeddedStore
from tests.scenarios.running import KEY, Service, serving


@dataclass
class Shown:
    """Two runs of the demo on one store, and what they printed."""

    service: Service
    first: Found
    again: Found
    first_lines: list[str]
    again_lines: list[str]


@pytest.fixture(scope="module")
def shown(store_binary: Path, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Shown]:
    folder = tmp_path_factory.mktemp("demo")
    with (
        EmbeddedStore(folder / "store", store_binary) as store,
        serving(store.url, folder) as service,
    ):
        told: list[list[str]] = [[], []]
        found = [
            run(service.url, KEY, now=datetime.now(UTC), progress=False, out=lines.append)
            for lines in told
        ]
        yield Shown(service, *found, *told)


def test_all_cheats_are_found_and_no_honest_merchant_is_alarmed(shown: Shown) -> None:
    assert len(shown.first.verdict.caught) == 3
    assert shown.first.verdict.missed == ()
    assert shown.first.verdict.mistaken == ()
    cheats = {cheat.merchant for cheat, _ in shown.first.verdict.caught}
    assert {alarm["merchant"] for alarm in shown.first.alarms} == cheats
    assert "Cheats found: 3 of 3." in shown.first_lines
    honest = len(MERCHANTS) - 3
    assert f"Honest merchants without an alarm: {honest} of {honest}." in shown.first_lines


def test_alarms_come_after_the_first_row_that_was_made_up(shown: Shown) -> None:
    for cheat, alarm in shown.first.verdict.caught:
        assert alarm["count"] > cheat.row
        assert alarm["historic"] is False
        assert alarm["explanation"] in "\n".join(shown.first_lines)


def test_second_run_counts_nothing_and_reports_the_same(shown: Shown) -> None:
    assert shown.first.accepted == shown.first.rows
    assert (shown.again.accepted, shown.again.duplicates) == (0, shown.first.rows)
    assert [a["id"] for a in shown.again.alarms] == [a["id"] for a in shown.first.alarms]
    assert shown.again.verdict.missed == shown.again.verdict.mistaken == ()
    assert "Every row had been counted before, so none was counted again." in shown.again_lines


def test_service_holds_every_row_of_the_town(shown: Shown) -> None:
    entries = shown.service.get("/v1/merchants?limit=1000")["merchants"]
    assert sum(e["count"] + e["zero"] for e in entries) == shown.first.rows
    assert {e["merchant"] for e in entries} == {merchant.name for merchant in MERCHANTS}
    alarmed = {e["merchant"] for e in entries if e["standing"] == "alarmed"}
    assert alarmed == {cheat.merchant for cheat, _ in shown.first.verdict.caught}
