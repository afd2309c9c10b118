"""POST /v1/checks: every measure of a handful of amounts."""

from __future__ import annotations

from collections import Counter

import numpy as np
import pytest
from scipy import stats

from tests.web.described import DescribedClient


def _powers_of_two(count: int) -> list[int]:
    return [2**i for i in range(count) if 2**i <= 10**15]


def _spread_evenly(n: int) -> list[int]:
    # Equidistant on the circle: the law holds but for rounding.
    return [int(10 ** (3 + 4 * (i + 0.5) / n)) for i in range(n)]


def test_amounts_in_minor_units_and_decimal_strings_are_the_same(client: DescribedClient) -> None:
    whole = client.post("/v1/checks", json={"amounts": [1999, 50, 100_000, 0], "currency": "EUR"})
    text = client.post("/v1/checks", json={"amounts": ["19.99", "0.5", "1000", "0.00"]})
    assert whole.status_code == 200
    assert whole.get_json() == text.get_json()
    assert (whole.get_json()["count"], whole.get_json()["zero"]) == (3, 1)


def test_the_currency_decides_the_decimals(client: DescribedClient) -> None:
    yen = client.post("/v1/checks", json={"amounts": ["1999"], "currency": "JPY"})
    assert yen.status_code == 200
    assert yen.get_json()["views"]["tail_pair"]["largest_z"]["cell"] == "99"
    assert (
        client.post("/v1/checks", json={"amounts": ["19.99"], "currency": "JPY"}).status_code == 422
    )
    dinar = client.post("/v1/checks", json={"amounts": ["1.999"], "currency": "KWD"})
    assert dinar.status_code == 200


def test_amounts_that_follow_the_law_score_full_marks(client: DescribedClient) -> None:
    found = client.post("/v1/checks", json={"amounts": _spread_evenly(4000)}).get_json()
    assert found["score"] == 100
    assert found["score_low"] > 50
    for view in ("lead_digit", "second_digit", "lead_pair"):
        assert found["views"][view]["misfit"] == 0
        assert found["views"][view]["chi_square"]["p_value"] > 0.99
    assert found["views"]["lead_digit"]["band"]["name"] == "close"


def test_invented_amounts_are_told_from_the_law(client: DescribedClient) -> None:
    random = np.random.default_rng(7)
    amounts = random.integers(1000, 10_000, 2000).tolist()
    found = client.post("/v1/checks", json={"amounts": amounts}).get_json()
    assert found["score"] < 20
    lead = found["views"]["lead_digit"]
    # Uniform digits are 0.2688 from the law in total variation: sum of max(0, 1/9 - p_d).
    law = np.log10(1 + 1 / np.arange(1, 10))
    distance = np.maximum(0, 1 / 9 - law).sum()
    assert lead["misfit_low"] < distance < lead["misfit_high"]
    assert lead["e_value"] > 1e6
    assert found["views"]["tail_pair"]["e_value"] < 1


def test_chi_square_agrees_with_scipy(client: DescribedClient) -> None:
    amounts = _powers_of_two(50)
    counts = Counter(str(a)[0] for a in amounts)
    observed = [counts[str(d)] for d in range(1, 10)]
    expected = np.log10(1 + 1 / np.arange(1, 10)) * len(amounts)
    chi_square = stats.chisquare(observed, expected)
    found = client.post("/v1/checks", json={"amounts": amounts}).get_json()
    lead = found["views"]["lead_digit"]
    assert lead["count"] == len(amounts) == 50
    assert lead["chi_square"]["statistic"] == pytest.approx(chi_square.statistic)
    assert lead["chi_square"]["p_value"] == pytest.approx(chi_square.pvalue)
    assert lead["mad"] == pytest.approx(np.abs(np.array(observed) - expected).mean() / 50)


def test_few_amounts_get_no_score(client: DescribedClient) -> None:
    assert client.post("/v1/checks", json={"amounts": [5] * 199}).get_json()["score"] is None
    assert client.post("/v1/checks", json={"amounts": [5] * 200}).get_json()["score"] == 0


def test_zeros_alone_have_no_digits(client: DescribedClient) -> None:
    found = client.post("/v1/checks", json={"amounts": [0, "0.00"]}).get_json()
    assert (found["count"], found["zero"]) == (0, 2)
    assert found["views"]["lead_digit"]["misfit"] is None
    assert found["circle"]["spread"] is None


@pytest.mark.parametrize(
    ("amount", "expected"),
    [
        (19.99, "Expected an integer"),
        (True, "Expected an integer"),
        (None, "Expected an integer"),
        ([], "Expected an integer"),
        (-1, "0 to 10^15"),
        (10**15 + 1, "0 to 10^15"),
        ("-1.00", "0 to 10^15"),
        ("19.999", "got 3"),
        ("1e3", "decimal string"),
        (" 1", "decimal string"),
        ("", "decimal string"),
    ],
)
def test_what_is_no_amount_is_named(client: DescribedClient, amount: object, expected: str) -> None:
    answer = client.post("/v1/checks", json={"amounts": [1, amount, "2"]})
    assert answer.status_code == 422
    (error,) = answer.get_json(force=True)["errors"]
    assert error["pointer"] == "/amounts/1"
    assert expected in error["detail"]


@pytest.mark.parametrize(
    ("body", "pointer"),
    [
        ({}, "/amounts"),
        ({"amounts": []}, "/amounts"),
        ({"amounts": "12"}, "/amounts"),
        ({"amounts": None}, "/amounts"),
        ({"amounts": [1], "currency": "XAU"}, "/currency"),
        ({"amounts": [1], "currency": "eur"}, "/currency"),
        ({"amounts": [1], "currency": "EUR\n"}, "/currency"),
        ({"amounts": [1], "currency": "QQQ"}, "/currency"),
        ({"amounts": [1], "colour": "red"}, "/colour"),
    ],
)
def test_other_faults_are_pointed_at(
    client: DescribedClient, body: dict[str, object], pointer: str
) -> None:
    answer = client.post("/v1/checks", json=body)
    assert answer.status_code == 422
    assert [e["pointer"] for e in answer.get_json(force=True)["errors"]] == [pointer]


def test_at_most_a_hundred_thousand_amounts(app: object, client: DescribedClient) -> None:
    client.application.config["MAX_CONTENT_LENGTH"] = 10**6
    most = b'{"amounts":[' + b"1," * 99_999 + b"1]}"
    one_more = b'{"amounts":[' + b"1," * 100_000 + b"1]}"
    answer = client.post("/v1/checks", data=most, content_type="application/json")
    assert answer.get_json()["count"] == 100_000
    answer = client.post("/v1/checks", data=one_more, content_type="application/json")
    assert answer.status_code == 422
