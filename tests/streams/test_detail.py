"""Details of one stream, against SciPy, statsmodels and plain loops."""

from __future__ import annotations

import json
import math
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats
from statsmodels.stats.gof import powerdiscrepancy

from schemas.stream import Detail
from service.detection import bank
from service.detection.policy import Policy
from service.streams.detail import detail
from service.streams.folded import Folded
from service.streams.record import Stream
from service.streams.state import BY_OWN
from tests.streams.listed import listed
from tests.streams.test_fold import LAW, START, law_amounts, records, run, with_fraud

DAY = 86_400_000
SHOP = [199, 299, 499, 999, 1499, 2499, 4999, 9999]
AUTO = Policy()
STREAM = Stream("harbour-books", "sale", "EUR")


def of(amounts, policy: Policy = LAW, days: float = 1, *, flow: str = "sale", measures=True):
    at = START + np.linspace(0, days * DAY, len(amounts)).astype(np.int64)
    folded, _ = run([records(amounts, at=at)], {1: policy})
    stream = STREAM._replace(flow=flow)
    now = START + int(days * DAY)
    found = detail(folded, stream, {1: policy}, now, category="5942", all_measures=measures)
    json.dumps(found, allow_nan=False)
    assert Detail().validate(found | {"alarm": None}) == {}
    entry = listed(folded, [stream], {1: policy}, now)[0]
    assert {key: found[key] for key in entry} == entry
    return found


def leads(amounts) -> np.ndarray:
    return np.bincount([int(str(a)[0]) for a in amounts.tolist()], minlength=10)[1:]


def test_the_views_of_the_contract_with_interval_and_span() -> None:
    found = of(law_amounts(np.random.default_rng(31), 600), measures=False)
    assert list(found["views"]) == [
        "lead_digit",
        "second_digit",
        "lead_pair",
        "tail_pair",
        "circle",
    ]
    lead = found["views"]["lead_digit"]
    assert lead["misfit"] == found["misfit"]
    assert lead["span"] == found["score_span"] == "window"
    for name, view in found["views"].items():
        assert view["reference"] == "law"
        if name != "circle":
            assert 0 <= view["misfit_low"] <= view["misfit"] <= view["misfit_high"] <= 1
    assert found["views"]["circle"]["count"] == 600
    assert not {"warning", "circle"} & set(found)
    assert "mad" not in lead
    assert (found["category"], found["policy"], found["policy_version"]) == ("5942", "standard", 1)
    assert (found["first_seen"], found["late"]) == ("2026-09-21T14:13:20.000Z", 0)


def test_classic_measures_are_those_of_scipy_and_statsmodels() -> None:
    amounts = with_fraud(np.random.default_rng(32), 700, 0, 0.03)
    found = of(amounts)
    lead = found["views"]["lead_digit"]
    counts, p = leads(amounts), bank.LAW[:9]
    expected = stats.chisquare(counts, counts.sum() * p / p.sum())
    assert lead["chi_square"]["statistic"] == pytest.approx(expected.statistic, rel=1e-5)
    assert lead["chi_square"]["p_value"] == pytest.approx(expected.pvalue, rel=1e-4)
    statistic, p_value = powerdiscrepancy(counts, counts.sum() * p, lambd="loglikeratio")
    assert lead["g"]["statistic"] == pytest.approx(statistic, rel=1e-5)
    assert lead["g"]["p_value"] == pytest.approx(p_value, rel=1e-4)
    assert lead["mad"] == pytest.approx(np.abs(counts / 700 - p).mean(), rel=1e-5)
    means = [stats.binom(700, k).expect(lambda x, k=k: abs(x / 700 - k)) for k in p]
    assert lead["mad_expected"] == pytest.approx(np.mean(means), rel=1e-5)
    logs = np.log10(amounts)
    circle = found["circle"]
    assert circle["spread"] == pytest.approx(np.std(logs, ddof=1), rel=1e-5)
    resultant = abs(np.exp(2j * np.pi * logs).sum()) / 700
    assert circle["rayleigh"]["statistic"] == pytest.approx(2 * 700 * resultant**2, rel=1e-4)
    assert "one look" in found["warning"]
    pair = found["views"]["lead_pair"]
    assert pair["largest_z"]["cell"] == "49"
    assert found["views"]["tail_pair"]["kuiper"] > 0


def test_the_e_value_is_the_product_of_what_each_row_was_bet_to_be() -> None:
    amounts = with_fraud(np.random.default_rng(33), 150, 0, 0.2)
    found = of(amounts)

    def gained(cells: list[int], p: np.ndarray, kappa: float) -> float:
        seen, capital = np.zeros(len(p)), 1.0
        for k in cells:
            capital *= (kappa * p[k] + seen[k]) / (kappa + seen.sum()) / p[k]
            seen[k] += 1
        return capital

    text = [str(a) for a in amounts.tolist()]
    lead = [int(t[0]) - 1 for t in text]
    pair = [int(t[:2]) - 10 for t in text if len(t) > 1]
    tail = [int(t[-2:]) for t in text if len(t) > 3]
    law = bank.LAW
    e = np.mean(
        [
            np.mean([gained(lead, law[:9], k) for k in (20, 200, 2000)]),
            np.mean([gained(pair, law[9:99], k) for k in (50, 500, 5000)]),
            np.mean([gained(tail, law[99:], k) for k in (50, 500, 5000)]),
        ]
    )
    assert e > 20
    assert found["e_value"] == pytest.approx(e, rel=1e-5)
    assert found["log10_e_value"] == pytest.approx(math.log10(e), abs=0.0006)
    assert found["p_value"] == pytest.approx(1 / e, rel=1e-5)


def test_enormous_evidence_is_capped_and_never_certain() -> None:
    found = of(np.full(5000, 4900))
    assert found["e_value"] == 1e300
    assert found["p_value"] == 1e-300
    assert found["log10_e_value"] > 300


def test_honest_evidence_is_no_evidence() -> None:
    found = of(law_amounts(np.random.default_rng(34), 3000, 2, 6))
    assert found["e_value"] < 1
    assert found["p_value"] == 1


def test_bands_only_against_the_law_and_in_large_tallies() -> None:
    rng = np.random.default_rng(35)
    band = of(law_amounts(rng, 9000, 2, 6))["views"]["lead_digit"]["band"]
    assert band["name"] == "close"
    assert "Nigrini" in band["source"]
    assert of(law_amounts(rng, 900, 2, 6))["views"]["lead_digit"]["band"] is None
    own = of(rng.choice(SHOP, 9000), AUTO, 15)
    assert own["views"]["lead_digit"]["reference"] == "own"
    assert own["views"]["lead_digit"]["band"] is None
    assert own["views"]["second_digit"]["reference"] == "law"
    assert own["views"]["second_digit"]["band"]["name"] == "off"


def test_while_learning_nothing_is_promised_and_the_law_is_unknown() -> None:
    found = of(law_amounts(np.random.default_rng(36), 500), AUTO, 3)
    assert found["standing"] == "learning"
    assert found["law_applies"]["status"] == "unknown"
    assert "500 of 1,000 amounts and 3.0 of 14 days" in found["law_applies"]["reason"]
    assert found["guarantee"]["status"] == "void"
    assert "Nothing raises alarms yet" in found["guarantee"]["reason"]
    baseline = found["baseline"]
    assert (baseline["complete"], baseline["count"], baseline["size"]) == (False, 500, 1000)
    assert (baseline["days"], baseline["days_needed"]) == (3, 14)
    assert baseline["first_at"] == found["first_seen"]


def test_rows_that_cross_while_learning_answer_no_at_once() -> None:
    found = of(np.full(100, 4900), AUTO)
    assert found["law_applies"]["status"] == "no"
    assert "unfinished baseline" in found["law_applies"]["reason"]
    assert found["guarantee"]["status"] == "void"


def test_a_law_like_merchant() -> None:
    found = of(law_amounts(np.random.default_rng(37), 3000, 2, 6), AUTO, 20)
    assert found["standing"] == "steady"
    assert found["law_applies"]["status"] == "yes"
    assert found["guarantee"]["status"] == "holds"
    assert "accepted" in found["guarantee"]["reason"]
    assert found["baseline"]["complete"]
    assert found["baseline"]["days"] == pytest.approx(14, abs=0.05)


def test_a_shop_is_promised_with_the_stated_confidence() -> None:
    found = of(np.random.default_rng(38).choice(SHOP, 3000), AUTO, 20)
    assert found["law_applies"]["status"] == "no"
    assert "tail pair is not spread evenly" in found["law_applies"]["reason"]
    assert found["guarantee"]["status"] == "holds"
    # The first baseline may spend half of 1 - 0.9995.
    assert "confidence 0.99975" in found["guarantee"]["reason"]
    assert "do not depend on each other visibly" in found["guarantee"]["reason"]


def test_a_baseline_of_a_morning_is_doubtful() -> None:
    quick = Policy(baseline_size=500, baseline_days=0)
    found = of(np.random.default_rng(39).choice(SHOP, 800), quick, 0.5)
    assert found["guarantee"]["status"] == "doubtful"
    assert "less than one week" in found["guarantee"]["reason"]


def test_the_law_taken_for_granted() -> None:
    rng = np.random.default_rng(40)
    few = of(law_amounts(rng, 300))
    assert few["baseline"] is None
    assert few["law_applies"]["status"] == "unknown"
    assert few["guarantee"]["status"] == "doubtful"
    many = of(law_amounts(rng, 3000, 2, 6))
    assert (many["law_applies"]["status"], many["guarantee"]["status"]) == ("yes", "holds")
    narrow = of((10 ** rng.normal(3.5, 0.25, 3000)).astype(int))
    assert narrow["law_applies"]["status"] == "no"
    assert narrow["guarantee"]["status"] != "holds"
    cheat = of(with_fraud(rng, 2000, 500, 0.3))
    assert "begin with 49, and 0.97 % is the bound" in cheat["guarantee"]["reason"]


def test_quiet_flows_are_void() -> None:
    found = of(law_amounts(np.random.default_rng(41), 300), flow="chargeback")
    assert found["guarantee"]["status"] == "void"
    assert "chargeback" in found["guarantee"]["reason"]
    none = of(law_amounts(np.random.default_rng(41), 300), Policy(reference="law", views=()))
    assert none["guarantee"]["status"] == "void"


@pytest.mark.parametrize("amounts", [[], [0, 0, 0]])
def test_nothing_is_known_of_nothing(amounts: list[int]) -> None:
    found = of(amounts, AUTO)
    assert {view["count"] for view in found["views"].values()} == {0}
    assert found["views"]["lead_digit"]["misfit"] is None
    assert found["views"]["lead_digit"]["chi_square"] == {"statistic": None, "p_value": None}
    assert found["circle"]["spread"] is None
    assert (found["e_value"], found["p_value"]) == (1, 1)
    assert found["law_applies"]["status"] == "unknown"
    assert (found["first_seen"] is None) == (not amounts)


def test_one_size_only() -> None:
    found = of(np.full(300, 4900))
    assert found["score"] == 0
    assert found["circle"]["spread"] == pytest.approx(0, abs=1e-6)  # rounding of two sums
    noise = math.sqrt(2 * 0.01 * 0.99 / math.pi / 300)
    expected = 50 * math.sqrt(0.0198**2 - noise**2)
    assert found["views"]["tail_pair"]["misfit"] == pytest.approx(expected, abs=1e-6)
    assert found["views"]["tail_pair"]["misfit_high"] == 1


def test_tiny_amounts_without_a_tail_pair() -> None:
    rng = np.random.default_rng(42)
    found = of(rng.choice([5, 50, 120, 350], 2000), Policy(reference="own"), 20)
    tail = found["views"]["tail_pair"]
    assert (tail["count"], tail["misfit"], tail["reference"]) == (0, None, "own")
    assert "No amount was large enough" in found["law_applies"]["reason"]
    assert found["views"]["lead_digit"]["count"] > found["views"]["lead_pair"]["count"] > 0


def test_an_own_baseline_without_tail_pairs_knows_no_misfit_of_later_ones() -> None:
    rng = np.random.default_rng(43)
    amounts = rng.choice([5, 50, 120, 350], 2000)
    amounts[-50:] = 5000
    policy = Policy(reference="own")
    found = of(amounts, policy, 20)
    tail = found["views"]["tail_pair"]
    assert (tail["count"], tail["misfit"]) == (50, None)


def test_detail_is_of_one_stream() -> None:
    with pytest.raises(ValueError, match="one stream"):
        detail(Folded.new(2), STREAM, {}, START, category=None, all_measures=False)


def test_a_stricter_policy_makes_an_old_baseline_short() -> None:
    rng = np.random.default_rng(44)
    log = records(rng.choice(SHOP, 2500), at=START + np.linspace(0, 20 * DAY, 2500).astype(int))
    log["policy"][-1] = 2
    policies = {1: AUTO, 2: Policy(version=2, baseline_size=20_000)}
    folded, _ = run([log], policies)
    assert folded.state["reference"][0, 0] == BY_OWN
    found = detail(folded, STREAM, policies, START + 20 * DAY, category=None, all_measures=False)
    assert found["guarantee"]["status"] == "doubtful"
    assert "shorter than the policy asks" in found["guarantee"]["reason"]
    assert found["policy_version"] == 2


def test_bursts_void_the_guarantee_and_chance_does_not() -> None:
    rng = np.random.default_rng(61)
    shop = rng.choice([199, 299, 499, 999, 1499, 2499, 4999, 9999], 4000)
    steady = of(shop, Policy(reference="own"), 40)["guarantee"]
    assert steady["status"] == "holds"
    bursts = np.repeat(shop[:1000], 4)  # each customer buys the same thing four times
    broken = of(bursts, Policy(reference="own"), 40)["guarantee"]
    assert broken["status"] == "void"
    assert "follow each other" in broken["reason"]
    some = np.where(rng.random(4000) < 0.05, np.roll(shop, 1), shop)
    assert of(some, Policy(reference="own"), 40)["guarantee"]["status"] in ("holds", "doubtful")


def test_an_open_alarm_casts_doubt_on_the_bounds() -> None:
    rng = np.random.default_rng(62)
    shop = rng.choice([199, 299, 499, 999, 1499, 2499, 4999, 9999], 4000)
    shop[3000:] = rng.choice([150, 250, 350, 950], 1000)  # a promotion: all prices end in 50
    found = of(shop, Policy(reference="own"), 40)
    assert found["standing"] == "alarmed"
    assert found["guarantee"]["status"] != "holds"
    assert "promotion" in found["guarantee"]["reason"]


def test_more_crossings_than_chance_allows_void_the_guarantee() -> None:
    rng = np.random.default_rng(63)
    shop = rng.choice([199, 299, 499, 999, 1499, 2499, 4999, 9999], 6000)
    changed = np.where(np.arange(6000) < 3000, shop, rng.choice([150, 250, 350, 950], 6000))
    policy = Policy(reference="own", transactions_per_false_alarm=1000)
    found = of(changed, policy, 60)["guarantee"]
    assert found["status"] == "void"
    assert "more often than the promise allows" in found["reason"]
    by_chance = of(law_amounts(rng, 6000), replace(LAW, transactions_per_false_alarm=1000), 60)
    assert "more often" not in by_chance["guarantee"]["reason"]
