"""Bodies read whole or not at all, and JSON read strictly: no name twice, no NaN."""

from __future__ import annotations

import json
from collections.abc import Iterator
from typing import Any

from flask import current_app, g, request
from werkzeug.exceptions import ClientDisconnected

from service.batches.document import Members, parse
from service.web.line import Line
from service.web.problems import Problem, faults, invalid, too_large


def read_body() -> bytes:
    """Return the current request's body as it was sent, all of it.

    Raises
    ------
    Problem
        413 above the limit, 408 where it came too slowly, 400 where it broke off.
    """
    limit: int = current_app.config["MAX_CONTENT_LENGTH"]
    # The stream of a body without a length ends at its limit as if that were all, and that of a
    # caller who hung up ends early; a batch cut at a line's end would look whole.
    request.max_content_length = limit + 1
    line = request.environ.get("gunicorn.socket")
    if isinstance(line, Line):
        line.allow(g.admission.crowded)
    try:
        body = request.get_data(cache=False)
    except ClientDisconnected as error:
        if isinstance(line, Line) and line.late():
            raise Problem(408, "The body came too slowly; send it faster, or less.") from error
        raise Problem(400, "The body broke off.") from error
    if len(body) > limit:
        raise too_large(limit)
    said = request.content_length
    if said is not None and len(body) != said:
        raise Problem(400, f"The body broke off after {len(body):,} of {said:,} bytes.")
    if isinstance(line, Line):
        line.entire = True
    return body


def strict_json(body: bytes) -> Any:
    """Return the value that a JSON text (UTF-8, RFC 8259) holds.

    Raises
    ------
    Unreadable
        With line and column, where the text is not JSON.
    Problem
        400 for a string that is not Unicode, 422 for names given twice in one object.
    """
    value = parse(body)
    if b"\\u" in body:
        try:
            json.dumps(value, ensure_ascii=False).encode("utf-8")
        except UnicodeEncodeError as error:
            raise Problem(400, "A string in the body holds half of a surrogate pair.") from error
    twice = [{"pointer": p, "detail": "Given twice in one object."} for p in _repeated(value)]
    if twice:
        raise invalid(twice)
    return value


def _repeated(value: Any, pointer: str = "") -> Iterator[str]:
    if isinstance(value, Members):
        for name in value.repeated:
            yield from (place for place, _ in faults({name: ""}, pointer))
    items: Any = ()
    if isinstance(value, dict):
        items = value.items()
    elif isinstance(value, list):
        items = enumerate(value)
    for name, inner in items:
        if isinstance(inner, dict | list):
            token = str(name).replace("~", "~0").replace("/", "~1")
            yield from _repeated(inner, f"{pointer}/{token}")
