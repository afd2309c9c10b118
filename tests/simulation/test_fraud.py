"""Made-up amounts have the cells they state."""

from __future__ import annotations

import numpy as np
import pytest

from service.digits.views import LEAD_DIGIT, LEAD_PAIR, TAIL_PAIR
from service.simulation import fraud
from service.simulation.cells import shares_of_amounts
from service.simulation.fraud import FRAUD
from service.simulation.honest import LogNormal
from tests.simulation.test_honest import LEVEL, p_values, rows_of


@pytest.mark.parametrize("name", FRAUD)
def test_fraud_has_the_cells_it_states(name) -> None:
    pattern = FRAUD[name]()
    honest = LogNormal(sigma=0.4, median=3000)  # some of it below 10.00
    amounts, _ = rows_of(honest, 100_000, streams=2)
    u = np.random.default_rng(5).random((*amounts.shape, pattern.draws))
    made_up = pattern.replace(u, amounts)
    assert made_up.shape == amounts.shape
    assert made_up.dtype == np.int64
    assert made_up.min() >= 1
    for p in p_values(made_up, pattern.cells(honest.cells()[0])):
        assert p > LEVEL


def test_cells_of_a_range_are_counted_by_hand() -> None:
    cells = fraud.Pair49().cells(np.zeros(199))
    assert cells[LEAD_DIGIT].tolist() == [0, 0, 0, pytest.approx(1), 0, 0, 0, 0, 0]
    assert cells[LEAD_PAIR][39] == pytest.approx(1)
    np.testing.assert_allclose(cells[TAIL_PAIR], 0.01)
    ones = fraud.Ones().cells(np.zeros(199))
    np.testing.assert_allclose(ones[LEAD_PAIR][:10], 0.1)
    assert not ones[TAIL_PAIR].any()  # 1.00 to 1.99 have no tail pair


def test_wide_ranges_are_thinned_without_losing_endings() -> None:
    exact = fraud.Even(low=10_000, high=1_000_000).cells(np.zeros(199))
    thinned = fraud.Even(low=100_000_000, high=10_000_000_000).cells(np.zeros(199))
    np.testing.assert_allclose(thinned, exact, atol=2e-6)


def test_human_digits_follow_their_chain() -> None:
    pattern = fraud.HumanDigits()
    cells = pattern.cells(np.zeros(199))
    first = np.array(pattern.first) / sum(pattern.first)
    np.testing.assert_allclose(cells[LEAD_DIGIT], first)
    later = np.array(pattern.later)
    later[3] *= pattern.repeat  # after a 3 another 3 is avoided
    np.testing.assert_allclose(cells[LEAD_PAIR][20:30], first[2] * later / later.sum())
    assert cells[TAIL_PAIR].sum() == pytest.approx(1)
    assert cells[TAIL_PAIR][::11].sum() < 0.05  # 00, 11, 22, ...


def test_round_endings_leave_leading_digits_alone() -> None:
    amounts = np.array([[3951, 999, 1000, 123_456]])
    out = fraud.RoundEndings().replace(np.zeros((1, 4, 1)), amounts)
    assert out.tolist() == [[3900, 999, 1000, 123_400]]


def test_shares_take_probabilities() -> None:
    cells = shares_of_amounts(np.array([5, 49, 4900]), [0.5, 0.3, 0.2])
    assert cells[LEAD_DIGIT][[3, 4]].tolist() == pytest.approx([0.5, 0.5])
    assert cells[LEAD_PAIR][39] == pytest.approx(0.5)
    assert cells[TAIL_PAIR].sum() == pytest.approx(0.2)


@pytest.mark.parametrize(
    ("make", "argument"),
    [
        (lambda: fraud.Even(low=0, high=5), "low"),
        (lambda: fraud.Even(low=5, high=5), "high"),
        (lambda: fraud.UnderLimit(margin=0), "margin"),
        (lambda: fraud.OneAmount(amount=-1), "amount"),
        (lambda: fraud.TwoAmounts(other=0), "other"),
        (lambda: fraud.Digits(repeat=-1), "repeat"),
        (lambda: fraud.Digits(first=(1.0,)), "first"),
        (lambda: fraud.Digits(later=(0.0,) * 10), "the sum of later"),
    ],
)
def test_parameters_out_of_range_are_named(make, argument) -> None:
    with pytest.raises(ValueError, match=f"^{argument} must (be .* got|have)"):
        make()
