"""The fold agrees with a plain loop over rows, however the log is cut."""

from __future__ import annotations

import numpy as np
import pytest

from service.detection import bank
from service.detection.cells import VIEW_OF_CELL
from service.detection.policy import Limit, Policy
from service.streams.findings import cusums, evidence_of_cells
from service.streams.fold import Crossing, fold
from service.streams.folded import Folded
from service.streams.pages import WINDOW_PLACES
from service.streams.record import HISTORIC, RECORD
from service.streams.rules import Kind
from service.streams.snapshots import read_snapshots, tidy, write_snapshots
from service.streams.state import BY_LAW, BY_OWN, UNDECIDED
from tests.streams.plain import PlainStream

START = 1_790_000_000_000  # ms since 1970 UTC, September 2026
LAW = Policy(reference="law", transactions_per_false_alarm=1e6)


def records(amounts, *, at=None, arrived=None, policy=1, flags=0):
    amounts = np.asarray(amounts, np.int64)
    out = np.zeros(len(amounts), RECORD)
    at = START + 60_000 * np.arange(len(amounts)) if at is None else np.asarray(at)
    arrived = at if arrived is None else np.asarray(arrived)
    out["amount"] = amounts
    out["at_s"], out["at_ms"] = at // 1000, at % 1000
    out["arrived_s"], out["arrived_ms"] = arrived // 1000, arrived % 1000
    out["policy"] = policy
    out["flags"] = flags
    return out


def run(logs, policies, *, cuts=None, snapshots=False) -> tuple[Folded, list[Crossing]]:
    """Fold one log per stream, whole or in pieces; optionally through snapshots in between."""
    folded = Folded.new(len(logs))
    names = [f"t/m{i}".encode() for i in range(len(logs))]
    kinds = [Kind("sale", "EUR")] * len(logs)
    crossings = []
    edges = [[0, *c, len(log)] for c, log in zip(cuts or [[]] * len(logs), logs, strict=True)]
    for k in range(max(map(len, edges)) - 1):
        parts = [
            log[e[k] : e[k + 1]] if k + 1 < len(e) else log[:0]
            for e, log in zip(edges, logs, strict=True)
        ]
        slot = np.repeat(np.arange(len(logs)), [len(p) for p in parts])
        crossings += fold(folded, np.concatenate(parts), slot, policies, kinds, names)
        if snapshots:
            blobs = write_snapshots(folded, range(len(logs)))
            folded = Folded.new(len(logs))
            read_snapshots(folded, range(len(logs)), blobs)
    return folded, sorted(crossings, key=lambda c: (c.slot, c.record))


def assert_same(mine, other) -> None:
    """Compare structured arrays field by field, floats to 1e-9."""
    for name in other.dtype.names:
        if other[name].dtype.names:
            assert_same(mine[name], other[name])
        elif other[name].dtype.kind == "f":
            np.testing.assert_allclose(mine[name], other[name], rtol=1e-9, atol=1e-9, err_msg=name)
        else:
            np.testing.assert_array_equal(mine[name], other[name], err_msg=name)


def law_amounts(rng, n, low=1.5, high=6.5):
    return np.maximum(1, 10 ** rng.uniform(low, high, n)).astype(np.int64)


def with_fraud(rng, n, change, share):
    amounts = law_amounts(rng, n)
    bad = (np.arange(n) >= change) & (rng.random(n) < share)
    amounts[bad] = rng.integers(490_000, 500_000, bad.sum())
    return amounts


def test_every_value_and_alarm_equals_the_plain_loop() -> None:
    rng = np.random.default_rng(1)
    logs = [
        with_fraud(rng, 900, 500, 0.4),
        law_amounts(rng, 1300),
        rng.integers(1, 100, 300),  # too small for a tail pair, some without a lead pair
        np.full(60, 4900),
        with_fraud(rng, 5, 0, 1.0),
    ]
    folded, crossings = run([records(a) for a in logs], {1: LAW})
    bounds = bank.LAW * (1 + np.array(LAW.tolerances())[VIEW_OF_CELL])
    assert len(crossings) > 20
    for s, amounts in enumerate(logs):
        plain = PlainStream(bounds, bank.LAW[9:99], 1e6)
        for amount in amounts.tolist():
            plain.add(amount)
        state = folded.state[s]
        mine = [c for c in crossings if c.slot == s]
        assert [c.rows for c in mine] == [row for row, _ in plain.crossings]
        np.testing.assert_allclose(
            [c.evidence for c in mine], np.log10([t for _, t in plain.crossings]), rtol=1e-9
        )
        np.testing.assert_array_equal(state["cell"]["count"], plain.count)
        np.testing.assert_allclose(
            evidence_of_cells(state),
            (bank.CELL_WEIGHTS[:, None] * bank.EPSILON_SHARES * plain.value).sum(axis=1),
            rtol=1e-9,
        )
        np.testing.assert_allclose(
            state["shape"][plain.shape_on], plain.shape[plain.shape_on], rtol=1e-7
        )
        by_view = [
            (bank.CELL_WEIGHTS[:, None] * plain.value)[v == VIEW_OF_CELL].sum(axis=0)
            * bank.EPSILON_SHARES
            for v in range(3)
        ]
        np.testing.assert_allclose(state["sums"], by_view, rtol=1e-9, atol=1e-300)
        np.testing.assert_allclose(cusums(state), plain.cusum, atol=1e-9)
        running = plain.cusum > 0
        np.testing.assert_array_equal(state["cell"]["onset"][running], plain.onset[running])


@pytest.mark.parametrize("seed", range(8))
def test_cuts_and_snapshots_change_nothing(seed: int) -> None:
    rng = np.random.default_rng(seed)
    policies = {
        1: Policy(baseline_size=400, baseline_days=1.0),
        2: LAW,
        3: Policy(
            baseline_size=300,
            baseline_days=0,
            tolerance=0.2,
            version=3,
            limits=(Limit("EUR", 500_000), Limit("EUR", 10_000, 0.2), Limit("USD", 1000)),
        ),
    }
    shop = rng.choice([199, 299, 499, 999, 1499, 2499, 4999, 9999], 2500)
    lengths = (2500, 2000, 700, 40)
    logs = [
        records(np.where(rng.random(2500) < 0.03, 0, shop), policy=1),
        records(with_fraud(rng, 2000, 1200, 0.3), policy=np.repeat([1, 3, 2], (1500, 300, 200))),
        records(with_fraud(rng, 700, 0, 0.5), policy=np.repeat([2, 1], (600, 100))),
        records(np.full(40, 123_400), policy=2),
    ]
    for log in logs:  # arrival out of step with event time, some rows late
        shift = rng.choice([0, 1, 40], len(log), p=[0.6, 0.3, 0.1]) * 6 * 3600
        log["arrived_s"] += shift.astype(np.uint32)
    whole, expected = run(logs, policies)
    assert expected
    cuts = [sorted(rng.integers(0, n + 1, rng.integers(1, 60)).tolist()) for n in lengths]
    pieces, crossings = run(logs, policies, cuts=cuts, snapshots=True)
    assert [(c.slot, c.record, c.alarm, c.ordinal, c.rows, c.historic) for c in crossings] == [
        (c.slot, c.record, c.alarm, c.ordinal, c.rows, c.historic) for c in expected
    ]
    for mine, other in zip(crossings, expected, strict=True):
        assert mine.evidence == pytest.approx(other.evidence, rel=1e-9)
        assert [f.cells for f in mine.findings] == [f.cells for f in other.findings]
        assert [f.onset_row for f in mine.findings] == [f.onset_row for f in other.findings]
    for folded in (whole, pieces):
        tidy(folded, range(len(logs)))
    assert_same(pieces.state, whole.state)
    for s in range(len(logs)):
        np.testing.assert_array_equal(pieces.pages.of(s), whole.pages.of(s))


def test_zero_is_counted_in_zero_and_in_nothing_else() -> None:
    rng = np.random.default_rng(3)
    amounts = law_amounts(rng, 500)
    with_zeros = np.insert(amounts, [0, 10, 10, 499, 500], 0)
    plain, _ = run([records(amounts, at=np.full(500, START))], {1: LAW})
    other, _ = run([records(with_zeros, at=np.full(505, START))], {1: LAW})
    assert other.state["zero"][0] == 5
    assert other.state["records"][0] == 505
    for name in whole_names(plain):
        np.testing.assert_array_equal(other.state[name], plain.state[name], err_msg=name)


def whole_names(folded: Folded) -> list[str]:
    return [n for n in folded.state.dtype.names or () if n not in ("zero", "records")]


def test_late_rows_count_for_lifetime_and_detectors_but_not_for_the_window() -> None:
    day = 86_400_000
    amounts = [1234, 1234, 1234]
    at = np.array([START - 8 * day, START - 6 * day, START])
    folded, _ = run([records(amounts, at=at, arrived=np.full(3, START))], {1: LAW})
    assert folded.state["late"][0] == 1
    assert folded.state["rows"][0] == 3
    assert folded.state["cell"]["count"][0, 0] == 3
    assert folded.pages.of(0)[:WINDOW_PLACES, 0].sum() == 2


def test_a_law_like_merchant_is_accepted_and_a_price_point_shop_is_not() -> None:
    rng = np.random.default_rng(4)
    n = 3000
    at = START + np.linspace(0, 20 * 86_400_000, n).astype(np.int64)
    shop = rng.choice([199, 299, 499, 999, 1499, 2499, 4999, 9999], n)
    folded, crossings = run(
        [records(law_amounts(rng, n, 2, 6), at=at), records(shop, at=at)], {1: Policy()}
    )
    assert crossings == []
    np.testing.assert_array_equal(folded.state["reference"][0], BY_LAW)
    np.testing.assert_array_equal(folded.state["reference"][1], BY_OWN)


def test_endings_that_a_baseline_never_saw_are_not_taken_to_be_even() -> None:
    rng = np.random.default_rng(8)
    n = 2600
    at = START + np.linspace(0, 40 * 86_400_000, n).astype(np.int64)
    amounts = np.where(np.arange(n) < 1600, rng.integers(100, 1000, n), 1299)
    folded, _ = run([records(amounts, at=at)], {1: Policy()})
    np.testing.assert_array_equal(folded.state["reference"][0, 2], BY_OWN)
    only_tail = Policy(views=("tail_pair",))
    assert run([records(amounts, at=at)], {1: only_tail})[1] == []


def test_a_baseline_needs_both_its_rows_and_its_days() -> None:
    rng = np.random.default_rng(5)
    day = 86_400_000
    few_days = START + np.linspace(0, 10 * day, 2000).astype(np.int64)
    few_rows = START + np.linspace(0, 30 * day, 900).astype(np.int64)
    both = START + np.linspace(0, 15 * day, 1100).astype(np.int64)
    folded, _ = run(
        [records(law_amounts(rng, len(at), 2, 6), at=at) for at in (few_days, few_rows, both)],
        {1: Policy()},
    )
    learning = (folded.state["reference"] == UNDECIDED).any(axis=1)
    np.testing.assert_array_equal(learning, [True, True, False])


def test_a_cheat_against_the_own_baseline_is_found() -> None:
    rng = np.random.default_rng(6)
    n = 4000
    at = START + np.linspace(0, 40 * 86_400_000, n).astype(np.int64)
    shop = rng.choice([199, 299, 499, 999, 1499, 2499, 4999, 9999], n)
    shop[(np.arange(n) > 3000) & (rng.random(n) < 0.2)] = 4900
    folded, crossings = run([records(shop, at=at)], {1: Policy()})
    first = crossings[0]
    assert 3000 < first.rows < 3200
    assert 2950 < first.findings[0].onset_row <= first.rows
    assert "00" in {c for f in first.findings for c in f.cells}
    assert {f.reference for f in first.findings} == {"own"}
    assert first.evidence >= 6
    assert folded.state["alarm"][0]


def test_history_marks_its_alarms() -> None:
    logs = [records(np.full(50, 4900), flags=HISTORIC)]
    _, crossings = run(logs, {1: LAW})
    assert crossings
    assert all(c.historic for c in crossings)
    assert [c.ordinal for c in crossings] == list(range(len(crossings)))
    assert len({c.alarm for c in crossings}) == 1


def test_an_alarm_that_crosses_often_rests_but_counts_on() -> None:
    n = 5000
    log = records(np.full(n, 4900))
    folded, crossings = run([log], {1: LAW})
    assert len(crossings) == 16 + (n - crossings[15].rows) // 128
    assert crossings[-1].excess == pytest.approx(crossings[-1].rows, rel=0.02)
    assert crossings[-1].excess_amount == pytest.approx(4900 * crossings[-1].rows, rel=0.02)
    assert crossings[-1].last_hit_at == crossings[-1].at
    pieces, same = run([log], {1: LAW}, cuts=[list(range(7, n, 113))], snapshots=True)
    assert [(c.rows, c.ordinal) for c in same] == [(c.rows, c.ordinal) for c in crossings]
    assert pieces.state["alarm_hits"][0] == folded.state["alarm_hits"][0] == n


def test_the_first_live_crossing_of_an_old_alarm_says_so() -> None:
    flags = np.repeat([HISTORIC, 0], (20, 20))
    _, crossings = run([records(np.full(40, 4900), flags=flags)], {1: LAW})
    assert [c.live for c in crossings].count(True) == 1
    first = next(c for c in crossings if c.live)
    assert first.ordinal > 0
    assert 20 < first.rows <= 25
    _, crossings = run([records(np.full(300, 4900), flags=np.repeat([HISTORIC, 0], 150))], {1: LAW})
    first = next(c for c in crossings if c.live)
    assert first.ordinal >= 16  # it rested
    assert 150 < first.rows <= 155


def test_amounts_just_below_a_review_limit_are_a_cell_of_their_own() -> None:
    # 9 000.00 to 9 999.99, spread over many pairs and endings, in a merchant of large amounts
    rng = np.random.default_rng(9)
    n, change = 3500, 2500
    at = START + np.arange(n) * 15 * 60_000
    amounts = (10 ** rng.normal(5.6, 0.35, n)).astype(np.int64)
    below = (np.arange(n) >= change) & (rng.random(n) < 0.2)
    amounts[below] = rng.integers(900_000, 1_000_000, below.sum())
    limited = Policy(reference="own", limits=(Limit("EUR", 1_000_000), Limit("USD", 5)))
    folded, crossings = run([records(amounts, at=at)], {1: limited})
    state = folded.state[0]
    learned = int(state["limit_rows"])
    inside = (amounts[:learned] >= 900_000) & (amounts[:learned] < 1_000_000)
    assert state["limit_base"].tolist() == [inside.sum(), 0, 0, 0]
    assert state["joint_bound"][3] > inside.mean()
    first = crossings[0]
    assert change < first.rows < change + 120
    found = {f.view: f for f in first.findings}["limit"]
    assert (found.cells, found.low, found.high) == (("1000000",), 900_000, 1_000_000)
    since = amounts[found.onset_row - 1 : first.rows]
    assert found.observed == pytest.approx(
        ((since >= 900_000) & (since < 1_000_000)).mean(), abs=1e-12
    )
    without = run([records(amounts, at=at)], {1: Policy(reference="own")})[1]
    assert all(f.view != "limit" for c in without for f in c.findings)
    assert not without or without[0].rows > first.rows


def test_fixed_amounts_that_come_again_and_again_are_found_sooner() -> None:
    rng = np.random.default_rng(14)
    n, change = 3000, 2000
    at = START + np.arange(n) * 15 * 60_000
    amounts = law_amounts(rng, n, 3, 7)
    bad = (np.arange(n) >= change) & (rng.random(n) < 0.3)
    amounts[bad] = rng.choice([3720, 5860], bad.sum())
    folded, crossings = run([records(amounts, at=at)], {1: Policy()})
    state = folded.state[0]
    learned = int(state["base_rows"])
    before = [a in amounts[max(i - 64, 0) : i] for i, a in enumerate(amounts[:learned])]
    assert state["repeat_share"] == pytest.approx(np.mean(before))
    assert np.mean(before) < state["joint_bound"][2] < 0.2
    np.testing.assert_array_equal(state["recent"], [amounts[i : i + 64][0] for i in ring_order(n)])
    first = crossings[0]
    assert change < first.rows < change + 60
    found = {f.view: f for f in first.findings}["repeat"]
    assert set(found.cells[:2]) == {"3720", "5860"}
    since = range(found.onset_row - 1, first.rows)
    again = [amounts[i] in amounts[i - 64 : i] for i in since]
    assert found.observed == pytest.approx(np.mean(again), abs=1e-12)


def ring_order(rows: int) -> list[int]:
    """Row (from 0) of each place of a ring that the last 64 of so many rows went into."""
    return [rows - 1 - (rows - 1 - place) % 64 for place in range(64)]


def test_new_limits_are_learned_anew() -> None:
    rng = np.random.default_rng(10)
    n = 2500
    at = START + np.arange(n) * 30 * 60_000
    versions = np.repeat([1, 2], (1200, 1300))
    policies = {
        1: Policy(limits=(Limit("EUR", 1_000_000),)),
        2: Policy(version=2, limits=(Limit("EUR", 2_000_000),)),
    }
    folded, _ = run([records(law_amounts(rng, n, 4, 8), at=at, policy=versions)], policies)
    state = folded.state[0]
    assert state["limit_rows"] == 1000
    assert 0 < state["joint_bound"][3] < 1
    np.testing.assert_array_equal(state["joint_bound"][4:], 1)  # no limits there
    halfway, _ = run(
        [records(law_amounts(rng, 2000, 4, 8), at=at[:2000], policy=versions[:2000])], policies
    )
    assert halfway.state["joint_bound"][0, 3] == 0
    assert halfway.state["limit_rows"][0] == 800


def test_limits_that_a_policy_dropped_leave_nothing_behind_wherever_the_log_is_cut() -> None:
    rng = np.random.default_rng(15)
    n, change = 1500, 200
    policies = {
        1: Policy(baseline_days=0, limits=(Limit("EUR", 1_000_000), Limit("EUR", 2_000_000))),
        2: Policy(version=2, baseline_days=0, limits=(Limit("EUR", 1_000_000),)),
    }
    versions = np.repeat([1, 2], (change, n - change))
    log = records(law_amounts(rng, n, 4, 8), policy=versions)
    whole, _ = run([log], policies)
    pieces, _ = run([log], policies, cuts=[[change, change + 50]])
    np.testing.assert_array_equal(whole.state["limit_base"], pieces.state["limit_base"])
    np.testing.assert_array_equal(whole.state["joint_bound"], pieces.state["joint_bound"])
    assert whole.state["limit_base"][0, 1] == 0
    assert whole.state["joint_bound"][0, 4] == 1


def test_quiet_flows_are_tallied_but_raise_nothing() -> None:
    folded = Folded.new(1)
    log = records(np.full(500, 4900))
    slot = np.zeros(500, np.int64)
    assert fold(folded, log, slot, {1: LAW}, [Kind("chargeback", "EUR")], [b"x"]) == []
    assert folded.state["rows"][0] == 500
    assert folded.state["crossed_row"][0] > 0
    assert not folded.state["alarm_crossings"][0]


def test_enormous_values_stay_finite_and_above_every_threshold() -> None:
    never = Policy(reference="law", transactions_per_false_alarm=1e12)
    folded, crossings = run([records(np.full(400, 4900))], {1: never})
    assert crossings
    folded, crossings = run([records(np.full(9000, 4900))], {1: Policy(baseline_days=1000)})
    state = folded.state[0]  # it learns for ever, and its views are silenced one by one
    assert crossings == []
    assert state["cell"]["value"].max() > 1e90
    for values in (state["sums"], state["shape"], state["shape_ratio"], state["cell"]["ratio"]):
        assert np.all(np.isfinite(values))
