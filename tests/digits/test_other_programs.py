"""The measures against SciPy, statsmodels and astropy, and against published quantiles."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction
from itertools import combinations

import numpy as np
import pytest
from astropy.stats import binom_conf_interval, rayleightest
from astropy.stats import kuiper as astropy_kuiper
from scipy import stats
from scipy.special import betainc
from statsmodels.stats.proportion import multinomial_proportions_confint

from service.digits.evidence import CONCENTRATIONS, log_evidence, tolerant_log_evidence
from service.digits.goodness import kuiper, rayleigh, watson_u2
from service.digits.intervals import always_valid, clopper_pearson
from service.digits.laws import law_cells, leading_law
from service.digits.significand import FloatArray
from service.digits.views import WATCHED

LAW = leading_law(1)
FINE = 20_000


def _on_fine_cells(points: FloatArray) -> FloatArray:
    return np.bincount((points * FINE).astype(int), minlength=FINE).astype(float)


def test_kuiper_against_astropy_and_both_sides_of_kolmogorov_smirnov() -> None:
    """On cells so fine that each point is alone, V is the continuous statistic.

    It is the sum of the two one-sided Kolmogorov-Smirnov statistics, which SciPy has.
    """
    even = np.full(FINE, 1 / FINE)
    for n in (8, 50, 400):
        points = np.random.default_rng(80 + n).beta(1.3, 0.9, n)
        v = float(kuiper(_on_fine_cells(points), even)) / (n**0.5 + 0.155 + 0.24 / n**0.5)
        assert v == pytest.approx(astropy_kuiper(points)[0], abs=2 / FINE)
        up = stats.kstest(points, "uniform", alternative="greater").statistic
        down = stats.kstest(points, "uniform", alternative="less").statistic
        assert v == pytest.approx(up + down, abs=2 / FINE)


def test_watson_against_its_continuous_formula() -> None:
    """U^2 = sum (x_i - (2i-1)/2n)^2 + 1/12n - n (mean x - 1/2)^2 (Watson 1961)."""
    even = np.full(FINE, 1 / FINE)
    for n in (8, 50, 400):
        x = np.sort(np.random.default_rng(90 + n).beta(1.3, 0.9, n))
        i = np.arange(1, n + 1)
        u2 = ((x - (2 * i - 1) / (2 * n)) ** 2).sum() + 1 / (12 * n) - n * (x.mean() - 0.5) ** 2
        assert float(watson_u2(_on_fine_cells(x), even)) == pytest.approx(u2, abs=3 * n / FINE)


@pytest.mark.parametrize("n", [6, 30, 200])
@pytest.mark.parametrize("pull", [0.0, 0.6])
def test_rayleigh_against_astropy(n: int, pull: float) -> None:
    """Both correct exp(-n R^2) for small n, by different series: they meet to three decimals."""
    angles = np.random.default_rng(n).vonmises(1.0, pull, n)
    got = rayleigh(n, np.cos(angles).sum(), np.sin(angles).sum())
    assert float(got.p_value) == pytest.approx(float(rayleightest(angles)), abs=2e-3)
    resultant = abs(np.exp(1j * angles).mean())
    assert float(got.statistic) == pytest.approx(2 * n * resultant**2, rel=1e-12)


def test_intervals_against_scipy_and_around_jeffreys_of_astropy() -> None:
    for n in (20, 500):
        for c in (0, 1, n // 3, n):
            got = clopper_pearson(c, n, 0.05)
            exact = stats.binomtest(c, n).proportion_ci(0.95, method="exact")
            assert (float(got.low), float(got.high)) == pytest.approx(tuple(exact), rel=1e-9)
            low, high = binom_conf_interval(c, n, 0.95, interval="jeffreys")
            assert float(got.low) <= low < high <= float(got.high)
            # The exact one by its definition: 2.5 % of the binomial beyond each end.
            if 0 < c < n:
                assert float(betainc(c, n - c + 1, got.low)) == pytest.approx(0.025, rel=1e-8)


def test_simultaneous_intervals_lie_around_those_for_one_look() -> None:
    """Those of statsmodels (Goodman 1965) hold for all cells at one look; ours at all looks."""
    counts = np.random.default_rng(81).multinomial(2000, LAW)
    valid = always_valid(counts)
    once = multinomial_proportions_confint(counts, alpha=0.05, method="goodman")
    assert np.all(valid.low < once[:, 0])
    assert np.all(once[:, 1] < valid.high)
    assert np.all((valid.high - valid.low) < 1.6 * (once[:, 1] - once[:, 0]))


@pytest.mark.parametrize("view", list(WATCHED))
@pytest.mark.parametrize("n", [1, 40, 5000])
def test_evidence_is_the_ratio_of_two_distributions_of_scipy(view: str, n: int) -> None:
    """E is the chance of the counts under a Dirichlet-multinomial over that under a multinomial."""
    law = law_cells()[WATCHED[view]]
    law = law / law.sum()
    kappas = CONCENTRATIONS[view]
    for bent in (law, 0.8 * law + 0.2 / law.size):
        counts = np.random.default_rng([82, n]).multinomial(n, bent)
        mixture = [stats.dirichlet_multinomial.logpmf(counts, k * law, n) for k in kappas]
        alone = stats.multinomial.logpmf(counts, n, law)
        log_e = np.logaddexp.reduce(mixture) - np.log(len(kappas)) - alone
        assert float(log_evidence(counts, law, kappas)) == pytest.approx(float(log_e), abs=1e-8)


def _best_by_faces(counts: list[int], bounds: list[Fraction]) -> Fraction:
    """Return the largest likelihood under {q <= bounds, sum q = 1}, in rational arithmetic.

    The maximum puts some cells at their bounds and shares out the rest in proportion to the
    counts; trying all sets of cells finds it without the order in which ours looks for it.
    """
    best, cells = Fraction(0), range(len(counts))
    for size in range(len(counts) + 1):
        for at_bound in combinations(cells, size):
            left = 1 - sum((bounds[k] for k in at_bound), Fraction(0))
            free = [k for k in cells if k not in at_bound]
            rest = sum(counts[k] for k in free)
            if left < 0 or (rest == 0 and left > sum((bounds[k] for k in free), Fraction(0))):
                continue
            q = dict(zip(at_bound, (bounds[k] for k in at_bound), strict=True))
            if rest:
                q |= {k: left * counts[k] / rest for k in free}
                if any(q[k] > bounds[k] for k in free):
                    continue
            likelihood = Fraction(1)
            for k in cells:
                likelihood *= q.get(k, Fraction(0)) ** counts[k] if counts[k] else 1
            best = max(best, likelihood)
    return best


def _mixture(counts: list[int], p: list[Fraction], kappas: tuple[int, ...]) -> Fraction:
    """Return the chance of one order of the counts, by rising factorials."""
    total = Fraction(0)
    for kappa in kappas:
        chance, before = Fraction(1), 0
        for k, count in enumerate(counts):
            for i in range(count):
                chance *= (kappa * p[k] + i) / (kappa + before)
                before += 1
        total += chance
    return total / len(kappas)


def test_both_kinds_of_evidence_on_nine_cells_in_rational_arithmetic() -> None:
    """The law in 45ths (9 8 7 6 5 4 3 2 1), tolerance 1/10; every step an exact fraction."""
    p = [Fraction(k, 45) for k in range(9, 0, -1)]
    law = [float(share) for share in p]
    bounds = [share * Fraction(11, 10) for share in p]
    rng = np.random.default_rng(83)
    for n in (1, 5, 12, 60):
        for bent in (law, np.full(9, 1 / 9)):
            counts = rng.multinomial(n, bent).tolist()
            mixture = _mixture(counts, p, (20, 200, 2000))
            likelihood = Fraction(1)
            for share, count in zip(p, counts, strict=True):
                likelihood *= share**count
            got = float(log_evidence(counts, law, (20, 200, 2000)))
            assert np.exp(got) == pytest.approx(float(mixture / likelihood), rel=1e-10)
            got = float(
                tolerant_log_evidence(counts, law, [float(b) for b in bounds], (20, 200, 2000))
            )
            exact = float(mixture / _best_by_faces(counts, bounds))
            assert np.exp(got) == pytest.approx(exact, rel=1e-10)


# Upper quantiles of the continuous statistics: Stephens (1970), table 1, from memory; each is
# also what the limiting distribution gives, see below.
STEPHENS: dict[str, tuple[Callable[[FloatArray, FloatArray], FloatArray], dict[float, float]]] = {
    "kuiper": (kuiper, {0.10: 1.620, 0.05: 1.747, 0.01: 2.001}),
    "watson_u2": (watson_u2, {0.10: 0.152, 0.05: 0.187, 0.01: 0.268}),
}


def _tail_of_kuiper(x: float) -> float:
    """P(V* > x) = 2 sum (4 j^2 x^2 - 1) exp(-2 j^2 x^2) (Kuiper 1960)."""
    j = np.arange(1, 20)
    return float(2 * ((4 * j**2 * x**2 - 1) * np.exp(-2 * j**2 * x**2)).sum())


def _tail_of_watson(x: float) -> float:
    """P(U^2 > x) = 2 sum (-1)^(j-1) exp(-2 j^2 pi^2 x) (Watson 1961)."""
    j = np.arange(1, 20)
    return float(2 * ((-1.0) ** (j - 1) * np.exp(-2 * j**2 * np.pi**2 * x)).sum())


def test_the_remembered_quantiles_are_those_of_the_limit() -> None:
    for tail, name in ((_tail_of_kuiper, "kuiper"), (_tail_of_watson, "watson_u2")):
        for level, value in STEPHENS[name][1].items():
            assert tail(value) == pytest.approx(level, rel=0.02)


@pytest.mark.parametrize("name", list(STEPHENS))
def test_null_quantiles_on_fine_cells_are_the_continuous_ones(name: str) -> None:
    """4000 seeded samples of 50 points on 8000 cells: beyond each quantile the share it states.

    Allowed are four standard errors of the share (0.019 at 10 %). Stephens' modification makes
    one table serve all n; that of U^2 is not part of ``watson_u2`` and is applied here.
    """
    statistic, quantiles = STEPHENS[name]
    n, cells = 50, 8000
    even = np.full(cells, 1 / cells)
    rng = np.random.default_rng(84)
    values = []
    for _ in range(8):
        at = rng.integers(0, cells, (500, n)) + cells * np.arange(500)[:, np.newaxis]
        counts = np.bincount(at.ravel(), minlength=500 * cells).reshape(500, cells)
        values.append(statistic(counts.astype(float), even))
    found = np.concatenate(values)
    if name == "watson_u2":
        found = (found - 0.1 / n + 0.1 / n**2) * (1 + 0.8 / n)
    for level, value in quantiles.items():
        error = 4 * np.sqrt(level * (1 - level) / found.size)
        assert (found > value).mean() == pytest.approx(level, abs=error)
