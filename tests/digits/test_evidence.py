"""The e-process against rational arithmetic, and its promise by enumeration and simulation."""

from __future__ import annotations

from collections.abc import Iterator
from fractions import Fraction
from itertools import product
from math import factorial, prod

import mpmath
import numpy as np
import pytest

from service.digits.evidence import (
    CONCENTRATIONS,
    e_value,
    log_evidence,
    p_value,
    tolerant_log_evidence,
)
from service.digits.goodness import chi_square
from service.digits.laws import leading_law

LAW = leading_law(1)
P = [Fraction(1, 2), Fraction(1, 3), Fraction(1, 6)]
SHARES = [float(p) for p in P]
KAPPAS = (20, 200, 2000)


def _urn(counts: tuple[int, ...]) -> Fraction:
    """E as the product of one-step predictions of Polya's urn, averaged over kappa."""
    total = Fraction(0)
    for kappa in KAPPAS:
        e, seen, n = Fraction(1), [0] * len(counts), 0
        for k, count in enumerate(counts):
            for _ in range(count):
                e *= (kappa * P[k] + seen[k]) / (kappa + n) / P[k]
                seen[k] += 1
                n += 1
        total += e
    return total / len(KAPPAS)


def _outcomes(n: int) -> Iterator[tuple[int, ...]]:
    return (c for c in product(range(n + 1), repeat=3) if sum(c) == n)


def _chance(counts: tuple[int, ...], p: list[Fraction]) -> Fraction:
    ways = Fraction(factorial(sum(counts)), prod(factorial(c) for c in counts))
    return ways * prod((q**c for q, c in zip(p, counts, strict=True)), start=Fraction(1))


@pytest.mark.parametrize("n", [0, 1, 2, 7, 12])
def test_against_rational_arithmetic(n: int) -> None:
    outcomes = list(_outcomes(n))
    got = np.exp(log_evidence(outcomes, SHARES, KAPPAS))
    np.testing.assert_allclose(got, [float(_urn(c)) for c in outcomes], rtol=1e-11)


@pytest.mark.parametrize("n", [1, 5, 10])
def test_its_expectation_under_the_reference_is_one(n: int) -> None:
    outcomes = list(_outcomes(n))
    chances = [_chance(c, P) for c in outcomes]
    assert sum(c * _urn(o) for c, o in zip(chances, outcomes, strict=True)) == 1
    e = np.exp(log_evidence(outcomes, SHARES, KAPPAS))
    assert float((np.array(chances, dtype=float) * e).sum()) == pytest.approx(1, rel=1e-12)


def test_a_thousand_million_amounts_against_mpmath() -> None:
    counts = np.random.default_rng(40).multinomial(10**9, LAW)
    with mpmath.workdps(50):
        parts = []
        for kappa in KAPPAS:
            log_e = mpmath.loggamma(kappa) - mpmath.loggamma(kappa + 10**9)
            for c, p in zip(counts.tolist(), LAW.tolist(), strict=True):
                alpha = kappa * mpmath.mpf(p)
                log_e += mpmath.loggamma(alpha + c) - mpmath.loggamma(alpha) - c * mpmath.log(p)
            parts.append(mpmath.exp(log_e))
        exact = float(mpmath.log(mpmath.fsum(parts) / 3))
    assert float(log_evidence(counts, LAW, KAPPAS)) == pytest.approx(exact, abs=1e-4)


def test_looks_at_every_row_cry_wolf_in_at_most_one_in_twenty() -> None:
    """600 seeded honest streams, 500 rows, a look at each; 4 standard errors are 0.036."""
    rng = np.random.default_rng(41)
    hits = np.eye(9)[rng.choice(9, (600, 500), p=LAW / LAW.sum())]
    counts = hits.cumsum(axis=1)
    running = np.maximum.accumulate(log_evidence(counts, LAW, CONCENTRATIONS["lead_digit"]), axis=1)
    assert (p_value(running[:, -1]) <= 0.05).mean() <= 0.05 + 0.036
    # The same looks by chi-square, to show that the check can fail.
    assert (chi_square(counts[:, 100:], LAW).p_value <= 0.05).any(axis=1).mean() > 0.2


def test_it_grows_on_invented_digits() -> None:
    counts = np.random.default_rng(42).multinomial(3000, 0.7 * LAW + 0.3 / 9, 200)
    log_e = log_evidence(counts, LAW, CONCENTRATIONS["lead_digit"])
    assert np.median(p_value(log_e)) < 1e-6


def test_impossible_cells() -> None:
    p = [0.5, 0.5, 0.0]
    missed = float(log_evidence([6, 4, 0], p, KAPPAS))
    assert missed == pytest.approx(float(log_evidence([6, 4], [0.5, 0.5], KAPPAS)), rel=1e-12)
    hit = log_evidence([6, 4, 1], p, KAPPAS)
    assert float(hit) == np.inf
    assert float(p_value(hit)) == 0
    assert np.isfinite(e_value(hit))


def test_values_for_people() -> None:
    np.testing.assert_allclose(p_value([-3.0, 0.0, np.log(20)]), [1, 1, 0.05])
    np.testing.assert_allclose(e_value([0.0, np.log(20)]), [1, 20])
    assert np.isfinite(e_value(1e6))
    assert log_evidence(np.zeros((2, 9)), LAW, KAPPAS).tolist() == [0, 0]


def test_shapes_and_own_references() -> None:
    rng = np.random.default_rng(43)
    p = rng.dirichlet(np.full(9, 5.0), (4, 5))
    counts = rng.multinomial(100, p)
    together = log_evidence(counts, p, KAPPAS)
    assert together.shape == (4, 5)
    alone = log_evidence(counts[1, 2], p[1, 2], KAPPAS)
    assert float(together[1, 2]) == pytest.approx(float(alone), rel=1e-12)


def test_tolerant_evidence_between_its_extremes() -> None:
    """No tolerance is the plain e-value; bounds of 1 leave the counts' own shares as the null."""
    counts = np.random.default_rng(44).multinomial(200, LAW, 50)
    plain = log_evidence(counts, LAW, KAPPAS)
    np.testing.assert_allclose(
        tolerant_log_evidence(counts, LAW, LAW, KAPPAS), plain, rtol=1e-9, atol=1e-9
    )
    shares = counts / 200
    own = (counts * np.log(np.where(counts > 0, shares, 1) / LAW)).sum(axis=1)
    np.testing.assert_allclose(
        tolerant_log_evidence(counts, LAW, np.ones(9), KAPPAS), plain - own, atol=1e-9
    )
    ten = tolerant_log_evidence(counts, LAW, 1.1 * LAW, KAPPAS)
    assert np.all((plain - own - 1e-9 <= ten) & (ten <= plain + 1e-9))


@pytest.mark.parametrize("tolerance", [0.05, 0.3, 1.0])
def test_the_null_is_maximised_over_a_grid(tolerance: float) -> None:
    bounds = np.array(SHARES) * (1 + tolerance)
    steps = np.arange(1, 600) / 600
    first, second = np.meshgrid(steps, steps, indexing="ij")
    grid = np.stack([first, second, 1 - first - second], axis=-1).reshape(-1, 3)
    grid = grid[(grid > 1e-9).all(axis=1) & (grid <= bounds + 1e-12).all(axis=1)]
    for counts in _outcomes(8):
        best = (np.array(counts) * np.log(grid)).sum(axis=1).max()
        at_p = (np.array(counts) * np.log(SHARES)).sum()
        gained = float(
            log_evidence(counts, SHARES, KAPPAS)
            - tolerant_log_evidence(counts, SHARES, bounds, KAPPAS)
        )
        assert best - at_p <= gained + 1e-9
        assert gained <= best - at_p + 0.08


def test_tolerant_expectation_is_at_most_one_throughout_the_null() -> None:
    outcomes = list(_outcomes(10))
    bounds = np.array(SHARES) * 1.2
    e = np.exp(tolerant_log_evidence(outcomes, SHARES, bounds, KAPPAS))
    for true in ([3, 2, 1], [18, 12, 0], [16, 8, 6], [4, 4, 2]):
        p = [Fraction(t, sum(true)) for t in true]
        assert all(float(q) <= b + 1e-9 for q, b in zip(p, bounds, strict=True))
        chances = np.array([_chance(o, p) for o in outcomes], dtype=float)
        assert float((chances * e).sum()) <= 1 + 1e-12


def test_bad_arguments_are_named() -> None:
    with pytest.raises(ValueError, match="counts must be whole numbers"):
        log_evidence([1, -1], [0.5, 0.5], KAPPAS)
    with pytest.raises(ValueError, match="p must be shares"):
        log_evidence([1, 1], [0.5, 0.6], KAPPAS)
    for bad in ([], [0.0], [-1.0], [np.inf], [np.nan]):
        with pytest.raises(ValueError, match="concentrations must be one or more"):
            log_evidence([1, 1], [0.5, 0.5], bad)
    for bounds in ([0.5, 0.4], [1.0], [np.nan, 1.0], 1.0):
        with pytest.raises(ValueError, match="bounds must have a value for each cell"):
            tolerant_log_evidence([1, 1], [0.5, 0.5], bounds, KAPPAS)
