"""Benford's own twenty tables through every measure, each against another program or plain loops.

F. Benford (1938), *The law of anomalous numbers*, Proc. Am. Phil. Soc. 78, 551-572, Table 1: shares
of the first digits 1-9 in percent, and the number of observations. **From memory.** The memory
is checked by what the paper says besides: each row sums to 100, the title counts 20 229
observations, and the averages of its last line are those of the rows. Shares are rounded to a
tenth of a percent, so counts are rebuilt from them and may be off by a few; what is compared
below is computed from the rebuilt counts on both sides.
"""

from __future__ import annotations

from fractions import Fraction

import mpmath
import numpy as np
import pytest
from scipy import stats
from statsmodels.stats.gof import powerdiscrepancy
from statsmodels.stats.multitest import multipletests
from statsmodels.stats.proportion import proportion_confint, proportions_ztest

from service.digits.evidence import CONCENTRATIONS, log_evidence, p_value, tolerant_log_evidence
from service.digits.goodness import chi_square, g, kuiper, largest_z, watson_u2, z_scores
from service.digits.intervals import always_valid, clopper_pearson
from service.digits.laws import leading_law
from service.digits.measures import band, mad, mad_expected, misfit, score
from service.digits.significand import IntArray

LAW = leading_law(1)
KAPPAS = CONCENTRATIONS["lead_digit"]

TABLE = {
    "A rivers, area": (31.0, 16.4, 10.7, 11.3, 7.2, 8.6, 5.5, 4.2, 5.1, 335),
    "B population": (33.9, 20.4, 14.2, 8.1, 7.2, 6.2, 4.1, 3.7, 2.2, 3259),
    "C constants": (41.3, 14.4, 4.8, 8.6, 10.6, 5.8, 1.0, 2.9, 10.6, 104),
    "D newspapers": (30.0, 18.0, 12.0, 10.0, 8.0, 6.0, 6.0, 5.0, 5.0, 100),
    "E specific heat": (24.0, 18.4, 16.2, 14.6, 10.6, 4.1, 3.2, 4.8, 4.1, 1389),
    "F pressure": (29.6, 18.3, 12.8, 9.8, 8.3, 6.4, 5.7, 4.4, 4.7, 703),
    "G horse-power lost": (30.0, 18.4, 11.9, 10.8, 8.1, 7.0, 5.1, 5.1, 3.6, 690),
    "H molecular weight": (26.7, 25.2, 15.4, 10.8, 6.7, 5.1, 4.1, 2.8, 3.2, 1800),
    "I drainage": (27.1, 23.9, 13.8, 12.6, 8.2, 5.0, 5.0, 2.5, 1.9, 159),
    "J atomic weight": (47.2, 18.7, 5.5, 4.4, 6.6, 4.4, 3.3, 4.4, 5.5, 91),
    "K 1/n, root n": (25.7, 20.3, 9.7, 6.8, 6.6, 6.8, 7.2, 8.0, 8.9, 5000),
    "L design": (26.8, 14.8, 14.3, 7.5, 8.3, 8.4, 7.0, 7.3, 5.6, 560),
    "M digest": (33.4, 18.5, 12.4, 7.5, 7.1, 6.5, 5.5, 4.9, 4.2, 308),
    "N cost data": (32.4, 18.8, 10.1, 10.1, 9.8, 5.5, 4.7, 5.5, 3.1, 741),
    "O X-ray volts": (27.9, 17.5, 14.4, 9.0, 8.1, 7.4, 5.1, 5.8, 4.8, 707),
    "P American league": (32.7, 17.6, 12.6, 9.8, 7.4, 6.4, 4.9, 5.6, 3.0, 1458),
    "Q black body": (31.0, 17.3, 14.1, 8.7, 6.6, 7.0, 5.2, 4.7, 5.4, 1165),
    "R addresses": (28.9, 19.2, 12.6, 8.8, 8.5, 6.4, 5.6, 5.0, 5.0, 342),
    "S powers, factorials": (25.3, 16.0, 12.0, 10.0, 8.5, 8.8, 6.8, 7.1, 5.5, 900),
    "T death rate": (27.0, 18.6, 15.7, 9.4, 6.7, 6.5, 7.2, 4.8, 4.1, 418),
}
# The paper's last line, from memory too.
AVERAGE = (30.6, 18.5, 12.4, 9.4, 8.0, 6.4, 5.1, 4.9, 4.7)


def _counts(row: tuple[float, ...]) -> IntArray:
    """Rebuild counts from rounded shares: the largest remainders take what is left over."""
    n = int(row[9])
    exact = np.array(row[:9]) * n / 100
    counts = np.floor(exact).astype(np.int64)
    counts[np.argsort(counts - exact, kind="stable")[: n - counts.sum()]] += 1
    return counts


COUNTS = np.array([_counts(row) for row in TABLE.values()])


def test_the_memory_is_what_the_paper_says_of_itself() -> None:
    shares = np.array([row[:9] for row in TABLE.values()])
    np.testing.assert_allclose(shares.sum(axis=1), 100, atol=1e-9)
    assert sum(int(row[9]) for row in TABLE.values()) == 20_229
    # In the third and ninth column the paper's average is a tenth from that of its rows.
    np.testing.assert_allclose(shares.mean(axis=0), AVERAGE, atol=0.145)
    assert round(float(np.mean([row[9] for row in TABLE.values()]))) == 1011
    np.testing.assert_allclose(100 * COUNTS / COUNTS.sum(axis=1, keepdims=True), shares, atol=1.0)


def test_his_averages_are_the_law() -> None:
    """What made the paper: on average his tables are within 1 % of the law in every digit."""
    assert np.abs(np.array(AVERAGE) - 100 * LAW).max() < 1
    assert np.abs(np.array(AVERAGE) - 100 * LAW).mean() < 0.4


def test_chi_square_and_g_against_two_programs() -> None:
    x2, lr = chi_square(COUNTS, LAW), g(COUNTS, LAW)
    for i, counts in enumerate(COUNTS):
        expected = LAW / LAW.sum() * counts.sum()
        assert (x2.statistic[i], x2.p_value[i]) == pytest.approx(
            tuple(stats.chisquare(counts, expected)), rel=1e-9
        )
        other = powerdiscrepancy(counts, expected, lambd="loglikeratio", ddof=0)
        assert (lr.statistic[i], lr.p_value[i]) == pytest.approx(tuple(other), rel=1e-9)


def test_largest_z_against_statsmodels() -> None:
    """Its z without the continuity correction, and its Holm adjustment."""
    got = largest_z(COUNTS, LAW)
    z = z_scores(COUNTS, LAW)
    for i, counts in enumerate(COUNTS):
        n = int(counts.sum())
        for k, c in enumerate(counts.tolist()):
            plain = proportions_ztest(c, n, LAW[k], prop_var=LAW[k])[0]
            half = 0.5 / np.sqrt(n * LAW[k] * (1 - LAW[k]))
            corrected = np.sign(plain) * max(abs(plain) - half, 0)
            assert float(z[i, k]) == pytest.approx(corrected, rel=1e-9, abs=1e-12)
        adjusted = multipletests(2 * stats.norm.sf(np.abs(z[i])), method="holm")[1]
        assert float(got.p_value[i]) == pytest.approx(adjusted[got.cell[i]], rel=1e-9)
        assert abs(float(got.z[i])) == np.abs(z[i]).max()


def test_kuiper_and_watson_against_plain_loops() -> None:
    for i, counts in enumerate(COUNTS.tolist()):
        n = sum(counts)
        gaps, above = [], Fraction(0)
        for c, p in zip(counts, LAW.tolist(), strict=True):
            above += Fraction(c, n) - Fraction(p)
            gaps.append(above)
        v = float(max(gaps) - min(gaps)) * (n**0.5 + 0.155 + 0.24 / n**0.5)
        centre = sum(Fraction(p) * gap for p, gap in zip(LAW.tolist(), gaps, strict=True))
        u2 = n * sum(
            Fraction(p) * (gap - centre) ** 2 for p, gap in zip(LAW.tolist(), gaps, strict=True)
        )
        assert float(kuiper(COUNTS[i], LAW)) == pytest.approx(v, rel=1e-9)
        assert float(watson_u2(COUNTS[i], LAW)) == pytest.approx(float(u2), rel=1e-9)


def test_mad_misfit_and_score_by_plain_loops() -> None:
    for i, counts in enumerate(COUNTS.tolist()):
        n = sum(counts)
        deviation = sum(abs(c / n - p) for c, p in zip(counts, LAW.tolist(), strict=True)) / 9
        noise = sum((2 * p * (1 - p) / np.pi / n) ** 0.5 for p in LAW.tolist()) / 9
        excess = max(deviation**2 - noise**2, 0) ** 0.5
        assert float(mad(COUNTS[i], LAW)) == pytest.approx(deviation, rel=1e-12)
        assert float(misfit(COUNTS[i], LAW).value) == pytest.approx(4.5 * excess, rel=1e-9)
        assert float(score(COUNTS[i], LAW).value) == pytest.approx(
            100 * max(0, 1 - excess / 0.03), rel=1e-9
        )
        exact = np.mean([stats.binom(n, p).expect(lambda k, n=n, p=p: abs(k / n - p)) for p in LAW])
        assert float(mad_expected(n, LAW)) == pytest.approx(exact, rel=1e-6)


def test_intervals_against_statsmodels_and_within_the_always_valid_ones() -> None:
    once = clopper_pearson(COUNTS, COUNTS.sum(axis=1, keepdims=True), 0.05 / 9)
    valid = always_valid(COUNTS)
    for i, counts in enumerate(COUNTS):
        low, high = proportion_confint(counts, counts.sum(), alpha=0.05 / 9, method="beta")
        np.testing.assert_allclose(once.low[i], low, rtol=1e-9)
        np.testing.assert_allclose(once.high[i], high, rtol=1e-9)
    assert np.all(valid.low < once.low)
    assert np.all(once.high < valid.high)


def test_evidence_against_mpmath() -> None:
    for counts in COUNTS.tolist():
        n = sum(counts)
        with mpmath.workdps(40):
            parts = []
            for kappa in KAPPAS:
                e = mpmath.gamma(kappa) / mpmath.gamma(kappa + n)
                for c, p in zip(counts, LAW.tolist(), strict=True):
                    e *= mpmath.rf(kappa * mpmath.mpf(p), c) / mpmath.mpf(p) ** c
                parts.append(e)
            exact = float(mpmath.log(mpmath.fsum(parts) / len(parts)))
        assert float(log_evidence(counts, LAW, KAPPAS)) == pytest.approx(exact, abs=1e-8)


def test_what_the_measures_say_of_his_tables() -> None:
    """Some of his tables follow the law; his largest, of 1/n and roots, surely does not.

    That the fit of the whole is worse than it looks is long known (Diaconis & Freedman 1979, *J.
    Am. Statist. Ass.* 74, 359-364, from memory).
    """
    names = list(TABLE)
    log_e = log_evidence(COUNTS, LAW, KAPPAS)
    refuted = {names[i] for i in np.flatnonzero(p_value(log_e) < 0.001)}
    assert {"B population", "E specific heat", "H molecular weight", "K 1/n, root n"} <= refuted
    fitting = {"D newspapers", "F pressure", "G horse-power lost", "R addresses", "O X-ray volts"}
    assert not fitting & refuted
    assert all(float(chi_square(_counts(TABLE[name]), LAW).p_value) > 0.5 for name in fitting)
    for i, name in enumerate(names):
        if name in refuted:
            assert float(chi_square(COUNTS[i], LAW).p_value) < 1e-4
    # A tolerance of a tenth excuses some of it, never adds to it.
    tolerant = tolerant_log_evidence(COUNTS, LAW, 1.1 * LAW, KAPPAS)
    assert np.all(tolerant <= log_e + 1e-9)
    # Only the table of 5000 is large enough for a band; no score of a fitting table is poor.
    bands = dict(zip(names, band("lead_digit", COUNTS, LAW).tolist(), strict=True))
    assert {name for name, found in bands.items() if found} == {"K 1/n, root n"}
    assert bands["K 1/n, root n"] == "off"
    assert all(float(score(_counts(TABLE[name]), LAW).high) == 100 for name in fitting)
