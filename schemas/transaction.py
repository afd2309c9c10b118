"""A transaction as callers post it: what each field may hold, and how the document describes it.

The checks here need no clock and no currency table; `service.batches.rowcheck` adds those.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from datetime import UTC, datetime, timedelta, timezone
from typing import Any

from marshmallow import ValidationError, fields, validate, validates_schema

from schemas.base import Asked, Whole, said
from service.digits.significand import MAX_AMOUNT
from service.streams.record import FLOW, MERCHANT

CURRENCY = re.compile(r"[A-Z]{3}")
CATEGORY = re.compile(r"[0-9]{4}")
PRINTABLE = re.compile(r"[ -~]{1,64}")
MAX_OFFSET = 2**53 - 1
"""Largest offset: the largest integer that every JSON reader keeps exactly (RFC 8259 §6)."""

END_MS = int(datetime(2101, 1, 1, tzinfo=UTC).timestamp()) * 1000
"""Event times are before this, in milliseconds since 1970 UTC."""

DECIMAL = re.compile(r"-?(?:0|[1-9][0-9]*)(?:\.[0-9]+)?")
"""Grammar of a decimal amount, to be matched in full: a JSON number without an exponent."""

DECIMAL_EXPECTED = (
    'Expected an integer of minor units (1999) or a decimal string in major units ("19.99"): '
    "digits, at most one point with digits on both sides, no leading zeros, no plus sign, "
    "exponent or spaces."
)
LIMIT_EXPECTED = "Expected at most 10^15 minor units."
_RFC3339 = re.compile(
    r"([0-9]{4})-([0-9]{2})-([0-9]{2})[Tt]([0-9]{2}):([0-9]{2}):([0-9]{2})(?:\.([0-9]+))?"
    r"(?:([Zz])|([+-])([0-9]{2}):([0-9]{2}))"
)
_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
_LONGEST_TIME = 64
_BEFORE = "Expected a time not before 1970-01-01."


def instant(text: str) -> int:
    """Return an RFC 3339 time as milliseconds since 1970 UTC; finer fractions are cut off.

    Parameters
    ----------
    text : str
        Such as ``2026-11-30T12:00:00Z`` or ``2026-11-30T13:00:00.250+01:00``.

    Returns
    -------
    int
        0 to `END_MS` - 1.

    Raises
    ------
    ValueError
        If it is no such time, or before 1970 or after 2100; the message says which.
    """
    match = _RFC3339.fullmatch(text) if len(text) <= _LONGEST_TIME else None
    if match is None:
        raise ValueError("Expected an RFC 3339 time with its offset, such as 2026-11-30T12:00:00Z.")
    year, month, day, hour, minute, second = (int(part) for part in match.groups()[:6])
    fraction, _, sign, offset_hour, offset_minute = match.groups()[6:]
    if second == 60:
        raise ValueError("Leap seconds (:60) are not taken: send :59.")
    if hour > 23 or minute > 59 or second > 59:
        raise ValueError("Expected a time of day from 00:00:00 to 23:59:59.")
    if year == 0:  # RFC 3339 has it, Python's calendar does not
        raise ValueError(_BEFORE)
    ahead = timedelta(0)
    if sign:
        if int(offset_hour) > 23 or int(offset_minute) > 59:
            raise ValueError("Expected an offset from 00:00 to 23:59.")
        ahead = timedelta(hours=int(offset_hour), minutes=int(offset_minute))
        ahead = -ahead if sign == "-" else ahead
    try:
        local = datetime(year, month, day, hour, minute, second, tzinfo=timezone(ahead))
    except ValueError:
        raise ValueError("There is no such day in the calendar.") from None
    milliseconds = (local - _EPOCH) // timedelta(milliseconds=1)
    milliseconds += int((fraction or "0")[:3].ljust(3, "0"))
    if milliseconds < 0:
        raise ValueError(_BEFORE)
    if milliseconds >= END_MS:
        raise ValueError("Expected a time not after the year 2100.")
    return milliseconds


class Amount(fields.Field[int | str]):
    """An integer of minor units, or a decimal text in major units."""

    def _deserialize(
        self, value: Any, attr: str | None, data: Mapping[str, Any] | None, **kwargs: Any
    ) -> int | str:
        if isinstance(value, int) and not isinstance(value, bool):
            if abs(value) > MAX_AMOUNT:
                raise ValidationError(LIMIT_EXPECTED)
            return value
        if isinstance(value, float):
            raise ValidationError(
                "Ambiguous as a JSON number with a fraction or exponent: send an integer of "
                'minor units (1999) or a string ("19.99").'
            )
        if not isinstance(value, str) or not DECIMAL.fullmatch(value):
            raise ValidationError(DECIMAL_EXPECTED)
        return value


class Instant(fields.Field[int]):
    """An RFC 3339 time, read as milliseconds since 1970 UTC."""

    def _deserialize(
        self, value: Any, attr: str | None, data: Mapping[str, Any] | None, **kwargs: Any
    ) -> int:
        if not isinstance(value, str):
            raise ValidationError("Expected a string with an RFC 3339 time.")
        try:
            return instant(value)
        except ValueError as error:
            raise ValidationError(str(error)) from error


_MESSAGES: dict[str, Any] = {
    "required": "Expected a value: it is required.",
    "null": "Expected a value other than null; leave the field out instead.",
    "invalid": "Expected a string.",
}


def _text(
    pattern: re.Pattern[str], expected: str, *, required: bool = False, **more: Any
) -> fields.String:
    """Return a field whose whole text matches a pattern."""

    def check(value: str) -> None:
        if not pattern.fullmatch(value):
            raise ValidationError(expected)

    return fields.String(
        required=required,
        validate=check,
        error_messages=_MESSAGES,
        metadata=more | {"pattern": f"^(?:{pattern.pattern})$"},
    )


class TransactionSchema(Asked):
    """One transaction."""

    error_messages = {  # noqa: RUF012 - marshmallow's own way
        "unknown": "Unknown: a transaction has no such field.",
        "type": "Expected an object.",
    }

    merchant = _text(
        MERCHANT,
        "Expected 1 to 64 characters of A-Z a-z 0-9 . _ : @ + -, beginning with a letter or digit.",
        required=True,
        description="Whose amount it is.",
        example="harbour-books",
    )
    amount = Amount(
        required=True,
        error_messages=_MESSAGES,
        metadata=said(
            "The amount the merchant priced, before currency conversion, tip or cash-back: an "
            "integer of minor units, or a decimal string in major units with at most the "
            "currency's decimals; at most 10^15 minor units. A JSON number with a fraction is "
            "refused. Negative without a flow: a refund of the absolute value.",
            oneOf=[
                {"type": "integer", "minimum": -MAX_AMOUNT, "maximum": MAX_AMOUNT},
                {"type": "string", "pattern": f"^(?:{DECIMAL.pattern})$"},
            ],
            example=1999,
        ),
    )
    currency = _text(
        CURRENCY,
        "Expected three capital letters (ISO 4217).",
        description="ISO 4217 currency that has a minor unit; a setting of the service gives the "
        "default.",
        example="EUR",
    )
    flow = _text(
        FLOW,
        "Expected 1 to 16 characters of a-z 0-9 _ -.",
        description="sale (default), refund, payout, recurring, authorisation, chargeback, test, "
        "or a label of your own.",
        example="sale",
    )
    at = Instant(
        error_messages=_MESSAGES,
        metadata=said(
            "When it happened: RFC 3339, from 1970 to 2100, at most 5 minutes ahead; by default "
            "the time of arrival.",
            type="string",
            format="date-time",
            example="2026-11-30T12:00:00Z",
        ),
    )
    id = _text(
        PRINTABLE,
        "Expected 1 to 64 printable ASCII characters.",
        description="Your own name of the transaction; another row with the same one is a "
        "duplicate.",
        example="7c1e-000017",
    )
    category = _text(
        CATEGORY,
        "Expected four digits (ISO 18245).",
        description="The merchant's category, ISO 18245; the last one given stays.",
        example="5942",
    )
    source = _text(
        PRINTABLE,
        "Expected 1 to 64 printable ASCII characters.",
        description="A partition of your log; with offset it identifies the row for ever.",
        example="payments-3",
    )
    offset = Whole(
        error_messages=_MESSAGES | {"invalid": "Expected an integer."},
        validate=validate.Range(0, MAX_OFFSET, error="Expected 0 to 2^53 - 1."),
        metadata=said("The row's position in its source, ascending.", example=184467),
    )

    @validates_schema(pass_original=True, skip_on_field_errors=False)
    def check_together(self, data: Mapping[str, Any], original_data: Any, **kwargs: Any) -> None:
        """Check what one field alone does not show."""
        if not isinstance(original_data, Mapping):
            return
        errors: dict[str, list[str]] = {}
        for name, other in (("source", "offset"), ("offset", "source")):
            if name in original_data and other not in original_data:
                errors[other] = [f"Expected a value: it is required together with {name}."]
        if "flow" in original_data and _is_negative(data.get("amount", 0)):
            errors["amount"] = [
                "Expected no minus sign where a flow is given; without one it is a refund."
            ]
        if errors:
            raise ValidationError(errors)


def _is_negative(amount: int | str) -> bool:
    if isinstance(amount, str):
        return amount.startswith("-") and amount.strip("-0.") != ""
    return amount < 0


class BatchSchema(Asked):
    """The body of a batch."""

    transactions = fields.List(
        fields.Nested(TransactionSchema),
        required=True,
        metadata=said("Transactions, in the order in which detectors are to see them."),
    )
