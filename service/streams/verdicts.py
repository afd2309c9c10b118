"""Whether the law applies to a stream, and whether its false-alarm promise holds: with reasons."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy import special

from service.detection.baseline import HARMONICS_FROM, law_verdict, spent_alpha
from service.detection.policy import Policy
from service.digits.intervals import always_valid
from service.digits.significand import IntArray
from service.digits.views import LEAD_PAIR, TAIL_PAIR, WATCHED, WATCHED_VIEWS, cell_label
from service.streams.explanation import percent
from service.streams.fit import bounds
from service.streams.record import Stream
from service.streams.rules import DAY_MS
from service.streams.state import (
    BY_LAW,
    BY_OWN,
    REFUTED_BY_BANK,
    REFUTED_BY_CELL,
    REFUTED_BY_CIRCLE,
    TOO_FEW,
    States,
    is_learning,
)

WEEK_DAYS = 7
"""Days that a baseline must span to have seen a merchant's week."""

TOO_MANY, FAR_TOO_MANY = 0.01, 1e-6
"""Chance of so many crossings at one in A rows at which the promise is doubtful, or void."""

NEIGHBOURS_FROM = 300
"""Rows below which nothing is said about neighbours."""
DEPENDENT_Z = 4.0
"""Standard errors from which repeated neighbours are no chance."""
DOUBTFUL_REPEATS, VOID_REPEATS = 1.2, 2.0
"""How many times as often as chance neighbours repeat before the promise is doubtful, or void."""

_TAIL = WATCHED_VIEWS.index("tail_pair")
_VERB = {"lead_digit": "begin with", "lead_pair": "begin with", "tail_pair": "end in"}


class _Over(NamedTuple):
    """A cell that is surely above its bound, with the lower end of its share."""

    view: str
    cell: str
    low: float
    bound: float


def learned(state: States) -> bool:
    """Return whether one stream's baseline is complete."""
    return bool(np.any(state["cell"]["bound"]))


def baseline_days(state: States) -> float:
    """Return the days of event time that one stream's baseline spans so far."""
    return float(state["base_last_at"] - state["base_first_at"]) / DAY_MS


def progress(state: States, policy: Policy) -> str:
    """Say how far a baseline has come, for reasons given in words."""
    return (
        f"{int(state['base_rows']):,} of {policy.baseline_size:,} amounts and "
        f"{baseline_days(state):.1f} of {policy.baseline_days:g} days"
    )


def law_applies(state: States, policy: Policy) -> dict[str, str]:
    """Say whether the logarithmic law describes one stream's leading digits.

    The answer is about the leading digits; the reason adds what is known of the tail pair.

    Parameters
    ----------
    state : one record of ``STATE``
    policy : Policy
        The one in force.

    Returns
    -------
    dict
        ``status``, one of ``yes``, ``no``, ``unknown``, and ``reason``.
    """
    if learned(state):
        tails = int(state["cell"]["base"][TAIL_PAIR].sum())
        return _judged(state["refuted"], int(state["base_rows"]), tails, "baseline's")
    if not is_learning(state):  # the policy takes the law for granted
        tails = int(state["clock"][_TAIL])
        return _judged(_refuted_now(state, policy), int(state["rows"]), tails, "stream's")
    if np.any(state["refuted"][:_TAIL] & REFUTED_BY_BANK):
        return {
            "status": "no",
            "reason": "The amounts of its unfinished baseline would have raised an alarm under "
            f"the law; it is being learned ({progress(state, policy)}).",
        }
    return {
        "status": "unknown",
        "reason": f"It is judged when the baseline is complete: {progress(state, policy)} so far.",
    }


def guarantee(state: States, policy: Policy, stream: Stream) -> dict[str, str]:
    """Say whether the condition of the false-alarm promise is plausible for one stream.

    Serial dependence is looked for in neighbours only: how often a row begins with the two digits
    of the one before, against what the shares of the pairs let one expect.

    Parameters
    ----------
    state : one record of ``STATE``
    policy : Policy
        The one in force.
    stream : Stream

    Returns
    -------
    dict
        ``status``, one of ``holds``, ``doubtful``, ``void``, and ``reason``.
    """
    if not policy.watches(stream.flow):
        reason = f"The flow {stream.flow} is tallied but raises no alarms under this policy."
        return {"status": "void", "reason": reason}
    views = [v for v, name in enumerate(WATCHED_VIEWS) if name in policy.views]
    if not views:
        return {"status": "void", "reason": "The policy watches no view, so nothing raises alarms."}
    if is_learning(state):
        reason = (
            "Nothing raises alarms yet: what is ordinary for this merchant is being learned, "
            f"{progress(state, policy)} so far."
        )
        return {"status": "void", "reason": reason}
    doubts, grounds = [], []
    if any(state["reference"][v] == BY_OWN for v in views):
        doubts += _short(state, policy)
        alpha = spent_alpha(policy.baseline_confidence, int(state["relearns"]))
        grounds.append(
            f"The bounds learned from {int(state['base_rows']):,} amounts hold with confidence "
            f"{1 - alpha:.6g}, if these were the merchant's ordinary business."
        )
    by_law = [v for v in views if state["reference"][v] == BY_LAW]
    if by_law and learned(state) and not np.any(state["refuted"][by_law]):
        grounds.append(f"The law was accepted for {_named(by_law)} on a complete baseline.")
    elif by_law:
        doubt, ground = _law_taken(state, policy, by_law)
        doubts += doubt
        grounds += ground
    if state["alarm_crossings"]:
        doubts.append(
            "An alarm is open. If what it shows has become the merchant's ordinary business, such "
            "as a promotion or new prices, the bounds do not represent it any more."
        )
    chance = chance_of_crossings(state, policy)
    if chance < TOO_MANY:
        doubts.append(
            f"Its evidence reached the threshold {int(state['crossings']):,} times in "
            f"{int(state['rows'] - state['decided_row']):,} amounts, more often than the promise "
            "allows for chance: its digits have changed, or were never what they were taken for."
        )
        if chance < FAR_TOO_MANY:
            return {"status": "void", "reason": " ".join(doubts + grounds)}
    ratio, z = dependence(state)
    if z > DEPENDENT_Z and ratio > DOUBTFUL_REPEATS:
        doubts.append(
            f"Amounts that begin alike follow each other {ratio:.1f} times as often as chance "
            "would have it, so bursts may raise alarms without cause."
        )
        if ratio > VOID_REPEATS:
            return {"status": "void", "reason": " ".join(doubts + grounds)}
    if doubts:
        return {"status": "doubtful", "reason": " ".join(doubts + grounds)}
    if int(state["neighbours"]) < NEIGHBOURS_FROM:
        grounds.append("There are too few rows yet to see whether neighbours depend on each other.")
    else:
        grounds.append("Neighbouring amounts do not depend on each other visibly.")
    return {"status": "holds", "reason": " ".join(grounds)}


def chance_of_crossings(state: States, policy: Policy) -> float:
    """Return the chance of so many crossings or more, were they one in A rows (Poisson)."""
    crossings = int(state["crossings"])
    expected = int(state["rows"] - state["decided_row"]) / policy.transactions_per_false_alarm
    return float(special.pdtrc(crossings - 1, expected)) if crossings else 1.0


def dependence(state: States) -> tuple[float, float]:
    """Return how often neighbours repeat their lead pair, as a multiple of chance, and its z.

    Were rows independent, a row would repeat the pair before it with probability
    ``sum p_k**2``; the shares are those of the stream's life. 1 and 0 where nothing is known.
    """
    n = int(state["neighbours"])
    counts = state["cell"]["count"][LEAD_PAIR].astype(np.float64)
    if n < NEIGHBOURS_FROM or not counts.sum():
        return 1.0, 0.0
    chance = float(((counts / counts.sum()) ** 2).sum())
    if chance >= 1:
        return 1.0, 0.0
    repeats = int(state["repeats"])
    return repeats / n / chance, (repeats - n * chance) / float(np.sqrt(n * chance * (1 - chance)))


def _short(state: States, policy: Policy) -> list[str]:
    rows, days = int(state["base_rows"]), baseline_days(state)
    if rows < policy.baseline_size or days < policy.baseline_days:
        return [f"The baseline is shorter than the policy asks: {progress(state, policy)}."]
    if days < WEEK_DAYS:
        return [f"The baseline spans {days:.1f} days, less than one week of the merchant."]
    return []


def _law_taken(state: States, policy: Policy, views: list[int]) -> tuple[list[str], list[str]]:
    """Doubts and grounds where the policy compares with the law without a baseline's verdict."""
    over = _surely_over(state, policy, views)
    if over is not None:
        return [
            "The condition is broken: over the stream's life at least "
            f"{percent(over.low)} of the amounts {_VERB[over.view]} {over.cell}, and "
            f"{percent(over.bound)} is the bound. If that is its ordinary business, alarms about "
            "it are not covered by the promise."
        ], []
    refuted = _refuted_now(state, policy)[views]
    if int(state["rows"]) < HARMONICS_FROM:
        return [
            "The policy takes the law for granted, and "
            f"{int(state['rows']):,} amounts are too few to tell whether it applies."
        ], []
    if np.any(refuted):
        return ["The policy takes the law for granted, but the amounts do not look like it."], []
    return [], [
        "The policy takes the law for granted, and the stream's amounts so far agree with it."
    ]


def _surely_over(state: States, policy: Policy, views: list[int]) -> _Over | None:
    """Return the cell furthest above its bound at 95 % confidence for all looks, if any is."""
    worst: _Over | None = None
    for v in views:
        name = WATCHED_VIEWS[v]
        cells = WATCHED[name]
        low = always_valid(state["cell"]["count"][cells]).low
        bound = bounds(state, v, policy.tolerances()[v])
        k = int(np.argmax(low / bound))
        if low[k] > bound[k] and (worst is None or low[k] / bound[k] > worst.low / worst.bound):
            worst = _Over(name, cell_label(cells.start + k), float(low[k]), float(bound[k]))
    return worst


def _refuted_now(state: States, policy: Policy) -> IntArray:
    """Judge the law on the stream's whole life, in the flags of ``state["refuted"]``."""
    verdict = law_verdict(
        state["cell"]["count"],
        state["clock"],
        state["circle"][:4],
        int(state["rows"]),
        policy.tolerances(),
    )
    flags = (
        REFUTED_BY_CIRCLE * verdict.circle + REFUTED_BY_CELL * verdict.cell + TOO_FEW * verdict.few
    )
    return np.asarray(flags | state["refuted"], dtype=np.int64)


def _judged(refuted: IntArray, rows: int, tails: int, whose: str) -> dict[str, str]:
    flags = int(np.bitwise_or.reduce(refuted[:_TAIL]))
    reasons = []
    if flags & REFUTED_BY_CELL:
        reasons.append("some first digits are surely more frequent than the law allows")
    if flags & REFUTED_BY_BANK:
        reasons.append("its detectors would have raised an alarm")
    if flags & REFUTED_BY_CIRCLE and rows >= HARMONICS_FROM:
        reasons.append("the logarithms of the amounts are not spread evenly over a decade")
    if not tails:
        tail = "No amount was large enough to have a tail pair."
    elif refuted[_TAIL] & (REFUTED_BY_CELL | REFUTED_BY_BANK):
        tail = "The tail pair is not spread evenly."
    elif refuted[_TAIL]:
        tail = f"{tails:,} tail pairs are too few to say whether they are spread evenly."
    else:
        tail = f"Nothing in {tails:,} tail pairs speaks against their being spread evenly."
    if reasons:
        status, reason = "no", f"Over the {whose} {rows:,} amounts {'; '.join(reasons)}."
    elif flags:
        status = "unknown"
        reason = f"The {whose} {rows:,} amounts are too few; {HARMONICS_FROM:,} are needed."
    else:
        status = "yes"
        reason = (
            f"The {whose} {rows:,} amounts are spread evenly enough over the decade, and no "
            "first digits are surely more frequent than the law allows."
        )
    return {"status": status, "reason": f"{reason} {tail}"}


def _named(views: list[int]) -> str:
    return ", ".join(WATCHED_VIEWS[v] for v in views)
