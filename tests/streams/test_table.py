"""The table of digits, against counting by text and textbook formulas."""

from __future__ import annotations

import json
import math
from collections import Counter

import numpy as np
import pytest
from scipy.special import betaln
from statsmodels.stats.proportion import proportions_ztest

from schemas.digits import Digits
from service.detection.policy import Policy
from service.streams.folded import Folded
from service.streams.state import BY_OWN
from service.streams.table import VIEWS, digits, z_learned
from tests.streams.test_fold import LAW, START, law_amounts, records, run

DAY = 86_400_000
SHOP = [199, 299, 499, 999, 1499, 2499, 4999, 9999]
CUT = {
    "lead_digit": lambda a: str(a)[0],
    "second_digit": lambda a: str(a)[1] if a >= 10 else None,
    "lead_pair": lambda a: str(a)[:2] if a >= 10 else None,
    "tail_pair": lambda a: str(a)[-2:] if a >= 1000 else None,
}
AUTO = Policy()


def of(amounts, policy: Policy = LAW, days: float = 1):
    at = START + np.linspace(0, days * DAY, len(amounts)).astype(np.int64)
    folded, _ = run([records(amounts, at=at)], {1: policy})
    return folded, {1: policy}, START + int(days * DAY)


@pytest.mark.parametrize("view", VIEWS)
@pytest.mark.parametrize("low", [0.0, 2.0])
def test_counts_and_shares_are_those_of_the_written_numbers(view: str, low: float) -> None:
    amounts = law_amounts(np.random.default_rng(21), 800, low, 5)
    folded, policies, now = of(amounts)
    expected = Counter(CUT[view](a) for a in amounts.tolist())
    del expected[None]
    for span in ("window", "lifetime"):
        table = digits(folded, policies, view, span, now)
        assert {c["cell"]: c["count"] for c in table["cells"] if c["count"]} == expected
        assert (
            len(table["cells"])
            == {"l": 9, "s": 10, "le": 90, "t": 100}["le" if view == "lead_pair" else view[0]]
        )
        assert table["count"] == expected.total()
        assert (table["view"], table["span"], table["reference"]) == (view, span, "law")
        for cell in table["cells"]:
            assert cell["share"] == pytest.approx(cell["count"] / table["count"], rel=1e-5)
            assert 0 <= cell["low"] <= cell["share"] <= cell["high"] <= 1
        assert sum(c["expected"] for c in table["cells"]) == pytest.approx(1, abs=1e-4)
        assert Digits().validate(table) == {}
        json.dumps(table, allow_nan=False)


def test_expected_bound_and_z_under_the_law() -> None:
    amounts = law_amounts(np.random.default_rng(22), 1000)
    folded, policies, now = of(amounts)
    one = digits(folded, policies, "lead_digit", "lifetime", now)["cells"][0]
    p, c = math.log10(2), one["count"]
    assert one["expected"] == 0.30103
    assert one["bound"] == pytest.approx(1.1 * p, rel=1e-5)
    z = math.copysign(max(abs(c - 1000 * p) - 0.5, 0), c - 1000 * p)
    assert one["z"] == pytest.approx(z / math.sqrt(1000 * p * (1 - p)), abs=0.005)
    tail = digits(folded, policies, "tail_pair", "lifetime", now)["cells"][0]
    assert (tail["cell"], tail["expected"], tail["bound"]) == ("00", 0.01, 0.0105)
    second = digits(folded, policies, "second_digit", "lifetime", now)["cells"]
    assert {c["bound"] for c in second} == {None}
    # Second digit 0 has probability 0.11968 under the law (Newcomb 1881, to four places .1197).
    assert second[0]["expected"] == pytest.approx(0.1197, abs=5e-5)
    wide = {1: Policy(reference="law", tolerance=0.3)}
    assert digits(folded, wide, "tail_pair", "window", now)["cells"][7]["bound"] == 0.0115


def test_the_interval_ends_where_the_beta_mixture_reaches_its_level() -> None:
    folded, policies, now = of(law_amounts(np.random.default_rng(23), 500))
    for cell in digits(folded, policies, "lead_digit", "lifetime", now)["cells"]:
        c = cell["count"]
        for t in (cell["low"], cell["high"]):
            ratio = (
                betaln(c + 0.5, 500 - c + 0.5)
                - betaln(0.5, 0.5)
                - c * math.log(t)
                - (500 - c) * math.log1p(-t)
            )
            assert ratio == pytest.approx(math.log(9 / 0.05), abs=1e-2)


def test_an_own_baseline_gives_expected_bound_and_z() -> None:
    rng = np.random.default_rng(24)
    shop = rng.choice(SHOP, 3000)
    folded, policies, now = of(shop, AUTO, 30)
    state = folded.state[0]
    assert state["reference"][0] == BY_OWN
    table = digits(folded, policies, "lead_digit", "lifetime", now)
    assert table["reference"] == "own"
    base, m = state["cell"]["base"][:9].astype(int).tolist(), int(state["base_rows"])
    counts = [c["count"] for c in table["cells"]]
    for k, cell in enumerate(table["cells"]):
        assert cell["expected"] == pytest.approx(base[k] / m, rel=1e-5)
        assert cell["bound"] == pytest.approx(1.1 * float(state["cell"]["bound"][k]), rel=1e-5)
        assert cell["bound"] > cell["expected"]
        if base[k]:
            rest = [counts[k] - base[k], base[k]]
            z, _ = proportions_ztest(rest, [3000 - m, m])
            assert cell["z"] == pytest.approx(z, abs=0.02)
        else:
            assert (cell["expected"], cell["z"]) == (0, 0)


def test_z_against_a_baseline_apart_from_the_span_is_the_two_sample_z() -> None:
    counts, base = np.array([300, 500, 200]), np.array([900, 1500, 900])
    z = z_learned(counts, base, nested=False)
    for k in range(3):
        expected, _ = proportions_ztest([counts[k], base[k]], [1000, 3300])
        assert z[k] == pytest.approx(expected, rel=0.01)
    assert z_learned(base, base, nested=True).tolist() == [0, 0, 0]
    assert np.isnan(z_learned(counts * 0, base, nested=False)).all()
    new = z_learned(np.array([500, 500, 40]), np.array([1000, 1000, 0]), nested=False)
    assert 5 < new[2] < 20


def test_while_learning_the_bounds_are_the_laws() -> None:
    folded, policies, now = of(np.full(50, 1234), AUTO)
    table = digits(folded, policies, "lead_digit", "window", now)
    assert table["reference"] == "law"
    assert table["cells"][0]["bound"] == pytest.approx(0.331133, rel=1e-5)


@pytest.mark.parametrize("view", VIEWS)
def test_an_empty_view_has_no_shares(view: str) -> None:
    folded, policies, now = of([0, 0])
    table = digits(folded, policies, view, "window", now)
    assert table["count"] == 0
    for cell in table["cells"]:
        assert (cell["count"], cell["share"], cell["low"], cell["high"]) == (0, None, 0, 1)
        assert cell["z"] is None
    assert Digits().validate(table) == {}


def test_tiny_amounts_have_no_tail_pair_and_an_own_baseline_expects_nothing_of_it() -> None:
    rng = np.random.default_rng(25)
    own = Policy(reference="own")
    folded, policies, now = of(rng.choice([5, 50, 120, 350], 2000), own, 30)
    assert folded.state["reference"][0, 2] == BY_OWN
    table = digits(folded, policies, "tail_pair", "lifetime", now)
    assert (table["count"], table["reference"]) == (0, "own")
    assert {(c["expected"], c["bound"], c["z"]) for c in table["cells"]} == {(None, 1.0, None)}
    assert Digits().validate(table) == {}


def test_what_has_no_table_is_refused_by_name() -> None:
    folded, policies, now = of([5])
    with pytest.raises(ValueError, match="lead_digit, second_digit, lead_pair, tail_pair"):
        digits(folded, policies, "circle", "window", now)
    with pytest.raises(ValueError, match="window, lifetime"):
        digits(folded, policies, "lead_digit", "month", now)
    with pytest.raises(ValueError, match="one stream"):
        digits(Folded.new(2), policies, "lead_digit", "window", now)
