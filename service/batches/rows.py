"""The usual way in: a typed decode in C, trusted only where it cannot hide anything."""

from __future__ import annotations

import re

import msgspec
import numpy as np

LINE = re.compile(rb"[^ \t\r\n][^\n]*")
"""A line of NDJSON that is not blank, from its first character."""

_BLANK = b" \t\r"


class Row(msgspec.Struct, forbid_unknown_fields=True, gc=False):
    """One transaction as sent; None where a field was left out (a JSON null is refused)."""

    merchant: str
    amount: int | str
    id: str = None  # type: ignore[assignment]
    currency: str = None  # type: ignore[assignment]
    flow: str = None  # type: ignore[assignment]
    at: str = None  # type: ignore[assignment]
    category: str = None  # type: ignore[assignment]
    source: str = None  # type: ignore[assignment]
    offset: int = None  # type: ignore[assignment]


class _Envelope(msgspec.Struct, forbid_unknown_fields=True, gc=False):
    transactions: list[Row]


_document = msgspec.json.Decoder(_Envelope)
_lines = msgspec.json.Decoder(Row)


def typed_rows(body: bytes, *, ndjson: bool) -> list[Row] | None:
    """Decode a body whose every row has the right fields and types.

    Parameters
    ----------
    body : bytes
        A JSON envelope, or one transaction a line.
    ndjson : bool
        Which of them.

    Returns
    -------
    list of Row, or None
        None where something is wrong; finding out what is the business of
        `service.batches.document`. Names that occur twice in one object are not seen here, but
        by `unrepeated`.
    """
    try:
        if not ndjson:
            return _document.decode(body).transactions
        tidy, lines = _one_a_line(body)
        if not tidy:
            body = b"\n".join([line[0].rstrip(_BLANK) for line in LINE.finditer(body)])
            tidy, lines = _one_a_line(body)
        rows = _lines.decode_lines(body) if tidy else []
    except (msgspec.DecodeError, UnicodeDecodeError, RecursionError):
        return None
    return rows if len(rows) == lines else None  # never so for an untidy body


def _one_a_line(body: bytes) -> tuple[bool, int]:
    """Tell whether every line break follows a brace, and how many lines there are.

    The decoder also takes two objects on a line, and one that spans lines. As no field of a row
    holds an object, a line break after a brace is between rows; if all breaks are, and there are
    as many lines as rows, then every line holds one.
    """
    if not body:
        return True, 0
    characters = np.frombuffer(body, dtype=np.uint8)
    breaks = np.flatnonzero(characters == ord("\n"))
    if breaks.size == 0:
        return True, 1
    tidy = breaks[0] > 0 and bool((characters[breaks - 1] == ord("}")).all())
    return tidy, breaks.size + (0 if breaks[-1] == len(body) - 1 else 1)


def unrepeated(body: bytes, *, ndjson: bool, names: int, texts: int) -> bool:
    """Tell whether no object of a decoded body gives a name twice, by counting quotes.

    JSON readers keep the last of two equal names and say nothing; here a sender would believe in
    one amount while another is counted.

    Parameters
    ----------
    body : bytes
        A body that `typed_rows` has decoded.
    ndjson : bool
        Whether it has no envelope.
    names, texts : int
        Fields present over all rows, and how many of them hold strings.
    """
    if b"\\" in body:  # what is escaped is no delimiter
        body = body.replace(b"\\\\", b"").replace(b'\\"', b"")
    quotes = np.count_nonzero(np.frombuffer(body, dtype=np.uint8) == ord('"'))
    return bool(quotes == 2 * (names + texts + (0 if ndjson else 1)))
