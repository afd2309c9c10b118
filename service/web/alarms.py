"""The feed of alarms, and single alarms."""

from __future__ import annotations

import time
from typing import Any

from flask import Response

from schemas.alarm import Alarm, Alarms, AlarmsQuery
from service.tallies import Document
from service.web.access import principal, requires
from service.web.following import Wanted, read
from service.web.parts import parts, tallies
from service.web.problems import Problem, invalid, sentence
from service.web.resource import Resource, path_parameter, reply

alarms = Resource(
    "alarms",
    __name__,
    description="Streams whose digits left their bounds: reasons to look, never proof of fraud.",
)

POLL = 0.25
"""Seconds between two looks at the feed while a request waits."""

ID = path_parameter("alarm_id", "The alarm's id.", "[!-~]{1,128}")


@alarms.path("/v1/alarms")
@requires("read")
@alarms.asks(AlarmsQuery)
@alarms.answers(Alarms, "Alarms after the position, oldest first.")
@alarms.fails(422, 429, 503)
def list_alarms(query: dict[str, Any]) -> Response:
    """Follow the feed of alarms, oldest first.

    Give the `next` of a page as the `after` of the following request, and no alarm is missed or
    repeated. `wait` holds the request until there is an alarm. An alarm is a reason to look, never
    proof of fraud.
    """
    after, limit, wait = query.pop("after", None), query.pop("limit"), query.pop("wait")
    wanted = Wanted(**query)
    found, position = _page(wanted, after, limit)
    if not found and wait > 0:
        seats = parts().seats
        if not seats.acquire(blocking=False):
            raise Problem(429, "Too many requests wait for alarms already; ask without wait.")
        try:
            deadline = time.monotonic() + min(wait, parts().settings.max_wait)
            while not found and (left := deadline - time.monotonic()) > 0:
                time.sleep(min(POLL, left))
                found, position = _page(wanted, position, limit)
        finally:
            seats.release()
    return reply({"alarms": found, "next": position})


@alarms.path("/v1/alarms/<alarm_id>", parameters=[ID])
@requires("read")
@alarms.answers(Alarm, "The alarm.")
@alarms.fails(404, 503)
def get_alarm(alarm_id: str) -> Response:
    """Show one alarm."""
    return reply(tallies().alarm(principal().tenant, alarm_id))


def _page(wanted: Wanted, after: str | None, limit: int) -> tuple[list[Document], str | None]:
    tenant = principal().tenant
    try:
        return read(lambda a, n: tallies().alarms(tenant, after=a, limit=n), wanted, after, limit)
    except ValueError as error:
        raise invalid([{"parameter": "after", "detail": sentence(str(error))}]) from error
