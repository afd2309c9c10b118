"""What the policies in force mean for the detectors of each stream."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from functools import cache
from hashlib import blake2b
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from service.detection import bank
from service.detection.baseline import own_shares
from service.detection.policy import Limit, Policy
from service.digits.significand import FloatArray, IntArray
from service.digits.views import LEAD_PAIR
from service.streams.in_force import weights
from service.streams.ordinary import bounds_of_view, except_cells
from service.streams.state import BY_LAW, BY_OWN, UNDECIDED, States

DAY_MS = 86_400_000
LIMIT_DETECTORS = slice(bank.FIRST_LIMIT, bank.JOINT)
"""Places of the review limits among the joint detectors."""


class Kind(NamedTuple):
    """What of a stream's name matters to its rules."""

    flow: str
    currency: str


RULES = np.dtype(
    [
        ("version", "<i8"),  # of the policy that they follow from; 0 for none yet
        ("tolerance", "<f8", 3),  # by view
        ("threshold", "<f8"),
        ("active", "<f8", 3),  # 1 for a view that counts
        ("shapes", "<f8", bank.SHAPES),  # weights of the shape detectors
        ("shape_least", "<f8", bank.SHAPES),  # smallest ratio q/p* of each; 0 for a dropped one
        ("shape_per_norm", "<f8", bank.SHAPES),  # one over z of the alternative
        ("joint", "<f8", bank.JOINT),  # weights of the joint detectors
        ("low", "<i8", bank.LIMITS),  # just below a review limit: low <= amount < high
        ("high", "<i8", bank.LIMITS),
        ("minimum", "<i8"),  # rows below which there is no score
        ("size", "<i8"),  # rows and ms of a complete baseline
        ("span", "<i8"),
        ("pairs", "<f8"),  # rows of the baseline with a lead pair
        ("watching", "u1"),  # 1 for flows that may raise alarms
    ],
    align=True,
)
"""Per stream, what its state and the policy in force mean for the detectors."""

AllRules = npt.NDArray[np.void]


def put_right(
    state: States,
    slots: IntArray,
    rules: AllRules,
    policies: Mapping[int, Policy],
    kinds: Sequence[Kind],
) -> None:
    """Make the rules of streams those of the policies in force for them, where they are not.

    Raises
    ------
    KeyError
        If a policy version is missing.
    """
    versions = state["policy"][slots].astype(np.int64)
    stale = np.not_equal(rules["version"][slots], versions)
    if stale.any():
        adopt(state, slots[stale], versions[stale], rules, policies, kinds)


def adopt(
    state: States,
    slots: IntArray,
    versions: IntArray,
    rules: AllRules,
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
            for name in ("bound", "value", "ratio", "onset", "onset_at", "hits", "spent", "seen"):
                state[f"joint_{name}"][s, LIMIT_DETECTORS] = 0


def fingerprint(limits: Sequence[Limit]) -> int:
    """Return a number that stands for review limits, 0 for none."""
    text = repr([(limit.lowest, limit.amount) for limit in limits]).encode()
    return int.from_bytes(blake2b(text, digest_size=8).digest(), "little") if limits else 0


def choose_references(state: States, slots: IntArray, policy: Policy) -> None:
    """Set what the views are compared with, and the shape detectors that follow from it."""
    learned = np.any(state["cell"]["bound"][slots], axis=1)[:, None]
    own = (policy.reference == "own") | (state["refuted"][slots] > 0)
    state["reference"][slots] = (
        BY_LAW
        if policy.reference == "law"
        else np.where(learned, np.where(own, BY_OWN, BY_LAW), UNDECIDED)
    )
    state["cell"]["excepted"][slots] = 0
    if policy.reference == "auto":
        except_cells(state, slots[learned[:, 0]])
    tolerance = policy.tolerances()[1]
    state["shape_scale"][slots], state["shape_norm"][slots] = _law_shapes(tolerance)
    own_pairs = state["reference"][slots, 1] == BY_OWN
    special = own_pairs | np.any(state["cell"]["excepted"][slots, LEAD_PAIR], axis=1)
    for s, own_pair in zip(slots[special].tolist(), own_pairs[special].tolist(), strict=True):
        shares = (
            own_shares(state["cell"]["base"][s])[LEAD_PAIR] if own_pair else bank.LAW[LEAD_PAIR]
        )
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
    state: States,
    slots: IntArray,
    rules: AllRules,
    policy: Policy,
    kinds: Sequence[Kind],
) -> None:
    """Recompute the rules of streams under one policy."""
    fresh = np.zeros(len(slots), RULES)
    fresh["version"] = state["policy"][slots]
    fresh["tolerance"] = policy.tolerances()
    fresh["threshold"] = policy.transactions_per_false_alarm
    fresh["active"], fresh["shapes"], fresh["joint"] = weights(state, slots, policy)
    fresh["shape_least"] = 1 / state["shape_scale"][slots]
    fresh["shape_per_norm"] = 1 / state["shape_norm"][slots]
    fresh["minimum"] = policy.minimum_count
    fresh["size"] = policy.baseline_size
    fresh["span"] = int(policy.baseline_days * DAY_MS)
    fresh["pairs"] = state["cell"]["base"][slots, LEAD_PAIR].sum(axis=1)
    for i, s in enumerate(slots.tolist()):
        fresh["watching"][i] = policy.watches(kinds[s].flow)
        for place, limit in enumerate(policy.limits_in(kinds[s].currency)):
            fresh["low"][i, place], fresh["high"][i, place] = limit.lowest, limit.amount
    rules[slots] = fresh
