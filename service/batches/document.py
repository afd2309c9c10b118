"""The slow way in: any JSON at all, with the place of what is wrong."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

from service.batches.errors import TooLarge, Unreadable
from service.batches.rows import LINE

_DEEP = 100
_TOKEN = re.compile(r'"(?:[^"\\]|\\.)*"|[\[{]|[\]}]|NaN|-?Infinity', re.DOTALL)
_MANY_DIGITS = 40
_VALUES_A_ROW = 200  # 9 fields, and 128 characters of text that look like structure


class Members(dict[str, Any]):
    """A JSON object that remembers the names it gave twice."""

    repeated: tuple[str, ...] = ()


@dataclass(frozen=True)
class Malformed:
    """A line that is not JSON."""

    detail: str
    line: int
    column: int


class _Constant(ValueError):
    """NaN or an infinity, which are not JSON."""


def _members(pairs: list[tuple[str, Any]]) -> Members:
    members = Members(pairs)
    if len(members) != len(pairs):
        seen: set[str] = set()
        repeated = {name: None for name, _ in pairs if name in seen or seen.add(name)}  # type: ignore[func-returns-value]
        members.repeated = tuple(repeated)
    return members


def _integer(text: str) -> int:
    """Read an integer; of very long ones only that they are large."""
    return int(text[:_MANY_DIGITS])


def _constant(name: str) -> Any:
    raise _Constant(name)


_decoder = json.JSONDecoder(
    object_pairs_hook=_members, parse_int=_integer, parse_constant=_constant
)


def parse(body: bytes, *, line: int = 1) -> Any:
    """Parse a JSON document; objects become `Members`.

    Parameters
    ----------
    body : bytes
        UTF-8.
    line : int
        Number of its first line.

    Raises
    ------
    Unreadable
        With line and column of what is wrong.
    """
    try:
        text = body.decode("utf-8")
    except UnicodeDecodeError as error:
        before = body[: error.start].decode("utf-8")
        raise _at(before, len(before), "JSON must be UTF-8", line) from error
    try:
        return _decoder.decode(text)
    except json.JSONDecodeError as error:
        raise Unreadable(error.msg, error.lineno + line - 1, error.colno) from error
    except _Constant as error:
        raise _at(text, _find_constant(text), f"{error} is not JSON", line) from error
    except RecursionError as error:
        raise _at(text, _find_depth(text), "the JSON is nested too deeply", line) from error


def guard(body: bytes, max_rows: int) -> None:
    """Refuse a body with far more values than a batch can have, before any becomes an object.

    A megabyte of ``[],[],[]`` would take twenty as Python lists; small bodies may.

    Raises
    ------
    TooLarge
        By ``max_rows``.
    """
    if len(body) <= 1 << 20:
        return
    structure = len(body) - len(body.translate(None, b",:[{"))
    if structure > _VALUES_A_ROW * (max_rows + 10):
        raise too_many_rows(max_rows)


def too_many_rows(max_rows: int) -> TooLarge:
    """Return the error of a batch with too many rows."""
    return TooLarge(
        "max_rows", max_rows, f"a batch may hold at most {max_rows} transactions; send several"
    )


def lines(body: bytes) -> Iterator[Any | Malformed]:
    """Parse NDJSON line by line; blank lines are passed over."""
    number, counted = 1, 0
    for match in LINE.finditer(body):
        number += body.count(b"\n", counted, match.start())
        counted = match.start()
        start = body.rfind(b"\n", 0, counted) + 1
        try:
            yield parse(body[start : match.end()], line=number)
        except Unreadable as error:
            yield Malformed(error.detail, error.line or number, error.column or 1)


def _at(text: str, position: int, detail: str, line: int) -> Unreadable:
    start = text.rfind("\n", 0, position) + 1
    return Unreadable(detail, text.count("\n", 0, position) + line, position - start + 1)


def _find_constant(text: str) -> int:
    for match in _TOKEN.finditer(text):
        if match[0][-1] in "Ny":
            return match.start()
    return 0


def _find_depth(text: str) -> int:
    depth = 0
    for match in _TOKEN.finditer(text):
        depth += {"[": 1, "{": 1, "]": -1, "}": -1}.get(match[0], 0)
        if depth > _DEEP:
            return match.start()
    return 0
