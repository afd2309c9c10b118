"""The folded state of a stream: one record of arrays, counts per bucket aside."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from service.detection.bank import JOINT, LIMITS, REACH, SHAPES
from service.detection.cells import CELLS, VIEW_OF_CELL
from service.streams.pages import WINDOW_PLACES

UNDECIDED, BY_LAW, BY_OWN = 0, 1, 2
"""What a view is compared with; undecided while its baseline is being learned."""

REFUTED_BY_CIRCLE, REFUTED_BY_CELL, REFUTED_BY_BANK, TOO_FEW = 1, 2, 4, 8
"""Why the law was not accepted for a view."""

NO_VIEW = 3
"""Stands for a view that sees every amount above zero: the limits'."""

CELL = np.dtype(
    [
        ("value", "<f8", 3),  # of the cell's detectors right after its last hit
        (
            "ratio",
            "<f8",
        ),  # exp of its CUSUM after the last hit; at rest up to 1
        ("hit", "<i8"),  # the view's clock at the last hit or the last restart
        ("count", "<i8"),
        ("spent", "<f8"),  # amounts of the hits since onset
        ("run", "<u4"),  # hits since onset
        ("bound", "<f4"),  # own upper bound, before tolerance
        ("excepted", "<f4"),  # bound of a single cell though the law was accepted, else 0
        ("onset", "<u4"),  # row of the first hit since the CUSUM was last zero
        ("onset_at", "<i8"),
        ("onset_clock", "<u4"),  # the view's clock at it
        ("base", "<u4"),  # the baseline's count
        ("rare", "u1"),  # 1 for a cell hardly used in the baseline
        ("alarmed", "u1"),  # 1 for a cell of the open alarm
    ],
    align=True,
)
"""What is known of one cell of a stream, close together in memory."""

STATE = np.dtype(
    [
        # tallies
        ("incarnation", "<u8"),
        ("records", "<i8"),  # log records folded
        ("rows", "<i8"),  # rows with an amount above zero
        ("zero", "<i8"),
        ("late", "<i8"),
        ("first_at", "<i8"),
        ("last_at", "<i8"),
        ("last_arrived", "<i8"),
        ("window", "<u4", WINDOW_PLACES),  # number of the bucket at each place of the window
        ("clock", "<i8", 3),  # rows seen by each watched view
        ("circle", "<f8", 6),  # sums of cos, sin of 1 and 2 turns; log10 amount and its square
        ("cell", CELL, CELLS),
        # detectors
        ("sums", "<f8", (3, 3)),  # weighted values of a view's cells, per contamination
        ("shape", "<f8", SHAPES),
        ("shape_ratio", "<f8", SHAPES),  # as of the cells
        ("shape_onset", "<i8", SHAPES),
        ("shape_onset_at", "<i8", SHAPES),
        ("recent", "<i8", REACH),  # ring of the last amounts
        ("recent_rows", "<i8"),  # rows that went into it
        ("joint_value", "<f8", (JOINT, 2)),  # of the joint detectors, by contamination
        ("joint_ratio", "<f8", JOINT),
        ("joint_onset", "<i8", JOINT),
        ("joint_onset_at", "<i8", JOINT),
        ("joint_hits", "<i8", JOINT),  # since onset, their amounts, and rows seen
        ("joint_spent", "<f8", JOINT),
        ("joint_seen", "<i8", JOINT),
        # references
        ("policy", "<u4"),
        ("reference", "u1", 3),
        ("refuted", "u1", 3),
        ("block_level", "u1"),
        ("relearns", "u1"),
        ("base_rows", "<i8"),
        ("base_first_at", "<i8"),
        ("base_last_at", "<i8"),
        ("base_circle", "<f8", 4),
        ("joint_bound", "<f4", JOINT),  # of joint shares; 0 before there is a baseline
        ("repeat_share", "<f8"),  # of the baseline's amounts
        ("limits", "<u8"),  # fingerprint of the review limits in force, 0 for none
        ("limit_rows", "<i8"),  # rows from which the bounds of the limits are learned
        ("limit_first_at", "<i8"),
        ("limit_last_at", "<i8"),
        ("limit_base", "<i8", LIMITS),  # those of them just below each limit
        ("shape_scale", "<f8", SHAPES),  # c of the projection; infinite for a dropped detector
        ("shape_norm", "<f8", SHAPES),  # z of the alternative
        # dependence between neighbours, counted once a baseline is complete
        ("neighbour", "<i8"),  # lead pair of the last row that has one, 0 for none
        ("neighbours", "<i8"),  # rows compared with the one before, and those of the same pair
        ("repeats", "<i8"),
        # the open alarm
        ("alarm", "S16"),  # id, binary; empty for none
        ("alarm_crossings", "<u4"),
        ("alarm_view", "u1"),  # place in ``WATCHED_VIEWS``; NO_VIEW for a limit's
        ("alarm_shape", "u1"),  # 1 if its pattern is a shape
        ("alarm_live", "u1"),  # 1 once a crossing was not historic
        ("alarm_severity", "<f8"),
        ("alarm_share", "<f8"),  # expected in its cells
        ("alarm_low", "<i8"),  # amounts from this to below that, for a limit's
        ("alarm_high", "<i8"),
        ("alarm_hits", "<i8"),  # rows in its cells since its onset, and their amounts
        ("alarm_spent", "<f8"),
        ("alarm_seen", "<i8"),  # rows its view saw since the onset
        ("alarm_hit_at", "<i8"),
        ("crossed_row", "<i8"),  # row of the last crossing
        ("crossings", "<u4"),  # since the references were decided, at a row of its own
        ("decided_row", "<i8"),
    ],
    align=True,
)
WORDS = STATE.itemsize // 8
assert STATE.itemsize == WORDS * 8

States = npt.NDArray[np.void]


def is_learning(state: States) -> npt.NDArray[np.bool_]:
    """Return which streams still learn their baseline; for one record, whether it does."""
    return np.asarray(np.any(state["reference"] == UNDECIDED, axis=-1))


def restart(state: States, s: int) -> None:
    """Set every detector of a stream back to zero."""
    for name in ("sums", "shape", "shape_ratio", "shape_onset", "shape_onset_at"):
        state[name][s] = 0
    for name in ("value", "ratio", "onset", "onset_at", "hits", "spent", "seen"):
        state[f"joint_{name}"][s] = 0
    cell = state["cell"][s]
    for name in ("value", "ratio", "spent", "run", "onset", "onset_at", "onset_clock"):
        cell[name] = 0
    cell["hit"] = state["clock"][s][VIEW_OF_CELL]
