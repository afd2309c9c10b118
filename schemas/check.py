"""Checks: every measure of a handful of amounts, looked at once."""

from __future__ import annotations

from typing import Any

import marshmallow as ma
from marshmallow import fields, validate

from schemas import words
from schemas.base import Answer, Asked, Number, Whole, said
from schemas.measures import ONE_LOOK, Circle, Measures, WatchedMeasures

MOST_AMOUNTS = 100_000


class Amounts(fields.List[Any]):
    """Integers and strings, told apart all at once: there may be a hundred thousand."""

    def __init__(self, **kwargs: Any) -> None:
        one = fields.Raw(
            metadata={
                "description": "Minor units, or major units as a decimal string.",
                "oneOf": [
                    {"type": "integer", "minimum": 0, "maximum": 10**15},
                    {"type": "string", "pattern": r"^(0|[1-9][0-9]*)(\.[0-9]+)?$"},
                ],
            }
        )
        super().__init__(one, **kwargs)

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> list[Any]:
        if not isinstance(value, list):
            raise self.make_error("invalid")
        if not set(map(type, value)) <= {int, str}:
            wrong = "Expected an integer in minor units, or a decimal string such as 19.99."
            raise ma.ValidationError(
                {i: [wrong] for i, one in enumerate(value) if type(one) not in (int, str)}
            )
        return value


class CheckRequest(Asked):
    """The amounts to look at."""

    amounts = Amounts(
        required=True,
        validate=validate.Length(1, MOST_AMOUNTS, error=f"Expected 1 to {MOST_AMOUNTS:,} amounts."),
        metadata=said(
            "Integers in minor units, or decimal strings in major units; a JSON float is refused. "
            "Zeros are counted in zero and in nothing else.",
            example=[1999, "20.50", 310],
        ),
    )
    currency = words.currency(
        "ISO 4217 currency of all amounts; without it, the service's default."
    )


class Views(Answer):
    """The views that have cells."""

    lead_digit = fields.Nested(WatchedMeasures, required=True)
    second_digit = fields.Nested(Measures, required=True)
    lead_pair = fields.Nested(WatchedMeasures, required=True)
    tail_pair = fields.Nested(WatchedMeasures, required=True)


class Check(Answer):
    """Every measure of the amounts against the laws of digits."""

    currency = words.currency(required=True)
    count = Whole(required=True, metadata=said("Amounts above zero.", minimum=0))
    zero = Whole(required=True, metadata=said("Amounts of zero.", minimum=0))
    score = Number(
        required=True,
        allow_none=True,
        metadata=said(
            "0 to 100: how well first digits fit the law, noise removed; null below 200 amounts.",
            minimum=0,
            maximum=100,
        ),
    )
    score_low = Number(
        required=True,
        allow_none=True,
        metadata=said("Lower end of its 95 % interval.", minimum=0, maximum=100),
    )
    score_high = Number(
        required=True,
        allow_none=True,
        metadata=said("Upper end of its 95 % interval.", minimum=0, maximum=100),
    )
    views = fields.Nested(Views, required=True)
    circle = fields.Nested(Circle, required=True)
    warning = fields.String(required=True, metadata=said(ONE_LOOK))
