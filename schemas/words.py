"""Fields that several resources share, each with its pattern, range and meaning."""

from __future__ import annotations

import re
from typing import Any

from marshmallow import ValidationError, fields, validate

from schemas.base import said
from schemas.transaction import CATEGORY, CURRENCY
from service.digits.views import VIEWS, WATCHED_VIEWS
from service.streams.record import FLOW, MERCHANT

POLICY = re.compile(r"[a-z0-9_-]{1,32}")

SPANS = ("window", "lifetime")
STANDINGS = ("learning", "steady", "alarmed")
STATES = ("open", "acknowledged", "confirmed", "dismissed")
LIMIT = "limit"
REPEAT = "repeat"
PATTERNS = ("cell", "rare_cells", "shape")
REFERENCES = ("law", "own", "category")


class Matching(validate.Regexp):
    """The whole string matches, a line end at its end not excepted."""

    def __init__(self, pattern: re.Pattern[str], message: str) -> None:
        super().__init__(rf"^(?:{pattern.pattern})$", error=message)
        self.whole = pattern

    def __call__(self, value: Any) -> Any:
        """Return the value, or raise ValidationError."""
        if not isinstance(value, str) or self.whole.fullmatch(value) is None:
            raise ValidationError(str(self.error))
        return value


_MERCHANT = Matching(
    MERCHANT,
    "Expected 1 to 64 characters of A-Z a-z 0-9 . _ : @ + -, beginning with a letter or digit.",
)
_FLOW = Matching(FLOW, "Expected 1 to 16 characters of a-z 0-9 _ -.")
_CURRENCY = Matching(CURRENCY, "Expected three capital letters (ISO 4217).")
_CATEGORY = Matching(CATEGORY, "Expected four digits (ISO 18245).")
_POLICY = Matching(POLICY, "Expected 1 to 32 characters of a-z 0-9 _ -.")


def one_of(*words: str) -> validate.OneOf:
    """Return a validator that names the choices when it refuses."""
    return validate.OneOf(words, error="Expected one of: {choices}.")


def between(low: float, high: float) -> validate.Range:
    """Return a validator for an inclusive range that names both ends."""
    return validate.Range(min=low, max=high, error=f"Expected a number from {low:,} to {high:,}.")


def merchant(**kwargs: Any) -> fields.String:
    """A merchant's name."""
    metadata = said("The merchant's name, unique in the tenant.", example="harbour-books")
    return fields.String(validate=_MERCHANT, metadata=metadata, **kwargs)


def flow(
    description: str = "What kind of money: sale, refund, payout, ...", **kwargs: Any
) -> fields.String:
    """A flow of money."""
    return fields.String(validate=_FLOW, metadata=said(description, example="sale"), **kwargs)


def currency(description: str = "ISO 4217 currency.", **kwargs: Any) -> fields.String:
    """A currency."""
    return fields.String(validate=_CURRENCY, metadata=said(description, example="EUR"), **kwargs)


def category(**kwargs: Any) -> fields.String:
    """A merchant category code."""
    metadata = said("Merchant category, four digits (ISO 18245).", example="5942")
    return fields.String(validate=_CATEGORY, metadata=metadata, **kwargs)


def policy(**kwargs: Any) -> fields.String:
    """A policy's name."""
    metadata = said("Name of a policy.", example="standard")
    return fields.String(validate=_POLICY, metadata=metadata, **kwargs)


def celled_view(**kwargs: Any) -> fields.String:
    """A view that has cells."""
    return fields.String(
        validate=one_of(*(view for view in VIEWS if view != "circle")),
        metadata=said(
            "How an amount's digits are read: lead_digit (first significant digit), second_digit, "
            "lead_pair (first two digits), tail_pair (last two digits of the minor-unit integer, "
            "amounts of at least 1000 minor units)."
        ),
        **kwargs,
    )


def alarmed_view(**kwargs: Any) -> fields.String:
    """A view, or the amounts just below a review limit."""
    metadata = said(
        "A view that detectors watch; `limit` for amounts just below a review limit of the "
        "policy, whose cell is the limit in minor units; `repeat` for amounts that repeat one of "
        "the few before them, whose cells are such amounts in minor units."
    )
    return fields.String(
        validate=one_of(*WATCHED_VIEWS, LIMIT, REPEAT), metadata=metadata, **kwargs
    )


def watched_view(**kwargs: Any) -> fields.String:
    """A view that detectors watch."""
    metadata = said("A view that detectors watch.")
    return fields.String(validate=one_of(*WATCHED_VIEWS), metadata=metadata, **kwargs)


def span(**kwargs: Any) -> fields.String:
    """The rolling window, or the whole life of a stream."""
    metadata = said("window (rolling, in event time) or lifetime.")
    return fields.String(validate=one_of(*SPANS), metadata=metadata, **kwargs)


def moment(description: str, **kwargs: Any) -> fields.String:
    """A time, RFC 3339 in UTC."""
    metadata = said(description, format="date-time", example="2026-11-30T12:00:00.000Z")
    return fields.String(metadata=metadata, **kwargs)
