"""One episode: a plan is posted while things go wrong, then all is calm and the truth is told."""

from __future__ import annotations

import random
import threading
import time
from collections import Counter
from collections.abc import Sequence
from contextlib import nullcontext
from dataclasses import dataclass, field
from functools import partial
from typing import Any

from loadtests.faulty import truth
from loadtests.faulty.callers import Follower, Poster, Progress
from loadtests.faulty.faults import LOSSES, OF_THE_PATH, OF_THE_STORE, Fault, Scene
from loadtests.faulty.house import House
from loadtests.faulty.plan import Plan, Row, again, plan

STRICT = "nothing may be lost"


@dataclass(frozen=True)
class Script:
    """What happens in an episode.

    Attributes
    ----------
    loss : str or None
        The fault by which acknowledged rows may be lost; None in a strict episode.
    fsync : str
        ``always`` or ``everysec``.
    store, path : list of str
        Faults of the store and of the path to it, in order; the two go on side by side.
    """

    seed: int
    rows: int
    loss: str | None
    fsync: str
    store: list[str]
    path: list[str]

    @classmethod
    def of(cls, seed: int, rows: int, without: Sequence[str] = ()) -> Script:
        """Draw an episode; a loss that it is to do without makes it a strict one."""
        chance = random.Random(f"script {seed}")
        loss = chance.choice(sorted(LOSSES)) if chance.random() < 0.35 else None
        loss = None if loss in without else loss
        return cls(
            seed,
            rows,
            loss,
            chance.choice(["always", "everysec"]),
            chance.choices(sorted(OF_THE_STORE), k=chance.randint(1, 3)),
            chance.choices(sorted(OF_THE_PATH), k=chance.randint(2, 4)),
        )

    def __str__(self) -> str:
        kind = self.loss or STRICT
        return f"{kind}, {self.fsync}; {', '.join(self.store)} | {', '.join(self.path)}"


@dataclass
class Outcome:
    """What an episode counted."""

    counts: Counter[str] = field(default_factory=Counter)
    faults: Counter[str] = field(default_factory=Counter)
    lost: Counter[str] = field(default_factory=Counter)  # acknowledged rows, by identity
    seen_twice: int = 0  # alarms, by a follower, after a loss


def play(house: House, script: Script) -> Outcome:
    """Play an episode.

    Raises
    ------
    AssertionError
        If a promise was broken.
    """
    return _Play(house, script).run()


class _Play:
    def __init__(self, house: House, script: Script) -> None:
        self.house, self.script = house, script
        self.prefix = house.prefixes.pop()
        self.plan: Plan = plan(script.seed, script.rows, self.prefix)
        self.progress = Progress(sum(map(len, self.plan.posters)))
        self.outcome = Outcome()

    def run(self) -> Outcome:
        house, loss = self.house, self.script.loss
        house.keep_durability(self.script.fsync)
        self.start = self._end_of_feed()
        follower = Follower(house.service.port, self.start, self.prefix)
        following = threading.Thread(target=follower.run, daemon=True)
        following.start()
        try:
            with house.replica() if loss == "replica promoted" else nullcontext() as replica:
                self._post_while_things_go_wrong(replica)
            house.line.forget_breaks()
            house.settle()
            self._tell_the_truth(after_a_loss=loss is not None)
        finally:
            follower.over.set()
            following.join(30)
        self._followed(follower)
        if loss is not None or self.script.seed % 4 == 0:
            self._send_everything_again()
        self.outcome.counts += self.progress.counts
        self.outcome.counts["rows"] += len(self.plan.rows)
        return self.outcome

    def _post_while_things_go_wrong(self, replica: Any) -> None:
        port, seed = self.house.service.port, self.script.seed
        posters = [
            Poster(port, batches, self.progress, f"poster {seed} {i}")
            for i, batches in enumerate(self.plan.posters)
        ]
        jobs = [p.run for p in posters]
        lanes = [list(self.script.store), list(self.script.path)]
        if self.script.loss:  # first: what comes before it must be in the files that are kept
            lanes[0].insert(0, self.script.loss)
        for i, names in enumerate(lanes):
            chance = random.Random(f"lane {seed} {i}")
            scene = Scene(
                self.house, self.plan, self.progress, chance, replica, self.script.loss is None
            )
            total = self.progress.total
            at = sorted(int(chance.uniform(0.05, 0.8) * total) for _ in names)
            timetable = list(zip(at, names, strict=True))
            jobs.append(partial(self._conduct, scene, timetable))
        threads = [threading.Thread(target=job, daemon=True) for job in jobs]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
        if self.progress.failed is not None:
            raise self.progress.failed

    def _conduct(self, scene: Scene, timetable: list[tuple[int, str]]) -> None:
        every: dict[str, Fault] = OF_THE_STORE | OF_THE_PATH | LOSSES
        try:
            for batches, name in timetable:
                self.progress.wait_for(batches)
                if self.progress.failed is not None:
                    return
                every[name](scene)
                self.outcome.faults[name] += 1
        except BaseException as error:
            self.progress.fail(error)
        finally:
            self.house.line.mend()

    def _tell_the_truth(self, *, after_a_loss: bool) -> None:
        logs = truth.written(self.house, self.prefix)
        truth.counted_once(self.plan, logs)
        kinds = ("id", "source", "key", "none")
        lost = {k: truth.missing(self.plan, logs, self.progress, [k]) for k in kinds}
        if after_a_loss:
            self.outcome.lost.update(lost)
        else:
            truth.require(not any(lost.values()), f"acknowledged rows are lost: {lost}")
        for _ in range(3):  # by either worker
            said = truth.listed(self.house, self.prefix)
            self._agrees(logs, said)
        self._a_row_more(logs)

    def _agrees(self, logs: truth.Logs, said: list[Any]) -> None:
        feed = truth.feed_since(self.house, self.start_now(), self.prefix)
        self.outcome.counts["alarms"] = truth.is_one_fold(self.house, logs, said, feed)

    def start_now(self) -> str | None:
        """Where the feed ended before the episode; a store that came back empty had none."""
        return None if self.script.loss == "came back empty" else self.start

    def _a_row_more(self, logs: truth.Logs) -> None:
        """Let any worker take one row a stream, several times: all know where the streams are."""
        counts = {name: int((records["amount"] > 0).sum()) for name, (_, records) in logs.items()}
        for k in range(4):
            self.house.service.reconnect()
            rows = [self._fresh(name) for name in counts]
            documents = [row.document for row in rows]
            receipt = self.house.service.post(documents, "?reply=merchants")
            truth.require(receipt["accepted"] == len(rows), f"fresh rows: {receipt}")
            for entry in receipt["merchants"]:
                name = truth.row_path(entry["merchant"], entry["flow"], entry["currency"])
                truth.require(
                    entry["count"] == counts[name] + k + 1,
                    f"{name}: a worker counts {entry['count']}, not {counts[name] + k + 1}",
                )
        self.house.settle()
        logs = truth.written(self.house, self.prefix)
        truth.counted_once(self.plan, logs)
        self._agrees(logs, receipt["merchants"])
        truth.same_digits(self.house, self.plan, logs)

    def _fresh(self, name: str) -> Row:
        """Return one more row of a stream, known by its id, as part of the plan."""
        rows = self.plan.expected[name]
        model = next(iter(rows.values()))
        at = time.time_ns() // 1_000_000 - 600_000
        while at in rows:
            at -= 1
        document = {
            **{k: model.document[k] for k in ("merchant", "flow", "currency")},
            "amount": 1000 + len(rows),
            "id": f"more-{len(rows)}",
            "at": time.strftime("%Y-%m-%dT%H:%M:%S", time.gmtime(at // 1000)) + f".{at % 1000:03}Z",
        }
        row = Row(model.stream, at, document)
        rows[at] = row
        self.plan.rows.append(row)
        self.progress.acknowledged.add(row.name)
        return row

    def _send_everything_again(self) -> None:
        """By id and by key every row is there afterwards, once."""
        poster = Poster(self.house.service.port, [], self.progress, "again")
        for batch in again(self.plan, self.script.seed):
            poster.insist(batch)
        poster.caller.hang_up()
        extra = [
            row
            for row in self.plan.rows
            if str(row.document.get("id", "")).startswith("more-")
            and self.plan.identity[row.stream.merchant] != "id"
        ]
        for row in extra:
            self.house.service.post([row.document])
        self.house.settle()
        logs = truth.written(self.house, self.prefix)
        truth.counted_once(self.plan, logs)
        kinds = ("id", "key") if self.script.loss else ("id", "key", "source", "none")
        lost = truth.missing(self.plan, logs, self.progress, kinds)
        truth.require(not lost, f"{lost} rows are not there though they were sent again")
        self._agrees(logs, truth.listed(self.house, self.prefix))

    def _end_of_feed(self) -> str | None:
        after = None
        while True:
            asked = f"&after={after}" if after else ""
            page = self.house.service.get(f"/v1/alarms?limit=500{asked}")
            if not page["alarms"]:
                return after
            after = page["next"]

    def _followed(self, follower: Follower) -> None:
        """Whoever followed the feed meanwhile has seen every alarm once."""
        if follower.failed is not None:
            raise follower.failed
        seen = [a["id"] for a in follower.alarms]
        places = [tuple(map(int, a["cursor"].split("-"))) for a in follower.alarms]
        truth.require(places == sorted(set(places)), "a follower was led back")
        if self.script.loss is None:
            truth.require(len(set(seen)) == len(seen), "a follower saw an alarm twice")
        self.outcome.seen_twice = len(seen) - len(set(seen))
        feed = truth.feed_since(self.house, self.start_now(), self.prefix)
        missed = {a["id"] for a in feed} - set(seen)
        truth.require(not missed, f"a follower missed {missed}")
        if self.script.loss is None:
            truth.require(seen == [a["id"] for a in feed], "a follower saw what is not in the feed")
