"""Policies: what a tenant asks of the detectors, each setting with its range and default."""

from __future__ import annotations

from typing import Any

import marshmallow as ma
from marshmallow import fields, validate

from schemas import words
from schemas.base import Answer, Asked, Number, Whole, said
from service.detection.bank import LIMITS
from service.digits.significand import MAX_AMOUNT
from service.digits.views import WATCHED_VIEWS

REFERENCES = ("auto", "law", "own")


def _reference(value: str) -> None:
    if value == "category":
        raise ma.ValidationError(
            "The reference category is not there yet; take auto, law or own until it is."
        )
    if value not in REFERENCES:
        raise ma.ValidationError(f"Expected one of: {', '.join(REFERENCES)}.")


def _distinct(values: list[str] | None) -> None:
    if values is not None and len(set(values)) < len(values):
        raise ma.ValidationError("Expected each only once.")


def _few_a_currency(limits: list[dict[str, Any]]) -> None:
    currencies = [limit["currency"] for limit in limits]
    most = max((currencies.count(c) for c in currencies), default=0)
    if most > LIMITS:
        raise ma.ValidationError(f"Expected at most {LIMITS} limits in one currency.")


class ReviewLimit(Asked):
    """A limit from which amounts are reviewed; those just below it are a cell of their own."""

    currency = words.currency(required=True)
    amount = Whole(
        required=True,
        validate=words.between(10, MAX_AMOUNT),
        metadata=said("Minor units; amounts from this on are reviewed.", example=1_000_000),
    )
    margin = Number(
        load_default=0.1,
        validate=words.between(0.001, 0.9),
        metadata=said("Share of the limit below it that counts as just below."),
    )


class PolicySettings(Asked):
    """All settings of a policy; what is left out takes its default."""

    reference = fields.String(
        load_default="auto",
        validate=_reference,
        metadata=said(
            "What digits are compared with. auto: per view, the law where it applies to the "
            "stream's baseline, else the stream's own baseline; law; own.",
            enum=list(REFERENCES),
        ),
    )
    tolerance = Number(
        load_default=None,
        allow_none=True,
        validate=words.between(0, 1),
        metadata=said(
            "By what share a cell may exceed its reference before that counts as a difference. "
            "null: 0.10 for leading views and 0.05 for tail_pair. A number serves the leading "
            "views, and half of it tail_pair."
        ),
    )
    transactions_per_false_alarm = Number(
        load_default=1_000_000.0,
        validate=words.between(100, 1_000_000_000),
        metadata=said("The figure in the promise; larger is quieter and slower."),
    )
    baseline_size = Whole(
        load_default=1000,
        validate=words.between(200, 100_000),
        metadata=said("Rows that a baseline holds at least."),
    )
    baseline_days = Number(
        load_default=14.0,
        validate=words.between(0, 366),
        metadata=said("Days of event time that a baseline spans at least."),
    )
    baseline_confidence = Number(
        load_default=0.9995,
        validate=words.between(0.9, 0.999999),
        metadata=said("Confidence, per stream, that a learned baseline's bounds hold."),
    )
    minimum_count = Whole(
        load_default=200,
        validate=words.between(1, 1_000_000),
        metadata=said("Rows below which no score is given."),
    )
    views = fields.List(
        words.watched_view(),
        load_default=lambda: list(WATCHED_VIEWS),
        validate=[
            validate.Length(min=1, error="Expected at least one view."),
            _distinct,
        ],
        metadata=said("Views that may raise alarms.", default=list(WATCHED_VIEWS)),
    )
    flows = fields.List(
        words.flow("A flow."),
        load_default=None,
        allow_none=True,
        validate=[validate.Length(max=100, error="Expected at most 100 flows."), _distinct],
        metadata=said(
            "Flows that may raise alarms; null: all but authorisation, chargeback and test."
        ),
    )
    limits = fields.List(
        fields.Nested(ReviewLimit),
        load_default=list,
        validate=[
            validate.Length(max=100, error="Expected at most 100 limits."),
            _few_a_currency,
        ],
        metadata=said(
            "Review limits. How often amounts come just below each is learned with the baseline, "
            "or anew when the limits change; more than that raises an alarm.",
            default=[],
        ),
    )


class Policy(Answer):
    """A policy in force."""

    name = words.policy(required=True)
    version = Whole(
        required=True, metadata=said("Counts up with each change in the tenant.", minimum=1)
    )
    reference = fields.String(required=True, validate=words.one_of(*REFERENCES))
    tolerance = Number(required=True, allow_none=True, validate=words.between(0, 1))
    transactions_per_false_alarm = Number(required=True, validate=words.between(100, 1_000_000_000))
    baseline_size = Whole(required=True, validate=words.between(200, 100_000))
    baseline_days = Number(required=True, validate=words.between(0, 366))
    baseline_confidence = Number(required=True, validate=words.between(0.9, 0.999999))
    minimum_count = Whole(required=True, validate=words.between(1, 1_000_000))
    views = fields.List(words.watched_view(), required=True)
    flows = fields.List(words.flow("A flow."), required=True, allow_none=True)
    limits = fields.List(fields.Nested(ReviewLimit), required=True)


class Policies(Answer):
    """All policies of the tenant."""

    policies = fields.List(fields.Nested(Policy), required=True)


def defaults() -> dict[str, Any]:
    """Return the settings of a policy that says nothing."""
    return dict(PolicySettings().load({}))
