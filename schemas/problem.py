"""RFC 9457 problem details: the body of every error."""

from __future__ import annotations

from marshmallow import fields

from schemas.base import Answer, Whole, said


class Fault(Answer):
    """One thing wrong with the request: where it is, and what was expected."""

    pointer = fields.String(
        metadata=said(
            "RFC 6901 JSON Pointer into the body; the empty string is the whole body.",
            example="/transactions/17/amount",
        )
    )
    parameter = fields.String(
        metadata=said("Name of the query or path parameter at fault, instead of a pointer.")
    )
    header = fields.String(metadata=said("Name of the header at fault, instead of a pointer."))
    detail = fields.String(required=True, metadata=said("What was expected."))


class Problem(Answer):
    """What went wrong (RFC 9457, ``application/problem+json``)."""

    type = fields.String(
        required=True,
        metadata=said("Always about:blank: the status says the kind.", example="about:blank"),
    )
    title = fields.String(required=True, metadata=said("The status in words."))
    status = Whole(required=True, metadata=said("The HTTP status.", minimum=400, maximum=599))
    detail = fields.String(required=True, metadata=said("What happened and what to do."))
    errors = fields.List(
        fields.Nested(Fault),
        metadata=said("Every input at fault, the first 100 of them.", maxItems=100),
    )
    error_count = Whole(metadata=said("How many inputs are at fault, listed or not.", minimum=1))
