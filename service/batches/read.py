"""From a document to a batch: the fast way first, and row by row where anything is wrong."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from service.batches.batch import Batch, Rejection
from service.batches.columns import Doubt, Request, batch_of
from service.batches.document import Malformed, Members, guard, lines, parse, too_many_rows
from service.batches.errors import Invalid, Unreadable
from service.batches.limits import Defaults, Limits
from service.batches.rowcheck import Finding, findings, pointer, readable_id, token
from service.batches.rows import Row, typed_rows, unrepeated

_BOM = b"\xef\xbb\xbf"  # RFC 8259 §8.1 lets a reader ignore it
_LISTED = 100
_FIELDS_TOLD = 5


def read_batch(
    body: bytes,
    *,
    ndjson: bool,
    limits: Limits,
    defaults: Defaults,
    now: int,
    ident_key: tuple[int, int],
    idempotency_key: str | None,
    skip_invalid: bool,
) -> Batch:
    """Read a document of transactions.

    Parameters
    ----------
    body : bytes
        ``{"transactions": [...]}`` or, with ``ndjson``, one transaction a line; UTF-8.
    ndjson : bool
        Which of them. Blank lines do not count as rows.
    limits : Limits
        ``max_rows``, ``max_streams`` and ``horizon_ms`` apply here.
    defaults : Defaults
        What rows leave out.
    now : int
        Time of arrival, milliseconds since 1970 UTC.
    ident_key : tuple of two int
        Random 64-bit integers that key the identities.
    idempotency_key : str or None
        The request's ``Idempotency-Key``; rows without identity then go by their position.
    skip_invalid : bool
        Whether to leave invalid rows out instead of refusing all.

    Returns
    -------
    Batch
        The valid rows. ``rejected`` holds one entry for each row left out; it points at the
        row's first error and tells the others, and is retryable if all of them are.

    Raises
    ------
    Unreadable
        If it is not JSON (with ``skip_invalid``, lines of NDJSON that are not are left out).
    Invalid
        If a row is invalid (without ``skip_invalid``), or the envelope is; lists every invalid
        field of every row, up to 100.
    TooLarge
        If there are too many rows or streams.
    """
    request = Request(limits, defaults, now, ident_key, idempotency_key)
    body = body.removeprefix(_BOM)
    guard(body, limits.max_rows)
    rows = typed_rows(body, ndjson=ndjson)
    if rows is not None:
        if len(rows) > limits.max_rows:
            raise too_many_rows(limits.max_rows)
        try:
            batch, presence = batch_of(rows, request)
        except Doubt:
            pass
        else:
            if unrepeated(body, ndjson=ndjson, names=presence.names, texts=presence.texts):
                return batch
    values = _lines(body, limits, skip_invalid) if ndjson else _document(body, limits)
    return _checked(values, request, skip_invalid)


def _lines(body: bytes, limits: Limits, skip_invalid: bool) -> list[Any]:
    values: list[Any] = []
    for value in lines(body):
        if isinstance(value, Malformed) and not skip_invalid:
            raise Unreadable(value.detail, value.line, value.column)
        values.append(value)
        if len(values) > limits.max_rows:
            raise too_many_rows(limits.max_rows)
    return values


def _document(body: bytes, limits: Limits) -> list[Any]:
    """Return the rows of the envelope, whatever they are."""
    envelope = parse(body)
    if not isinstance(envelope, Members):
        raise _invalid_envelope({"": 'Expected an object: {"transactions": [...]}.'})
    errors = {
        f"/{token(name)}": "Unknown: a batch has no such field."
        for name in envelope
        if name != "transactions"
    }
    errors |= {f"/{token(name)}": "Expected the field only once." for name in envelope.repeated}
    values = envelope.get("transactions")
    if "transactions" not in envelope:
        errors["/transactions"] = "Expected a value: it is required."
    elif not isinstance(values, list):
        errors["/transactions"] = "Expected a list of transactions."
    if errors or not isinstance(values, list):
        raise _invalid_envelope(errors)
    if len(values) > limits.max_rows:
        raise too_many_rows(limits.max_rows)
    return values


def _invalid_envelope(errors: Mapping[str, str]) -> Invalid:
    """Return errors of the document itself, which belong to no row (index -1)."""
    listed = list(errors.items())[:_LISTED]
    return Invalid([Rejection(-1, None, at, detail) for at, detail in listed], len(errors))


def _checked(values: Sequence[Any], request: Request, skip_invalid: bool) -> Batch:
    rows: list[Row] = []
    positions: list[int] = []
    rejections: list[Rejection] = []
    count = 0
    for index, value in enumerate(values):
        found = findings(value, now=request.now, default_currency=request.defaults.currency)
        if not found:
            rows.append(Row(**value))
            positions.append(index)
            continue
        count += len(found)
        if skip_invalid:
            rejections.append(_one(index, value, found))
        elif len(rejections) < _LISTED:
            rejections += [
                _rejection(index, value, finding) for finding in found[: _LISTED - len(rejections)]
            ]
    if rejections and not skip_invalid:
        raise Invalid(rejections, count)
    try:
        batch, _ = batch_of(
            rows, request, positions=np.array(positions, dtype=np.int64), rejected=rejections
        )
    except Doubt as doubt:
        raise RuntimeError("the checks by row and by column disagree") from doubt
    return batch


def _rejection(index: int, value: Any, finding: Finding) -> Rejection:
    return Rejection(
        index,
        readable_id(value),
        pointer(index, finding.name),
        finding.detail,
        finding.retryable,
    )


def _one(index: int, value: Any, found: Sequence[Finding]) -> Rejection:
    """Return one entry for a row, however many errors it has."""
    detail = found[0].detail
    others = [f"{token(f.name or '')}: {f.detail}" for f in found[1 : 1 + _FIELDS_TOLD]]
    if others:
        more = len(found) - 1 - len(others)
        detail += " Also " + " ".join(others) + (f" And {more} more." if more else "")
    return Rejection(
        index,
        readable_id(value),
        pointer(index, found[0].name),
        detail,
        all(finding.retryable for finding in found),
    )
