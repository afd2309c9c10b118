"""One entry per stream, as listings and replies show it; on the write path, so in arrays."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from service.detection.policy import Policy
from service.digits.measures import misfit_of, score_of
from service.digits.significand import IntArray
from service.digits.views import LEAD_DIGIT
from service.streams.fit import fit, window_counts
from service.streams.folded import Folded
from service.streams.in_force import evidence, policy_of
from service.streams.notation import decimals, moments
from service.streams.record import Stream
from service.streams.state import States, is_learning

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


def spans(folded: Folded, policies: Mapping[int, Policy], now: int) -> Spans:
    """Choose the window where it holds enough rows, else the lifetime.

    Raises
    ------
    KeyError
        If a policy version in force is missing.
    """
    state = folded.state
    versions, which = np.unique(state["policy"], return_inverse=True)
    least = [policy_of(policies, version).minimum_count for version in versions.tolist()]
    minimum = np.array(least, dtype=np.int64)[which]
    window = window_counts(folded, LEAD_DIGIT, now)
    window_rows = window.sum(axis=1)  # every row with an amount has a lead digit
    lifetime = window_rows < minimum
    counts = np.where(lifetime[:, None], state["cell"]["count"][:, LEAD_DIGIT], window)
    return Spans(window_rows, minimum, lifetime, counts)


def standings(state: States) -> list[str]:
    """Return ``alarmed`` for an open alarm, else ``learning`` or ``steady``."""
    learning = is_learning(state)
    names = np.where(learning, "learning", "steady")
    standing: list[str] = np.where(state["alarm"] != b"", "alarmed", names).tolist()
    return standing


def open_alarms(state: States) -> list[str | None]:
    """Return the open alarm's id as 32 hexadecimal digits, None where there is none."""
    return [alarm.ljust(16, b"\0").hex() if alarm else None for alarm in state["alarm"].tolist()]


def entries(
    folded: Folded, streams: Sequence[Stream], policies: Mapping[int, Policy], now: int
) -> list[dict[str, Any]]:
    """Return one entry per stream, in the names of the API.

    Score and misfit are of the lead digit, against the stream's reference (the law while it is
    being learned), over the window or, while that holds fewer rows than the policy's
    ``minimum_count``, over the lifetime; the score is None below that count in both. The error of
    a learned baseline is taken off the misfit and widens the score's interval (`fit`).

    Parameters
    ----------
    folded : Folded
        States of n streams.
    streams : sequence of Stream, length n
    policies : mapping
        Every policy version in force.
    now : int
        Milliseconds since 1970 UTC.

    Raises
    ------
    KeyError
        If a policy version in force is missing.
    """
    state = folded.state
    if not len(state):
        return []
    span = spans(folded, policies, now)
    far = fit(state, _LEAD_DIGIT_VIEW, span.counts, span.lifetime)
    few = span.counts.sum(axis=1) < span.minimum
    score, low, high = (np.where(few, np.nan, value) for value in score_of(far.reference))
    columns = zip(
        streams,
        state["rows"].tolist(),
        state["zero"].tolist(),
        span.window_rows.tolist(),
        decimals(score, 1),
        decimals(low, 1),
        decimals(high, 1),
        span.lifetime.tolist(),
        decimals(misfit_of(far.reference, _CELLS).value, 6),
        decimals(misfit_of(far.law, _CELLS).value, 6),
        decimals(evidence(state, policies), 2),
        standings(state),
        open_alarms(state),
        moments(state["last_arrived"]),
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
            "standing": standing,
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
            standing,
            alarm,
            updated,
        ) in columns
    ]
