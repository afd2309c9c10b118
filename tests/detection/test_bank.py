"""The bank's promises: weights, and likelihood ratios that no member of the null can beat."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import linprog

from service.detection import bank, cells
from service.digits.laws import leading_law


def test_weights_sum_to_one() -> None:
    whole = bank.CELL_WEIGHTS.sum() + bank.SHAPE_WEIGHTS.sum() + bank.JOINT_WEIGHTS.sum()
    assert whole == pytest.approx(1, abs=1e-12)
    assert bank.EPSILON_SHARES.sum() == pytest.approx(1)
    np.testing.assert_allclose(bank.VIEW_WEIGHTS, [0.11, 0.30 + 0.11, 0.34])


@pytest.mark.parametrize("tolerance", [0.02, 0.1, 0.3])
def test_no_member_of_the_null_beats_a_shape_detector(tolerance: float) -> None:
    # the largest expectation of q/p* over {p <= u, sum p = 1}, by linear programming (SciPy)
    law = leading_law(2)
    u = law * (1 + tolerance)
    q, _ = bank.alternatives(law)
    c = bank.projection(q, u)
    for j in range(bank.SHAPES):
        projected = np.minimum(u, c[j] * q[j])
        assert projected.sum() == pytest.approx(1, abs=1e-12)
        ratio = q[j] / projected
        worst = linprog(-ratio, A_eq=np.ones((1, 90)), b_eq=[1], bounds=[(0, bound) for bound in u])
        assert -worst.fun == pytest.approx(1, abs=1e-9)


def test_dividing_the_mixture_by_the_law_would_break_the_promise() -> None:
    # why the projection is needed: the naive ratio has an expectation above 1 under the tolerance
    law = leading_law(2)
    q, _ = bank.alternatives(law)
    worst = linprog(
        -q[1] / law, A_eq=np.ones((1, 90)), b_eq=[1], bounds=[(0, 1.1 * p) for p in law]
    )
    assert -worst.fun > 1.01


def test_a_shape_inside_the_null_projects_onto_itself() -> None:
    law = leading_law(2)
    q, _ = bank.alternatives(law)
    np.testing.assert_allclose(bank.projection(q, np.minimum(20 * law, 1)), 1, atol=1e-12)


def test_bounds_that_leave_no_room_are_refused() -> None:
    law = leading_law(2)
    with pytest.raises(ValueError, match="sum to at least 1"):
        bank.projection(bank.alternatives(law)[0], 0.9 * law)


def test_coarse_cells_are_partitions_of_the_pairs() -> None:
    assert cells.CELLS == 224
    assert cells.COARSE_OF_PAIR.shape == (3, 90)
    for row, part in zip(
        cells.COARSE_OF_PAIR, (cells.HALVES, cells.QUARTERS, cells.THIRDS), strict=True
    ):
        assert np.all(np.diff(row) >= 0)
        np.testing.assert_array_equal(np.unique(row), np.arange(part.start, part.stop))
        np.testing.assert_allclose(bank.LAW[part].sum(), 1)
    assert [p - 9 + 10 for p in cells.pairs_of(cells.HALVES.stop - 1)] == [95, 96, 97, 98, 99]
    assert [p - 9 + 10 for p in cells.pairs_of(cells.QUARTERS.start + 1)] == list(range(20, 50))
    counts = np.arange(199.0)
    assert cells.with_coarse(counts)[cells.HALVES.start] == sum(range(9, 14))
