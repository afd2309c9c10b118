"""What the policies in force mean for the detectors of each stream."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cache
from hashlib import blake2b
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from service.detection import bank
from service.detection.baseline import own_shares
from service.detection.cells import VIEW_OF_CELL
from service.detection.policy import Limit, Policy
from service.digits.significand import FloatArray, IntArray
from service.digits.views import LEAD_PAIR
from service.streams.in_force import weights
from service.streams.ordinary import bound_of, bounds_of_view, except_cells
from service.streams.rows import Rows
from service.streams.state import BY_LAW, BY_OWN, UNDECIDED, States

DAY_MS = 86_400_000
LIMIT_DETECTORS = slice(bank.FIRST_LIMIT, bank.JOINT)
"""Places of the review limits among the joint detectors."""

JOINT_VIEWS = (*bank.RARE_VIEWS, 1, *([1] * bank.LIMITS))
"""The view whose tolerance serves each joint detector; without a view, the lead pair's."""


class Kind(NamedTuple):
    """What of a stream's name matters to its rules."""

    flow: str
    currency: str


@dataclass
class Rules:
    """Per stream, what the policy in force means for the detectors; refreshed between passes."""

    tolerance: FloatArray  # (n, 3), by view
    threshold: FloatArray  # (n,)
    watching: npt.NDArray[np.bool_]  # (n,) flows that may raise alarms
    active: FloatArray  # (n, 3), 1 for a view that counts
    shapes: FloatArray  # (n, 14), weights of the shape detectors
    joint: FloatArray  # (n, 7), weights of the joint detectors
    low: IntArray  # (n, 4) amounts just below each review limit are low <= amount < high
    high: IntArray
    size: IntArray  # (n,) rows and span of a complete baseline
    span: IntArray

    @classmethod
    def empty(cls, n: int) -> Rules:
        return cls(
            np.zeros((n, 3)),
            np.full(n, np.inf),
            np.zeros(n, bool),
            np.zeros((n, 3)),
            np.zeros((n, bank.SHAPES)),
            np.zeros((n, bank.JOINT)),
            np.zeros((n, bank.LIMITS), np.int64),
            np.zeros((n, bank.LIMITS), np.int64),
            np.zeros(n, np.int64),
            np.zeros(n, np.int64),
        )


def adopt(
    state: States,
    slots: IntArray,
    versions: IntArray,
    rules: Rules,
    policies: Mapping[int, Policy],
    kinds: Sequence[Kind],
) -> None:
    """Put policy versions into force for some streams (version 0: none yet)."""
    for version in np.unique(versions[versions > 0]).tolist():
        mine = slots[versions == version]
        changed = mine[np.not_equal(state["policy"][mine], version)]
        if changed.size:
            state["policy"][changed] = version
            _learn_limits_anew(state, changed, policies[version], kinds)
            choose_references(state, changed, policies[version])
        refresh(state, mine, rules, policies[version], kinds)


def _learn_limits_anew(
    state: States, slots: IntArray, policy: Policy, kinds: Sequence[Kind]
) -> None:
    """Forget what was learned of review limits where they have changed."""
    for s in slots.tolist():
        mark = fingerprint(policy.limits_in(kinds[s].currency))
        if mark != int(state["limits"][s]):
            state["limits"][s] = mark
            state["limit_rows"][s] = 0
            state["limit_base"][s] = 0
            for name in ("bound", "value", "cusum", "onset", "onset_at", "hits", "spent", "seen"):
                state[f"joint_{name}"][s, LIMIT_DETECTORS] = 0


def fingerprint(limits: Sequence[Limit]) -> int:
    """Return a number that stands for review limits, 0 for none."""
    text = repr([(limit.lowest, limit.amount) for limit in limits]).encode()
    return int.from_bytes(blake2b(text, digest_size=8).digest(), "little") if limits else 0


def choose_references(state: States, slots: IntArray, policy: Policy) -> None:
    """Set what the views are compared with, and the shape detectors that follow from it."""
    learned = np.any(state["bound"][slots], axis=1)[:, None]
    own = (policy.reference == "own") | (state["refuted"][slots] > 0)
    state["reference"][slots] = (
        BY_LAW
        if policy.reference == "law"
        else np.where(learned, np.where(own, BY_OWN, BY_LAW), UNDECIDED)
    )
    state["excepted"][slots] = 0
    if policy.reference == "auto":
        except_cells(state, slots[learned[:, 0]])
    tolerance = policy.tolerances()[1]
    state["shape_scale"][slots], state["shape_norm"][slots] = _law_shapes(tolerance)
    own_pairs = state["reference"][slots, 1] == BY_OWN
    special = own_pairs | np.any(state["excepted"][slots, LEAD_PAIR], axis=1)
    for s, own_pair in zip(slots[special].tolist(), own_pairs[special].tolist(), strict=True):
        shares = own_shares(state["base"][s])[LEAD_PAIR] if own_pair else bank.LAW[LEAD_PAIR]
        state["shape_scale"][s], state["shape_norm"][s] = _shapes(
            shares, bounds_of_view(state[s], 1), tolerance
        )


def _shapes(
    shares: FloatArray, bounds: FloatArray, tolerance: float
) -> tuple[FloatArray, FloatArray]:
    """Return scale and norm of the shape detectors; an infinite scale drops a detector."""
    bounds = np.minimum(bounds * (1 + tolerance), 1)
    q, norm = bank.alternatives(shares)
    inside = np.all(q <= bounds, axis=-1)
    return np.where(inside, np.inf, bank.projection(q, bounds)), norm


@cache
def _law_shapes(tolerance: float) -> tuple[FloatArray, FloatArray]:
    return _shapes(bank.LAW[LEAD_PAIR], bank.LAW[LEAD_PAIR], tolerance)


def refresh(
    state: States, slots: IntArray, rules: Rules, policy: Policy, kinds: Sequence[Kind]
) -> None:
    """Recompute the rules of streams under one policy."""
    rules.tolerance[slots] = policy.tolerances()
    rules.threshold[slots] = policy.transactions_per_false_alarm
    rules.watching[slots] = [policy.watches(kinds[s].flow) for s in slots.tolist()]
    rules.active[slots], rules.shapes[slots], rules.joint[slots] = weights(state, slots, policy)
    rules.low[slots] = rules.high[slots] = 0
    if policy.limits:
        for s in slots.tolist():
            for place, limit in enumerate(policy.limits_in(kinds[s].currency)):
                rules.low[s, place], rules.high[s, place] = limit.lowest, limit.amount
    rules.size[slots] = policy.baseline_size
    rules.span[slots] = int(policy.baseline_days * DAY_MS)


def bounds(state: States, rules: Rules, slot: IntArray, cell: IntArray) -> FloatArray:
    """Return the bound u of (stream, cell) pairs, tolerance included."""
    tolerance = rules.tolerance[slot, VIEW_OF_CELL[cell]]
    return np.minimum(bound_of(state, slot, cell) * (1 + tolerance), 1.0)


def below_limits(rules: Rules, part: Rows) -> npt.NDArray[np.bool_]:
    """Return which rows lie just below each review limit, (4, n)."""
    low, high = rules.low[part.slot].T, rules.high[part.slot].T
    return np.asarray((part.amount >= low) & (part.amount < high))
