"""The numbering of the watched cells and which view sees which amount."""

from __future__ import annotations

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from service.digits.views import CELLS, VIEW_OF_CELL, WATCHED, cell_label, cells_hit


@given(st.lists(st.integers(0, 10**15), min_size=1, max_size=50))
def test_cells_hit_are_those_of_the_decimal_string(values: list[int]) -> None:
    hit = cells_hit(np.array(values, dtype=np.int64))
    for i, value in enumerate(values):
        text = str(value)
        assert hit.lead_digit[i] == (int(text[0]) - 1 if value else -1)
        assert hit.lead_pair[i] == (9 + int(text[:2]) - 10 if value >= 10 else -1)
        assert hit.tail_pair[i] == (99 + int(text[-2:]) if value >= 1000 else -1)


def test_smallest_amounts_that_a_view_sees() -> None:
    hit = cells_hit(np.array([0, 1, 9, 10, 999, 1000]))
    assert (hit.lead_digit >= 0).tolist() == [False, True, True, True, True, True]
    assert (hit.lead_pair >= 0).tolist() == [False, False, False, True, True, True]
    assert (hit.tail_pair >= 0).tolist() == [False] * 5 + [True]


def test_the_views_share_out_all_cells() -> None:
    numbers = [k for cells in WATCHED.values() for k in range(cells.start, cells.stop)]
    assert numbers == list(range(CELLS))
    for i, cells in enumerate(WATCHED.values()):
        assert np.all(VIEW_OF_CELL[cells] == i)


def test_a_label_leads_back_to_its_cell() -> None:
    for cell in range(9, 99):
        amount = int(cell_label(cell)) * 1000
        assert cells_hit(np.array([amount])).lead_pair[0] == cell
        assert cell_label(int(cells_hit(np.array([amount])).lead_digit[0])) == cell_label(cell)[0]
    for cell in range(99, 199):
        assert cells_hit(np.array([int("123" + cell_label(cell))])).tail_pair[0] == cell
    assert [cell_label(k) for k in (0, 8, 9, 98, 99, 198)] == ["1", "9", "10", "99", "00", "99"]
