"""Intervals of a cell's share: for one look against other programs, for all looks by simulation."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import optimize, stats
from scipy.special import betaln, xlog1py, xlogy
from statsmodels.stats.proportion import proportion_confint

from service.digits.intervals import (
    always_valid,
    clopper_pearson,
    clopper_pearson_lower,
    clopper_pearson_upper,
)
from service.digits.laws import law_cells, leading_law
from service.digits.views import WATCHED

LAW = leading_law(1)


@pytest.mark.parametrize("n", [1, 2, 30, 2000])
@pytest.mark.parametrize("alpha", [0.05, 0.0005])
def test_clopper_pearson_against_statsmodels(n: int, alpha: float) -> None:
    counts = np.unique(np.linspace(0, n, 40).astype(int))
    got = clopper_pearson(counts, n, alpha)
    low, high = proportion_confint(counts, n, alpha=alpha, method="beta")
    # That program leaves NaN at the edges, where the bound is 0 or 1.
    np.testing.assert_allclose(got.low, np.where(counts == 0, 0, low), rtol=1e-9)
    np.testing.assert_allclose(got.high, np.where(counts == n, 1, high), rtol=1e-9)


@pytest.mark.parametrize(("c", "n"), [(0, 2000), (1, 2000), (20, 2000), (1999, 2000), (3, 10**6)])
@pytest.mark.parametrize("alpha", [0.05, 0.0005 / 199, 1e-12])
def test_a_bound_leaves_exactly_alpha_on_its_side(c: int, n: int, alpha: float) -> None:
    upper = float(clopper_pearson_upper(c, n, alpha))
    lower = float(clopper_pearson_lower(c, n, alpha))
    with mpmath.workdps(40):
        p = mpmath.mpf(upper)
        below = (
            mpmath.fsum(mpmath.binomial(n, k) * p**k * (1 - p) ** (n - k) for k in range(c + 1))
            if c < 100
            else 1 - mpmath.betainc(c + 1, n - c, 0, p, regularized=True)
        )
        assert float(below) == pytest.approx(alpha, rel=1e-8)
    if c:
        assert float(stats.binom.sf(c - 1, n, lower)) == pytest.approx(alpha, rel=1e-6)


def test_edges_of_clopper_pearson_in_closed_form() -> None:
    np.testing.assert_allclose(clopper_pearson_upper(0, 500, 0.01), 1 - 0.01 ** (1 / 500))
    np.testing.assert_allclose(clopper_pearson_lower(500, 500, 0.01), 0.01 ** (1 / 500))
    assert float(clopper_pearson_upper(500, 500, 0.01)) == 1
    assert float(clopper_pearson_lower(0, 500, 0.01)) == 0
    nothing = clopper_pearson([0, 0], 0, 0.05)
    assert (nothing.low.tolist(), nothing.high.tolist()) == ([0, 0], [1, 1])
    many = clopper_pearson_upper(np.arange(200).reshape(2, 100), [[1000], [2000]], 0.05)
    assert many.shape == (2, 100)
    # A never-seen cell keeps its precision in a huge tally.
    assert float(clopper_pearson_upper(0, 10**15, 0.05)) == pytest.approx(2.995732e-15, rel=1e-6)


def test_where_the_inverse_of_scipy_loses_its_way() -> None:
    """It gives NaN for two hits at an alpha of 1e-200, and 0.0000019 for a thousand of 10**9."""
    few = float(clopper_pearson_lower(2, 30, 1e-200))
    assert few == pytest.approx((1e-200 / 435) ** 0.5, rel=1e-6)  # 435 pairs of 30
    many = clopper_pearson_lower([1000, 1000], [[10**8], [10**9]], [0.025, 1e-9])
    share = np.array([[1e-5], [1e-6]])
    assert np.all((many < share) & (many > 0.8 * share))
    exact = stats.gamma.ppf(0.025, 1000) / 1e9
    assert float(many[1, 0]) == pytest.approx(exact, rel=1e-6)


def test_a_rare_cell_is_bounded_as_the_design_says() -> None:
    """A 1 % cell at n = 2000: about 2.0 to 2.4 times its share between alpha 0.05 and 0.0005."""
    bounds = clopper_pearson_upper(20, 2000, np.array([0.05, 0.0005]) / 199)
    np.testing.assert_allclose(bounds / 0.01, [2.0, 2.4], atol=0.15)


def _direct(c: int, n: int, room: float) -> tuple[float, float]:
    """Both ends by bisection on the log martingale itself."""

    def over(t: float) -> float:
        mixed = betaln(0.5 + c, 0.5 + n - c) - betaln(0.5, 0.5)
        return float(mixed - xlogy(c, t) - xlog1py(n - c, -t) - room)

    def root(a: float, b: float) -> float:
        return float(optimize.brentq(over, a, b, xtol=1e-15, rtol=1e-13))

    tiny = 1e-14
    return root(tiny, c / n) if c else 0.0, root(c / n, 1 - tiny) if c < n else 1.0


def test_always_valid_against_a_scalar_root_finder() -> None:
    counts = np.random.default_rng(31).multinomial(300, LAW, 20)
    counts[0] = [300, 0, 0, 0, 0, 0, 0, 0, 0]
    counts[1] = [1, 0, 0, 0, 0, 0, 0, 0, 299]
    got = always_valid(counts)
    for i, row in enumerate(counts.tolist()):
        for k, c in enumerate(row):
            low, high = _direct(c, 300, np.log(9 / 0.05))
            assert float(got.low[i, k]) == pytest.approx(low, rel=1e-8, abs=1e-12)
            assert float(got.high[i, k]) == pytest.approx(high, rel=1e-8, abs=1e-12)


@given(st.lists(st.integers(0, 10**14), min_size=2, max_size=12))
def test_the_counted_share_lies_inside(values: list[int]) -> None:
    counts = np.array(values, dtype=float)
    low, high = always_valid(counts)
    assert np.all((low >= 0) & (low <= high) & (high <= 1))
    if counts.sum():
        share = counts / counts.sum()
        assert np.all((low <= share) & (share <= high))
        assert np.all(low[counts == 0] == 0)
        # About 10 standard deviations at most, so the root was found.
        sd = np.sqrt(share * (1 - share) / counts.sum())
        room = 12 * sd + 60 / counts.sum()
        assert np.all(high - share <= room)
        assert np.all(share - low <= room)
    else:
        assert np.all((low == 0) & (high == 1))


@pytest.mark.parametrize("view", ["lead_digit", "tail_pair"])
def test_no_true_share_is_ever_outside(view: str) -> None:
    """2000 seeded streams looked at 25 times up to 20 000 amounts; 4 standard errors are 0.02."""
    p = law_cells()[WATCHED[view]]
    rng = np.random.default_rng(32)
    streams = 2000 if view == "lead_digit" else 300
    counts = np.zeros((streams, p.size))
    outside = np.zeros(streams, dtype=bool)
    once = np.zeros(streams, dtype=bool)
    seen = 0
    for until in np.unique(np.geomspace(5, 20_000, 25).astype(int)):
        counts += rng.multinomial(until - seen, p, streams)
        seen = int(until)
        low, high = always_valid(counts)
        outside |= ((p < low) | (p > high)).any(axis=1)
        fixed = clopper_pearson(counts, seen, 0.05 / p.size)
        once |= ((p < fixed.low) | (p > fixed.high)).any(axis=1)
    assert outside.mean() <= 0.05 + 4 * np.sqrt(0.05 * 0.95 / streams)
    # The check can fail: intervals for one look do not survive 25 looks.
    assert once.mean() > 0.08


def test_twice_the_price_for_all_looks_at_most() -> None:
    counts = np.round(LAW * 10_000)
    valid = always_valid(counts)
    fixed = clopper_pearson(counts, counts.sum(), 0.05 / 9)
    ratio = (valid.high - valid.low) / (fixed.high - fixed.low)
    assert np.all((ratio > 1) & (ratio < 2))


def test_bad_arguments_are_named() -> None:
    for bound in (clopper_pearson, clopper_pearson_upper, clopper_pearson_lower):
        with pytest.raises(ValueError, match="counts must be whole numbers from 0 to n"):
            bound(3, 2, 0.05)
        with pytest.raises(ValueError, match="n must be whole numbers"):
            bound(0, -2, 0.05)
        for alpha in (0, 1, 2.5, np.nan):
            with pytest.raises(ValueError, match="alpha must be above 0"):
                bound(1, 2, alpha)
    with pytest.raises(ValueError, match="level must be above 0"):
        always_valid([1, 2], 1.0)
    with pytest.raises(ValueError, match="counts must be whole numbers"):
        always_valid([1, -2])
