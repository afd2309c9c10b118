"""A stream has learned: what its baseline's counts and blocks say to trust."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from service.detection.bank import FIRST_LIMIT
from service.detection.baseline import (
    BOUNDS,
    law_verdict,
    own_bounds,
    rare_cells,
    repeat_bound,
    spent_alpha,
)
from service.detection.cells import CELLS
from service.detection.policy import Policy
from service.digits.intervals import clopper_pearson_upper
from service.digits.views import WATCHED
from service.streams.folded import Folded
from service.streams.ordinary import rounded_up
from service.streams.pages import FIRST_HOUR, FIRST_RUN, FIRST_WEEKDAY, PLACES, REPEAT_CELL
from service.streams.rules import DAY_MS, LIMIT_DETECTORS, choose_references
from service.streams.state import (
    REFUTED_BY_CELL,
    REFUTED_BY_CIRCLE,
    TOO_FEW,
    States,
    is_learning,
    restart,
)


def learns_limits(state: States) -> npt.NDArray[np.bool_]:
    """Return which streams have review limits whose bounds they still learn."""
    unknown = np.all(state["joint_bound"][..., LIMIT_DETECTORS] == 0, axis=-1)
    return np.asarray((state["limits"] > 0) & unknown)


def decide(folded: Folded, s: int, policy: Policy) -> None:
    """Complete what a stream has learned: its baseline, the bounds of its review limits, or both.

    A limit's bound is as those of the cells, Clopper-Pearson at the same share of the error.
    """
    state = folded.state
    alpha = spent_alpha(policy.baseline_confidence, int(state["relearns"][s]))
    if learns_limits(state[s]) and _is_long(state[s], "limit", policy):
        upper = clopper_pearson_upper(
            state["limit_base"][s], np.array([state["limit_rows"][s]]), alpha / BOUNDS
        )
        named = (
            folded.rules["high"][s] > 0
        )  # places without a limit get the bound that finds nothing
        state["joint_bound"][s, LIMIT_DETECTORS] = rounded_up(np.where(named, upper, 1.0))
    if is_learning(state[s]) and _is_long(state[s], "base", policy):
        _decide_references(folded, s, policy, alpha)
        state["crossings"][s] = 0
        state["decided_row"][s] = state["rows"][s]
        restart(state, s)


def _is_long(state: States, what: str, policy: Policy) -> bool:
    span = int(state[f"{what}_last_at"]) - int(state[f"{what}_first_at"])
    return bool(
        state[f"{what}_rows"] >= policy.baseline_size and span >= policy.baseline_days * DAY_MS
    )


def _decide_references(folded: Folded, s: int, policy: Policy, alpha: float) -> None:
    """Accept the law for a view, or bound the merchant's own cells."""
    state = folded.state
    count = state["cell"]["base"][s].astype(np.int64)
    rows = np.array([int(count[cells].sum()) for cells in WATCHED.values()])
    places = FIRST_RUN + np.flatnonzero(folded.pages.table[s, FIRST_RUN:])
    blocks = folded.pages.of(s)[places].astype(np.int64)
    repeats, per_block = blocks[:, REPEAT_CELL], blocks[:, :CELLS]
    seen = np.stack([per_block[:, cells].sum(axis=1) for cells in WATCHED.values()], axis=1)
    partition = np.searchsorted([FIRST_HOUR, FIRST_WEEKDAY], places, side="right")
    bounds = own_bounds(count, rows, per_block, seen, partition, alpha)
    runs = partition == 0
    rare, joint = rare_cells(per_block[runs], seen[runs], alpha)
    state["cell"]["bound"][s] = rounded_up(bounds)
    state["cell"]["rare"][s] = rare
    again = repeat_bound(repeats, seen[:, 0], partition, alpha)
    state["joint_bound"][s, :FIRST_LIMIT] = rounded_up(np.append(joint, again))
    state["repeat_share"][s] = repeats[runs].sum() / max(int(seen[runs, 0].sum()), 1)
    verdict = law_verdict(
        count,
        rows,
        state["base_circle"][s],
        int(state["base_rows"][s]),
        policy.tolerances(),
    )
    state["refuted"][s] |= (
        REFUTED_BY_CIRCLE * verdict.circle + REFUTED_BY_CELL * verdict.cell + TOO_FEW * verdict.few
    ).astype(np.uint8)
    folded.pages.forget(s, slice(FIRST_RUN, PLACES))
    choose_references(state, np.array([s]), policy)
