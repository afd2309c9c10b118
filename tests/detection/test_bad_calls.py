"""Bad arguments are refused by name, with what is allowed."""

from __future__ import annotations

import numpy as np
import pytest

from service.detection import bank, baseline, cells

COUNT, ROWS = np.ones(224, int), np.full(3, 500)
BLOCKS = np.zeros((2, 224), int), np.zeros((2, 3), int)
TOLERANCES = (0.1, 0.1, 0.05)


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: baseline.spent_alpha(1.5, 0), "confidence must be between 0 and 1, got 1.5"),
        (lambda: baseline.spent_alpha(0.9, -1), "relearns must be 0 or more, got -1"),
        (
            lambda: baseline.own_bounds(COUNT, ROWS, *BLOCKS, np.zeros(2, int), 0),
            "alpha must be between 0 and 1, got 0",
        ),
        (
            lambda: baseline.own_bounds(COUNT[:199], ROWS, *BLOCKS, np.zeros(2, int), 0.1),
            "count must have 224 values",
        ),
        (
            lambda: baseline.own_bounds(COUNT, ROWS[:2], *BLOCKS, np.zeros(2, int), 0.1),
            "rows must have 3 values",
        ),
        (
            lambda: baseline.own_bounds(-COUNT, ROWS, *BLOCKS, np.zeros(2, int), 0.1),
            "count must be 0 or more, got -1",
        ),
        (lambda: baseline.rare_cells(*BLOCKS, 1.0), "alpha must be between 0 and 1"),
        (
            lambda: baseline.rare_cells(BLOCKS[0], BLOCKS[1][:1], 0.1),
            r"block_rows must have shape \(2, 3\)",
        ),
        (
            lambda: baseline.law_verdict(COUNT[:9], ROWS, np.zeros(4), 9, TOLERANCES),
            "count must have 224 values",
        ),
        (lambda: baseline.exceptions(COUNT[:90]), "count must have 224 values"),
        (lambda: baseline.own_shares(COUNT[:90]), "count must have 224 values"),
        (lambda: bank.alternatives(np.ones(89)), "reference must have 90 shares above 0"),
        (lambda: bank.alternatives(np.zeros(90)), "reference must have 90 shares above 0"),
        (lambda: cells.with_coarse(np.ones(90)), "counts must have 199 values"),
        (lambda: cells.pairs_of(9), "cell must be 199 to 223, got 9"),
    ],
)
def test_a_bad_argument_is_named(call, words: str) -> None:
    with pytest.raises(ValueError, match=words):
        call()
