"""e-BH across streams: its plain definition, ties and infinities, and the promise by simulation."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.digits.evidence import CONCENTRATIONS, e_bh, log_evidence, tolerant_log_evidence
from service.digits.laws import leading_law
from service.digits.significand import BoolArray, FloatArray

LAW = leading_law(1)


def _plain(log_e: list[float], fdr: float) -> list[bool]:
    """Take the definition at its word: for every k, count who reaches n / (k fdr)."""
    n = len(log_e)
    for k in range(n, 0, -1):
        limit = np.log(n) - np.log(fdr) - np.log(k)
        if sum(value >= limit for value in log_e) >= k:
            return [value >= limit for value in log_e]
    return [False] * n


# Few different values, so that ties are common, and some from the logs of the limits themselves.
values = st.one_of(
    st.floats(-50, 50, allow_nan=False),
    st.integers(-3, 8).map(float),
    st.integers(1, 400).map(lambda whole: float(np.log(whole))),
    st.sampled_from([-np.inf, np.inf]),
)


@given(st.lists(values, max_size=60), st.sampled_from([0.001, 0.05, 0.25, 1.0]))
def test_against_the_plain_definition(log_e: list[float], fdr: float) -> None:
    got = e_bh(log_e, fdr)
    assert got.tolist() == _plain(log_e, fdr)
    turned = e_bh(log_e[::-1], fdr)
    assert turned.tolist() == got.tolist()[::-1]


def test_by_hand() -> None:
    """Four streams at 0.25: limits 16, 8, 16/3 and 4 for the first to the fourth largest."""

    def flags(*e: float) -> list[int]:
        with np.errstate(divide="ignore"):
            return e_bh(np.log(e), 0.25).astype(int).tolist()

    assert flags(15, 7, 5, 3) == [0, 0, 0, 0]
    assert flags(17, 7, 5, 3) == [1, 0, 0, 0]
    # The second alone would not reach 16; together with the first it need only reach 8.
    assert flags(9, 3, 0, 9) == [1, 0, 0, 1]
    # Nor does a gap stop it: none reaches the limits of the first three, all four that of four.
    assert flags(4.1, 4.1, 4.1, 4.1) == [1, 1, 1, 1]
    assert flags(4.1, 4.1, 4.1, 3.9) == [0, 0, 0, 0]


def test_infinities_and_nothing() -> None:
    assert e_bh([np.inf, -np.inf, 0.0, np.inf], 0.05).tolist() == [True, False, False, True]
    assert e_bh([-np.inf] * 3, 1.0).tolist() == [False] * 3
    assert e_bh([], 0.05).shape == (0,)
    assert e_bh([np.log(21)], 0.05).tolist() == [True]
    assert e_bh([np.log(19)], 0.05).tolist() == [False]


def _all_at_once(rng: np.random.Generator, honest: int) -> FloatArray:
    """The worst case: with chance 0.1 all are 10 together (a hair more, for rounding), else 0."""
    return np.full(honest, np.log(10.000001) if rng.random() < 0.1 else -np.inf)


def _one_factor(rng: np.random.Generator, honest: int) -> FloatArray:
    """Likelihood ratios of a shift of 2 between normals correlated by 0.8; mean 1 each."""
    x = np.sqrt(0.8) * rng.normal() + np.sqrt(0.2) * rng.normal(size=honest)
    return 2 * x - 2


def _opposed(rng: np.random.Generator, honest: int) -> FloatArray:
    """The same with negative dependence: a shared term that enters with alternating sign."""
    sign = np.where(np.arange(honest) % 2, 1, -1)
    x = np.sqrt(0.8) * rng.normal() * sign + np.sqrt(0.2) * rng.normal(size=honest)
    return 2 * x - 2


DEPENDENCE: dict[str, Callable[[np.random.Generator, int], FloatArray]] = {
    "all_at_once": _all_at_once,
    "one_factor": _one_factor,
    "opposed": _opposed,
}


def _false_share(flagged: BoolArray, honest: int) -> float:
    return float(flagged[:honest].sum() / max(flagged.sum(), 1))


@pytest.mark.parametrize("name", list(DEPENDENCE))
def test_the_false_discovery_rate_holds_under_dependence(name: str) -> None:
    """5000 seeded portfolios of 40 honest streams and 10 cheats, at 0.1.

    Allowed is fdr times the honest share, 0.08, and four standard errors of the simulation,
    0.017 at most (a share of 0.08 that is all or nothing has a standard error of 0.0038).
    """
    rng = np.random.default_rng([70, len(name)])
    false, found = [], 0
    for _ in range(5000):
        log_e = np.concatenate([DEPENDENCE[name](rng, 40), rng.normal(3, 2, 10)])
        flagged = e_bh(log_e, 0.1)
        false.append(_false_share(flagged, 40))
        found += int(flagged[40:].sum())
    error = np.std(false) / np.sqrt(len(false))
    assert error < 0.0045
    assert np.mean(false) <= 0.1 * 0.8 + 4 * error
    assert found > 5000


def test_the_bound_is_reached_and_flagging_one_by_one_would_break_it() -> None:
    """All honest and all at once: false discoveries in 10 % of portfolios, and not a bit more."""
    rng = np.random.default_rng(71)
    looks = [_all_at_once(rng, 40) for _ in range(4000)]
    wrong = np.mean([e_bh(log_e, 0.1).any() for log_e in looks])
    assert wrong == pytest.approx(0.1, abs=4 * np.sqrt(0.1 * 0.9 / 4000))
    # Each stream on its own, e >= 10, is right for one stream and wrong for a portfolio.
    alone = np.exp(rng.normal(-2, 2, (4000, 40))) >= 10
    assert alone.any(axis=1).mean() > 0.4


def test_cheats_among_streams_that_share_a_street() -> None:
    """The service's own e-values, on honest tallies of which half the rows are the same rows."""
    rng = np.random.default_rng(72)
    false = []
    for _ in range(300):
        shared = rng.multinomial(300, LAW)
        counts = np.concatenate(
            [
                shared + rng.multinomial(300, LAW, 45),
                rng.multinomial(600, 0.7 * LAW + 0.3 * np.eye(9)[3], 5),
            ]
        )
        plain = log_evidence(counts, LAW, CONCENTRATIONS["lead_digit"])
        log_e = tolerant_log_evidence(counts, LAW, 1.1 * LAW, CONCENTRATIONS["lead_digit"])
        assert np.all(log_e <= plain + 1e-9)
        flagged = e_bh(log_e, 0.05)
        assert flagged[45:].all()
        false.append(_false_share(flagged, 45))
    assert np.mean(false) <= 0.05 * 0.9
