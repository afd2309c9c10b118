"""One entry per stream, as listings and replies show it; on the write path, so in arrays."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from service.digits.measures import score_of
from service.digits.significand import FloatArray, IntArray
from service.digits.views import LEAD_DIGIT
from service.streams.fit import fit, window_counts
from service.streams.folded import Folded
from service.streams.notation import decimals, moments
from service.streams.record import Stream
from service.streams.state import UNDECIDED, States
from service.streams.walk import evidence_of

_LEAD_DIGIT_VIEW = 0
_CELLS = LEAD_DIGIT.stop - LEAD_DIGIT.start


class Spans(NamedTuple):
    """Which span the score of each stream is over.

    Attributes
    ----------
    window_rows : int64 array (n,)
    minimum : int64 array (n,)
        The policy's ``minimum_count``.
    lifetime : bool array (n,)
        True while the window holds fewer rows than that.
    counts : int64 array (n, 9)
        Lead digits over the span.
    """

    window_rows: IntArray
    minimum: IntArray
    lifetime: npt.NDArray[np.bool_]
    counts: IntArray


def spans(folded: Folded, slots: IntArray, now: int) -> Spans:
    """Choose the window where it holds enough rows, else the lifetime."""
    window = window_counts(folded, slots, LEAD_DIGIT, now)
    window_rows = window.sum(axis=1)  # every row with an amount has a lead digit
    minimum = np.maximum(folded.rules["minimum"][slots], 1)  # 1 without a policy in force
    lifetime = window_rows < minimum
    whole = folded.state["cell"]["count"][slots, LEAD_DIGIT]
    return Spans(window_rows, minimum, lifetime, np.where(lifetime[:, None], whole, window))


def open_alarms(state: States, slots: IntArray) -> list[str | None]:
    """Return the open alarm's id as 32 hexadecimal digits, None where there is none."""
    ids = state["alarm"][slots].tolist()
    return [alarm.ljust(16, b"\0").hex() if alarm else None for alarm in ids]


def evidence(folded: Folded, slots: IntArray) -> FloatArray:
    """Return log10 of the weighted sum of every stream's detectors, 0 where it is below 1."""
    total = evidence_of(folded.state, folded.rules, slots)
    return np.asarray(np.log10(np.maximum(total, 1.0)))


def entries(
    folded: Folded, slots: IntArray, streams: Sequence[Stream], now: int
) -> list[dict[str, Any]]:
    """Return one entry per stream, in the names of the API.

    Score and misfit are of the lead digit, against the stream's reference (the law while it is
    being learned), over the window or, while that holds fewer rows than the policy's
    ``minimum_count``, over the lifetime; the score is None below that count in both. The error of
    a learned baseline is taken off the misfit and widens the score's interval (`fit`).

    Parameters
    ----------
    folded : Folded
        Its rules are those of the policies in force.
    slots : int64 array (n,)
    streams : sequence of Stream, length n
    now : int
        Milliseconds since 1970 UTC.
    """
    state = folded.state
    if not len(slots):
        return []
    span = spans(folded, slots, now)
    far = fit(state, slots, _LEAD_DIGIT_VIEW, span.counts, span.lifetime)
    few = span.counts.sum(axis=1) < span.minimum
    scores = np.where(few, np.nan, np.stack(score_of(far.reference)))
    # what `misfit_of` makes of a value; the intervals are not told here
    misfits = np.stack([far.reference.value, far.law.value]) * (_CELLS / 2)
    alarms = open_alarms(state, slots)
    learning = np.any(np.equal(state["reference"][slots], UNDECIDED), axis=1).tolist()
    columns = zip(
        streams,
        state["rows"][slots].tolist(),
        state["zero"][slots].tolist(),
        span.window_rows.tolist(),
        *decimals(scores, 1),
        span.lifetime.tolist(),
        *decimals(misfits, 6),
        *decimals(evidence(folded, slots)[None], 2),
        alarms,
        learning,
        moments(state["last_arrived"][slots]),
        strict=True,
    )
    return [
        {
            "merchant": stream.merchant,
            "flow": stream.flow,
            "currency": stream.currency,
            "count": count,
            "zero": zero,
            "window_count": window_count,
            "score": score,
            "score_low": score_low,
            "score_high": score_high,
            "score_span": "lifetime" if lifetime else "window",
            "misfit": misfit,
            "law_misfit": law_misfit,
            "evidence": gathered,
            "standing": "alarmed" if alarm else "learning" if learns else "steady",
            "open_alarm": alarm,
            "updated": updated,
        }
        for (
            stream,
            count,
            zero,
            window_count,
            score,
            score_low,
            score_high,
            lifetime,
            misfit,
            law_misfit,
            gathered,
            alarm,
            learns,
            updated,
        ) in columns
    ]
