"""Reading the alarm feed past what a follower does not want, without losing its place."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

from service.tallies import Document

CHUNK = 1000
"""Alarms read from the feed at a time."""

CHUNKS = 20
"""Chunks read for one page at most; a follower goes on from the position it is given."""

Feed = Callable[[str | None, int], tuple[list[Document], str]]
"""(after, limit) to alarms, oldest first, and the last position read."""


class Wanted(NamedTuple):
    """What a follower wants to see; None leaves nothing out."""

    merchant: str | None = None
    flow: str | None = None
    currency: str | None = None
    state: str | None = None
    view: str | None = None
    cell: str | None = None


def wants(wanted: Wanted, alarm: Document) -> bool:
    """Return whether an alarm passes; ``view`` and ``cell`` must meet in one finding."""
    return all(
        getattr(wanted, name) in (None, alarm[name])
        for name in ("merchant", "flow", "currency", "state")
    ) and (
        (wanted.view is None and wanted.cell is None)
        or any(_holds(wanted, finding) for finding in (alarm, *alarm["findings"]))
    )


def _holds(wanted: Wanted, finding: dict[str, Any]) -> bool:
    return wanted.view in (None, finding["view"]) and (
        wanted.cell is None or wanted.cell in finding["cells"]
    )


def read(
    feed: Feed, wanted: Wanted, after: str | None, limit: int
) -> tuple[list[Document], str | None]:
    """Return wanted alarms, oldest first, and the position up to which the feed was read.

    Parameters
    ----------
    feed : Feed
        The tenant's feed.
    after : str or None
        Position to go on from.
    limit : int
        At most so many alarms, at least 1.
    """
    everything = wanted == Wanted()
    chunk = limit if everything else max(limit, CHUNK)
    found: list[Document] = []
    position = after
    for _ in range(CHUNKS):
        alarms, position = feed(position, chunk)
        for alarm in alarms:
            if wants(wanted, alarm):
                found.append(alarm)
                if len(found) == limit:
                    # What follows in this chunk was not handed out: do not read past it.
                    return found, position if alarm is alarms[-1] else str(alarm["cursor"])
        if len(alarms) < chunk or everything:
            break
    return found, position
