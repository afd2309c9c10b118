"""JSON bodies read strictly: no name twice, no NaN, no half characters; faults with their place."""

from __future__ import annotations

import json
from collections.abc import Iterator
from typing import Any

from service.batches.document import Members, parse
from service.web.problems import Problem, faults, invalid


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
