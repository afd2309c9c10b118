"""Posting: bytes of a request to a receipt, by way of one batch."""

from __future__ import annotations

import hashlib
import re
from functools import lru_cache
from typing import Any

from flask import Response, request

from schemas.batch import BatchQuery, Receipt
from schemas.transaction import BatchSchema, TransactionSchema
from service.batches.batch import Batch, Rejection
from service.batches.body import expand
from service.batches.read import read_batch
from service.tallies import Conflict, Document, Posted
from service.web.access import principal, requires
from service.web.bodies import read_body
from service.web.clock import now
from service.web.parts import parts
from service.web.problems import Problem, invalid, sentence
from service.web.resource import Resource, documents, reply

batches = Resource("batches", __name__, description="Posting transactions.")

NDJSON = {"application/json": False, "application/x-ndjson": True}
"""Content types that are taken, and whether they hold a transaction a line."""

_KEY = re.compile(r"[\x20-\x7e]{1,128}")


def _describe(doc: dict[str, Any]) -> None:
    """Describe what the view reads by itself: query, headers and body."""
    manual = doc.setdefault("manual_doc", {})
    manual["parameters"] = [
        {"in": "query", "schema": BatchQuery},
        {
            "in": "header",
            "name": "Idempotency-Key",
            "description": "Identifies the rows that have no identity of their own, by their "
            "position. The same key with another body is 422.",
            "schema": {"type": "string", "pattern": f"^{_KEY.pattern}$"},
        },
        {
            "in": "header",
            "name": "Content-Encoding",
            "description": "How the body is packed; its size is bounded after unpacking too.",
            "schema": {"type": "string", "enum": ["identity", "gzip"], "default": "identity"},
        },
    ]
    manual["requestBody"] = {
        "required": True,
        "description": "A batch, or one transaction a line (`application/x-ndjson`).",
        "content": {
            "application/json": {"schema": BatchSchema},
            "application/x-ndjson": {"schema": TransactionSchema},
        },
    }


@batches.path("/v1/batches", "POST")
@requires("post")
@batches.answers(Receipt, "What became of the batch.")
@batches.fails(400, 408, 413, 415, 422, 503)
@documents(_describe)
def post_batch() -> Response:
    """Post a batch of transactions.

    Post each sale once: the capture, not also its authorisation; the amount that the merchant
    priced, before currency conversion, tip and cash-back. A negative amount without a flow is a
    refund of its absolute value. Detectors see a stream's rows in the order given.

    A row is counted exactly once, however often it is sent and however batches are cut, if it
    has an identity: `source` and `offset`, or `id`, or the request's `Idempotency-Key` and its
    position. After a 503 or a lost answer, send the same batch again: it is completed, and
    nothing is doubled.
    """
    ndjson = NDJSON.get(request.mimetype)
    if ndjson is None:
        raise Problem(415, f"Send a batch as {' or '.join(NDJSON)}.")
    query = _query(request.query_string)
    idempotency_key = _idempotency_key()
    here, arrived = parts(), now()
    tallies, tenant = here.tallies, principal().tenant
    body = expand(read_body(), request.headers.get("Content-Encoding"), here.limits)
    digest = "" if idempotency_key is None else hashlib.sha256(body).hexdigest()
    ident_key = tallies.ident_key()
    batch = read_batch(
        body,
        ndjson=ndjson,
        limits=here.limits,
        defaults=here.defaults,
        now=arrived,
        ident_key=ident_key,
        # with the body's digest: a key used again after its claim was forgotten names other rows
        idempotency_key=None if idempotency_key is None else f"{idempotency_key}/{digest}",
        skip_invalid=query["invalid"] == "skip",
    )
    if query["reply"] == "full" and len(batch.streams) > here.settings.max_full:
        most = here.settings.max_full
        raise Problem(413, f"reply=full takes at most {most:,} streams a batch.")
    if idempotency_key is not None:
        try:
            tallies.claim(tenant, idempotency_key, digest)
        except Conflict as conflict:
            fault = {"header": "Idempotency-Key", "detail": sentence(conflict.args[0])}
            raise invalid([fault]) from conflict
    durability = tallies.durability  # asked before: once rows are counted, nothing may fail
    posted = tallies.post(
        tenant,
        batch,
        historic="mode" in query,
        reply=query["reply"],
        now=arrived,
        ident_key=ident_key,
    )
    return reply(_receipt(batch, posted, durability, query["reply"]))


@lru_cache(maxsize=64)  # callers ask the same thing with every batch
def _query(query_string: bytes) -> dict[str, Any]:
    """Return the current request's query parameters."""
    return batches.query(BatchQuery)


def _idempotency_key() -> str | None:
    key = request.headers.get("Idempotency-Key")
    if key is not None and _KEY.fullmatch(key) is None:
        expected = "Expected 1 to 128 printable ASCII characters."
        raise invalid([{"header": "Idempotency-Key", "detail": expected}])
    return key


def _receipt(batch: Batch, posted: Posted, durability: str, wanted: str) -> Document:
    receipt: Document = {
        "accepted": posted.accepted,
        "duplicates": posted.duplicates,
        "late": posted.late,
        "zero": posted.zero,
        "unverified": posted.unverified,
        "rejected": [_rejected(rejection) for rejection in batch.rejected],
        "exactly_once": batch.exactly_once,
        "durability": durability,
        "alarms": posted.alarms,
    }
    if wanted != "alarms":
        receipt["merchants"] = posted.entries
    return receipt


def _rejected(rejection: Rejection) -> Document:
    return {
        "index": rejection.index,
        "id": rejection.id,
        "pointer": rejection.pointer,
        "detail": rejection.detail,
        "retryable": rejection.retryable,
    }
