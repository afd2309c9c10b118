from __future__ import annotations

from decimal import Decimal

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.batches.currencies import EXPONENTS, exponent, minor_units, minor_units_column


@pytest.mark.parametrize(
    ("code", "decimals"),
    # ISO 4217 list one, as published by SIX; these from memory.
    [("EUR", 2), ("USD", 2), ("JPY", 0), ("KWD", 3), ("BHD", 3), ("CLF", 4), ("ISK", 0)],
)
def test_exponents(code, decimals):
    assert exponent(code) == decimals


@pytest.mark.parametrize("code", ["XAU", "XXX", "XTS", "XDR"])
def test_currency_without_minor_unit_is_refused_by_name(code):
    with pytest.raises(ValueError, match=f"minor unit; {code} has none"):
        exponent(code)


@pytest.mark.parametrize("code", ["", "eur", "EURO", "ZZZ", "DEM", "€"])
def test_unknown_currency_is_refused(code):
    with pytest.raises(ValueError, match="this is none"):
        exponent(code)


@pytest.mark.parametrize(
    ("text", "decimals", "minor"),
    [
        ("19.99", 2, 1999),
        ("19.9", 2, 1990),
        ("19", 2, 1900),
        ("-5.00", 2, -500),
        ("0.05", 2, 5),
        ("-0.00", 2, 0),
        ("0", 0, 0),
        ("1999", 0, 1999),
        ("1.2345", 4, 12345),
        ("10000000000000.00", 2, 10**15),
        ("1000000000000000", 0, 10**15),
        ("100000000000.0000", 4, 10**15),
        ("-100000000000.0000", 4, -(10**15)),
    ],
)
def test_decimal_amounts_are_exact(text, decimals, minor):
    assert minor_units(text, decimals) == minor
    values, ok = minor_units_column([text], decimals)
    assert ok.tolist() == [True]
    assert values.tolist() == [minor]


NO_AMOUNTS = [
    "", "-", ".", "-.", ".5", "5.", "-.5", "+5", "1e3", "1E3", " 5", "5 ", "1,000", "1.2.3", "--5",
    "5-", "1-2", "007", "00.5", "-01", "NaN", "Infinity", "0x10", "1_000", "５", "5\n", "5\x00",
    "\x00", "1.-5", "9" * 5000, "10000000000000.01", "99999999999999999", "-10000000000000.01",
]  # fmt: skip


@pytest.mark.parametrize("text", NO_AMOUNTS)
def test_other_texts_are_no_amounts(text):
    with pytest.raises(ValueError, match="Expected"):
        minor_units(text, 2)
    assert minor_units_column([text], 2)[1].tolist() == [False]


def test_too_many_decimals_name_how_many_there_may_be():
    for text in ("19.999", "19.990"):
        with pytest.raises(ValueError, match="at most 2 decimals"):
            minor_units(text, 2)
    with pytest.raises(ValueError, match="at most 0 decimals"):
        minor_units("100.0", 0)


texts = st.one_of(
    st.text("0123456789.-", max_size=20),
    st.decimals(-(10**13), 10**13, places=2).map(str),
    st.integers(-(10**16), 10**16).map(str),
    st.sampled_from(NO_AMOUNTS),
)


@given(st.lists(st.tuples(texts, st.integers(0, 4)), max_size=20))
def test_column_agrees_with_one_by_one(rows):
    values, ok = minor_units_column(
        [text for text, _ in rows], np.array([d for _, d in rows], dtype=np.int64)
    )
    if not all(text.isascii() for text, _ in rows):
        assert not ok.any()
        return
    for (text, decimals), value, good in zip(rows, values.tolist(), ok.tolist(), strict=True):
        try:
            expected = minor_units(text, decimals)
        except ValueError:
            assert not good
        else:
            assert good
            assert value == expected == Decimal(text).scaleb(decimals)


def test_table_has_the_currencies_of_the_package():
    assert len(EXPONENTS) > 150
    assert all(code.isupper() and len(code) == 3 for code in EXPONENTS)
