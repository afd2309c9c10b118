"""Health: is the process alive, and may it be sent work."""

from __future__ import annotations

from marshmallow import fields

from schemas import words
from schemas.base import Answer, said

STATUSES = ("pass", "warn", "fail")


class Live(Answer):
    """The process answers."""

    status = fields.String(required=True, validate=words.one_of("pass"))


class Part(Answer):
    """One part's health."""

    name = fields.String(required=True, metadata=said("The part.", example="store"))
    status = fields.String(required=True, validate=words.one_of(*STATUSES))
    detail = fields.String(
        required=True, allow_none=True, metadata=said("What was found, in words.")
    )


class Ready(Answer):
    """Whether work may be sent: the worst of the checks."""

    status = fields.String(required=True, validate=words.one_of(*STATUSES))
    checks = fields.List(fields.Nested(Part), required=True)
