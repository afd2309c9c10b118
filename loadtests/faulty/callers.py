"""Callers that do as they are told: they send the same bytes until a 200 comes."""

from __future__ import annotations

import http.client
import json
import random
import threading
import time
from collections import Counter
from dataclasses import dataclass, field
from typing import Any

from loadtests.faulty.plan import Batch
from tests.scenarios.running import KEY

PATIENCE = 60.0  # seconds without a single 200; only ends a hopeless episode


class Failed(AssertionError):
    """What was promised did not hold."""


class Caller:
    """One keep-alive connection that is opened again after whatever went wrong."""

    def __init__(self, port: int, timeout: float) -> None:
        self.port, self.timeout = port, timeout
        self._line: http.client.HTTPConnection | None = None

    def send(
        self, method: str, path: str, body: bytes | None = None, headers: Any = ()
    ) -> tuple[int, bytes]:
        if self._line is None:
            self._line = http.client.HTTPConnection("127.0.0.1", self.port, timeout=self.timeout)
        try:
            with_key = {"Authorization": f"Bearer {KEY}", **dict(headers)}
            self._line.request(method, path, body, with_key)
            response = self._line.getresponse()
            return response.status, response.read()
        except BaseException:
            self.hang_up()
            raise

    def put(self, path: str, document: Any) -> bool:
        """Tell whether a document was taken; it may be sent again otherwise."""
        body, headers = json.dumps(document).encode(), {"Content-Type": "application/json"}
        try:
            status, text = self.send("PUT", path, body, headers)
        except (OSError, http.client.HTTPException):
            return False
        if status not in (200, 503):
            raise Failed(f"{status} for {path}: {text[:500]!r}")
        return status == 200

    def hang_up(self) -> None:
        if self._line is not None:
            self._line.close()
            self._line = None


@dataclass
class Progress:
    """What the posters of an episode have done so far, of so many batches in all."""

    total: int
    counts: Counter[str] = field(default_factory=Counter)
    acknowledged: set[tuple[str, int]] = field(default_factory=set)
    done: list[Batch] = field(default_factory=list)
    changed: threading.Condition = field(default_factory=threading.Condition)
    failed: BaseException | None = None

    def tell(self, **counts: int) -> None:
        with self.changed:
            self.counts.update(counts)

    def finish(self, batch: Batch, receipt: Any) -> None:
        with self.changed:
            self.done.append(batch)
            if receipt is not None:
                self.counts.update(
                    batches=1,
                    accepted=receipt["accepted"],
                    duplicates=receipt["duplicates"],
                )
                self.acknowledged.update(row.name for row in batch.rows)
            self.changed.notify_all()

    def fail(self, error: BaseException) -> None:
        with self.changed:
            self.failed = self.failed or error
            self.changed.notify_all()

    def wait_for(self, batches: int) -> None:
        """Wait until so many batches are done, or all of them, or all is lost."""
        enough = min(batches, self.total)
        with self.changed:
            self.changed.wait_for(lambda: len(self.done) >= enough or self.failed is not None)


class Poster:
    """Sends its batches one after the other, each until it is taken."""

    def __init__(self, port: int, batches: list[Batch], progress: Progress, seed: str) -> None:
        self.batches, self.progress = batches, progress
        self.chance = random.Random(seed)
        self.caller = Caller(port, timeout=self.chance.choice([0.5, 1.0, 3.0]))

    def run(self) -> None:
        try:
            for batch in self.batches:
                if self.progress.failed is not None:
                    return
                self.progress.finish(batch, self.insist(batch))
                if self.chance.random() < 0.2:
                    self.caller.hang_up()  # any worker may take the next
        except BaseException as error:
            self.progress.fail(error)
        finally:
            self.caller.hang_up()

    def insist(self, batch: Batch) -> Any:
        """Return the receipt; None where a batch must not be sent again and nothing was said."""
        limit = time.monotonic() + PATIENCE
        while True:
            try:
                status, text = self.caller.send(
                    "POST", "/v1/batches" + batch.query, batch.body, batch.headers
                )
            except (OSError, http.client.HTTPException):
                self.progress.tell(broken=1)
            else:
                if status == 200:
                    return self._checked(batch, json.loads(text))
                if status != 503:
                    raise Failed(f"{status} for a batch: {text[:500]!r}")
                self.progress.tell(refused=1)
            if batch.identity == "none":
                return None
            if time.monotonic() > limit:
                raise Failed(f"no 200 within {PATIENCE:.0f} s")
            self.progress.tell(retries=1)
            time.sleep(self.chance.uniform(0.01, 0.1))

    def _checked(self, batch: Batch, receipt: Any) -> Any:
        if receipt["accepted"] + receipt["duplicates"] != len(batch.rows):
            raise Failed(f"{len(batch.rows)} rows were sent, the receipt says {receipt}")
        if receipt["exactly_once"] is not (batch.identity != "none"):
            raise Failed(f"rows by {batch.identity}, and exactly_once is wrong in {receipt}")
        return receipt


class Follower:
    """Follows the feed from a cursor on, page by page, whatever happens."""

    def __init__(self, port: int, start: str | None, prefix: str) -> None:
        self.caller = Caller(port, timeout=5.0)
        self.position, self.prefix = start, prefix
        self.alarms: list[Any] = []
        self.over = threading.Event()
        self.failed: BaseException | None = None

    def run(self) -> None:
        try:
            while True:
                last = self.over.is_set()
                page = self._page()
                if page is not None:
                    self.alarms += [
                        a for a in page["alarms"] if a["merchant"].startswith(self.prefix)
                    ]
                    self.position = page["next"] or self.position
                    if last and not page["alarms"]:
                        return
                self.caller.hang_up()
        except BaseException as error:
            self.failed = error
        finally:
            self.caller.hang_up()

    def _page(self) -> Any:
        wait = 0 if self.over.is_set() else 1
        after = f"&after={self.position}" if self.position else ""
        try:
            status, text = self.caller.send("GET", f"/v1/alarms?limit=3&wait={wait}{after}")
        except (OSError, http.client.HTTPException):
            return None
        if status == 503:
            time.sleep(0.05)
            return None
        if status != 200:
            raise Failed(f"{status} for a page of the feed: {text[:500]!r}")
        return json.loads(text)
