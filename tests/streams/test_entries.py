"""Entries agree with plain calculations, one stream at a time or many at once."""

from __future__ import annotations

import json
import math
from datetime import UTC, datetime

import numpy as np
import pytest

from service.detection import bank
from service.detection.cells import VIEW_OF_CELL
from service.detection.policy import Policy
from service.streams.findings import evidence_of_cells
from service.streams.fit import excess_of_learned, window_counts
from service.streams.folded import Folded
from service.streams.record import HISTORIC, Stream
from service.streams.state import BY_OWN
from tests.streams.listed import evidence_of, listed
from tests.streams.test_fold import LAW, START, law_amounts, records, run, with_fraud

DAY = 86_400_000
FIRST = np.zeros(1, np.int64)
SHOP = [199, 299, 499, 999, 1499, 2499, 4999, 9999]
AUTO = Policy()


def spread(n: int, days: float) -> np.ndarray:
    return START + np.linspace(0, days * DAY, n).astype(np.int64)


def streams(n: int) -> list[Stream]:
    return [Stream(f"m{i}", "sale", "EUR") for i in range(n)]


def one(log, policy: Policy = LAW, now: int = START) -> dict:
    folded, _ = run([log], {1: policy})
    return listed(folded, streams(1), {1: policy}, now)[0]


@pytest.fixture(scope="module")
def town() -> tuple[Folded, dict[int, Policy], int]:
    """Streams of every kind: no rows, only zeros, one size, tiny, law-like, shop, cheat."""
    rng = np.random.default_rng(11)
    policies = {
        1: AUTO,
        2: LAW,
        3: Policy(baseline_size=300, baseline_days=1, views=("tail_pair",)),
    }
    at = spread(2400, 30)
    logs = [
        records([]),
        records(np.zeros(20)),
        records(np.full(300, 4900), policy=2),
        records(rng.integers(1, 10, 500), policy=1),
        records(law_amounts(rng, 2400, 2, 6), at=at),
        records(rng.choice(SHOP, 2400), at=at),
        records(with_fraud(rng, 2400, 1500, 0.3), at=at, policy=2),
        records(rng.choice(SHOP, 2400), at=at, policy=3),
    ]
    folded, _ = run(logs, policies)
    return folded, policies, int(at[-1]) + 1


def test_many_at_once_are_the_same_as_one_at_a_time(town) -> None:
    folded, policies, now = town
    names = streams(len(folded.state))
    together = listed(folded, names, policies, now)
    apart = [listed(folded.only([i]), [names[i]], policies, now)[0] for i in range(len(names))]
    assert together == apart
    json.dumps(together, allow_nan=False)
    assert {e["standing"] for e in together} == {"learning", "steady", "alarmed"}
    assert {e["score_span"] for e in together} == {"window", "lifetime"}


def plain_law_misfit(counts: list[int]) -> tuple[float, float, float]:
    """Misfit and score's ends from the formulas of the design, digit by digit."""
    n = sum(counts)
    law = [math.log10(1 + 1 / d) for d in range(1, 10)]
    raw = sum(abs(c / n - p) for c, p in zip(counts, law, strict=True)) / 9
    noise = sum(math.sqrt(2 * p * (1 - p) / math.pi) for p in law) / 9
    x = math.sqrt(max(0.0, raw**2 - noise**2 / n))
    return 4.5 * x, 100 * max(0.0, 1 - x / 0.030), raw


def test_score_and_misfit_follow_the_formula_over_the_window() -> None:
    rng = np.random.default_rng(12)
    amounts = law_amounts(rng, 3000)
    amounts[rng.random(3000) < 0.12] = 1234
    at = spread(3000, 20)
    now = int(at[-1])
    entry = one(records(amounts, at=at), now=now)
    recent = amounts[at // (6 * 3_600_000) >= (now - 7 * DAY) // (6 * 3_600_000)]
    counts = [sum(str(a).startswith(str(d)) for a in recent.tolist()) for d in range(1, 10)]
    misfit, score, _ = plain_law_misfit(counts)
    assert entry["score_span"] == "window"
    assert entry["window_count"] == sum(counts) > 1000
    assert entry["misfit"] == entry["law_misfit"] == pytest.approx(misfit, abs=1e-6)
    assert 0.02 < misfit < 0.2
    assert entry["score"] == pytest.approx(score, abs=0.05)
    assert entry["score_low"] < entry["score"] < entry["score_high"]


def test_lifetime_is_scored_while_the_window_holds_too_few() -> None:
    rng = np.random.default_rng(13)
    amounts = law_amounts(rng, 400)
    at = np.concatenate([spread(250, 1), START + 60 * DAY + np.arange(150)])
    now = START + 60 * DAY + 1000
    entry = one(records(amounts, at=at), now=now)
    assert (entry["count"], entry["window_count"]) == (400, 150)
    assert entry["score_span"] == "lifetime"
    counts = [sum(str(a).startswith(str(d)) for a in amounts.tolist()) for d in range(1, 10)]
    assert entry["misfit"] == pytest.approx(plain_law_misfit(counts)[0], abs=1e-6)
    assert entry["score"] is not None
    low = Policy(reference="law", minimum_count=150)
    assert one(records(amounts, at=at), low, now)["score_span"] == "window"


def test_no_score_below_the_minimum_count_of_the_policy() -> None:
    amounts = law_amounts(np.random.default_rng(14), 199)
    entry = one(records(amounts))
    assert entry["score"] is entry["score_low"] is entry["score_high"] is None
    assert entry["score_span"] == "lifetime"
    assert entry["misfit"] is not None
    assert one(records(amounts), Policy(reference="law", minimum_count=199))["score"] is not None


def test_nothing_and_only_zeros() -> None:
    for log, zero in ((records([]), 0), (records([0, 0, 0]), 3)):
        entry = one(log)
        assert (entry["count"], entry["zero"], entry["window_count"]) == (0, zero, 0)
        assert entry["misfit"] is entry["law_misfit"] is entry["score"] is None
        assert entry["evidence"] == 0
        assert entry["open_alarm"] is None
        assert (entry["updated"] is None) == (zero == 0)
    assert listed(Folded.new(0), [], {}, START) == []


def test_the_window_forgets_by_itself_and_keeps_every_row_of_seven_days() -> None:
    at = START - np.array([0, 3, 6, 6.99]) * DAY
    folded, _ = run([records(np.full(4, 77), at=np.sort(at.astype(np.int64)))], {1: LAW})
    cells = slice(0, 9)
    assert window_counts(folded, FIRST, cells, START).tolist() == [[0, 0, 0, 0, 0, 0, 4, 0, 0]]
    assert window_counts(folded, FIRST, cells, START + 2 * DAY).sum() == 2
    assert window_counts(folded, FIRST, cells, START + 8 * DAY).sum() == 0


def test_baseline_blocks_are_not_the_window() -> None:
    n = 100
    folded, _ = run([records(np.full(n, 1234), at=spread(n, 1))], {1: AUTO})
    assert folded.pages.of(0)[:, 0].sum() == 4 * n
    for cells in (slice(0, 9), slice(9, 99), slice(99, 199)):
        assert window_counts(folded, FIRST, cells, START + DAY).sum() == n


def test_evidence_is_the_weighted_sum_of_what_is_in_force(town) -> None:
    folded, policies, now = town
    state = folded.state
    got = [e["evidence"] for e in listed(folded, streams(len(state)), policies, now)]
    for s in range(len(state)):
        policy = policies.get(int(state["policy"][s]), AUTO)
        counts = np.array([v in policy.views for v in ("lead_digit", "lead_pair", "tail_pair")])
        counts &= ~((state["reference"][s] == 0) & ((state["refuted"][s] & 4) > 0))
        total = (evidence_of_cells(state[s]) * counts[VIEW_OF_CELL]).sum()
        if counts[1]:
            on = np.isfinite(state["shape_scale"][s])
            total += (state["shape"][s] * bank.SHAPE_WEIGHTS)[on].sum()
        for place, view in enumerate((1, 2)):
            own = state["reference"][s, view] == BY_OWN
            if counts[view] and own and 0 < state["joint_bound"][s, place] < 0.5:
                total += 0.015 * state["joint_value"][s, place].mean()
        # a resting alarm's values reach the ceiling, where they are held apart from each other
        expected = min(math.log10(max(1.0, total)), 90)
        assert min(got[s], 90) == pytest.approx(expected, abs=0.0051)
    assert max(got) > 1


def test_evidence_is_that_of_the_crossing_just_before_it() -> None:
    rng = np.random.default_rng(15)
    log = records(with_fraud(rng, 1000, 600, 0.3))
    _, crossings = run([log], {1: LAW})
    folded, none = run([log[: crossings[0].record]], {1: LAW})
    assert not none
    before = float(evidence_of(folded, {1: LAW})[0])
    assert 4 < before < 6 <= crossings[0].evidence
    after, _ = run([log[: crossings[0].record + 1]], {1: LAW})
    entry = listed(after, streams(1), {1: LAW}, START)[0]
    assert entry["evidence"] == 0
    assert entry["standing"] == "alarmed"
    assert entry["open_alarm"] == crossings[0].alarm.hex()


def test_an_alarm_id_that_ends_in_zero_bytes_stays_whole() -> None:
    folded = Folded.new(1)
    folded.state["alarm"][0] = b"\x01" * 14 + b"\0\0"
    entry = listed(folded, streams(1), {}, START)[0]
    assert entry["open_alarm"] == "01" * 14 + "0000"


def test_updated_is_the_last_arrival_in_utc() -> None:
    entry = one(records([5, 6], at=[START, START + 1], arrived=[START + 5, START + 1234]))
    then = datetime.fromisoformat(entry["updated"])
    assert then == datetime.fromtimestamp((START + 1234) / 1000, tz=UTC)
    assert entry["updated"].endswith("Z")


def test_a_missing_policy_version_is_an_error() -> None:
    folded, _ = run([records([5, 6])], {1: LAW})
    folded.rules["version"] = 0  # as of a stream just read
    with pytest.raises(KeyError):
        listed(folded, streams(1), {2: LAW}, START)


def test_a_shop_is_near_its_own_baseline_and_far_from_the_law(town) -> None:
    folded, policies, now = town
    assert folded.state["reference"][5, 0] == BY_OWN
    entry = listed(folded, streams(8), policies, now)[5]
    assert entry["misfit"] < 0.05
    assert entry["law_misfit"] > 0.3
    assert entry["score"] > 60


def test_a_learned_reference_is_compared_as_two_samples() -> None:
    counts, base = [30, 50, 20], [250, 450, 300]
    n, m = 100, 1000
    q, p = [c / n for c in counts], [b / m for b in base]
    raw = sum(abs(a - b) for a, b in zip(q, p, strict=True)) / 3
    c = sum(math.sqrt(2 * b * (1 - b) / math.pi) for b in p) / 3
    got = excess_of_learned(counts, base, False)
    assert float(got.value) == pytest.approx(math.sqrt(raw**2 - c**2 * (1 / n + 1 / m)))
    nested = excess_of_learned([250 + 30, 450 + 50, 300 + 20], base, True)
    raw = sum(abs((b + c) / 1100 - b / m) for b, c in zip(base, counts, strict=True)) / 3
    expected = max(raw**2 - c**2 * (1 / m - 1 / 1100), 0)
    assert float(nested.value) == pytest.approx(math.sqrt(expected))
    assert float(excess_of_learned(base, base, True).value) == 0
    assert np.isnan(excess_of_learned([0, 0, 0], base, False).value)
    assert np.isnan(excess_of_learned(counts, [0, 0, 0], False).high)


@pytest.mark.parametrize("moved", [0.0, 0.1, 0.3])
def test_the_interval_allows_for_the_error_of_the_baseline(moved: float) -> None:
    rng = np.random.default_rng(16)
    p = bank.LAW[:9]
    q = (1 - moved) * p + moved * np.eye(9)[5]
    true = np.abs(q - p).mean()
    base = rng.multinomial(400, p, 2000)
    got = excess_of_learned(rng.multinomial(600, q, 2000), base, np.zeros(2000, bool))
    covered = (got.low <= true) & (true <= got.high)
    assert covered.mean() > 0.95
    assert np.all((got.low <= got.value) & (got.value <= got.high))
    if moved == 0.3:
        assert got.value.mean() == pytest.approx(true, rel=0.02)
        assert (got.low > 0).mean() > 0.99
    ignored = excess_of_learned(rng.multinomial(600, q, 2000), base * 10**9, np.zeros(2000, bool))
    assert np.all((ignored.high - ignored.low).mean() < (got.high - got.low).mean())


def test_history_counts_as_any_row() -> None:
    amounts = law_amounts(np.random.default_rng(17), 300)
    assert one(records(amounts, flags=HISTORIC)) == one(records(amounts))


def test_a_view_that_crossed_while_learning_no_longer_counts() -> None:
    log = records(np.full(20, 4900))
    folded, crossings = run([log], {1: AUTO})
    assert not crossings
    state = folded.state[0]
    crossed = (state["refuted"] & 4) > 0
    assert crossed.any()
    everything = math.log10(
        (evidence_of_cells(state)).sum() + (state["shape"] * bank.SHAPE_WEIGHTS).sum()
    )
    assert everything > 2
    kept = ~crossed
    counted = (evidence_of_cells(state) * kept[VIEW_OF_CELL]).sum()
    if kept[1]:
        on = np.isfinite(state["shape_scale"])
        counted += (state["shape"] * bank.SHAPE_WEIGHTS)[on].sum()
    got = float(evidence_of(folded, {1: AUTO})[0])
    assert got == pytest.approx(math.log10(max(1.0, counted)))
    assert got < everything - 0.3
