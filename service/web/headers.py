"""Headers on every response: the request's id, and what browsers and caches must not do."""

from __future__ import annotations

import re
import secrets

from flask import Flask, Response, g, request

from service.web.line import Line

_PRINTABLE = re.compile(r"[\x20-\x7e]{1,128}")


def request_id() -> str:
    """Return this request's id: the caller's if 1-128 printable ASCII, else a new one."""
    known: str | None = g.get("request_id")
    if known is None:
        given = request.headers.get("X-Request-Id", "")
        known = given if _PRINTABLE.fullmatch(given) else secrets.token_hex(12)
        g.request_id = known
    return known


def register(app: Flask) -> None:
    """Mark every response of an app."""
    app.after_request(_mark)


def _mark(response: Response) -> Response:
    line = request.environ.get("gunicorn.socket")
    if isinstance(line, Line):
        line.answer()
    headers = response.headers
    headers["X-Request-Id"] = request_id()
    headers["X-Content-Type-Options"] = "nosniff"
    if request.path.startswith(("/v1/", "/health/")):
        headers.setdefault("Cache-Control", "no-store")
    return response
