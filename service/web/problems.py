"""Every error as RFC 9457 problem details, in one place.

An input at fault is named by ``pointer`` (RFC 6901, into the body), by ``parameter`` (query or
path) or by ``header``.
"""

from __future__ import annotations

import logging
from collections.abc import Iterator, Mapping, Sequence
from http import HTTPStatus
from typing import Any

import msgspec
from flask import Flask, Response, current_app
from werkzeug.exceptions import HTTPException, RequestEntityTooLarge

from service.batches.errors import Invalid, TooLarge, UnknownEncoding, Unreadable
from service.tallies import Conflict, Unavailable, Unknown
from service.web.headers import request_id

LISTED = 100
"""How many errors a problem lists; the rest is only counted."""

RETRY_AFTER = 1
"""Seconds to wait where nothing better is known."""

Fault = Mapping[str, str]

_log = logging.getLogger(__name__)


class Problem(Exception):
    """An error to answer with.

    Parameters
    ----------
    status : int
        HTTP status, 400 to 599.
    detail : str
        What happened and what to do about it.
    errors : sequence of mapping, optional
        Inputs at fault: ``detail`` and one of ``pointer``, ``parameter``, ``header``.
    count : int, optional
        How many inputs are at fault, where that is more than ``errors`` holds.
    headers : mapping, optional
        More response headers.
    """

    def __init__(
        self,
        status: int,
        detail: str,
        *,
        errors: Sequence[Fault] = (),
        count: int | None = None,
        headers: Mapping[str, str] | None = None,
    ) -> None:
        super().__init__(detail)
        self.status = status
        self.detail = detail
        self.errors = errors
        self.count = len(errors) if count is None else count
        self.headers = dict(headers or {})


def invalid(errors: Sequence[Fault], count: int | None = None) -> Problem:
    """Return the 422 for inputs at fault."""
    total = len(errors) if count is None else count
    what = "One input is" if total == 1 else f"{total} inputs are"
    return Problem(422, f"{what} invalid; see errors.", errors=errors, count=count)


def problem_response(problem: Problem) -> Response:
    """Return a problem as ``application/problem+json``."""
    body: dict[str, Any] = {
        "type": "about:blank",
        "title": HTTPStatus(problem.status).phrase,
        "status": problem.status,
        "detail": problem.detail,
    }
    if problem.errors:
        body["errors"] = list(problem.errors[:LISTED])
        body["error_count"] = problem.count
    response = Response(
        msgspec.json.encode(body), problem.status, mimetype="application/problem+json"
    )
    response.headers.update(problem.headers)
    if problem.status in (429, 503):
        response.headers.setdefault("Retry-After", str(RETRY_AFTER))
    return response


def faults(messages: Any, pointer: str = "") -> Iterator[tuple[str, str]]:
    """Yield (JSON pointer, detail) for each message of a marshmallow error, depth first."""
    if isinstance(messages, Mapping):
        for name, inner in messages.items():
            token = str(name).replace("~", "~0").replace("/", "~1")
            yield from faults(inner, pointer if name == "_schema" else f"{pointer}/{token}")
    elif isinstance(messages, list | tuple):
        for inner in messages:
            yield from faults(inner, pointer)
    else:
        yield pointer, str(messages)


def register(app: Flask) -> None:
    """Answer every error of an app with problem details."""
    app.register_error_handler(Problem, problem_response)
    app.register_error_handler(HTTPException, _of_http)
    app.register_error_handler(Unknown, lambda e: _told(404, e.args[0]))
    app.register_error_handler(Conflict, lambda e: _told(409, e.args[0]))
    app.register_error_handler(Unavailable, _of_store)
    app.register_error_handler(Unreadable, _of_unreadable)
    app.register_error_handler(Invalid, _of_invalid)
    app.register_error_handler(TooLarge, lambda e: _told(413, e.detail))
    app.register_error_handler(UnknownEncoding, lambda e: _told(415, e.detail))
    app.register_error_handler(Exception, _of_fault)


def sentence(detail: str) -> str:
    """Return a reason as a sentence."""
    return f"{detail[:1].upper()}{detail[1:].rstrip('.')}."


def _told(status: int, detail: str) -> Response:
    return problem_response(Problem(status, sentence(detail)))


def _of_unreadable(error: Unreadable) -> Response:
    place = f" (line {error.line}, column {error.column})" if error.line is not None else ""
    reason = error.detail.rstrip(".")
    return problem_response(Problem(400, f"The body cannot be read: {reason}{place}."))


def _of_invalid(error: Invalid) -> Response:
    errors = [{"pointer": r.pointer, "detail": r.detail} for r in error.rejections]
    return problem_response(invalid(errors, error.error_count))


def _of_store(error: Unavailable) -> Response:
    headers = {"Retry-After": str(error.retry_after)}
    return problem_response(Problem(503, sentence(error.args[0]), headers=headers))


_DETAILS = {
    404: "Nothing is found at this path.",
    405: "This path does not take this method; Allow names those it takes.",
}


def _of_http(error: HTTPException) -> Response | HTTPException:
    status = error.code or 500
    if status < 400:
        return error
    if isinstance(error, RequestEntityTooLarge):
        return problem_response(too_large(current_app.config["MAX_CONTENT_LENGTH"]))
    detail = _DETAILS.get(status) or error.description or HTTPStatus(status).phrase
    problem = Problem(status, detail)
    response = problem_response(problem)
    for name, value in error.get_headers():
        if name.lower() in ("allow", "retry-after", "www-authenticate"):
            response.headers[name] = value
    return response


def too_large(limit: int) -> Problem:
    """Return the 413 that says the limit, in bytes."""
    return Problem(413, f"The body is too large: at most {limit:,} bytes are taken.")


def _of_fault(error: Exception) -> Response:
    # The log has the trace; a caller learns nothing internal but the id to ask about.
    _log.error("request %s failed", request_id(), exc_info=error)
    detail = f"An unexpected fault; the operator finds it in the log as request {request_id()}."
    return problem_response(Problem(500, detail))
