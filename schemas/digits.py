"""The digits of a stream, cell by cell, beside what was expected."""

from __future__ import annotations

from marshmallow import fields

from schemas import words
from schemas.base import Answer, Number, Whole, said
from schemas.merchant import StreamQuery


class DigitsQuery(StreamQuery):
    """Which stream, view and span."""

    view = words.celled_view(load_default="lead_digit")
    span = words.span(load_default="window")


class Cell(Answer):
    """One outcome of a view."""

    cell = fields.String(required=True, metadata=said("The digits, e.g. 1, 49, 05.", example="49"))
    count = Whole(required=True, metadata=said("Amounts in the cell.", minimum=0))
    share = Number(
        required=True,
        allow_none=True,
        metadata=said("count divided by the view's count; null of nothing.", minimum=0, maximum=1),
    )
    expected = Number(
        required=True,
        allow_none=True,
        metadata=said("The reference's share.", minimum=0, maximum=1),
    )
    bound = Number(
        required=True,
        allow_none=True,
        metadata=said("The largest share that counts as ordinary: the stated bound.", minimum=0),
    )
    low = Number(
        required=True,
        allow_none=True,
        metadata=said("Lower end of the simultaneous 95 % interval.", minimum=0, maximum=1),
    )
    high = Number(
        required=True,
        allow_none=True,
        metadata=said("Upper end of the simultaneous 95 % interval.", minimum=0, maximum=1),
    )
    z = Number(
        required=True,
        allow_none=True,
        metadata=said("Standard deviations from the expected count; holds for one look."),
    )


class Digits(Answer):
    """One view of a stream over one span."""

    view = words.celled_view(required=True)
    span = words.span(required=True)
    count = Whole(required=True, metadata=said("Amounts that the view sees.", minimum=0))
    reference = fields.String(
        required=True,
        validate=words.one_of(*words.REFERENCES),
        metadata=said("What the view is compared with."),
    )
    cells = fields.List(fields.Nested(Cell), required=True)
