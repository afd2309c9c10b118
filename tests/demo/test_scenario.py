"""The invented town is what it claims to be: repeatable, plausible, honest but for three."""

from __future__ import annotations

from collections import defaultdict
from datetime import UTC, datetime, timedelta, timezone
from decimal import Decimal

import numpy as np
import pytest
from scipy import stats

from service.demo.cheats import made_up
from service.demo.scenario import HISTORY_DAYS, Row, Scenario, scenario
from service.demo.town import EXPONENT, MERCHANTS
from service.digits.laws import leading_law
from service.digits.significand import leading, trailing

NOW = datetime(2026, 11, 30, 17, 23, 45, tzinfo=UTC)
BASELINE_ROWS, BASELINE_DAYS = 1000, 14
SMALL = {"widow-hales-lace", "thimble-clocks"}


@pytest.fixture(scope="module")
def story() -> Scenario:
    return scenario(NOW)


@pytest.fixture(scope="module")
def rows(story: Scenario) -> list[Row]:
    return story.history + story.live


def minor(row: Row) -> int:
    """Read an amount as the contract says: an integer is minor units, a string major ones."""
    amount = row["amount"]
    if isinstance(amount, int):
        return amount
    exact = Decimal(amount).scaleb(EXPONENT[str(row["currency"])])
    assert exact == exact.to_integral_value(), f"{amount} has too many places"
    return int(exact)


def stream(row: Row) -> tuple[str, str, str]:
    """Name the stream a row belongs to; a negative amount without a flow is a refund."""
    flow = row.get("flow", "refund" if minor(row) < 0 else "sale")
    return str(row["merchant"]), str(flow), str(row["currency"])


def counted(rows: list[Row], merchant: str, flow: str = "sale") -> np.ndarray:
    """Amounts of a merchant's stream that are not zero, in posting order."""
    amounts = [minor(r) for r in rows if r["merchant"] == merchant and stream(r)[1] == flow]
    return np.array([amount for amount in amounts if amount])


def lead_digit_p(amounts: np.ndarray) -> float:
    """p-value of Pearson's chi-square of the lead digits against the law, 8 degrees of freedom."""
    seen = np.bincount(leading(amounts, 1), minlength=10)[1:]
    return float(stats.chisquare(seen, leading_law(1) * seen.sum()).pvalue)


def test_same_seed_gives_the_same_rows(story: Scenario) -> None:
    again = scenario(NOW)
    assert (again.history, again.live, again.cheats) == (story.history, story.live, story.cheats)


def test_another_seed_gives_other_rows(story: Scenario) -> None:
    assert scenario(NOW, seed=7).history[:100] != story.history[:100]


def test_an_offset_means_the_same_row_whenever_the_demo_runs(story: Scenario) -> None:
    def without_time(rows: list[Row]) -> list[Row]:
        return [{name: row[name] for name in row if name != "at"} for row in rows]

    later = scenario(NOW + timedelta(days=3, hours=7, seconds=11))
    assert without_time(later.history) == without_time(story.history)
    assert without_time(later.live) == without_time(story.live)
    assert later.cheats == story.cheats
    assert later.live[0]["at"] != story.live[0]["at"]


def test_now_may_be_in_any_time_zone_but_must_have_one(story: Scenario) -> None:
    east = NOW.astimezone(timezone(timedelta(hours=9)))
    assert scenario(east).live == story.live
    with pytest.raises(ValueError, match="time zone"):
        scenario(NOW.replace(tzinfo=None))


def test_size(story: Scenario, rows: list[Row]) -> None:
    assert 100_000 <= len(rows) <= 150_000
    assert len({row["merchant"] for row in rows}) == len(story.merchants) >= 30


def test_rows_have_an_identity_that_ascends(rows: list[Row]) -> None:
    high: dict[tuple[object, ...], int] = defaultdict(lambda: -1)
    of_source: dict[object, set[int]] = defaultdict(set)
    for row in rows:
        offset = int(row["offset"])
        assert offset > high[row["source"], *stream(row)]
        high[row["source"], *stream(row)] = offset
        of_source[row["source"]].add(offset)
    for offsets in of_source.values():
        assert offsets == set(range(len(offsets)))
    assert len({row["id"] for row in rows}) == len(rows)
    assert len(of_source) == len(MERCHANTS)


def test_times_ascend_and_stay_within_bounds(story: Scenario) -> None:
    start, last_day = NOW - timedelta(days=HISTORY_DAYS + 1), NOW - timedelta(days=1)
    for part, low, high in ((story.history, start, last_day), (story.live, last_day, NOW)):
        times = [datetime.fromisoformat(str(row["at"])) for row in part]
        assert times == sorted(times)
        assert low <= times[0]
        assert times[-1] < high


def test_rows_are_valid(rows: list[Row]) -> None:
    allowed = {"id", "merchant", "amount", "currency", "flow", "at", "category", "source", "offset"}
    for row in rows:
        assert set(row) <= allowed
        assert abs(minor(row)) <= 10**15
        assert minor(row) >= 0 or "flow" not in row
        assert len(str(row["id"])) <= 64
        assert len(str(row["source"])) <= 64
        category = str(row["category"])
        assert len(category) == 4
        assert category.isdecimal()


def test_the_portfolio_shows_what_the_api_takes(rows: list[Row]) -> None:
    assert {row["currency"] for row in rows} == {"EUR", "GBP", "USD", "JPY", "KWD", "TND"}
    assert {row["flow"] for row in rows if "flow" in row} == {"sale", "refund", "recurring"}
    assert any(minor(row) < 0 for row in rows)
    assert 10 <= sum(minor(row) == 0 for row in rows) <= 500
    texts = [row["amount"] for row in rows if isinstance(row["amount"], str)]
    assert len(texts) > 1000
    kuwaiti = next(row["amount"] for row in rows if row["currency"] == "KWD")
    assert len(str(kuwaiti).split(".")[1]) == 3


def test_baselines_complete_in_history_except_for_the_two_small_ones(story: Scenario) -> None:
    for merchant in story.merchants:
        main = [
            datetime.fromisoformat(str(row["at"]))
            for row in story.history
            if stream(row) == (merchant.name, merchant.flow, merchant.currency) and minor(row)
        ]
        full = len(main) >= BASELINE_ROWS and main[-1] - main[0] >= timedelta(days=BASELINE_DAYS)
        assert full == (merchant.name not in SMALL), merchant.name


@pytest.mark.parametrize("merchant", [m for m in MERCHANTS if m.follows_law], ids=lambda m: m.name)
def test_wide_range_merchants_follow_the_law(story: Scenario, merchant) -> None:
    # Eleven merchants at 0.001 each; the seed is fixed, so the answer is too.
    assert lead_digit_p(counted(story.history, merchant.name, merchant.flow)) > 0.001


@pytest.mark.parametrize(
    "merchant",
    [m for m in MERCHANTS if not m.follows_law and m.name not in SMALL],
    ids=lambda m: m.name,
)
def test_price_lists_break_the_law(story: Scenario, merchant) -> None:
    assert lead_digit_p(counted(story.history, merchant.name, merchant.flow)) < 1e-12


@pytest.mark.parametrize(
    "merchant", [m for m in MERCHANTS if m.name not in SMALL], ids=lambda m: m.name
)
def test_honest_merchants_keep_their_mix(story: Scenario, merchant) -> None:
    """First against second half of history, lead digits, at 0.0001 each."""
    amounts = counted(story.history, merchant.name, merchant.flow)
    halves = np.array_split(leading(amounts, 1), 2)
    table = np.array([np.bincount(half, minlength=10)[1:] for half in halves])
    table = table[:, table.sum(axis=0) >= 10]
    assert stats.chi2_contingency(table).pvalue > 0.0001


def sales(story: Scenario, merchant: str) -> tuple[np.ndarray, np.ndarray]:
    """Offsets and amounts of all sales of a merchant."""
    picked = [
        (int(row["offset"]), minor(row))
        for row in story.history + story.live
        if row["merchant"] == merchant and stream(row)[1] == "sale"
    ]
    offsets, amounts = np.array(picked).T
    return offsets, amounts


def test_three_cheat_and_only_in_the_live_part(story: Scenario) -> None:
    assert len(story.cheats) == 3
    for cheat in story.cheats:
        live = [int(r["offset"]) for r in story.live if r["merchant"] == cheat.merchant]
        assert len(live) >= 1500
        assert live[0] < cheat.offset
        assert sum(offset >= cheat.offset for offset in live) >= 800
        assert min(cheat.planted) == cheat.offset
        offsets, amounts = sales(story, cheat.merchant)
        assert cheat.planted <= set(offsets.tolist())
        assert cheat.row == np.count_nonzero(amounts[offsets < cheat.offset])


def test_approval_limit_cheat_starts_where_the_truth_says(story: Scenario) -> None:
    cheat = next(c for c in story.cheats if c.merchant == "mole-end-timber")
    offsets, amounts = sales(story, cheat.merchant)
    below = (amounts >= 490_000) & (amounts < 500_000)
    assert below[offsets < cheat.offset].mean() < 0.01
    assert below[offsets == cheat.offset].all()
    assert 0.24 < below[offsets >= cheat.offset].mean() < 0.33
    assert lead_digit_p(amounts[offsets < cheat.offset]) > 0.001


def test_phantom_ticket_starts_where_the_truth_says(story: Scenario) -> None:
    cheat = next(c for c in story.cheats if c.merchant == "seven-knots-toys")
    offsets, amounts = sales(story, cheat.merchant)
    before = amounts[offsets < cheat.offset]
    assert offsets[amounts == 6420][0] == cheat.offset
    assert 20 not in trailing(before, 2)
    assert 0.20 < np.mean(amounts[offsets >= cheat.offset] == 6420) < 0.30


def test_made_up_invoices_start_where_the_truth_says(story: Scenario) -> None:
    cheat = next(c for c in story.cheats if c.merchant == "tidewell-wholesale")
    offsets, amounts = sales(story, cheat.merchant)
    assert lead_digit_p(amounts[offsets < cheat.offset]) > 0.001
    assert lead_digit_p(amounts[offsets >= cheat.offset]) < 1e-12
    planted = np.isin(offsets, list(cheat.planted))
    assert 0.45 < planted[offsets >= cheat.offset].mean() < 0.55
    assert lead_digit_p(amounts[(offsets >= cheat.offset) & ~planted]) > 0.001


def test_made_up_amounts_are_uniform_and_never_repeat_a_digit() -> None:
    amounts = made_up({4: 0.5, 6: 0.5})(np.random.default_rng(1), 20_000)
    assert {len(str(a)) for a in amounts} == {4, 6}
    assert not any(x == y for a in amounts for x, y in zip(str(a), str(a)[1:], strict=False))
    first = np.bincount(leading(amounts, 1), minlength=10)[1:]
    assert stats.chisquare(first).pvalue > 0.001
