"""Nothing drifts, overflows or turns to NaN on a stream of 10**8 rows, however it is posted.

A stream that old is made, not run: a warm one is given the counts and clocks of 10**8 rows more.
What it does with further rows is held against a plain loop in 40 digits that starts from the same
state.
"""

from __future__ import annotations

import copy
import math
from collections.abc import Iterable, Sequence
from fractions import Fraction
from typing import Any

import mpmath
import numpy as np
import pytest

from service.detection import bank
from service.detection.cells import VIEW_OF_CELL, with_coarse
from service.detection.policy import Limit, Policy
from service.digits.goodness import rayleigh
from service.digits.measures import spread
from service.digits.significand import circle
from service.digits.views import WATCHED
from service.streams.detail import detail
from service.streams.findings import cusums, evidence_of_cells, log_of
from service.streams.fold import Crossing, fold
from service.streams.folded import Folded
from service.streams.record import Records, Stream
from service.streams.rules import Kind
from service.streams.snapshots import read_snapshots, write_snapshots
from service.streams.table import VIEWS, digits
from tests.streams.listed import evidence_of, in_force, listed
from tests.streams.plain import cells_of, coarse_of
from tests.streams.test_fold import law_amounts, records, with_fraud

OLD = 10**8
NEVER = 1e90
LAW = Policy(reference="law", transactions_per_false_alarm=NEVER)
ALERT = Policy(reference="law", version=2, transactions_per_false_alarm=1e6)
SILENT = Policy(reference="law", version=3, transactions_per_false_alarm=math.inf)
POLICIES = {1: LAW, 2: ALERT, 3: SILENT}


def onward(folded: Folded, log: Records, sizes: Iterable[int]) -> tuple[Folded, list[Crossing]]:
    """Fold a log of one stream in pieces of some sizes, through a snapshot after each."""
    folded = copy.deepcopy(folded)
    crossings, start = [], 0
    for size in sizes:
        part = log[start : start + size]
        start += size
        crossings += fold(
            folded, part, np.zeros(len(part), np.int64), POLICIES, [Kind("sale", "EUR")], [b"t/m"]
        )
        (snapshot,) = write_snapshots(folded, [0])
        folded = Folded.new(1)
        read_snapshots(folded, [0], [snapshot])
    assert start >= len(log)
    return folded, crossings


@pytest.fixture(scope="module")
def old() -> Folded:
    """A stream as after 10**8 rows: warm detectors, and three cells not hit for half of them."""
    rng = np.random.default_rng(100)
    folded, _ = onward(Folded.new(1), records(law_amounts(rng, 3000, 2, 6)), [3000])
    state = folded.state
    counts = np.concatenate(
        [
            rng.multinomial(OLD, bank.LAW[cells] / bank.LAW[cells].sum())
            for cells in WATCHED.values()
        ]
    )
    state["cell"]["count"] += with_coarse(counts).astype(np.int64)
    for name in ("records", "rows"):
        state[name] += OLD
    for counter in (state["clock"], state["cell"]["hit"], state["neighbours"]):
        counter += OLD
    for row in (state["cell"]["onset"], state["cell"]["onset_clock"], state["shape_onset"]):
        row += np.where(row > 0, OLD, 0).astype(row.dtype)
    state["repeats"] += int(OLD * (bank.LAW[WATCHED["lead_pair"]] ** 2).sum())
    waves = rng.normal(0, np.sqrt(OLD / 2), 4)
    state["circle"][0] += [*waves, 4.0 * OLD, (16 + 16 / 12) * OLD]
    # Their values were high at the last hit; 50 million misses leave what no hit ever leaves.
    for cell in (8, 50, 150):
        state["cell"]["hit"][0, cell] -= OLD // 2
        state["cell"]["value"][0, cell] = [1e3, 1e5, 1e7]
        state["cell"]["ratio"][0, cell] = math.exp(12)
    held = bank.CELL_WEIGHTS[:, None] * bank.EPSILON_SHARES * _cells_now(state[0])
    state["sums"][0] = [held[view == VIEW_OF_CELL].sum(axis=0) for view in range(3)]
    return folded


def _cells_now(state: Any) -> Any:
    """Return the value of every cell's detectors, (224, 3), in closed form."""
    misses = (state["clock"][VIEW_OF_CELL] - state["cell"]["hit"])[:, None].astype(float)
    kept = bank.RETAINED**misses
    return kept * state["cell"]["value"] + bank.RETAINED * (1 - kept) / bank.EPSILONS


class Precise:
    """Every detector of one stream against the law, in 40 digits, from a given state on."""

    def __init__(self, state: Any) -> None:
        mpf = np.vectorize(mpmath.mpf, otypes=[object])
        tolerance = np.array(LAW.tolerances())[VIEW_OF_CELL]
        self.u = mpf(bank.LAW * (1 + tolerance))
        self.eps = mpf(bank.EPSILONS)
        self.weights = mpf(bank.CELL_WEIGHTS[:, None] * bank.EPSILON_SHARES)
        misses = (state["clock"][VIEW_OF_CELL] - state["cell"]["hit"]).tolist()
        kept = np.array([[(1 - e) ** m for e in self.eps] for m in misses])
        self.value = kept * mpf(state["cell"]["value"]) + (1 - self.eps) * (1 - kept) / self.eps
        self.keep, self.gain = mpmath.mpf(bank.CUSUM_RETAINED), mpmath.mpf(bank.CUSUM_GAIN)
        fallen = np.array([self.keep**m for m in misses])
        self.cusum = _log(mpf(state["cell"]["ratio"]) * fallen)
        self.shape = mpf(state["shape"])
        self.shape_cusum = _log(mpf(state["shape_ratio"]))
        # q / min(u, c q), with q and c as stored
        law = mpf(bank.LAW[WATCHED["lead_pair"]])
        invented = [(1 - e) * law + e / 90 for e in mpf(bank.INVENTED)]
        waves = law * (1 + mpf(bank.SHIFT_RHO)[:, None] * mpf(bank.SHIFT_WAVES))
        q = np.array([*invented, *waves]) / mpf(state["shape_norm"])[:, None]
        scale = mpf(state["shape_scale"])[:, None]
        self.dropped = ~np.isfinite(state["shape_scale"])
        self.ratio = q / np.minimum(self.u[WATCHED["lead_pair"]], scale * q)
        self.shape_weights = mpf(np.where(self.dropped, 0.0, bank.SHAPE_WEIGHTS))

    def add(self, amount: int) -> None:
        for view, cell in enumerate(cells_of(amount)):
            if cell < 0:
                continue
            mine = np.flatnonzero(view == VIEW_OF_CELL)
            hit = [cell, *(coarse_of(amount) if view == 1 else [])]
            bet = np.full(self.value.shape, mpmath.mpf(0))
            bet[hit] = self.eps / self.u[hit, None]
            self.value[mine] = (1 + self.value[mine]) * (1 - self.eps + bet[mine])
            step = np.full(len(self.u), mpmath.log(self.keep))
            for k in hit:
                step[k] = mpmath.log(self.keep + self.gain / self.u[k])
            self.cusum[mine] = np.maximum(self.cusum[mine] + step[mine], mpmath.mpf(0))
            if view == 1:
                pair = cell - WATCHED["lead_pair"].start
                self.shape = (1 + self.shape) * self.ratio[:, pair]
                logs = np.array([mpmath.log(r) for r in self.ratio[:, pair]])
                self.shape_cusum = np.maximum(self.shape_cusum + logs, mpmath.mpf(0))

    def total(self) -> Any:
        return (self.weights * self.value).sum() + (self.shape_weights * self.shape).sum()


def _log(ratios: Any) -> Any:
    """Return the CUSUMs of ratios, at least 0."""
    return np.array([mpmath.log(max(r, mpmath.mpf(1))) for r in ratios])


def _floats(values: Any) -> Any:
    return np.vectorize(float, otypes=[float])(values)


SIZES = {
    "one_batch": [240],
    "one_row_posts": [1] * 240,
    "odd_pieces": [1, 2, 3, 5, 8, 13, 21, 34, 55, 89, 9],
}


@pytest.mark.parametrize("name", list(SIZES))
def test_further_rows_agree_with_forty_digits(old: Folded, name: str) -> None:
    rng = np.random.default_rng(101)
    amounts = with_fraud(rng, 240, 120, 0.3)
    amounts[[5, 6, 200]] = [912_350, 5_012_350, 95_051]  # cells that were not hit for long
    folded, crossings = onward(old, records(amounts), SIZES[name])
    assert crossings == []
    with mpmath.workdps(40):
        precise = Precise(old.state[0])
        for amount in amounts.tolist():
            precise.add(amount)
        total = float(precise.total())
        by_view = [
            _floats((precise.weights * precise.value)[view == VIEW_OF_CELL].sum(axis=0))
            for view in range(3)
        ]
    state = folded.state[0]
    assert total > 1e9
    np.testing.assert_allclose(_cells_now(state), _floats(precise.value), rtol=1e-9)
    np.testing.assert_allclose(state["sums"], by_view, rtol=1e-9)
    counts = ~precise.dropped
    np.testing.assert_allclose(state["shape"][counts], _floats(precise.shape)[counts], rtol=1e-9)
    np.testing.assert_allclose(
        log_of(state["shape_ratio"])[counts],
        _floats(precise.shape_cusum)[counts],
        rtol=1e-9,
        atol=1e-9,
    )
    np.testing.assert_allclose(cusums(state), _floats(precise.cusum), rtol=1e-9, atol=1e-9)
    got = float(evidence_of(folded, POLICIES)[0])
    assert got == pytest.approx(math.log10(total), rel=1e-9)
    before = old.state[0]
    assert int(state["rows"]) == int(before["rows"]) + 240 > OLD
    added = np.zeros(len(VIEW_OF_CELL), int)
    for amount in amounts.tolist():
        for cell in (*cells_of(amount), *coarse_of(amount)):
            added[cell] += cell >= 0
    np.testing.assert_array_equal(state["cell"]["count"], before["cell"]["count"] + added)


def test_the_row_that_alarms_is_the_same_in_forty_digits(old: Folded) -> None:
    amounts = with_fraud(np.random.default_rng(102), 400, 200, 0.4)
    with mpmath.workdps(40):
        precise = Precise(old.state[0])
        row = int(old.state["rows"][0])
        for amount in amounts.tolist():
            precise.add(amount)
            row += 1
            if precise.total() >= 1e6:
                break
        total = float(precise.total())
    assert OLD + 3200 < row < OLD + 3300
    log = records(amounts, policy=2)
    for sizes in ([400], [1] * 400, [150, 100, 150]):
        _, crossings = onward(old, log, sizes)
        first = crossings[0]
        assert first.rows == row
        assert first.evidence == pytest.approx(math.log10(total), rel=1e-9)
        assert OLD + 3150 < first.findings[0].onset_row <= row
        assert "49" in {cell for finding in first.findings for cell in finding.cells}


def test_an_error_is_forgotten_and_never_grows(old: Folded) -> None:
    """Why nothing drifts: sums of cells decay between hits, and R <- (1 + R) L shrinks errors."""
    log = records(law_amounts(np.random.default_rng(103), 1500, 2, 6))
    right, _ = onward(old, log, [1500])
    wrong = copy.deepcopy(old)
    wrong.state["sums"] *= 1.001
    wrong.state["cell"]["value"] *= 1 + 1e-6
    wrong.state["shape"] *= 1 + 1e-6
    wrong, _ = onward(wrong, log, [1500])
    np.testing.assert_allclose(_cells_now(wrong.state[0]), _cells_now(right.state[0]), rtol=1e-6)
    np.testing.assert_allclose(wrong.state["shape"], right.state["shape"], rtol=1e-6)
    # The error of the sums is gone but for that of the values, which is theirs.
    by_cell = bank.CELL_WEIGHTS[:, None] * bank.EPSILON_SHARES * _cells_now(wrong.state[0])
    held = [by_cell[view == VIEW_OF_CELL].sum(axis=0) for view in range(3)]
    np.testing.assert_allclose(wrong.state["sums"][0], held, rtol=1e-12)


def test_the_running_sum_stays_that_of_the_cells_over_real_rows() -> None:
    """Two ways to the same number, 60 000 rows later: one adds row by row, one looks up cells."""
    amounts = law_amounts(np.random.default_rng(104), 60_000, 1.2, 7)
    folded, _ = onward(Folded.new(1), records(amounts), [1, 9999, 50_000])
    state = folded.state[0]
    cells = evidence_of_cells(state)
    by_view = np.bincount(VIEW_OF_CELL, cells)
    np.testing.assert_allclose(state["sums"].sum(axis=1), by_view, rtol=1e-12)
    whole, _ = onward(Folded.new(1), records(amounts), [60_000])
    np.testing.assert_allclose(whole.state["sums"], folded.state["sums"], rtol=1e-9)
    np.testing.assert_allclose(whole.state["circle"], folded.state["circle"], rtol=1e-9, atol=1e-9)


def test_sums_on_the_circle_and_of_logarithms(old: Folded) -> None:
    """2000 one-row posts on top of 10**8 rows, against exact sums of the same floats."""
    amounts = law_amounts(np.random.default_rng(105), 2000, 2, 6)
    folded, _ = onward(old, records(amounts), [1] * 2000)
    turns = 2 * np.pi * circle(amounts)
    logs = np.log10(amounts.astype(float))
    exact = [
        float(Fraction(start) + sum(map(Fraction, terms.tolist())))
        for start, terms in zip(
            old.state["circle"][0].tolist(),
            (np.cos(turns), np.sin(turns), np.cos(2 * turns), np.sin(2 * turns), logs, logs**2),
            strict=True,
        )
    ]
    got = folded.state["circle"][0]
    np.testing.assert_allclose(got, exact, rtol=1e-12)
    n = int(folded.state["rows"][0])
    assert float(spread(n, *got[4:])) == pytest.approx(float(spread(n, *exact[4:])), rel=1e-9)
    assert 0 < float(rayleigh(n, *got[:2]).p_value) <= 1


def _numbers(document: Any) -> list[float]:
    if isinstance(document, dict):
        return [number for value in document.values() for number in _numbers(value)]
    if isinstance(document, Sequence) and not isinstance(document, str):
        return [number for value in document for number in _numbers(value)]
    return [document] if isinstance(document, (int, float)) else []


def test_what_is_said_of_an_old_stream_is_finite_and_exact(old: Folded) -> None:
    stream, now = Stream("m", "sale", "EUR"), int(old.state["last_at"][0])
    in_force(old, POLICIES)
    said = detail(old, stream, POLICIES, now, category=None, all_measures=True)
    assert said["count"] == OLD + 3000
    assert said["score"] > 95
    assert said["p_value"] == 1
    entry = listed(old, [stream], POLICIES, now)[0]
    tables = [
        digits(old, POLICIES, view, span, now) for view in VIEWS for span in ("window", "lifetime")
    ]
    numbers = _numbers([said, entry, tables])
    assert len(numbers) > 2000
    assert all(math.isfinite(number) for number in numbers)
    lifetime = digits(old, POLICIES, "lead_digit", "lifetime", now)
    assert sum(cell["count"] for cell in lifetime["cells"]) == OLD + 3000
    for cell in lifetime["cells"]:
        assert cell["low"] < cell["share"] < cell["high"]
        assert cell["high"] - cell["low"] < 1e-3


def test_values_are_held_far_above_any_threshold_and_come_down_again() -> None:
    """4000 rows in one cell would reach 10**4000: no overflow, no NaN, no warning."""
    same = records(np.full(4000, 4900), policy=3)
    honest = records(law_amounts(np.random.default_rng(106), 60_000, 2, 6), policy=3)
    for sizes in ([4000], [1] * 300 + [3700]):
        high, crossings = onward(Folded.new(1), same, sizes)
        assert crossings == []
        for name in high.state.dtype.names or ():
            if high.state[name].dtype.kind == "f" and name != "shape_scale":
                assert np.all(np.isfinite(high.state[name])), name
        assert 90 < float(evidence_of(high, POLICIES)[0]) < 110
    low, _ = onward(high, honest, [60_000])
    assert float(evidence_of(low, POLICIES)[0]) < 6


POSTED = {
    1: Policy(baseline_size=300, baseline_days=0.1, transactions_per_false_alarm=1e4),
    2: Policy(
        version=2,
        reference="own",
        baseline_size=250,
        baseline_days=0.1,
        transactions_per_false_alarm=1e4,
        limits=(Limit("EUR", 500_000, 0.1),),
    ),
    3: Policy(version=3, reference="law", transactions_per_false_alarm=1e4),
}


def test_one_row_posts_and_a_large_batch_agree() -> None:
    """Three streams under three policies, learning, deciding and alarming on the way."""
    rng = np.random.default_rng(107)
    shop = rng.choice([199, 299, 499, 999, 1499, 2499, 4999, 9999], 700)
    shop[rng.random(700) < 0.1] = 123_456
    logs = [
        records(with_fraud(rng, 700, 500, 0.4), policy=1),
        records(np.where(np.arange(700) < 450, shop, with_fraud(rng, 700, 0, 0.5)), policy=2),
        records(with_fraud(rng, 700, 350, 0.3), policy=3),
    ]
    kinds, names = [Kind("sale", "EUR")] * 3, [b"a", b"b", b"c"]
    whole, pieces = Folded.new(3), Folded.new(3)
    expected = fold(whole, np.concatenate(logs), np.repeat([0, 1, 2], 700), POSTED, kinds, names)
    crossings = []
    for i in range(700):
        rows = np.array([log[i] for log in logs])
        crossings += fold(pieces, rows, np.arange(3), POSTED, kinds, names)
    crossings.sort(key=lambda crossing: (crossing.slot, crossing.record))
    assert {crossing.slot for crossing in expected} == {0, 1, 2}
    assert [(c.slot, c.record, c.alarm, c.ordinal) for c in crossings] == [
        (c.slot, c.record, c.alarm, c.ordinal) for c in expected
    ]
    for mine, other in zip(crossings, expected, strict=True):
        assert mine.evidence == pytest.approx(other.evidence, rel=1e-9)
        assert mine.severity == pytest.approx(other.severity, rel=1e-9)
    for name in whole.state.dtype.names or ():
        mine, other = pieces.state[name], whole.state[name]
        if mine.dtype.kind == "f":
            np.testing.assert_allclose(mine, other, rtol=1e-9, atol=1e-9, err_msg=name)
        else:
            np.testing.assert_array_equal(mine, other, err_msg=name)
