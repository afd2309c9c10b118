"""What counts towards a stream's evidence: the one rule that fold, entries and details share."""

from __future__ import annotations

from collections.abc import Mapping
from typing import NamedTuple

import numpy as np

from service.detection import bank
from service.detection.policy import Policy
from service.digits.significand import FloatArray, IntArray
from service.digits.views import WATCHED_VIEWS
from service.streams.state import BY_OWN, REFUTED_BY_BANK, States, is_learning

JOINT_AT_MOST = 0.5
"""A joint bound above this leaves nothing to be found."""

_LEAD_PAIR = WATCHED_VIEWS.index("lead_pair")


class Weights(NamedTuple):
    """Weights of the detectors of n streams.

    Attributes
    ----------
    views : float64 array (n, 3)
        1 for a watched view whose cells count, else 0.
    shapes : float64 array (n, 14)
        Of the shape detectors, 0 for those that are dropped.
    joint : float64 array (n, 7)
        Of the joint detectors, 0 where a bound is not learned or says nothing; rare cells count
        against an own baseline only.
    """

    views: FloatArray
    shapes: FloatArray
    joint: FloatArray


def policy_of(policies: Mapping[int, Policy], version: int) -> Policy:
    """Return the policy in force; the default one for version 0, a stream without a counted row.

    Raises
    ------
    KeyError
        If the version is missing.
    """
    return policies[version] if version else Policy()


def weights(state: States, slots: IntArray, policy: Policy) -> Weights:
    """Return the weights in force for some streams under one policy.

    A view counts if the policy names it and its own baseline rows did not cross while it was
    being learned. Shapes count with the lead pair, unless their alternative lies in the null.

    Parameters
    ----------
    state : array of ``STATE``
    slots : int64 array (n,)
    policy : Policy
    """
    learning = is_learning(state)[slots]
    silenced = learning[:, None] & ((state["refuted"][slots] & REFUTED_BY_BANK) > 0)
    active = np.array([view in policy.views for view in WATCHED_VIEWS]) & ~silenced
    counts = np.isfinite(state["shape_scale"][slots]) & active[:, _LEAD_PAIR, None]
    bound = state["joint_bound"][slots]
    joint = (bound > 0) & (bound < JOINT_AT_MOST) & ~learning[:, None]
    views, rare = list(bank.RARE_VIEWS), slice(0, len(bank.RARE_VIEWS))
    joint[:, rare] &= active[:, views] & (state["reference"][slots][:, views] == BY_OWN)
    joint[:, bank.REPEATS] &= active[:, _LEAD_PAIR]
    return Weights(
        active.astype(np.float64),
        np.where(counts, bank.SHAPE_WEIGHTS, 0.0),
        np.where(joint, bank.JOINT_WEIGHTS, 0.0),
    )
