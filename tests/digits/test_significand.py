"""Digits of integers, checked against the only authority there is: their decimal strings."""

from __future__ import annotations

import mpmath
import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from service.digits.significand import MAX_AMOUNT, circle, decade, leading, trailing

near_powers = st.builds(
    lambda k, step: min(max(10**k + step, 1), MAX_AMOUNT),
    st.integers(0, 15),
    st.integers(-3, 3),
)
amounts = st.one_of(st.integers(1, MAX_AMOUNT), st.integers(1, 10**5), near_powers)

EDGES = np.array(
    sorted(
        {
            10**k * m + step
            for k in range(16)
            for m in range(1, 10)
            for step in (-1, 0, 1)
            if 1 <= 10**k * m + step <= MAX_AMOUNT
        }
    ),
    dtype=np.int64,
)


@given(st.lists(amounts, min_size=1, max_size=50), st.integers(1, 15))
def test_digits_are_those_of_the_decimal_string(values: list[int], digits: int) -> None:
    array = np.array(values, dtype=np.int64)
    texts = [str(v) for v in values]
    assert decade(array).tolist() == [len(t) - 1 for t in texts]
    assert leading(array, digits).tolist() == [
        int(t[:digits]) if len(t) >= digits else -1 for t in texts
    ]
    assert trailing(array, digits).tolist() == [int(t[-digits:]) for t in texts]


def test_every_change_of_first_digit_up_to_the_largest_amount() -> None:
    texts = [str(v) for v in EDGES.tolist()]
    assert decade(EDGES).tolist() == [len(t) - 1 for t in texts]
    assert leading(EDGES, 1).tolist() == [int(t[0]) for t in texts]
    assert leading(EDGES, 2).tolist() == [int(t[:2]) if len(t) > 1 else -1 for t in texts]


def test_every_small_amount() -> None:
    array = np.arange(1, 20_001)
    assert leading(array, 1).tolist() == [int(str(v)[0]) for v in range(1, 20_001)]
    assert trailing(array, 2).tolist() == [v % 100 for v in range(1, 20_001)]


def test_log10_then_floor_would_be_wrong_here() -> None:
    """Why the decade is found by comparison: the check above can tell the two apart."""
    largest = np.array([MAX_AMOUNT - 1, MAX_AMOUNT])
    assert decade(largest).tolist() == [14, 15]
    beyond = np.array([10**17 - 1])
    assert int(np.floor(np.log10(beyond))[0]) == 17
    assert decade(beyond).tolist() == [16]


def test_circle_near_powers_of_ten_against_mpmath() -> None:
    got = circle(EDGES)
    with mpmath.workdps(40):
        exact = [mpmath.log10(v) - (len(str(v)) - 1) for v in EDGES.tolist()]
        errors = [abs(mpmath.mpf(float(g)) - e) for g, e in zip(got, exact, strict=True)]
    assert max(errors) < 4e-16
    assert np.all((got >= 0) & (got < 1))
    assert np.all(circle(10 ** np.arange(16)) == 0)
    # On the circle and by division the first digit is the same, also one unit below a power.
    assert np.all(circle(10 ** np.arange(1, 16) - 1) > 0.95)


def test_zero_has_no_leading_digit() -> None:
    assert decade(np.array([0])).tolist() == [-1]
    assert leading(np.array([0, 7]), 1).tolist() == [-1, 7]


def test_shapes_are_kept() -> None:
    square = np.array([[12, 345], [6, 7890]])
    assert leading(square, 1).tolist() == [[1, 3], [6, 7]]
    assert decade(np.array([], dtype=np.int64)).shape == (0,)
