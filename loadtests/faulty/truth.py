"""What must hold when the dust has settled, whatever went wrong."""

from __future__ import annotations

import math
import time
from collections import Counter
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from loadtests.faulty.archive import whole_logs
from loadtests.faulty.callers import Failed, Progress
from loadtests.faulty.house import PARTITIONS, House
from loadtests.faulty.plan import TENANT, Plan
from service.settings import Settings
from service.store.feed import Feed
from service.store.keys import path, stream_of
from service.streams import record
from service.streams.crossing import Crossing
from service.streams.entries import entries
from service.streams.record import Records, Stream
from service.streams.walk import FEW_CROSSINGS
from service.tallies import Tallies
from tests.processes import eventually
from tests.scenarios import oracle
from tests.scenarios.test_cuts_and_workers import assert_same_state, pure_fold, read_state

Logs = Mapping[str, tuple[int, Records]]
ROUNDED = {"score": 0.1, "score_low": 0.1, "score_high": 0.1, "evidence": 0.01}
WINDOW_MS = 7 * 86_400_000


def require(holds: object, what: str) -> None:
    if not holds:
        raise Failed(what)


def written(house: House, prefix: str) -> Logs:
    """Return the whole logs of an episode's streams."""
    eventually(house.server.rewritten, "an append-only file that is handed over")
    files = [*house.earlier, *house.server.append_only_files]
    return whole_logs(files, PARTITIONS, f"{TENANT}/{prefix}")


def counted_once(plan: Plan, logs: Logs) -> None:
    """No row is in a log twice, none is of another plan, none was changed on its way."""
    for name, (_, records) in logs.items():
        rows = plan.expected[name]
        ats = record.at(records).tolist()
        twice = [at for at, n in Counter(ats).items() if n > 1]
        require(not twice, f"{name}: counted twice: {[rows[a].document for a in twice[:3]]}")
        strange = set(ats) - rows.keys()
        require(not strange, f"{name}: nobody sent rows of {sorted(strange)[:3]}")
        amounts = [rows[at].document["amount"] for at in ats]
        require(amounts == records["amount"].tolist(), f"{name}: amounts were changed")
        idents = records["ident"][records["ident"] > 0]
        require(len(np.unique(idents)) == len(idents), f"{name}: an ident is there twice")


def missing(plan: Plan, logs: Logs, progress: Progress, kinds: Sequence[str]) -> int:
    """Return how many acknowledged rows, known by one of these means, are in no log."""
    held = {(name, at) for name, (_, records) in logs.items() for at in record.at(records).tolist()}
    asked = (
        name
        for name in progress.acknowledged
        if plan.identity[stream_of(name[0])[1].merchant] in kinds
    )
    return sum(name not in held for name in asked)


def is_one_fold(house: House, logs: Logs, said: Sequence[Any], feed: Sequence[Any]) -> int:
    """States, entries, alarms and the feed are those of one fold; return how many alarms.

    Parameters
    ----------
    said : sequence of documents
        Entries of all streams, as workers told them.
    feed : sequence of documents
        The alarms of the episode in the feed, in its order.
    """
    url = f"redis://127.0.0.1:{house.server.port}"
    tallies = Tallies(Settings(redis_url=url, partitions=PARTITIONS))
    try:
        paths = sorted(logs)
        whole, crossings = pure_fold(dict(logs), paths, tallies)
        assert_same_state(read_state(tallies, paths), whole)
        streams = [stream_of(p)[1] for p in paths]
        now = time.time_ns() // 1_000_000
        _same_entries(said, entries(whole, np.arange(len(paths)), streams, now))
        return _same_alarms(Feed(tallies.client), feed, paths, crossings)
    finally:
        tallies.client.close()


def _same_entries(said: Sequence[Any], folded: Sequence[Any]) -> None:
    wanted = {(e["merchant"], e["flow"], e["currency"]): e for e in folded}
    require(
        {(e["merchant"], e["flow"], e["currency"]) for e in said} == wanted.keys(),
        "the streams that workers tell of are not those that have a log",
    )
    for entry in said:
        other = wanted[entry["merchant"], entry["flow"], entry["currency"]]
        for name, value in other.items():
            mine = entry[name]
            same = mine == value
            if isinstance(value, float) and isinstance(mine, float):
                same = math.isclose(mine, value, abs_tol=1.01 * ROUNDED.get(name, 1e-6))
            require(same, f"{entry['merchant']}: a worker says {name} {mine}, one fold {value}")


def _same_alarms(
    feed: Feed, told: Sequence[Any], paths: Sequence[str], crossings: Sequence[Crossing]
) -> int:
    """Each crossing is in its alarm, each live alarm in the feed once, and none is made up."""
    expected: dict[str, list[Crossing]] = {}
    for crossing in crossings:
        expected.setdefault(crossing.alarm.hex(), []).append(crossing)
    live = {name for name, mine in expected.items() if not all(c.historic for c in mine)}
    ids = [a["id"] for a in told]
    require(len(set(ids)) == len(ids), "an alarm is in the feed twice")
    require(
        set(ids) == live,
        f"the feed lacks {sorted(live - set(ids))} and made up {sorted(set(ids) - live)}",
    )
    places = [tuple(map(int, a["cursor"].split("-"))) for a in told]
    require(places == sorted(set(places)), "cursors do not ascend")
    shown = {a["id"]: a for a in told}
    stored = {a.alarm: a for a in feed.stored(TENANT, list(expected))}
    require(stored.keys() == expected.keys(), "an alarm was not kept")
    for name, mine in expected.items():
        first, last = mine[0], mine[-1]
        require(stored[name].path == paths[first.slot], f"alarm {name} is of another stream")
        require([c.ordinal for c in mine] == list(range(len(mine))), f"ordinals of {name}")
        kept = stored[name].crossings
        ordinals = [c.ordinal for c in mine[:FEW_CROSSINGS]]
        ordinals += [last.ordinal] if len(mine) > FEW_CROSSINGS else []
        held = [k["ordinal"] for k in kept]
        require(held == ordinals, f"alarm {name} has crossings {held}, one fold finds {ordinals}")
        for known in kept:
            one = mine[known["ordinal"]]
            require(
                (known["record"], known["rows"]) == (one.record, one.rows)
                and [f["onset_row"] for f in known["findings"]]
                == [f.onset_row for f in one.findings]
                and math.isclose(known["evidence"], one.evidence, rel_tol=1e-9),
                f"crossing {known['ordinal']} of alarm {name} is not that of one fold",
            )
        if name in shown:
            alarm = shown[name]
            require(
                (alarm["count"], alarm["onset_count"], alarm["repeats"])
                == (first.rows, first.findings[0].onset_row, len(mine) - 1),
                f"alarm {name} is shown otherwise than it was found",
            )
    return len(expected)


def same_digits(house: House, plan: Plan, logs: Logs) -> None:
    """Hold the tallies that the service shows against digits read off the text of the amounts."""
    service = house.service
    for name, (_, records) in logs.items():
        stream = stream_of(name)[1]
        query = f"flow={stream.flow}&currency={stream.currency}"
        now = time.time_ns() // 1_000_000
        lifetime = [str(a) for a in records["amount"].tolist()]
        young = (now - record.at(records) < WINDOW_MS).tolist()
        window = [digits for digits, new in zip(lifetime, young, strict=True) if new]
        service.reconnect()
        for span, amounts in (("lifetime", lifetime), ("window", window)):
            for view in ("lead_digit", "tail_pair"):
                address = f"/v1/merchants/{stream.merchant}/digits?view={view}&span={span}&{query}"
                counts = tuple(cell["count"] for cell in service.get(address)["cells"])
                require(
                    counts == oracle.tally(view, amounts),
                    f"{name}: {view} over the {span} is not what was posted",
                )


def listed(house: House, prefix: str) -> list[Any]:
    house.service.reconnect()
    found: list[Any] = house.service.get(f"/v1/merchants?search={prefix}&limit=1000")["merchants"]
    return found


def feed_since(house: House, start: str | None, prefix: str) -> list[Any]:
    """Return the episode's alarms, paged from where the feed ended before it."""
    found: list[Any] = []
    after = start
    while True:
        asked = f"&after={after}" if after else ""
        page = house.service.get(f"/v1/alarms?limit=7{asked}")
        if not page["alarms"]:
            return [a for a in found if a["merchant"].startswith(prefix)]
        found += page["alarms"]
        after = page["next"]


def row_path(merchant: str, flow: str, currency: str) -> str:
    return path(TENANT, Stream(merchant, flow, currency))
