"""Crossings as documents to be stored, and the alarm that the crossings so far amount to."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict
from typing import Any

from service.streams.crossing import Crossing
from service.streams.explanation import explanation
from service.streams.notation import decimal, moment, share
from service.streams.record import Stream

MOST_FINDINGS = 5

STRONGER = 1.1
"""A later finding replaces an earlier one of its view and pattern when it carries so many times
the share of the evidence; a smaller difference is chance, and the earlier onset is worth more."""

PAUSE = 3
"""A pattern counts as over when the stream went on for this many times the rows that its last
crossing took, and did not cross again."""

PAUSE_ROWS = 100
"""... and for at least so many rows."""


def crossing_document(crossing: Crossing) -> dict[str, Any]:
    """Return all that later alarm documents need of a crossing, JSON-ready.

    Times stay milliseconds and numbers unrounded; NaN becomes None.
    """
    return {
        "alarm": crossing.alarm.hex(),
        "ordinal": crossing.ordinal,
        "record": crossing.record,
        "rows": crossing.rows,
        "arrived": crossing.arrived,
        "at": crossing.at,
        "historic": crossing.historic,
        "evidence": crossing.evidence,
        "threshold": crossing.threshold,
        "severity": crossing.severity,
        "excess": _plain(crossing.excess),
        "excess_amount": _plain(crossing.excess_amount),
        "last_hit_at": crossing.last_hit_at,
        "findings": [
            {key: _plain(value) for key, value in asdict(finding).items()}
            for finding in crossing.findings
        ],
    }


def alarm_document(
    alarm_id: str,
    stream: Stream,
    crossings: Sequence[Mapping[str, Any]],
    *,
    cursor: str | None,
    exponent: int | None = None,
    rows: int | None = None,
) -> dict[str, Any]:
    """Return an alarm in the names of the API, undecided.

    Its own fields are those of the strongest finding of the crossing that raised it. ``findings``
    gathers the strongest of each view and pattern over all crossings. Severity, excess and last
    hit are as of the last crossing; a shape has no excess.

    Parameters
    ----------
    alarm_id : str
    stream : Stream
    crossings : sequence of mappings
        Documents of `crossing_document`, ordinals ascending.
    cursor : str or None
        Place in the feed.
    exponent : int or None
        Decimal places of the currency, for the explanation; None leaves money in minor units.
    rows : int or None
        The stream's rows with an amount by now, to tell whether the pattern goes on; None: as of
        the last crossing.

    Raises
    ------
    ValueError
        If there is no crossing, or the first has no finding.
    """
    if not crossings or not crossings[0]["findings"]:
        raise ValueError("an alarm needs a crossing with a finding")
    first, last = crossings[0], crossings[-1]
    top = first["findings"][0]
    excess_count = None if last["excess"] is None else decimal(last["excess"], 1)
    excess_amount = None if last["excess"] is None else round(last["excess_amount"])
    return {
        "id": alarm_id,
        "cursor": cursor,
        "merchant": stream.merchant,
        "flow": stream.flow,
        "currency": stream.currency,
        "state": "open",
        "historic": all(crossing["historic"] for crossing in crossings),
        "raised_at": moment(first["arrived"]),
        "count": first["rows"],
        "evidence": decimal(first["evidence"], 2),
        "transactions_per_false_alarm": _whole_if_whole(first["threshold"]),
        **_finding(top),
        "onset_at": moment(top["onset_at"]),
        "reference": top["reference"],
        "findings": [_finding(finding) for finding in _merged(crossings)],
        "repeats": last["ordinal"],
        "severity": decimal(last["severity"], 1),
        "excess_count": excess_count,
        "excess_amount": excess_amount,
        "last_hit_at": moment(last["last_hit_at"]),
        "still_active": rows is None or _goes_on(last, rows),
        "explanation": explanation(
            top, stream, excess=excess_count, excess_amount=excess_amount, exponent=exponent
        ),
        "assignee": None,
        "decision": None,
    }


def _plain(value: Any) -> Any:
    if isinstance(value, tuple):
        return list(value)
    return None if isinstance(value, float) and not math.isfinite(value) else value


def _whole_if_whole(value: float) -> float:
    return int(value) if float(value).is_integer() else value


def _finding(finding: Mapping[str, Any]) -> dict[str, Any]:
    observed, expected = finding["observed"], finding["expected"]
    return {
        "view": finding["view"],
        "pattern": finding["pattern"],
        "cells": list(finding["cells"]),
        "onset_count": finding["onset_row"],
        "observed_share": None if observed is None else share(observed),
        "expected_share": None if expected is None else share(expected),
    }


def _merged(crossings: Sequence[Mapping[str, Any]]) -> list[Mapping[str, Any]]:
    """Return the strongest finding of each view and pattern, strongest first."""
    strongest: dict[tuple[str, str], Mapping[str, Any]] = {}
    for crossing in crossings:
        for finding in crossing["findings"]:
            key = finding["view"], finding["pattern"]
            known = strongest.get(key)
            if known is None or finding["weight"] > STRONGER * known["weight"]:
                strongest[key] = finding
    return sorted(strongest.values(), key=lambda found: -found["weight"])[:MOST_FINDINGS]


def _goes_on(last: Mapping[str, Any], rows: int) -> bool:
    onset = min((found["onset_row"] for found in last["findings"]), default=last["rows"])
    took = last["rows"] - onset + 1
    return bool(rows - last["rows"] <= max(PAUSE * took, PAUSE_ROWS))
