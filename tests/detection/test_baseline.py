"""Learned baselines: what the bounds promise, and when the law is accepted."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from statsmodels.stats.proportion import proportion_confint

from service.detection.bank import LAW
from service.detection.baseline import (
    BOUNDS,
    REFUTING_LEVEL,
    exceptions,
    law_verdict,
    own_bounds,
    own_shares,
    rare_cells,
    spent_alpha,
)
from service.detection.cells import CELLS, with_coarse
from service.detection.policy import Policy
from service.digits.views import LEAD_PAIR, TAIL_PAIR, WATCHED
from service.streams.state import BY_OWN
from tests.streams.plain import cells_of
from tests.streams.test_fold import START, law_amounts, records, run

DAY = 86_400_000
NO_BLOCKS = (np.zeros((0, CELLS), np.int64), np.zeros((0, 3), np.int64), np.zeros(0, np.int64))


def counts_of(rng, n, shares=LAW):
    views = [rng.multinomial(n, shares[c] / shares[c].sum()) for c in WATCHED.values()]
    return with_coarse(np.concatenate(views)).astype(np.int64)


def test_bounds_are_clopper_pearson_at_the_bonferroni_level() -> None:
    # statsmodels' "beta" method is Clopper-Pearson; two-sided at 2 a is one-sided at a
    count = counts_of(np.random.default_rng(0), 1000)
    alpha = 0.0005
    bounds = own_bounds(count, np.full(3, 1000), *NO_BLOCKS, alpha)
    _, upper = proportion_confint(count, 1000, alpha=2 * alpha / BOUNDS, method="beta")
    np.testing.assert_allclose(bounds, upper, rtol=1e-9)
    never = count == 0
    assert never.any()
    np.testing.assert_allclose(bounds[never], 1 - (alpha / BOUNDS) ** (1 / 1000), rtol=1e-12)


def test_a_view_without_rows_bounds_nothing() -> None:
    count = np.zeros(CELLS, np.int64)
    np.testing.assert_array_equal(own_bounds(count, np.zeros(3, int), *NO_BLOCKS, 0.01), 1)


def test_all_bounds_hold_together_with_the_stated_confidence() -> None:
    # 2000 baselines at 95 %: the number that miss is at most binomial(2000, 0.05); 4 sd above
    rng = np.random.default_rng(1)
    shares = with_coarse(own_shares(counts_of(rng, 300))[:199])
    missed = 0
    for _ in range(2000):
        bounds = own_bounds(counts_of(rng, 400, shares), np.full(3, 400), *NO_BLOCKS, 0.05)
        missed += bool(np.any(bounds < shares))
    assert missed <= 2000 * 0.05 + 4 * np.sqrt(2000 * 0.05 * 0.95)
    assert missed > 0  # or the test could not fail


def test_error_spent_over_relearns_sums_to_what_was_promised() -> None:
    spent = [spent_alpha(0.9995, i) for i in range(10_000)]
    assert sum(spent) == pytest.approx(0.0005, rel=1e-3)
    assert sum(spent) < 0.0005


def test_a_cell_that_comes_in_bursts_gets_its_busiest_block() -> None:
    rng = np.random.default_rng(2)
    blocks = np.stack([counts_of(rng, 100) for _ in range(10)])
    blocks[3, 20] += 40
    rows = np.full((10, 3), 100)
    alpha = 0.0005
    bounds = own_bounds(
        blocks.sum(axis=0), rows.sum(axis=0), blocks, rows, np.zeros(10, int), alpha
    )
    _, busiest = proportion_confint(blocks[3, 20], 100, alpha=2 * alpha / BOUNDS, method="beta")
    assert bounds[20] == pytest.approx(busiest)
    pooled = own_bounds(blocks.sum(axis=0), rows.sum(axis=0), *NO_BLOCKS, alpha)
    assert bounds[20] > 3 * pooled[20]


def test_even_baselines_are_seldom_taken_for_bursts() -> None:
    # 199 cells, level 1e-4: about 0.02 cells a baseline; 200 baselines
    rng = np.random.default_rng(3)
    wider = 0
    for _ in range(200):
        blocks = np.stack([counts_of(rng, 64) for _ in range(16)])
        rows = np.full((16, 3), 64)
        total, seen = blocks.sum(axis=0), rows.sum(axis=0)
        bounds = own_bounds(total, seen, blocks, rows, np.zeros(16, int), 0.0005)
        wider += int((bounds > own_bounds(total, seen, *NO_BLOCKS, 0.0005)).sum())
    assert wider <= 15


def test_exceptions_are_cells_with_a_one_sided_p_value_below_a_fifth() -> None:
    count = counts_of(np.random.default_rng(4), 1000)
    p = stats.binom.sf(count - 1, 1000, LAW)
    bounds = exceptions(count)
    np.testing.assert_array_equal(bounds > 0, p < 0.2)
    _, upper = proportion_confint(count, 1000, alpha=0.02, method="beta")
    np.testing.assert_allclose(bounds[bounds > 0], upper[bounds > 0], rtol=1e-9)
    assert np.all(bounds[bounds > 0] > LAW[bounds > 0])


def test_a_perfect_merchant_is_seldom_refused_the_law_by_its_cells() -> None:
    rng = np.random.default_rng(5)
    refused = np.zeros(3)
    for _ in range(1000):
        verdict = law_verdict(
            counts_of(rng, 1500), np.full(3, 1500), np.zeros(4), 1500, (0.1, 0.1, 0.05)
        )
        refused += verdict.cell
    assert np.all(refused <= 1000 * REFUTING_LEVEL + 4 * np.sqrt(1000 * REFUTING_LEVEL))


def test_harmonics_refuse_a_bimodal_merchant() -> None:
    # two modes whose spread passes any rule about the spread: sd of log10 is 0.51
    rng = np.random.default_rng(6)
    log = np.where(rng.random(4000) < 0.5, 2.2, 3.2) + rng.normal(0, 0.1, 4000)
    assert np.std(log) > 0.5
    turn = 2 * np.pi * (log % 1)
    circle = np.array([f(h * turn).sum() for h in (1, 2) for f in (np.cos, np.sin)])
    count = counts_of(rng, 4000)
    verdict = law_verdict(count, np.full(3, 4000), circle, 4000, (0.1, 0.1, 0.05))
    assert verdict.circle.tolist() == [True, True, False]
    even = law_verdict(count, np.full(3, 4000), np.zeros(4), 4000, (0.1, 0.1, 0.05))
    assert not even.circle.any()


LUNCH = np.array([890, 950, 1050, 1190, 1290, 1450])
DINNER = np.array([2490, 2890, 3290, 3850, 4200, 5600, 6150])


@pytest.mark.parametrize(("a_day", "rhythm"), [(40, "hours"), (150, "hours"), (30, "weekends")])
def test_lunch_and_dinner_or_weekends_are_one_ordinary_merchant(a_day: int, rhythm: str) -> None:
    rng = np.random.default_rng(7)
    streams, rows = 20, 70 * a_day
    k = np.arange(rows)
    early = (k % a_day) / a_day < 0.45
    first = early if rhythm == "hours" else k // a_day % 7 < 5
    at = START - START % DAY + k // a_day * DAY + np.where(early, 12, 18) * 3_600_000
    logs = [
        records(np.where(first, rng.choice(LUNCH, rows), rng.choice(DINNER, rows)), at=at)
        for _ in range(streams)
    ]
    folded, crossings = run(logs, {1: Policy()})
    assert np.all(folded.state["cell"]["bound"].any(axis=1))
    assert crossings == []


def test_a_merchant_near_the_law_is_not_judged_by_the_law_where_it_differs() -> None:
    # 1 % of the prices end in 99: too few for a baseline of 1000 to refuse the law, and yet an
    # excess of 100 % in that cell. Judged by the law alone, half of such streams alarmed.
    rng = np.random.default_rng(8)
    streams, rows = 30, 15_000
    at = START + np.arange(rows) * 30 * 60_000
    logs = []
    for _ in range(streams):
        amounts = law_amounts(rng, rows, 4, 8)
        ends = rng.random(rows) < 0.01
        amounts[ends] = amounts[ends] // 100 * 100 + 99
        logs.append(records(amounts, at=at))
    folded, crossings = run(logs, {1: Policy()})
    by_law = (folded.state["reference"][:, 2] == 1).mean()
    assert by_law > 0.5  # accepted all the same
    assert len({c.slot for c in crossings}) <= 2
    ending = TAIL_PAIR.start + 99
    assert (folded.state["cell"]["excepted"][:, ending] > 0).mean() > 0.7
    assert (folded.state["cell"]["excepted"][:, LEAD_PAIR] > 0).mean() < 0.3


def test_rare_cells_are_bounded_together_with_the_stated_confidence() -> None:
    # chosen by one half and bounded by the other, so that the choice does not bias the bound
    rng = np.random.default_rng(9)
    shares = np.concatenate([np.sort(rng.dirichlet(np.full(k, 0.3))) for k in (9, 90, 100)])
    shares = with_coarse(shares)
    missed, alpha, trials = 0, 0.5, 600
    for _ in range(trials):
        blocks = np.stack([counts_of(rng, 64, shares) for _ in range(16)])
        rare, bound = rare_cells(blocks, np.full((16, 3), 64), alpha)
        truth = [shares[cells][rare[cells]].sum() for cells in (LEAD_PAIR, TAIL_PAIR)]
        missed += sum(b < t for b, t in zip(bound, truth, strict=True))
        assert rare[LEAD_PAIR].any()
        assert not rare[: LEAD_PAIR.start].any()
    level = 2 * alpha / BOUNDS
    assert missed <= trials * level + 4 * np.sqrt(trials * level) + 1


def test_an_even_spread_has_no_rare_cells() -> None:
    rng = np.random.default_rng(10)
    blocks = np.stack([counts_of(rng, 1000, np.ones(CELLS)) for _ in range(16)])
    rare, bound = rare_cells(blocks, np.full((16, 3), 1000), 0.0005)
    assert np.all(bound[rare[[LEAD_PAIR.start, TAIL_PAIR.start]]] > 0.1)
    assert rare_cells(np.zeros((0, CELLS), int), np.zeros((0, 3), int), 0.01)[1].tolist() == [1, 1]


def test_invented_amounts_are_found_against_an_own_baseline() -> None:
    # no single cell can find them: each rare cell's own bound is far above its share of them
    rng = np.random.default_rng(11)
    streams, clean, rows = 20, 2500, 3500
    prices = np.unique(np.concatenate([np.arange(99, 3000, 100), np.arange(500, 10_000, 500)]))
    at = START + np.arange(rows) * 15 * 60_000
    amounts = rng.choice(prices, (streams, rows))
    bad = (np.arange(rows) >= clean) & (rng.random((streams, rows)) < 0.3)
    invented = rng.integers(1000, 10_000, (streams, rows))
    logs = [records(a, at=at) for a in np.where(bad, invented, amounts)]
    _, crossings = run(logs, {1: Policy()})
    assert {c.slot for c in crossings} == set(range(streams))
    first = [next(c for c in crossings if c.slot == s) for s in range(streams)]
    assert all(clean < c.rows < clean + 300 for c in first)
    assert {c.findings[0].pattern for c in first} == {"rare_cells"}
    told = first[0].findings[0]
    assert told.observed > told.bound > told.expected
    assert len(told.members) > len(told.cells) == 9
    assert clean - 30 < told.onset_row <= first[0].rows


def test_rare_cells_obey_their_recurrence() -> None:
    rng = np.random.default_rng(12)
    n = 2400
    prices = np.array([199, 299, 499, 999, 1499, 2499, 4999, 9999])
    amounts = np.where(rng.random(n) < 0.02, rng.integers(1000, 10_000, n), rng.choice(prices, n))
    log = records(amounts, at=START + np.arange(n) * 15 * 60_000)
    folded, crossings = run([log], {1: Policy(transactions_per_false_alarm=1e9)})
    assert not crossings
    state = folded.state[0]
    assert np.all(state["reference"] == BY_OWN)
    learned = int(state["base_rows"])
    for place, (view, tolerance) in enumerate(((1, 0.10), (2, 0.05))):
        u = float(state["joint_bound"][place]) * (1 + tolerance)
        for e, eps in enumerate((0.12, 0.40)):
            value = 0.0
            for amount in amounts[learned:].tolist():
                cell = cells_of(amount)[view]
                if cell >= 0:
                    value = (1 + value) * (1 - eps + eps * bool(state["cell"]["rare"][cell]) / u)
            assert state["joint_value"][place, e] == pytest.approx(value, rel=1e-9)
