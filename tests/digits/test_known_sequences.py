"""Sequences whose digits are known to follow the law, and some that are known not to.

Powers of 2 and 3 and the Fibonacci numbers grow by a factor whose log10 is irrational, so they are
equidistributed on the circle (Weyl 1916) and follow the law exactly in the limit.
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
import pytest

from service.digits.evidence import CONCENTRATIONS, log_evidence, p_value
from service.digits.goodness import chi_square, kuiper, rayleigh
from service.digits.laws import leading_law
from service.digits.measures import band, misfit, score
from service.digits.significand import IntArray, circle, leading

LAW = leading_law(1)


def _fibonacci(n: int) -> list[int]:
    a, b, out = 1, 1, []
    for _ in range(n):
        out.append(a)
        a, b = b, a + b
    return out


def _significands(values: Iterable[int]) -> IntArray:
    """Shorten to 15 digits, which changes no leading digit."""
    return np.array([int(str(v)[:15]) for v in values], dtype=np.int64)


def _tally(amounts: IntArray) -> IntArray:
    return np.bincount(leading(amounts, 1), minlength=10)[1:]


SEQUENCES = {
    "powers_of_2": [2**k for k in range(4000)],
    "powers_of_3": [3**k for k in range(4000)],
    "fibonacci": _fibonacci(4000),
}


@pytest.mark.parametrize("name", list(SEQUENCES))
def test_geometric_growth_follows_the_law(name: str) -> None:
    amounts = _significands(SEQUENCES[name])
    counts = _tally(amounts)
    assert float(score(counts, LAW).value) == 100
    assert float(misfit(counts, LAW).value) == 0
    assert band("lead_digit", counts, LAW)[()] == "close"
    assert float(chi_square(counts, LAW).p_value) > 0.99
    assert float(kuiper(counts, LAW)) < 0.5
    angle = 2 * np.pi * circle(amounts)
    assert float(rayleigh(len(amounts), np.cos(angle).sum(), np.sin(angle).sum()).p_value) > 0.9
    assert float(log_evidence(counts, LAW, CONCENTRATIONS["lead_digit"])) < 0
    pairs = np.bincount(leading(amounts[60:], 2), minlength=100)[10:]
    assert float(chi_square(pairs, leading_law(2)).p_value) > 0.9


@pytest.mark.parametrize(
    "values",
    [[10**k for k in range(2000)], list(range(1, 10_000)), [4900 + k % 100 for k in range(2000)]],
    ids=["powers_of_10", "every_integer", "just_below_50"],
)
def test_others_do_not(values: list[int]) -> None:
    counts = _tally(_significands(values))
    assert float(score(counts, LAW).high) < 50
    log_e = log_evidence(counts, LAW, CONCENTRATIONS["lead_digit"])
    assert float(p_value(log_e)) < 1e-6
