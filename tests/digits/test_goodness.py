"""Classic tests against SciPy, rational arithmetic and their simulated null quantiles."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction
from math import sqrt

import numpy as np
import pytest
from scipy import integrate, optimize, stats
from statsmodels.stats.multitest import multipletests

from service.digits.goodness import (
    chi_square,
    g,
    holm,
    kuiper,
    largest_z,
    rayleigh,
    watson_u2,
    z_scores,
)
from service.digits.laws import leading_law
from service.digits.measures import mad
from service.digits.significand import FloatArray

LAW = leading_law(1)
RNG = np.random.default_rng(20)
TALLIES = RNG.multinomial(400, 0.8 * LAW + 0.2 / 9, 50)


def test_chi_square_and_g_against_scipy() -> None:
    for counts, x2, p2, xg, pg in zip(
        TALLIES, *chi_square(TALLIES, LAW), *g(TALLIES, LAW), strict=True
    ):
        expected = LAW / LAW.sum() * counts.sum()
        assert (x2, p2) == pytest.approx(tuple(stats.chisquare(counts, expected)), rel=1e-9)
        reference = stats.power_divergence(counts, expected, lambda_="log-likelihood")
        assert (xg, pg) == pytest.approx(tuple(reference), rel=1e-9)


def test_impossible_cells() -> None:
    p = [0.5, 0.5, 0.0]
    for statistic in (chi_square, g):
        missed = statistic([6, 4, 0], p)
        alone = statistic([6, 4], [0.5, 0.5])
        assert tuple(map(float, missed)) == tuple(map(float, alone))
        hit = statistic([6, 3, 1], p)
        assert (float(hit.statistic), float(hit.p_value)) == (np.inf, 0)
        sure = statistic([[7, 0], [6, 1]], [1.0, 0.0])
        assert sure.p_value.tolist() == [1, 0]
    assert z_scores([6, 3, 1], p)[2] == np.inf
    assert z_scores([6, 4, 0], p)[2] == 0


def _fractions(counts: list[int], p: list[Fraction]) -> tuple[Fraction, Fraction]:
    """V by the largest excess of any arc of cells, U^2 by pairs: neither cumulates from cell 1."""
    n, cells = sum(counts), len(p)
    excess = [c - n * share for c, share in zip(counts, p, strict=True)]
    arcs = [
        sum((excess[(i + j) % cells] for j in range(length)), Fraction(0))
        for i in range(cells)
        for length in range(cells)
    ]
    u2 = Fraction(0)
    for i in range(cells):
        between = Fraction(0)
        for j in range(i + 1, cells):
            between += excess[j]
            u2 += p[i] * p[j] * between**2
    return max(abs(a) for a in arcs) / n, u2 / n


def test_kuiper_and_watson_against_rational_arithmetic() -> None:
    """An independent direct computation; U^2 is the variance of S, half its mean square pair."""
    p = [Fraction(k, 45) for k in (9, 8, 7, 6, 5, 4, 3, 2, 1)]
    law = [float(share) for share in p]
    for counts in RNG.multinomial(60, law, 40).tolist():
        v, u2 = _fractions(counts, p)
        stephens = sqrt(60) + 0.155 + 0.24 / sqrt(60)
        assert float(kuiper(counts, law)) == pytest.approx(float(v) * stephens, rel=1e-12)
        assert float(watson_u2(counts, law)) == pytest.approx(float(u2), rel=1e-12)


def test_where_the_circle_is_cut_does_not_matter() -> None:
    for turn in range(9):
        rolled, law = np.roll(TALLIES, turn, axis=1), np.roll(LAW, turn)
        np.testing.assert_allclose(kuiper(rolled, law), kuiper(TALLIES, LAW), rtol=1e-10)
        np.testing.assert_allclose(watson_u2(rolled, law), watson_u2(TALLIES, LAW), rtol=1e-10)


def test_kuiper_on_fine_cells_is_the_continuous_statistic() -> None:
    """With every point alone in a cell V is that of the points, up to the width of a cell."""
    cells = 50_000
    points = np.sort(np.random.default_rng(21).random(100))
    counts = np.bincount((points * cells).astype(int), minlength=cells)
    v = stats.kstest(points, "uniform", alternative="greater").statistic
    v += stats.kstest(points, "uniform", alternative="less").statistic
    got = float(kuiper(counts, np.full(cells, 1 / cells))) / (10 + 0.155 + 0.024)
    assert got == pytest.approx(v, abs=2 / cells)


# 95 % and 99 % on the nine cells of the law. V*: Morrow 2014, 1.321 and 1.579, from memory;
# chi-square: 8 degrees of freedom; the others from earlier simulations of this project.
QUANTILES: dict[str, tuple[Callable[[FloatArray], FloatArray], int, float, float, float]] = {
    "kuiper": (lambda c: kuiper(c, LAW), 10_000, 1.32, 1.58, 0.005),
    "watson_u2": (lambda c: watson_u2(c, LAW), 10_000, 0.195, 0.294, 0.0005),
    "chi_square": (lambda c: chi_square(c, LAW).statistic, 10_000, 15.5, 20.1, 0.05),
    "largest_z": (lambda c: np.abs(largest_z(c, LAW).z), 1000, 2.72, 3.21, 0.005),
    "root_n_mad": (lambda c: sqrt(10_000) * mad(c, LAW), 10_000, 0.350, 0.407, 0.0005),
}


@pytest.mark.parametrize("name", list(QUANTILES))
def test_null_quantiles(name: str) -> None:
    """100 000 seeded tallies; allowed: four Monte-Carlo standard errors and the rounding.

    The standard error of a quantile at level a is that of the level, sqrt(a(1-a)/100000), read off
    the simulated distribution itself (0.0007 at 95 %, 0.0003 at 99 %).
    """
    statistic, n, *stated, rounding = QUANTILES[name]
    values = statistic(np.random.default_rng(22).multinomial(n, LAW, 100_000).astype(float))
    for level, value in zip((0.95, 0.99), stated, strict=True):
        slack = 4 * sqrt(level * (1 - level) / values.size)
        low, high = np.quantile(values, [level - slack, level + slack])
        assert low - rounding <= value <= high + rounding


def test_watson_quantiles_by_numerical_inversion() -> None:
    """In large tallies U^2 is a weighted sum of chi-squares; Imhof (1961) gives its tail."""
    covariance = np.diag(LAW) - np.outer(LAW, LAW)
    centred = (np.eye(9) - np.outer(np.ones(9), LAW)) @ np.tril(np.ones((9, 9)))
    root = np.sqrt(LAW)[:, np.newaxis]
    weights = np.linalg.eigvalsh(root * (centred @ covariance @ centred.T) * root.T)
    weights = weights[weights > 1e-12]

    def tail(x: float, level: float) -> float:
        def integrand(u: float) -> float:
            angle = 0.5 * np.arctan(weights * u).sum() - 0.5 * x * u
            return float(np.sin(angle) / (u * np.prod((1 + (weights * u) ** 2) ** 0.25)))

        value = integrate.quad(integrand, 1e-12, np.inf, limit=500)[0]
        return 0.5 + float(value) / np.pi - level

    exact = [optimize.brentq(tail, 0.05, 0.6, args=(level,)) for level in (0.05, 0.01)]
    assert exact == pytest.approx([0.195, 0.292], abs=5e-4)


def test_holm_against_statsmodels() -> None:
    p_values = np.random.default_rng(23).random((20, 9)) ** 3
    for got, raw in zip(holm(p_values), p_values, strict=True):
        np.testing.assert_allclose(got, multipletests(raw, method="holm")[1])
    with pytest.raises(ValueError, match="p_values must be 0 to 1"):
        holm([0.1, 1.2])


def test_largest_z_is_the_cell_that_deviates_most() -> None:
    z = z_scores(TALLIES, LAW)
    got = largest_z(TALLIES, LAW)
    assert got.cell.tolist() == np.abs(z).argmax(axis=1).tolist()
    two_sided = 2 * stats.norm.sf(np.abs(z))
    np.testing.assert_allclose(got.p_value, holm(two_sided).min(axis=1), rtol=1e-12)


def test_z_with_its_continuity_correction_by_hand() -> None:
    z = z_scores([60, 40], [0.5, 0.5])
    np.testing.assert_allclose(z, [(10 - 0.5) / 5, -(10 - 0.5) / 5])
    assert z_scores([3, 2], [0.5, 0.5]).tolist() == [0, 0]


def test_rayleigh_for_few_and_many_amounts() -> None:
    """Seeded, 200 000 samples: calls at 5 % and 1 % within 0.003 (4 standard errors 0.002)."""
    rng = np.random.default_rng(24)
    for n in (10, 40):
        angle = 2 * np.pi * rng.random((200_000, n))
        p = rayleigh(np.full(200_000, n), np.cos(angle).sum(axis=1), np.sin(angle).sum(axis=1))
        assert (p.p_value <= 0.05).mean() == pytest.approx(0.05, abs=0.003)
        assert (p.p_value <= 0.01).mean() == pytest.approx(0.01, abs=0.002)
    many = rayleigh(10**8, 3e4, 4e4)
    assert float(many.statistic) == pytest.approx(50)
    assert float(many.p_value) == pytest.approx(np.exp(-25), rel=1e-4)


def test_rayleigh_equals_its_published_form() -> None:
    """Zar, from memory: exp(sqrt(1 + 4n + 4(n^2 - R^2)) - (1 + 2n)) with R the length."""
    n, length = 20.0, 9.0
    published = np.exp(sqrt(1 + 4 * n + 4 * (n**2 - length**2)) - (1 + 2 * n))
    assert float(rayleigh(20, 9.0, 0.0).p_value) == pytest.approx(float(published), rel=1e-10)
    assert float(rayleigh(20, 20.0, 0.0).p_value) > 0
    with pytest.raises(ValueError, match="cosines and sines"):
        rayleigh(20, 20.0, 5.0)
    with pytest.raises(ValueError, match="n must be whole"):
        rayleigh(-1, 0.0, 0.0)


def test_single_look_p_values_hold_on_honest_tallies() -> None:
    """Seeded, 50 000 tallies of 500: calls at 5 % within 4 standard errors (0.004) and 0.004."""
    counts = np.random.default_rng(25).multinomial(500, LAW, 50_000)
    for statistic in (chi_square, g):
        assert (statistic(counts, LAW).p_value <= 0.05).mean() == pytest.approx(0.05, abs=0.008)
    assert (largest_z(counts, LAW).p_value <= 0.05).mean() <= 0.054


def test_an_empty_tally_gives_nan() -> None:
    zero = np.zeros((2, 9), dtype=np.int64)
    for look in (chi_square(zero, LAW), g(zero, LAW), rayleigh([0, 0], [0, 0], [0, 0])):
        assert np.isnan(look.statistic).all()
        assert np.isnan(look.p_value).all()
    for value in (kuiper(zero, LAW), watson_u2(zero, LAW), z_scores(zero, LAW)):
        assert np.isnan(value).all()
    largest = largest_z(zero, LAW)
    assert largest.cell.tolist() == [-1, -1]
    assert np.isnan(largest.z).all()
    assert np.isnan(largest.p_value).all()


def test_leading_axes_and_own_references() -> None:
    p = RNG.dirichlet(np.full(9, 5.0), (5, 10))
    counts = TALLIES.reshape(5, 10, 9)
    for measure in (
        lambda c, q: chi_square(c, q).statistic,
        lambda c, q: g(c, q).p_value,
        kuiper,
        watson_u2,
        lambda c, q: largest_z(c, q).z,
    ):
        together = measure(counts, p)
        assert together.shape == (5, 10)
        assert float(together[2, 3]) == pytest.approx(float(measure(counts[2, 3], p[2, 3])))


@pytest.mark.parametrize("measure", [chi_square, g, kuiper, watson_u2, z_scores, largest_z])
def test_bad_arguments_are_named(measure: Callable[..., object]) -> None:
    with pytest.raises(ValueError, match="counts must be whole numbers"):
        measure([-1] * 9, LAW)
    with pytest.raises(ValueError, match="p must be shares"):
        measure([1] * 9, LAW * 2)
