"""Health, for those who start and stop the service; no key is needed."""

from __future__ import annotations

from flask import Response

from schemas.health import STATUSES, Live, Ready
from service.tallies import Document, Unavailable
from service.web.parts import tallies
from service.web.resource import Resource, reply

health = Resource("health", __name__, description="Is it alive, and may it be sent work? No key.")


@health.path("/health/live")
@health.answers(Live, "The process answers.")
def live() -> Response:
    """Say that the process answers; the store is not asked."""
    return reply({"status": "pass"})


@health.path("/health/ready")
@health.answers(Ready, "Work may be sent; `warn` asks for an operator.")
@health.answers(Ready, "Work cannot be done now.", status=503)
def ready() -> Response:
    """Say whether work may be sent: the worst of the checks."""
    checks: list[Document]
    try:
        checks = list(tallies().checks())
    except Unavailable as error:
        checks = [{"name": "store", "status": "fail", "detail": str(error.args[0])}]
    status = max((check["status"] for check in checks), key=STATUSES.index, default="pass")
    headers = {"Retry-After": "1"} if status == "fail" else None
    return reply({"status": status, "checks": checks}, 503 if status == "fail" else 200, headers)
