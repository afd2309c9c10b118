"""Every reason why a row is not valid: the schema's, then those that need clock and currencies."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from marshmallow import ValidationError

from schemas.transaction import PRINTABLE, TransactionSchema
from service.batches.currencies import exponent, minor_units
from service.batches.document import Malformed, Members
from service.batches.limits import AHEAD_MS

_LONGEST_NAME = 64
_SCHEMA = TransactionSchema()
_WHOLE = "_schema"  # marshmallow's name for errors of the whole object


@dataclass(frozen=True)
class Finding:
    """One thing wrong with a row.

    Attributes
    ----------
    name : str or None
        Field; None for the row as a whole.
    detail : str
        What was expected.
    retryable : bool
        Whether the same row may be valid later.
    """

    name: str | None
    detail: str
    retryable: bool = False


def findings(row: Any, *, now: int, default_currency: str | None) -> list[Finding]:
    """Return everything that is wrong with a row; nothing when it is valid.

    Parameters
    ----------
    row : object
        What the JSON held: `Members` if it was an object, `Malformed` if it was no JSON.
    now : int
        Time of arrival, milliseconds since 1970 UTC.
    default_currency : str or None
        For rows without one.
    """
    if isinstance(row, Malformed):
        place = f"line {row.line}, column {row.column}"
        return [Finding(None, f"Expected JSON: {row.detail} ({place}).")]
    try:
        clean: Mapping[str, Any] = _SCHEMA.load(row)
        found = []
    except ValidationError as error:
        clean = error.valid_data if isinstance(error.valid_data, Mapping) else {}
        found = _from_schema(row, error.messages_dict)
    if not isinstance(row, Members):
        return found
    found += [Finding(name, "Expected the field only once.") for name in row.repeated]
    found += _of_money(clean, named="currency" in row, default=default_currency)
    at = clean.get("at")
    if at is not None and at > now + AHEAD_MS:
        minutes = AHEAD_MS // 60_000
        # later rows of a source pass its high-water mark, and then this one can never come
        found.append(
            Finding(
                "at",
                f"Expected a time at most {minutes} minutes ahead.",
                retryable="source" not in row,
            )
        )
    return found


def readable_id(row: Any) -> str | None:
    """Return the row's own id if it has a valid one."""
    value = row.get("id") if isinstance(row, Mapping) else None
    return value if isinstance(value, str) and PRINTABLE.fullmatch(value) else None


def pointer(index: int, name: str | None) -> str:
    """Return the RFC 6901 pointer to a field of a row, or to the row.

    A name that no field has comes from the request: what is not a character is written as an
    escape, and of a very long name only the beginning is given.
    """
    start = f"/transactions/{index}"
    return start if name is None else f"{start}/{token(name)}"


def token(name: str) -> str:
    """Return a name as part of an RFC 6901 pointer."""
    if len(name) > _LONGEST_NAME:
        name = name[:_LONGEST_NAME] + "…"
    name = name.encode("utf-8", "backslashreplace").decode("utf-8")
    return name.replace("~", "~0").replace("/", "~1")


def _from_schema(row: Any, messages: Mapping[str, Any]) -> list[Finding]:
    found = []
    for name, details in messages.items():
        whole = name == _WHOLE and not (isinstance(row, Mapping) and _WHOLE in row)
        found += [Finding(None if whole else name, str(detail)) for detail in details]
    return found


def _of_money(clean: Mapping[str, Any], *, named: bool, default: str | None) -> list[Finding]:
    code = clean.get("currency", None if named else default)
    if code is None:
        return [] if named else [Finding("currency", "Expected a value: there is no default.")]
    try:
        decimals = exponent(code)
    except ValueError as error:
        return [Finding("currency", str(error))]
    amount = clean.get("amount")
    if isinstance(amount, str):
        try:
            minor_units(amount, decimals)
        except ValueError as error:
            return [Finding("amount", str(error))]
    return []
