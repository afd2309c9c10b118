"""Merchants and their streams: the listing, one stream in full, its digits and rows."""

from __future__ import annotations

import csv
import io
from typing import Any
from urllib.parse import urlencode

from flask import Response, request

from schemas.digits import Digits, DigitsQuery
from schemas.merchant import (
    Assigned,
    Assignment,
    DetailQuery,
    Merchants,
    MerchantsQuery,
    Rows,
    StreamQuery,
)
from schemas.stream import Detail
from service.streams.record import MERCHANT, Stream
from service.tallies import Document, Unknown
from service.web import paging
from service.web.access import principal, requires
from service.web.clock import now
from service.web.parts import tallies
from service.web.problems import Problem, invalid, sentence
from service.web.resource import Resource, path_parameter, reply

merchants = Resource("merchants", __name__, description="Merchants and their streams.")

NAME = path_parameter("merchant", "The merchant's name.", MERCHANT.pattern)
LINK = {
    "Link": {
        "description": 'RFC 8288: the next page as `rel="next"`, absent at the end.',
        "schema": {"type": "string"},
    }
}


@merchants.path("/v1/merchants")
@requires("read")
@merchants.asks(MerchantsQuery)
@merchants.answers(Merchants, "One page of streams.", headers=LINK)
@merchants.fails(422, 503)
def list_merchants(query: dict[str, Any]) -> Response:
    """List streams: filter, sort, and go on by cursor.

    The cursor holds the last entry's value and name, so a stream that stands still is listed once,
    while one that moves may be listed twice or not at all. Entries are as of now; their order is as
    of each stream's last row.
    """
    tenant = principal().tenant
    try:
        page = paging.page(tallies().merchants(tenant), paging.Query(**query))
    except ValueError as error:
        raise invalid([{"parameter": "cursor", "detail": str(error)}]) from error
    entries = tallies().as_of_now(tenant, page.entries, now=now())
    response = reply({"merchants": entries, "next": page.next})
    if page.next is not None:
        following = {**request.args.to_dict(), "cursor": page.next}
        target = f"{request.script_root}{request.path}?{urlencode(following)}"
        response.headers["Link"] = f'<{target}>; rel="next"'
    return response


@merchants.path("/v1/merchants/<merchant>", parameters=[NAME])
@requires("read")
@merchants.asks(DetailQuery)
@merchants.answers(Detail, "Everything known about the stream.")
@merchants.fails(404, 422, 503)
def get_merchant(query: dict[str, Any], merchant: str) -> Response:
    """Show one stream in full."""
    stream = _stream(merchant, query)
    measures = query.get("measures") == "all"
    return reply(tallies().detail(principal().tenant, stream, measures=measures, now=now()))


@merchants.path("/v1/merchants/<merchant>", "PUT", parameters=[NAME])
@requires("tune")
@merchants.takes(Assignment)
@merchants.answers(Assigned, "What is assigned now.")
@merchants.fails(400, 408, 413, 415, 422, 503)
def put_merchant(assignment: dict[str, str], merchant: str) -> Response:
    """Assign a policy, a category, or both; rows that arrive from then on are judged by it."""
    if MERCHANT.fullmatch(merchant) is None:
        expected = (
            "Expected 1 to 64 characters of A-Z a-z 0-9 . _ : @ + -, "
            "beginning with a letter or digit."
        )
        raise invalid([{"parameter": "merchant", "detail": expected}])
    try:
        return reply(
            tallies().assign(
                principal().tenant,
                merchant,
                policy=assignment.get("policy"),
                category=assignment.get("category"),
            )
        )
    except Unknown as error:
        raise invalid([{"pointer": "/policy", "detail": sentence(error.args[0])}]) from error


@merchants.path("/v1/merchants/<merchant>/digits", parameters=[NAME])
@requires("read")
@merchants.asks(DigitsQuery)
@merchants.answers(Digits, "The view, cell by cell.")
@merchants.answers_text("text/csv", "The cells as a table, by `Accept: text/csv`.")
@merchants.fails(404, 422, 503)
def get_digits(query: dict[str, Any], merchant: str) -> Response:
    """Show one view of a stream, cell by cell, beside what was expected."""
    stream = _stream(merchant, query)
    found = tallies().digits(principal().tenant, stream, query["view"], query["span"], now=now())
    wanted = request.accept_mimetypes.best_match(
        ["application/json", "text/csv"], default="application/json"
    )
    response = _table(found) if wanted == "text/csv" else reply(found)
    response.vary.add("Accept")
    return response


@merchants.path("/v1/merchants/<merchant>/rows", parameters=[NAME])
@requires("read")
@merchants.asks(StreamQuery)
@merchants.answers(Rows, "The last rows kept, oldest first.")
@merchants.fails(404, 422, 503)
def get_rows(query: dict[str, Any], merchant: str) -> Response:
    """Show the last rows kept of a stream."""
    return reply({"rows": tallies().rows(principal().tenant, _stream(merchant, query))})


def _stream(merchant: str, query: dict[str, Any]) -> Stream:
    if MERCHANT.fullmatch(merchant) is None:
        raise Problem(404, "There is no merchant of this name.")
    return tallies().stream_of(principal().tenant, merchant, query["flow"], query.get("currency"))


COLUMNS = ("cell", "count", "share", "expected", "bound", "low", "high", "z")


def _table(found: Document) -> Response:
    text = io.StringIO()
    table = csv.DictWriter(text, COLUMNS, extrasaction="ignore", lineterminator="\r\n")
    table.writeheader()
    table.writerows(found["cells"])
    return Response(text.getvalue(), mimetype="text/csv")
