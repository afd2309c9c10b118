"""Everything known about one stream."""

from __future__ import annotations

from marshmallow import fields

from schemas import words
from schemas.base import Answer, Flag, Number, Whole, said
from schemas.measures import ONE_LOOK, Band, Circle, LargestZ, MisfitInterval, SingleLook
from schemas.merchant import Entry, Listed


class ViewDetail(MisfitInterval):
    """One view of a stream: what it is compared with, and how far it is from it."""

    span = words.span(required=True)
    reference = fields.String(required=True, validate=words.one_of(*words.REFERENCES))
    count = Whole(required=True, metadata=said("Amounts that the view sees.", minimum=0))
    misfit = Number(
        required=True,
        allow_none=True,
        metadata=said("Share that would have to differ, noise removed.", minimum=0, maximum=1),
    )
    band = fields.Nested(
        Band,
        required=True,
        allow_none=True,
        metadata=said("Only against the law, and where the count lets it mean anything."),
    )
    mad = Number(allow_none=True, metadata=said("With measures=all. " + ONE_LOOK, minimum=0))
    mad_expected = Number(allow_none=True, metadata=said("With measures=all.", minimum=0))
    chi_square = fields.Nested(SingleLook, metadata=said("With measures=all."))
    g = fields.Nested(SingleLook, metadata=said("With measures=all."))
    kuiper = Number(allow_none=True, metadata=said("With measures=all.", minimum=0))
    watson_u2 = Number(allow_none=True, metadata=said("With measures=all.", minimum=0))
    largest_z = fields.Nested(LargestZ, metadata=said("With measures=all."))


class ViewDetails(Answer):
    """All views of a stream; the circle has no misfit."""

    lead_digit = fields.Nested(ViewDetail, required=True)
    second_digit = fields.Nested(ViewDetail, required=True)
    lead_pair = fields.Nested(ViewDetail, required=True)
    tail_pair = fields.Nested(ViewDetail, required=True)
    circle = fields.Nested(ViewDetail, required=True)


class Verdict(Answer):
    """A word, and the reason for it in words."""

    status = fields.String(required=True)
    reason = fields.String(required=True, metadata=said("Why, in words."))


class Baseline(Answer):
    """How far the stream's baseline has come."""

    complete = Flag(required=True)
    count = Whole(required=True, metadata=said("Rows gathered.", minimum=0))
    size = Whole(required=True, metadata=said("Rows needed.", minimum=1))
    days = Number(required=True, metadata=said("Days of event time spanned.", minimum=0))
    days_needed = Number(required=True, metadata=said("Days needed.", minimum=0))
    first_at = words.moment("Event time of its first row.", required=True, allow_none=True)
    last_at = words.moment("Event time of its last row.", required=True, allow_none=True)


class Detail(Listed):
    """Everything known about one stream."""

    views = fields.Nested(ViewDetails, required=True)
    circle = fields.Nested(Circle, metadata=said("With measures=all: over the lifetime."))
    e_value = Number(
        required=True,
        allow_none=True,
        metadata=said(
            "Evidence against the law over the stream's life, the mean over the watched views: at "
            "least x with chance at most 1/x, however often one looks.",
            minimum=0,
        ),
    )
    log10_e_value = Number(
        required=True, allow_none=True, metadata=said("The same as log10, without bounds.")
    )
    p_value = Number(
        required=True,
        allow_none=True,
        metadata=said("min(1, 1 / e_value); valid however often one looks.", minimum=0, maximum=1),
    )
    law_applies = fields.Nested(Verdict, required=True, metadata=said("yes, no or unknown."))
    guarantee = fields.Nested(Verdict, required=True, metadata=said("holds, doubtful or void."))
    baseline = fields.Nested(Baseline, required=True, allow_none=True)
    policy = words.policy(required=True)
    policy_version = Whole(
        required=True, metadata=said("Version of the policy in force.", minimum=1)
    )
    late = Whole(
        required=True, metadata=said("Rows that were older than the window on arrival.", minimum=0)
    )
    first_seen = words.moment("Event time of the earliest row.", required=True, allow_none=True)
    last_seen = words.moment("Event time of the latest row.", required=True, allow_none=True)
    warning = fields.String(metadata=said("With measures=all: what the p-values mean."))


class Touched(Detail):
    """A stream that a batch touched: its entry, and with reply=full all of its details."""


DETAILS = sorted(set(Detail().fields) - set(Entry().fields))
"""Fields of a detail that an entry does not have."""
