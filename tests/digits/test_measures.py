"""Distance of a tally from its reference, and the noise in it."""

from __future__ import annotations

from fractions import Fraction
from itertools import pairwise
from math import comb

import mpmath
import numpy as np
import numpy.typing as npt
import pytest
from scipy import stats

from service.digits.laws import leading_law, position_law
from service.digits.measures import (
    BANDS,
    Estimate,
    band,
    excess_mad,
    mad,
    mad_expected,
    misfit,
    noise_constant,
    score,
    score_of,
    spread,
)
from service.digits.significand import FloatArray

LAW = leading_law(1)
LAWS = {"lead_digit": LAW, "second_digit": position_law(2), "lead_pair": leading_law(2)}


def test_mad_by_hand() -> None:
    counts = [[2, 1, 1], [0, 4, 0], [0, 0, 0]]
    got = mad(counts, [0.5, 0.25, 0.25])
    np.testing.assert_allclose(got, [0.0, (0.5 + 0.75 + 0.25) / 3, np.nan])


def test_expected_mad_by_exact_enumeration() -> None:
    """De Moivre's form against the sum over all outcomes in rational arithmetic."""
    p = [Fraction(1, 2), Fraction(1, 3), Fraction(1, 6)]
    for n in range(1, 40):
        exact = Fraction(0)
        for share in p:
            for k in range(n + 1):
                chance = comb(n, k) * share**k * (1 - share) ** (n - k)
                exact += chance * abs(Fraction(k, n) - share) / 3
        assert float(mad_expected(n, [float(s) for s in p])) == pytest.approx(
            float(exact), rel=1e-13
        )


@pytest.mark.parametrize("n", [1, 2, 17, 245, 3000])
def test_expected_mad_against_scipy(n: int) -> None:
    k = np.arange(n + 1)[:, np.newaxis]
    exact = (stats.binom.pmf(k, n, LAW) * np.abs(k / n - LAW)).sum(axis=0).mean()
    assert float(mad_expected(n, LAW)) == pytest.approx(exact, rel=1e-10)


def test_expected_mad_of_a_thousand_million_amounts_against_mpmath() -> None:
    n = 10**9
    with mpmath.workdps(50):
        total = mpmath.mpf(0)
        for share in LAW.tolist():
            p = mpmath.mpf(share)
            m = int(mpmath.floor(n * p))
            log_b = (
                mpmath.loggamma(n)
                - mpmath.loggamma(m + 1)
                - mpmath.loggamma(n - m)
                + m * mpmath.log(p)
                + (n - 1 - m) * mpmath.log1p(-p)
            )
            total += 2 * p * (1 - p) * mpmath.exp(log_b)
        exact = float(total / 9)
    assert float(mad_expected(n, LAW)) == pytest.approx(exact, rel=1e-12)


def test_expected_mad_at_the_edges() -> None:
    assert np.isnan(mad_expected(0, LAW))
    assert float(mad_expected(5, [1.0, 0.0])) == 0
    tiny = float(mad_expected(3, [1e-12, 1 - 1e-12]))
    assert tiny == pytest.approx(2e-12, rel=1e-9)
    rows = mad_expected([[1, 10], [100, 0]], LAW)
    assert rows.shape == (2, 2)
    assert float(rows[0, 1]) == float(mad_expected(10, LAW))


def test_noise_of_the_law() -> None:
    """0.2348 for the law; a perfect stream's raw MAD passes 0.015 near 245 amounts."""
    assert float(noise_constant(LAW)) == pytest.approx(0.2348, abs=5e-5)
    assert np.all(mad_expected(np.arange(1, 240), LAW) > 0.015)
    assert np.all(mad_expected(np.arange(250, 400), LAW) < 0.015)


def test_noise_is_taken_off() -> None:
    rng = np.random.default_rng(11)
    counts = rng.multinomial(1000, LAW, 2000)
    assert mad(counts, LAW).mean() > 0.007
    # Half of the perfect tallies have less than the mean noise, so nothing is left of them.
    assert np.median(excess_mad(counts, LAW).value) < 0.001
    far = 0.6 * LAW + 0.4 / 9
    truth = np.abs(far - LAW).mean()
    value = excess_mad(rng.multinomial(20_000, far, 2000), LAW).value
    assert value.mean() == pytest.approx(truth, abs=0.0002)


def test_score_at_the_published_lines() -> None:
    lines = np.array([0.0, 0.006, 0.012, 0.015, 0.030, 0.2])
    got = score_of(Estimate(lines, lines / 2, lines * 2))
    np.testing.assert_allclose(got.value, [100, 80, 60, 50, 0, 0])
    assert np.all((got.low <= got.value) & (got.value <= got.high))


def test_misfit_is_the_total_variation() -> None:
    """A tenth of a huge tally moved to one cell: its misfit is what had to be moved."""
    n = 10**12
    counts = np.round(0.9 * LAW * n)
    counts[3] += n - counts.sum()
    expected = 0.1 * (1 - LAW[3])
    got = misfit(counts, LAW)
    assert float(got.value) == pytest.approx(expected, rel=1e-4)
    assert float(got.low) < expected < float(got.high)
    assert float(got.value) == pytest.approx(4.5 * float(excess_mad(counts, LAW).value))
    everything = misfit([0] * 8 + [10**9], LAW)
    assert float(everything.value) == pytest.approx(1 - LAW[8], rel=1e-6)
    assert float(everything.high) <= 1


def _moved(source: int, target: int, share: float) -> FloatArray:
    q = LAW.copy()
    q[source] -= share
    q[target] += share
    return q


TRUTHS = {
    "law": LAW,
    "uniform_digits_mixed_in": 0.8 * LAW + 0.2 / 9,
    "one_cell": 0.9 * LAW + 0.1 * np.eye(9)[3],
    "one_rare_cell_takes_all": 0.02 * LAW + 0.98 * np.eye(9)[8],
    "two_cells": _moved(8, 7, 0.03),
    "half_up_half_down": _moved(0, 8, 0.2),
    "spread_by_noise": LAW
    + 0.01 * np.sqrt(LAW * (1 - LAW)) * np.array([1, -1, 1, -1, 1, -1, 1, -1, 0.1877]),
}
TRUTHS["spread_by_noise"] = TRUTHS["spread_by_noise"] / TRUTHS["spread_by_noise"].sum()


@pytest.mark.parametrize("truth", TRUTHS)
@pytest.mark.parametrize("n", [30, 200, 1000, 10_000])
def test_each_end_of_the_interval_misses_at_most_one_in_forty(truth: str, n: int) -> None:
    """Seeded, 8000 tallies; the bound allows four Monte-Carlo standard errors (0.007)."""
    q = TRUTHS[truth]
    rng = np.random.default_rng([n, len(truth)])
    estimate = excess_mad(rng.multinomial(n, q, 8000), LAW)
    population = np.abs(q - LAW).mean()
    allowed = 0.025 + 4 * np.sqrt(0.025 * 0.975 / 8000)
    assert (estimate.low > population + 1e-12).mean() <= allowed
    assert (estimate.high < population - 1e-12).mean() <= allowed


def test_the_interval_is_not_idle() -> None:
    """Its ends are told apart from no information, and it shrinks with the root of n."""
    rng = np.random.default_rng(5)
    widths = [
        (lambda e: (e.high - e.low).mean())(excess_mad(rng.multinomial(n, LAW, 500), LAW))
        for n in (1000, 4000, 16_000)
    ]
    for wide, narrow in pairwise(widths):
        assert wide / narrow == pytest.approx(2, rel=0.05)
    assert widths[0] < 0.016
    clear = score(rng.multinomial(2000, 0.5 * LAW + 0.5 / 9, 500), LAW)
    assert np.quantile(clear.high, 0.95) < 50


def test_the_value_lies_inside_its_interval() -> None:
    rng = np.random.default_rng(6)
    for p in (LAW, np.array([0.5, 0.5]), np.array([1.0, 0.0, 0.0])):
        q = rng.dirichlet(np.full(p.size, 0.3), 3000)
        for n in (1, 2, 5, 50, 5000):
            e = excess_mad(rng.multinomial(n, q), p)
            assert np.all((e.low >= 0) & (e.low <= e.value) & (e.value <= e.high))
            s = score(rng.multinomial(n, q), p)
            assert np.all((s.low >= 0) & (s.low <= s.value) & (s.value <= s.high) & (s.high <= 100))


def _band_of(view: str, n: int, law: FloatArray) -> object:
    counts = np.floor(law * n)
    counts[0] += n - counts.sum()
    return band(view, counts, law)[()]


@pytest.mark.parametrize("view", list(LAWS))
def test_a_band_is_given_as_soon_as_noise_rarely_reaches_the_first_cut_off(view: str) -> None:
    """At the smallest count with a band, 8000 seeded tallies; 4 standard errors are 0.01."""
    law = LAWS[view]
    first = next(n for n in range(1000, 30_000, 100) if _band_of(view, n, law) is not None)
    assert _band_of(view, first * 2, law) == "close"
    names = band(view, np.random.default_rng(8).multinomial(first, law, 8000), law)
    worse = (names != "close").mean()
    assert 0.02 <= worse <= 0.05 + 0.01


def test_bands_follow_the_published_cut_offs() -> None:
    """Nigrini 2012, from memory: 0.006, 0.012, 0.015 for the first digit."""
    n = 10**9
    got = []
    for size in (0.005, 0.007, 0.011, 0.0125, 0.0149, 0.0151):
        moved = np.round(_moved(0, 8, 4.5 * size) * n)
        got.append(band("lead_digit", moved, LAW)[()])
    assert got == ["close", "acceptable", "acceptable", "marginal", "marginal", "off"]
    assert set(got) == set(BANDS)
    few = band("lead_digit", [[30, 17, 12, 10, 8, 7, 6, 5, 5], [0] * 9], LAW)
    assert few.tolist() == [None, None]


def test_spread_against_numpy() -> None:
    y = np.random.default_rng(3).normal(4, 0.5, (5, 300))
    got = spread(np.full(5, 300), y.sum(axis=1), (y**2).sum(axis=1))
    np.testing.assert_allclose(got, y.std(axis=1, ddof=1), rtol=1e-9)
    assert np.isnan(spread([0, 1], [0, 4.0], [0, 16.0])).all()
    # All amounts equal: rounding must not make the variance negative.
    assert float(spread(3, 3 * 0.1, 3 * 0.1**2)) < 1e-8


def test_thousands_of_streams_are_the_same_as_one_by_one() -> None:
    rng = np.random.default_rng(4)
    counts = rng.multinomial(500, LAW, (20, 30))
    p = rng.dirichlet(np.full(9, 5.0), (20, 30))
    together = excess_mad(counts, p)
    assert together.value.shape == (20, 30)
    alone = excess_mad(counts[3, 4], p[3, 4])
    for many, one in zip(together, alone, strict=True):
        assert float(many[3, 4]) == float(one)


def test_an_empty_tally_gives_nan() -> None:
    zero = np.zeros((2, 9))
    for estimate in (excess_mad(zero, LAW), misfit(zero, LAW), score(zero, LAW)):
        assert all(np.isnan(part).all() for part in estimate)
    assert mad(np.zeros((0, 9)), LAW).shape == (0,)


@pytest.mark.parametrize(
    ("counts", "p", "message"),
    [
        ([1, -1, 3], [0.5, 0.25, 0.25], "counts must be whole numbers"),
        ([1, 1.5, 3], [0.5, 0.25, 0.25], "counts must be whole numbers"),
        ([1, np.nan, 3], [0.5, 0.25, 0.25], "counts must be whole numbers"),
        ([1, 2, 3], [0.5, 0.25, 0.2], "p must be shares from 0 to 1 whose sum is 1"),
        ([1, 2, 3], [1.5, -0.25, -0.25], "p must be shares from 0 to 1"),
        ([1, 2, 3], [0.5, np.nan, 0.5], "p must be shares from 0 to 1"),
        ([1, 2, 3], [0.5, 0.5], "counts and p must have the same number of cells"),
        ([1], [1.0], "counts must have at least 2 cells"),
        (3, [0.5, 0.5], "counts must have at least 2 cells"),
        ([1, 2], 1.0, "p must have at least 2 cells"),
    ],
)
def test_bad_arguments_are_named(counts: npt.ArrayLike, p: npt.ArrayLike, message: str) -> None:
    for measure in (mad, excess_mad, misfit, score):
        with pytest.raises(ValueError, match=message):
            measure(counts, p)


def test_bad_totals_and_views_are_named() -> None:
    with pytest.raises(ValueError, match="n must be whole numbers"):
        mad_expected(-1, LAW)
    with pytest.raises(ValueError, match="n must be whole numbers"):
        spread(1.5, 1.0, 1.0)
    with pytest.raises(ValueError, match="view must be one of lead_digit"):
        band("tail_pair", np.ones(100), np.full(100, 0.01))
