"""One view of a stream cell by cell, beside what was expected."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from service.detection.policy import Policy
from service.digits.goodness import z_scores
from service.digits.intervals import always_valid
from service.digits.laws import position_law
from service.digits.significand import FloatArray, IntArray
from service.digits.views import WATCHED, WATCHED_VIEWS
from service.streams.check import label
from service.streams.fit import SPANS, bounds, by_own, expected, window_counts
from service.streams.folded import Folded
from service.streams.in_force import policy_of
from service.streams.notation import decimal, share

_ONE = np.zeros(1, np.int64)

VIEWS = ("lead_digit", "second_digit", "lead_pair", "tail_pair")
"""Views that have cells."""


def digits(
    folded: Folded, policies: Mapping[int, Policy], view: str, span: str, now: int
) -> dict[str, Any]:
    """Return one view of one stream, cell by cell.

    ``low`` to ``high`` contain all cells' true shares together with 95 % confidence, at all looks
    at the lifetime; of the rolling window, at each look. ``bound`` is the largest share taken as
    ordinary, tolerance included: the law's while a baseline is being learned, None for the second
    digit, which no detector watches. ``z`` holds for one look; against a learned baseline it
    allows for the baseline's own error.

    Parameters
    ----------
    folded : Folded
        One stream.
    policies : mapping
        The policy version in force at least.
    view : str
        One of ``VIEWS``.
    span : str
        ``window`` or ``lifetime``.
    now : int
        Milliseconds since 1970 UTC.

    Raises
    ------
    ValueError
        If the view has no cells, the span is unknown, or folded is not one stream.
    KeyError
        If the policy version in force is missing.
    """
    if view not in VIEWS:
        raise ValueError(f"view must be one of {', '.join(VIEWS)}, got {view!r}")
    if span not in SPANS:
        raise ValueError(f"span must be one of {', '.join(SPANS)}, got {span!r}")
    if len(folded.state) != 1:
        raise ValueError(f"digits are of one stream, got {len(folded.state)}")
    state = folded.state[0]
    watched = "lead_pair" if view == "second_digit" else view
    part = WATCHED[watched]
    counts, base = (state["cell"][name][part].astype(np.int64) for name in ("count", "base"))
    if span == "window":
        counts = window_counts(folded, _ONE, part, now)[0]
    upper: list[float | None]
    if view == "second_digit":
        own = False
        counts = counts.reshape(9, 10).sum(axis=0)
        reference = position_law(2)
        upper = [None] * len(reference)
    else:
        v = WATCHED_VIEWS.index(view)
        own = bool(by_own(state, v))
        reference = expected(state, v)
        policy = policy_of(policies, int(state["policy"]))
        upper = [share(u) for u in bounds(state, v, policy.tolerances()[v])]
    nested = span == "lifetime"
    z = z_learned(counts, base, nested=nested) if own else z_scores(counts, reference)
    low, high = always_valid(counts)
    n = int(counts.sum())
    return {
        "view": view,
        "span": span,
        "count": n,
        "reference": "own" if own else "law",
        "cells": [
            {
                "cell": label(view, k),
                "count": int(counts[k]),
                "share": share(counts[k] / n) if n else None,
                "expected": share(reference[k]),
                "bound": upper[k],
                "low": share(low[k]),
                "high": share(high[k]),
                "z": decimal(z[k], 2),
            }
            for k in range(len(counts))
        ],
    }


def z_learned(counts: IntArray, base: IntArray, *, nested: bool) -> FloatArray:
    """Return each cell's deviation from a learned baseline in standard deviations.

    The two-sample z of shares: with n rows in the span, m in the baseline and p the share of both
    together (half a row added, so that a new cell stays finite), the variance of the difference
    is ``p (1-p) (1/n + 1/m)``, or ``p (1-p) (1/m - 1/n)`` where the baseline is part of the span.
    No continuity correction.

    Parameters
    ----------
    counts, base : int64 arrays (K,)
    nested : bool
        Whether the baseline's rows are among those counted.

    Returns
    -------
    float64 array (K,)
        NaN where nothing is counted; 0 where the span is the baseline.
    """
    n, m = int(counts.sum()), int(base.sum())
    if not n or not m:
        return np.full(len(counts), np.nan)
    both = counts + 0.5 if nested else counts + base + 0.5
    p = both / both.sum()
    v = 1 / m - 1 / n if nested else 1 / m + 1 / n
    if v <= 0:
        return np.zeros(len(counts))
    return np.asarray((counts / n - base / m) / np.sqrt(p * (1 - p) * v))
