"""Alarms held against the truth: found, missed, and honest merchants wronged."""

from __future__ import annotations

from datetime import UTC, datetime

import pytest

from service.demo.run import Found, report
from service.demo.scenario import Scenario, scenario
from service.demo.verdict import Alarm, judge

URL = "http://127.0.0.1:8080"


@pytest.fixture(scope="module")
def story() -> Scenario:
    return scenario(datetime(2026, 11, 30, 12, tzinfo=UTC))


def alarm(merchant: str, count: int, *, flow: str = "sale", currency: str = "EUR") -> Alarm:
    return {
        "id": f"{merchant}-{flow}-{count}",
        "merchant": merchant,
        "flow": flow,
        "currency": currency,
        "count": count,
        "state": "open",
        "explanation": f"The digits of {merchant} left their bounds.",
    }


def told(story: Scenario, alarms: list[Alarm], *, accepted: int = 10) -> str:
    verdict = judge(story.cheats, alarms)
    found = Found(10, accepted, 10 - accepted, len(story.merchants), 1.0, tuple(alarms), verdict)
    return "\n".join(report(found, story, URL))


def all_caught(story: Scenario) -> list[Alarm]:
    return [alarm(cheat.merchant, cheat.row + 50) for cheat in story.cheats]


def test_an_alarm_after_the_first_made_up_row_catches_the_cheat(story: Scenario) -> None:
    alarms = all_caught(story)
    verdict = judge(story.cheats, alarms)
    assert verdict.caught == tuple(zip(story.cheats, alarms, strict=True))
    assert verdict.missed == ()
    assert verdict.mistaken == ()


def test_an_alarm_while_a_cheat_was_still_honest_is_a_mistake(story: Scenario) -> None:
    cheat = story.cheats[0]
    early = alarm(cheat.merchant, cheat.row)  # so many rows, and none of them made up yet
    verdict = judge([cheat], [early])
    assert verdict.mistaken == (early,)
    assert verdict.missed == (cheat,)
    assert judge([cheat], [alarm(cheat.merchant, cheat.row + 1)]).missed == ()


@pytest.mark.parametrize("other", [{"flow": "refund"}, {"currency": "USD"}], ids=str)
def test_an_alarm_about_another_stream_catches_nothing(
    story: Scenario, other: dict[str, str]
) -> None:
    cheat = story.cheats[0]
    verdict = judge([cheat], [alarm(cheat.merchant, cheat.row + 50, **other)])
    assert verdict.missed == (cheat,)
    assert len(verdict.mistaken) == 1


def test_a_second_alarm_about_a_cheat_is_no_mistake(story: Scenario) -> None:
    cheat = story.cheats[0]
    first, second = (alarm(cheat.merchant, cheat.row + after) for after in (50, 400))
    verdict = judge([cheat], [first, second])
    assert verdict.caught == ((cheat, first),)
    assert verdict.mistaken == ()


def test_the_report_passes_on_explanations_and_says_what_was_found(story: Scenario) -> None:
    text = told(story, all_caught(story))
    for cheat in story.cheats:
        assert f"The digits of {cheat.merchant} left their bounds." in text
        assert cheat.how in text
    assert "Cheats found: 3 of 3." in text
    assert "Honest merchants without an alarm: 33 of 33." in text
    assert "MISSED" not in text
    assert "WRONGLY" not in text
    assert f"{URL}/v1/merchants?sort=evidence" in text
    assert "Authorization: Bearer $KEY" in text
    assert "never proof of fraud" in text


def test_the_report_hides_neither_a_miss_nor_a_wrong(story: Scenario) -> None:
    text = told(story, [*all_caught(story)[1:], alarm("foghorn-books", 2000)])
    assert f"MISSED: {story.cheats[0].merchant}" in text
    assert "Cheats found: 2 of 3." in text
    assert "WRONGLY ALARMED: foghorn-books" in text
    assert "Honest merchants without an alarm: 32 of 33." in text


def test_the_report_of_a_second_run_says_that_nothing_was_counted_twice(story: Scenario) -> None:
    assert "counted before" not in told(story, all_caught(story))
    again = told(story, all_caught(story), accepted=0)
    assert "none was counted again" in again
    assert "Cheats found: 3 of 3." in again
    assert "4 rows had been counted before" in told(story, all_caught(story), accepted=6)
