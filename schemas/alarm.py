"""Alarms: a stream's digits left their bounds. A reason to look, never proof of fraud."""

from __future__ import annotations

from marshmallow import fields, validate

from schemas import words
from schemas.base import Answer, Asked, Flag, Number, Whole, said

CELL = validate.Regexp(r"^[0-9]{1,2}$", error="Expected one or two digits.")


class Finding(Answer):
    """One thing that left its bounds."""

    view = words.alarmed_view(required=True)
    pattern = fields.String(
        required=True,
        validate=words.one_of(*words.PATTERNS),
        metadata=said(
            "cell: some cells carry too much, strongest first; rare_cells: cells hardly used "
            "before; shape: the whole shape moved."
        ),
    )
    cells = fields.List(
        fields.String(), required=True, metadata=said("Cells of the view, strongest first.")
    )
    onset_count = Whole(
        required=True,
        allow_none=True,
        metadata=said("Row number, in arrival order, where the change is likeliest to begin."),
    )
    observed_share = Number(
        required=True,
        allow_none=True,
        metadata=said(
            "Share of the cells since the onset. The alarm selects it, so it is biased upwards.",
            minimum=0,
            maximum=1,
        ),
    )
    expected_share = Number(
        required=True,
        allow_none=True,
        metadata=said("Share of the cells by the reference.", minimum=0, maximum=1),
    )


class Alarm(Finding):
    """An alarm; its own view, pattern and cells are those of the strongest finding."""

    id = fields.String(required=True, metadata=said("The alarm's id."))
    cursor = fields.String(
        required=True, allow_none=True, metadata=said("Its place in the feed, for after=.")
    )
    merchant = words.merchant(required=True)
    flow = words.flow(required=True)
    currency = words.currency(required=True)
    state = fields.String(
        required=True,
        validate=words.one_of(*words.STATES),
        metadata=said("open until somebody decides."),
    )
    historic = Flag(
        required=True, metadata=said("Raised by rows of the past (mode=history); not on the feed.")
    )
    raised_at = words.moment("When it was raised.", required=True)
    count = Whole(
        required=True, metadata=said("Row number in the stream at which it was raised.", minimum=0)
    )
    evidence = Number(
        required=True,
        metadata=said("log10 of the detectors' weighted sum at the crossing; not odds of fraud."),
    )
    transactions_per_false_alarm = Number(
        required=True, metadata=said("The policy's figure in the promise.", minimum=1)
    )
    onset_at = words.moment("Event time of the onset.", required=True, allow_none=True)
    reference = fields.String(
        required=True,
        validate=words.one_of(*words.REFERENCES),
        metadata=said("What the view was compared with."),
    )
    findings = fields.List(
        fields.Nested(Finding), required=True, metadata=said("All findings, strongest first.")
    )
    repeats = Whole(
        required=True, metadata=said("Further crossings while the alarm was open.", minimum=0)
    )
    severity = Number(
        required=True, metadata=said("Log-likelihood gathered since the onset; ranks alarms.")
    )
    excess_count = Number(
        required=True,
        allow_none=True,
        metadata=said("Rows since the onset above what was expected in the cells."),
    )
    excess_amount = Number(
        required=True, allow_none=True, metadata=said("The money in those rows, minor units.")
    )
    last_hit_at = words.moment(
        "Event time of the last row in the cells.", required=True, allow_none=True
    )
    still_active = Flag(required=True, metadata=said("Whether the pattern still goes on."))
    explanation = fields.String(
        required=True, metadata=said("The finding in words, fit for a case file.")
    )
    assignee = fields.String(required=True, allow_none=True, metadata=said("Who looks at it."))
    decision = fields.Dict(
        required=True, allow_none=True, metadata=said("What was decided, by whom and when.")
    )


class AlarmsQuery(Asked):
    """Where to go on in the feed, for how long to wait, and what to leave out."""

    after = fields.String(
        validate=validate.Length(1, 64, error="Expected 1 to 64 characters."),
        metadata=said("The next of an earlier page; without it, from the beginning."),
    )
    limit = fields.Integer(
        load_default=100, validate=words.between(1, 1000), metadata=said("How many at most.")
    )
    wait = fields.Float(
        load_default=0.0,
        allow_nan=False,
        validate=words.between(0, 30),
        metadata=said("Seconds to hold the request until there is an alarm."),
    )
    merchant = words.merchant()
    flow = words.flow("Only alarms of this flow.")
    currency = words.currency("Only alarms in this currency.")
    view = words.alarmed_view()
    cell = fields.String(
        validate=CELL, metadata=said("Only alarms with a finding in this cell.", example="49")
    )
    state = fields.String(
        validate=words.one_of(*words.STATES), metadata=said("Only alarms in this state now.")
    )


class Alarms(Answer):
    """A page of the feed, oldest first."""

    alarms = fields.List(fields.Nested(Alarm), required=True)
    next = fields.String(
        required=True,
        allow_none=True,
        metadata=said("The last position read, also on an empty page: give it as after="),
    )
