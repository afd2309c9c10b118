"""Everything known about one stream, for the one who looks at it."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from scipy.special import logsumexp

from service.detection.bank import LAW
from service.detection.policy import Policy
from service.digits import goodness
from service.digits.evidence import CONCENTRATIONS, log_evidence
from service.digits.laws import position_law
from service.digits.measures import Estimate, excess_mad, misfit_of, spread
from service.digits.significand import FloatArray, IntArray
from service.digits.views import WATCHED, WATCHED_VIEWS
from service.streams.check import band_of, measures_of
from service.streams.entries import entries, spans
from service.streams.fit import by_own, fit, window_counts
from service.streams.folded import Folded
from service.streams.in_force import policy_of
from service.streams.notation import decimal, moment, share
from service.streams.record import Stream
from service.streams.state import States
from service.streams.verdicts import baseline_days, guarantee, law_applies, learned

LARGEST_E = 300
"""log10 of the largest e-value written as a number; ``log10_e_value`` says it in full."""

ONE_LOOK = (
    "The p-values of chi_square, g, largest_z and rayleigh hold for one look at a number of "
    "amounts fixed beforehand; looked at again and again they cry wolf. These measures compare "
    "with the law, also where the stream's reference is its own baseline. e_value and p_value "
    "stay valid however often one looks."
)

_ONE = np.zeros(1, np.int64)
_CLASSIC = ("mad", "mad_expected", "chi_square", "g", "kuiper", "watson_u2", "largest_z")


def detail(
    folded: Folded,
    stream: Stream,
    policies: Mapping[int, Policy],
    now: int,
    *,
    category: str | None,
    all_measures: bool,
) -> dict[str, Any]:
    """Return the entry of one stream and all that is known besides.

    The views with cells are measured over the entry's ``score_span``, so that the lead digit's
    misfit is the entry's; the circle is kept over the lifetime only, and has no misfit. ``e_value``
    is the mean, over the watched views, of the lifetime's evidence against the law; it and
    ``p_value`` are valid however often one looks. Views are compared
    with the law while a baseline is being learned.

    Parameters
    ----------
    folded : Folded
        One stream.
    stream : Stream
    policies : mapping
        The policy version in force at least.
    now : int
        Milliseconds since 1970 UTC.
    category : str or None
        The merchant's, four digits.
    all_measures : bool
        Add the classical measures against the law, whose p-values hold for one look.

    Raises
    ------
    ValueError
        If folded is not one stream.
    KeyError
        If the policy version in force is missing.
    """
    if len(folded.state) != 1:
        raise ValueError(f"detail is of one stream, got {len(folded.state)}")
    state = folded.state[0]
    policy = policy_of(policies, int(state["policy"]))
    document = entries(folded, _ONE, [stream], now)[0]
    lifetime = bool(spans(folded, _ONE, now).lifetime[0])
    document |= {
        "category": category,
        "views": _views(folded, lifetime, now, all_measures),
        **_evidence(state),
        "law_applies": law_applies(state, policy),
        "guarantee": guarantee(state, policy, stream),
        "baseline": _baseline(state, policy),
        "policy": policy.name,
        "policy_version": policy.version,
        "first_seen": moment(int(state["first_at"])),
        "last_seen": moment(int(state["last_at"])),
        "late": int(state["late"]),
    }
    if all_measures:
        document |= {"circle": _circle(state), "warning": ONE_LOOK}
    return document


def _views(folded: Folded, lifetime: bool, now: int, measures: bool) -> dict[str, Any]:
    state, whole = folded.state, folded.state["cell"]["count"]
    span = "lifetime" if lifetime else "window"
    views: dict[str, Any] = {}
    for v, (name, cells) in enumerate(WATCHED.items()):
        counts = whole[:, cells] if lifetime else window_counts(folded, _ONE, cells, now)
        far = fit(state, _ONE, v, counts, np.array([lifetime]))
        own = bool(by_own(state, v)[0])
        views[name] = _view(
            name, span, counts[0], _first(far.reference), LAW[cells], own=own, measures=measures
        )
        if name == "lead_pair":
            second = counts[0].reshape(9, 10).sum(axis=0)
            law = position_law(2)
            views["second_digit"] = _view(
                "second_digit", span, second, excess_mad(second, law), law, measures=measures
            )
    views["circle"] = {
        "span": "lifetime",
        "reference": "law",
        "count": int(state["rows"][0]),
        "misfit": None,
        "misfit_low": None,
        "misfit_high": None,
        "band": None,
    }
    order = ("lead_digit", "second_digit", "lead_pair", "tail_pair", "circle")
    return {name: views[name] for name in order}


def _first(excess: Estimate) -> Estimate:
    return Estimate(*(value[0] for value in excess))


def _view(
    name: str,
    span: str,
    counts: IntArray,
    excess: Estimate,
    law: FloatArray,
    *,
    own: bool = False,
    measures: bool,
) -> dict[str, Any]:
    misfit = misfit_of(excess, len(law))
    document: dict[str, Any] = {
        "span": span,
        "reference": "own" if own else "law",
        "count": int(counts.sum()),
        "misfit": decimal(misfit.value, 6),
        "misfit_low": decimal(misfit.low, 6),
        "misfit_high": decimal(misfit.high, 6),
        "band": None if own else band_of(name, counts, law),
    }
    if measures:
        found = measures_of(name, counts, law)
        document |= {key: _rounded(found[key]) for key in _CLASSIC}
    return document


def _rounded(value: Any) -> Any:
    """Round the numbers of a measure to 6 significant digits."""
    if isinstance(value, dict):
        return {key: _rounded(one) for key, one in value.items()}
    return share(value) if isinstance(value, float) else value


def _evidence(state: States) -> dict[str, float | None]:
    """Average the watched views' e-values against the law: the mean of e-processes is one."""
    logs = [
        log_evidence(state["cell"]["count"][cells], LAW[cells], CONCENTRATIONS[name])
        for name, cells in WATCHED.items()
    ]
    log10_e = float((logsumexp(logs) - np.log(len(WATCHED_VIEWS))) / np.log(10))
    bounded = float(np.clip(log10_e, -LARGEST_E, LARGEST_E))
    return {
        "e_value": share(10**bounded),
        "log10_e_value": decimal(log10_e, 3),
        "p_value": share(min(1.0, 10**-bounded)),
    }


def _baseline(state: States, policy: Policy) -> dict[str, Any] | None:
    """Return how far the baseline has come; None where the policy needs none and none is there."""
    rows = int(state["base_rows"])
    if not rows and policy.reference == "law":
        return None
    return {
        "complete": learned(state),
        "count": rows,
        "size": policy.baseline_size,
        "days": decimal(baseline_days(state), 2),
        "days_needed": policy.baseline_days,
        "first_at": moment(int(state["base_first_at"])),
        "last_at": moment(int(state["base_last_at"])),
    }


def _circle(state: States) -> dict[str, Any]:
    rows = int(state["rows"])
    cosine, sine, _, _, logs, squares = state["circle"].tolist()
    test = goodness.rayleigh(rows, cosine, sine)
    return {
        "count": rows,
        "rayleigh": {"statistic": share(test.statistic), "p_value": share(test.p_value)},
        "spread": share(spread(rows, logs, squares)),
    }
