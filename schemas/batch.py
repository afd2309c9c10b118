"""What a batch is answered with, and how it may be sent."""

from __future__ import annotations

from marshmallow import fields

from schemas import words
from schemas.alarm import Alarm
from schemas.base import Answer, Asked, Flag, Whole, said
from schemas.stream import DETAILS, Touched


class BatchQuery(Asked):
    """How a batch is taken and answered."""

    invalid = fields.String(
        load_default="reject",
        validate=words.one_of("reject", "skip"),
        metadata=said(
            "reject: one invalid row refuses the batch and nothing is counted. skip: valid rows "
            "are counted and the others listed in rejected."
        ),
    )
    mode = fields.String(
        validate=words.one_of("history"),
        metadata=said(
            "history: rows of the past, which build tallies, history and baseline; alarms they "
            "cause are marked historic and stay off the feed."
        ),
    )
    reply = fields.String(
        load_default="alarms",
        validate=words.one_of("alarms", "merchants", "full"),
        metadata=said("merchants: add an entry per stream touched; full: with all its details."),
    )


class Rejected(Answer):
    """A row that was left out (invalid=skip)."""

    index = Whole(required=True, metadata=said("Position in the request, from 0.", minimum=0))
    id = fields.String(
        required=True, allow_none=True, metadata=said("The row's id, where it could be read.")
    )
    pointer = fields.String(
        required=True, metadata=said("RFC 6901 pointer.", example="/transactions/17/amount")
    )
    detail = fields.String(required=True, metadata=said("What was expected."))
    retryable = Flag(required=True, metadata=said("Whether the same row may be valid later."))


class Receipt(Answer):
    """What became of a batch; accepted + duplicates + rejected = rows sent."""

    accepted = Whole(
        required=True,
        metadata=said("Rows new and valid, those counted in late and zero included.", minimum=0),
    )
    duplicates = Whole(required=True, metadata=said("Rows seen before.", minimum=0))
    late = Whole(required=True, metadata=said("Accepted rows older than the window.", minimum=0))
    zero = Whole(required=True, metadata=said("Accepted rows with amount 0.", minimum=0))
    unverified = Whole(
        required=True,
        metadata=said(
            "Accepted rows older than the horizon and identified by id only: if they were posted "
            "before, they are counted twice.",
            minimum=0,
        ),
    )
    rejected = fields.List(fields.Nested(Rejected), required=True)
    exactly_once = Flag(
        required=True,
        metadata=said("Whether every row has an identity, so that sending again is safe."),
    )
    durability = fields.String(
        required=True,
        validate=words.one_of("none", "everysec", "always", "replicas", "unknown"),
        metadata=said(
            "What this answer means when the store's machine fails: none: kept in memory; "
            "everysec: about the last second is lost, more while the disk is slow; always: written "
            "to disk; replicas: held by as many replicas as the operator asked for; "
            "unknown: the store does not say."
        ),
    )
    alarms = fields.List(
        fields.Nested(Alarm),
        required=True,
        metadata=said("Alarms raised by rows of this request; the feed is the complete record."),
    )
    merchants = fields.List(
        fields.Nested(Touched(partial=DETAILS)),
        metadata=said("With reply=merchants or full: one entry per stream touched."),
    )
