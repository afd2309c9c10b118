"""Merchants: one entry per stream, and everything known about one stream."""

from __future__ import annotations

import marshmallow as ma
from marshmallow import fields, validate

from schemas import words
from schemas.base import Answer, Asked, Number, Whole, said

SCORE = (
    "0 to 100: how well the first digits fit their reference, sampling noise removed; null below "
    "the policy's minimum_count."
)
EVIDENCE = (
    "log10 of the weighted sum of the stream's sequential detectors (0 when below 1). It is not "
    "the odds of fraud."
)


class Entry(Answer):
    """One stream at a glance."""

    merchant = words.merchant(required=True)
    flow = words.flow(required=True)
    currency = words.currency(required=True)
    count = Whole(
        required=True, metadata=said("Amounts above zero over the stream's life.", minimum=0)
    )
    zero = Whole(required=True, metadata=said("Rows with amount 0.", minimum=0))
    window_count = Whole(
        required=True, metadata=said("Amounts above zero in the rolling window.", minimum=0)
    )
    score = Number(required=True, allow_none=True, metadata=said(SCORE, minimum=0, maximum=100))
    score_low = Number(
        required=True,
        allow_none=True,
        metadata=said("Lower end of the score's 95 % interval.", minimum=0, maximum=100),
    )
    score_high = Number(
        required=True,
        allow_none=True,
        metadata=said("Upper end of the score's 95 % interval.", minimum=0, maximum=100),
    )
    score_span = fields.String(
        required=True,
        allow_none=True,
        validate=words.one_of(*words.SPANS),
        metadata=said("What the score is over: lifetime while the window holds too few rows."),
    )
    misfit = Number(
        required=True,
        allow_none=True,
        metadata=said(
            "Share of the span's amounts, 0 to 1, that would have to differ for the first digits "
            "to match the reference (total variation distance), less what noise explains.",
            minimum=0,
            maximum=1,
        ),
    )
    law_misfit = Number(
        required=True,
        allow_none=True,
        metadata=said("The same against the logarithmic law, always.", minimum=0, maximum=1),
    )
    evidence = Number(required=True, metadata=said(EVIDENCE, minimum=0))
    standing = fields.String(
        required=True,
        validate=words.one_of(*words.STANDINGS),
        metadata=said("learning, steady, or alarmed (has an open alarm)."),
    )
    open_alarm = fields.String(
        required=True, allow_none=True, metadata=said("Id of the open alarm.")
    )
    updated = words.moment("When the last row arrived.", required=True, allow_none=True)


class Listed(Entry):
    """One stream in a listing."""

    category = words.category(required=True, allow_none=True)


class MerchantsQuery(Asked):
    """Filters, sorting and paging of merchants."""

    flow = words.flow("Only streams of this flow.")
    currency = words.currency("Only streams in this currency.")
    category = words.category()
    standing = fields.String(
        validate=words.one_of(*words.STANDINGS), metadata=said("Only streams that stand so.")
    )
    search = fields.String(
        validate=validate.Length(1, 64, error="Expected 1 to 64 characters."),
        metadata=said("Only merchants whose name contains this, in any case."),
    )
    sort = fields.String(
        load_default="evidence",
        validate=words.one_of("evidence", "score", "misfit", "law_misfit", "count", "updated"),
        metadata=said("What to order by; streams without a value come last in either order."),
    )
    order = fields.String(
        load_default="desc",
        validate=words.one_of("desc", "asc"),
        metadata=said("Largest or smallest first."),
    )
    limit = fields.Integer(
        load_default=100,
        validate=words.between(1, 1000),
        metadata=said("How many entries at most."),
    )
    cursor = fields.String(
        validate=validate.Length(1, 1024, error="Expected 1 to 1024 characters."),
        metadata=said("The next of an earlier page, with the same sort and order."),
    )


class Merchants(Answer):
    """One page of streams."""

    merchants = fields.List(fields.Nested(Listed), required=True)
    next = fields.String(
        required=True, allow_none=True, metadata=said("Cursor of the next page; null at the end.")
    )


class StreamQuery(Asked):
    """Which of a merchant's streams is meant."""

    flow = words.flow("Which flow.", load_default="sale")
    currency = words.currency("Which currency; without it, the busiest stream of the flow.")


class DetailQuery(StreamQuery):
    """Which stream, and how much about it."""

    measures = fields.String(
        validate=words.one_of("all"), metadata=said("all: add the classical measures per view.")
    )


class Assignment(Asked):
    """A merchant's policy, category, or both; what is left out stays as it is."""

    policy = words.policy()
    category = words.category()

    @ma.validates_schema
    def _something(self, data: dict[str, str], **kwargs: object) -> None:
        if not data:
            raise ma.ValidationError("Expected policy, category or both.")


class Assigned(Answer):
    """What is assigned to a merchant now."""

    merchant = words.merchant(required=True)
    policy = words.policy(required=True)
    category = words.category(required=True, allow_none=True)


class Row(Answer):
    """One row kept."""

    id = fields.String(required=True, allow_none=True, metadata=said("The row's id, as given."))
    amount = Whole(required=True, metadata=said("Minor units.", minimum=0))
    currency = words.currency(required=True)
    at = words.moment("Event time.", required=True)


class Rows(Answer):
    """The last rows kept of a stream, oldest first."""

    rows = fields.List(fields.Nested(Row), required=True)
