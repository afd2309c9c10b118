"""Run the demo: post the scenario to a running service and say what it found."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from datetime import datetime
from urllib.parse import quote

from tqdm import tqdm

from service.demo.connection import Connection
from service.demo.scenario import HISTORY_DAYS, Cheat, Row, Scenario, scenario
from service.demo.verdict import Alarm, Verdict, judge

HISTORY_BATCH = 2000
LIVE_BATCH = 200
SWEEP_SECONDS = 10
"""Longest wait for an alarm that its own request could not judge at once."""

Out = Callable[[str], object]


class Miscounted(Exception):
    """The service's answer does not account for every row sent."""


@dataclass(frozen=True)
class Found:
    """What a run found.

    Attributes
    ----------
    rows, accepted, duplicates : int
        Rows sent, counted now, and counted by an earlier run.
    merchants : int
        Merchants of the demo.
    seconds : float
        Time it took to post everything.
    alarms : tuple of Alarm
        Those about the demo's merchants, in the order raised.
    verdict : Verdict
        The same, held against the truth.
    """

    rows: int
    accepted: int
    duplicates: int
    merchants: int
    seconds: float
    alarms: tuple[Alarm, ...]
    verdict: Verdict


@dataclass
class _Posted:
    """Running totals over all batches; ``historic`` alarms never reach the feed."""

    accepted: int
    duplicates: int
    historic: list[Alarm]


def run(url: str, key: str, *, now: datetime, progress: bool = True, out: Out = print) -> Found:
    """Post the scenario, read the alarms, print and return what was found.

    Running it again on the same store counts nothing twice and reports the alarms on record.

    Parameters
    ----------
    url : str
        Where the service is, e.g. ``http://127.0.0.1:8080``.
    key : str
        Key with the roles ``post`` and ``read``.
    now : datetime
        With a time zone; the scenario ends here. Not ahead of the service's clock.
    progress : bool
        Whether to show a progress bar on standard error.
    out : callable
        Takes each line of the report.

    Raises
    ------
    Refused, Unreachable
        See ``service.demo.connection``; running again goes on from where it stopped.
    Miscounted
        If a reply does not account for every row of its batch.
    """
    story = scenario(now)
    with Connection(url, key) as connection:
        began = time.monotonic()
        posted = _post(connection, story, progress=progress)
        seconds = time.monotonic() - began
        alarms = _alarms(connection, story, posted.historic)
    found = Found(
        rows=len(story.history) + len(story.live),
        accepted=posted.accepted,
        duplicates=posted.duplicates,
        merchants=len(story.merchants),
        seconds=seconds,
        alarms=tuple(alarms),
        verdict=judge(story.cheats, alarms),
    )
    for line in report(found, story, url.rstrip("/")):
        out(line)
    return found


def _post(connection: Connection, story: Scenario, *, progress: bool) -> _Posted:
    """Send history, then the last day, in the order of time."""
    posted = _Posted(0, 0, [])
    total = len(story.history) + len(story.live)
    with tqdm(total=total, unit=" rows", disable=not progress) as bar:
        for path, rows, size in (
            ("/v1/batches?mode=history&reply=alarms", story.history, HISTORY_BATCH),
            ("/v1/batches?reply=alarms", story.live, LIVE_BATCH),
        ):
            for batch in _cut(rows, size):
                reply = connection.post(path, {"transactions": batch})
                if reply["accepted"] + reply["duplicates"] != len(batch):
                    raise Miscounted(
                        f"{len(batch)} rows sent, but {reply['accepted']} accepted and "
                        f"{reply['duplicates']} duplicates"
                    )
                posted.accepted += reply["accepted"]
                posted.duplicates += reply["duplicates"]
                posted.historic += [alarm for alarm in reply["alarms"] if alarm["historic"]]
                bar.update(len(batch))
    return posted


def _cut(rows: list[Row], size: int) -> Iterator[list[Row]]:
    """Cut rows into batches of at most ``size``, in order."""
    for start in range(0, len(rows), size):
        yield rows[start : start + size]


def _alarms(connection: Connection, story: Scenario, historic: list[Alarm]) -> list[Alarm]:
    """Return the historic alarms, then those on the feed about the demo's merchants.

    The feed, not the replies, is the complete record; after a second run it is the only one.
    """
    cast = {merchant.name for merchant in story.merchants}
    alarms, cursor = list(historic), ""
    wait = 0
    while True:
        after = f"&after={quote(cursor)}" if cursor else ""
        page = connection.get(f"/v1/alarms?limit=100{after}&wait={wait}")
        alarms += [alarm for alarm in page["alarms"] if alarm["merchant"] in cast]
        cursor = page["next"] or cursor
        if page["alarms"]:
            continue
        if wait or not judge(story.cheats, alarms).missed:
            return alarms
        wait = SWEEP_SECONDS


def report(found: Found, story: Scenario, url: str) -> Iterator[str]:
    """Yield the lines that say what was found, good news and bad alike."""
    verdict = found.verdict
    yield (
        f"Quillhaven, an invented harbour town: {found.rows:,} rows of {found.merchants} "
        f"merchants, {HISTORY_DAYS} days of history and the day of the fair, "
        f"in {found.seconds:.0f} s."
    )
    if found.accepted == 0:
        yield "Every row had been counted before, so none was counted again."
        yield "These are the alarms on record; what the history raised is kept off it."
    elif found.duplicates:
        yield f"{found.duplicates:,} rows had been counted before and were not counted again."
    if not found.alarms:
        yield "No alarm was raised."
    truth = {alarm["id"]: cheat for cheat, alarm in verdict.caught}
    trade = {merchant.name: merchant.trade for merchant in story.merchants}
    for number, alarm in enumerate(found.alarms, start=1):
        yield ""
        yield f"{number}. {alarm['merchant']}, {trade[alarm['merchant']]} ({alarm['state']})"
        yield f"   {alarm['explanation']}"
        if alarm in verdict.mistaken:
            yield "   The truth: it was honest at that point. This is a false alarm."
        elif alarm["id"] in truth:
            cheat = truth[alarm["id"]]
            yield f"   The truth: {_truth(cheat)}"
            yield f"   The alarm came {alarm['count'] - cheat.row:,} rows after the first."
        else:
            yield "   The truth: it is the cheat named above, still at it."
    yield ""
    honest = {merchant.name for merchant in story.merchants} - {c.merchant for c in story.cheats}
    wronged = {alarm["merchant"] for alarm in verdict.mistaken} & honest
    yield f"Cheats found: {len(verdict.caught)} of {len(story.cheats)}."
    for cheat in verdict.missed:
        yield f"MISSED: {cheat.merchant}. The truth: {_truth(cheat)}"
    yield f"Honest merchants without an alarm: {len(honest - wronged)} of {len(honest)}."
    for name in sorted(wronged):
        yield f"WRONGLY ALARMED: {name} was honest all along."
    yield ""
    yield "Look for yourself, with KEY set to your key:"
    address = f"{url}/v1/merchants?sort=evidence&order=desc&limit=10"
    yield f"  curl -s -H \"Authorization: Bearer $KEY\" '{address}'"
    yield "An alarm is a reason to look, never proof of fraud."


def _truth(cheat: Cheat) -> str:
    """Say what a cheat did and since which row; times would differ from the run that posted it."""
    return f"from its row {cheat.row:,} on it {cheat.how}, {cheat.share:.0%} of its sales."
