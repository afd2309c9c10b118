"""Honest patterns follow what they claim; chi-square of SciPy at a level of 1e-3 per view, seeded.

With fixed seeds a pass is a fact, not luck: what is stated is how unlikely a failure would be if
the pattern were right.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from service.digits.laws import law_cells
from service.digits.views import LEAD_PAIR, TAIL_PAIR, WATCHED, cells_hit
from service.simulation import honest
from service.simulation.honest import HONEST
from service.simulation.source import DAY_MS, START_MS

LEVEL = 1e-3


def rows_of(pattern, n, streams=4, seed=0):
    return pattern.source(seeds(streams, seed)).rows(n)


def seeds(streams, seed=0):
    return [np.random.SeedSequence(seed, spawn_key=(i, 0)) for i in range(streams)]


def p_values(amounts, cells):
    """Chi-square of every view's counts against the cells claimed; cells of few are pooled."""
    hits = cells_hit(amounts.ravel())
    for view, hit in zip(WATCHED, hits, strict=True):
        claimed = cells[WATCHED[view]]
        seen = hit[hit >= 0]
        counts = np.bincount(seen - WATCHED[view].start, minlength=len(claimed))
        # the share of rows that a view sees is claimed, too
        counts = np.append(counts, len(hit) - len(seen))
        claimed = np.append(claimed, 1 - claimed.sum())
        assert not counts[claimed <= 1e-12].any()
        expected = claimed * len(hit)
        few = expected < 10
        observed = np.append(counts[~few], counts[few].sum())
        expected = np.append(expected[~few], expected[few].sum())
        keep = expected > 1e-6
        assert not observed[~keep].any()
        if keep.sum() < 2:  # one cell holds all that is claimed, and all that was seen
            continue
        yield stats.chisquare(
            observed[keep], expected[keep] * observed.sum() / expected.sum()
        ).pvalue


@pytest.mark.parametrize(
    "pattern",
    [
        honest.Law(),
        honest.Law(decades=1),
        honest.NearNine(),
        honest.QuarterEndings(),
        honest.NearLimit(),
        honest.LogNormal(sigma=0.6),
        honest.LogNormal(sigma=0.4, median=900),
        honest.Bimodal(),
    ],
    ids=repr,
)
def test_independent_patterns_have_the_cells_they_state(pattern) -> None:
    amounts, _ = rows_of(pattern, 50_000)
    assert pattern.independent
    assert amounts.min() >= 1
    for p in p_values(amounts, pattern.cells()[0]):
        assert p > LEVEL


def test_a_wrong_claim_would_be_noticed() -> None:
    amounts, _ = rows_of(honest.NearNine(moved=0.02), 50_000)
    assert min(p_values(amounts, law_cells())) < 1e-6


def test_lognormal_cells_come_from_the_normal_distribution_of_scipy() -> None:
    # lead pair 49 and tail pair 07, added up amount by amount
    pattern = honest.LogNormal(sigma=0.3, median=700)
    normal = stats.norm(np.log10(700), 0.3)
    amounts = np.arange(1, 200_000)
    p = np.diff(normal.cdf(np.log10(np.append(amounts - 0.5, 199_999.5))))
    cells = pattern.cells()[0]
    lead = p[(amounts >= 10) & np.char.startswith(amounts.astype(str), "49")].sum()
    tail = p[(amounts >= 1000) & (amounts % 100 == 7)].sum()
    assert cells[LEAD_PAIR][39] == pytest.approx(lead, rel=1e-9)
    assert cells[TAIL_PAIR][7] == pytest.approx(tail, rel=1e-6)
    assert cells[TAIL_PAIR].sum() == pytest.approx(normal.sf(np.log10(999.5)), rel=1e-9)


@pytest.mark.parametrize("sigma", [0.3, 0.5])
def test_lognormal_has_the_fourier_coefficient_it_states(sigma) -> None:
    amounts, _ = rows_of(honest.LogNormal(sigma=sigma), 200_000, streams=1)
    measured = abs(np.exp(2j * np.pi * np.log10(amounts[0])).mean())
    # four standard errors of a mean of 200 000 unit vectors, and its upward bias
    assert measured == pytest.approx(np.exp(-2 * np.pi**2 * sigma**2), abs=4 / np.sqrt(200_000))


def test_the_two_kinds_of_sale_spread_as_widely_as_stated() -> None:
    amounts, _ = rows_of(honest.Bimodal(), 200_000, streams=1)
    turn = 2 * np.pi * np.log10(amounts[0])
    assert np.log10(amounts[0]).std() == pytest.approx(0.51, abs=0.005)
    assert 2 * abs(np.exp(1j * turn).mean()) == pytest.approx(0.45, abs=0.02)


def test_prices_are_the_merchants_own_and_end_as_prices_do() -> None:
    amounts, _ = rows_of(honest.PricePoints(), 4000)
    singles = [set(np.unique(a[a % 100 == 99]).tolist()) for a in amounts]
    assert singles[0] != singles[1]
    endings = np.unique(amounts[0] % 5)
    assert endings.tolist() == [0, 2, 3, 4]  # sums of one to three of 99, 95, 90, 50, 00


def test_lunch_is_not_dinner() -> None:
    pattern = honest.LunchAndDinner(per_day=20, dinner=0.4)
    amounts, at = rows_of(pattern, 20 * 30)
    hour = at[0] % DAY_MS / 3_600_000
    lunch = (hour >= 11.5) & (hour < 14.5)
    dinner = (hour >= 18) & (hour < 22)
    assert np.all(lunch | dinner)
    assert dinner.mean() == pytest.approx(0.4)
    assert np.all(np.diff(at[0]) > 0)
    for mine in amounts:
        assert mine[lunch].max() < mine[dinner].min() + 2000
        assert np.median(mine[dinner]) > 2 * np.median(mine[lunch])


def test_plans_are_billed_on_their_days() -> None:
    pattern = honest.Recurring(per_day=100)
    amounts, at = rows_of(pattern, 6000, streams=1)
    day = (at[0] - START_MS) // DAY_MS
    assert day[0] == 0
    assert day[-1] == 59
    for price, on in ((499, 0), (999, 9), (1999, 19)):
        billed = day[amounts[0] == price] % 30
        assert np.mean(billed == on) > 0.95
    assert np.mean(amounts[0] == 499) == pytest.approx(0.3 * 0.97, abs=0.02)


def test_a_promotion_drops_cents_only_on_its_days() -> None:
    pattern = honest.Promotion(days=7, dropped=0.5)
    shop, _ = rows_of(honest.PricePoints(), 1, streams=4)
    assert shop.shape == (4, 1)
    amounts, at = rows_of(pattern, 6000)
    on = (at[0] - START_MS) // DAY_MS % 30 >= 23
    assert on.mean() == pytest.approx(7 / 30)
    round_ = amounts % 100 == 0
    assert round_[:, on].mean() > 0.45
    assert round_[:, ~on].mean() < 0.3


@pytest.mark.parametrize("name", HONEST)
def test_rows_depend_neither_on_cuts_nor_on_other_streams(name) -> None:
    pattern = HONEST[name]()
    amounts, at = rows_of(pattern, 700, streams=3)
    source = pattern.source(seeds(3))
    parts = [source.rows(n) for n in (1, 128, 571)]
    np.testing.assert_array_equal(np.concatenate([a for a, _ in parts], axis=1), amounts)
    np.testing.assert_array_equal(np.concatenate([t for _, t in parts], axis=1), at)
    alone, _ = pattern.source(seeds(3)[1:2]).rows(700)
    np.testing.assert_array_equal(alone[0], amounts[1])
    source = pattern.source(seeds(3))
    source.rows(100)
    source.keep(np.array([2]))
    np.testing.assert_array_equal(source.rows(600)[0][0], amounts[2, 100:])
    assert np.all(np.diff(at) >= 0)
    assert len(np.unique(amounts[:, 0])) + len(np.unique(amounts[0])) > 2


@pytest.mark.parametrize("name", ["price_points", "lunch_and_dinner", "recurring", "promotion"])
def test_counted_cells_are_those_of_further_rows(name) -> None:
    # shares of 250 000 rows against 60 000 others of the same merchant: within 5 standard errors
    pattern = HONEST[name]()
    cells = pattern.cells(seed=3)
    child = np.random.SeedSequence(3).spawn(len(cells))[0]
    amounts, _ = pattern.source([child]).rows(60_000)
    hits = np.concatenate(cells_hit(amounts[0]))
    shares = np.bincount(hits[hits >= 0], minlength=199) / 60_000
    np.testing.assert_array_less(np.abs(shares - cells[0]), 5 * np.sqrt(cells[0] / 60_000) + 1e-4)


@pytest.mark.parametrize(
    ("make", "argument"),
    [
        (lambda: honest.Law(per_day=0), "per_day"),
        (lambda: honest.Law(decades=10), "decades"),
        (lambda: honest.LogNormal(sigma=0.01), "sigma"),
        (lambda: honest.LogNormal(sigma=float("nan")), "sigma"),
        (lambda: honest.Bimodal(gap=5), "gap"),
        (lambda: honest.NearNine(moved=1.1), "moved"),
        (lambda: honest.NearLimit(limit=1), "limit"),
        (lambda: honest.PricePoints(prices=0), "prices"),
        (lambda: honest.Promotion(days=31), "days"),
        (lambda: honest.Recurring(single=0), "single"),
        (lambda: honest.LunchAndDinner(dinner=2), "dinner"),
    ],
)
def test_parameters_out_of_range_are_named(make, argument) -> None:
    with pytest.raises(ValueError, match=f"^{argument} must be .* got"):
        make()
