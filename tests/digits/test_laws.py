"""Reference laws against arbitrary precision and the published percentages."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest

from service.digits.laws import law_cells, leading_law, position_law
from service.digits.views import WATCHED

# Newcomb (1881) and Benford (1938), rounded to a tenth of a percent; from memory.
FIRST_DIGIT = [30.1, 17.6, 12.5, 9.7, 7.9, 6.7, 5.8, 5.1, 4.6]
SECOND_DIGIT = [12.0, 11.4, 10.9, 10.4, 10.0, 9.7, 9.3, 9.0, 8.8, 8.5]


def test_published_percentages() -> None:
    assert np.round(100 * position_law(1), 1).tolist() == FIRST_DIGIT
    assert np.round(100 * position_law(2), 1).tolist() == SECOND_DIGIT


@pytest.mark.parametrize("digits", [1, 2, 3])
def test_leading_law_against_mpmath(digits: int) -> None:
    first = 10 ** (digits - 1)
    with mpmath.workdps(40):
        exact = [float(mpmath.log10(1 + mpmath.mpf(1) / d)) for d in range(first, 10 * first)]
    np.testing.assert_allclose(leading_law(digits), exact, rtol=1e-15)


@pytest.mark.parametrize("position", [2, 3, 4])
def test_position_law_against_mpmath(position: int) -> None:
    with mpmath.workdps(40):
        exact = [
            float(
                mpmath.fsum(
                    mpmath.log10(1 + mpmath.mpf(1) / (10 * j + d))
                    for j in range(10 ** (position - 2), 10 ** (position - 1))
                )
            )
            for d in range(10)
        ]
    np.testing.assert_allclose(position_law(position), exact, rtol=1e-13)


def test_laws_agree_with_each_other() -> None:
    pairs = leading_law(2).reshape(9, 10)
    np.testing.assert_allclose(pairs.sum(axis=1), leading_law(1), rtol=1e-14)
    np.testing.assert_allclose(pairs.sum(axis=0), position_law(2), rtol=1e-14)
    for cells in WATCHED.values():
        assert law_cells()[cells].sum() == pytest.approx(1, abs=1e-14)
    assert np.all(law_cells()[WATCHED["tail_pair"]] == 0.01)


@pytest.mark.parametrize("value", [0, 7])
def test_bad_arguments_are_named(value: int) -> None:
    with pytest.raises(ValueError, match="digits must be 1 to 6"):
        leading_law(value)
    with pytest.raises(ValueError, match="position must be 1 to 6"):
        position_law(value)
