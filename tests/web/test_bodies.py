"""JSON bodies: what is refused, and where the fault is said to be."""

from __future__ import annotations

import pytest

from tests.web.described import DescribedClient


def _sent(client: DescribedClient, body: bytes) -> tuple[int, str]:
    answer = client.post("/v1/checks", data=body, content_type="application/json")
    return answer.status_code, answer.get_data(as_text=True)


@pytest.mark.parametrize(
    ("body", "place"),
    [
        (b"", "line 1, column 1"),
        (b'{"amounts": [1,\n 2,,]}', "line 2, column 4"),
        (b'{"amounts": [NaN]}', "line 1, column 14"),
        (b'{"amounts":\n[-Infinity]}', "line 2, column 2"),
        (b'{"amounts": ["\xc3\xa4\xff"]}', "line 1, column 16"),
        (b'{"amounts": ' + b"[" * 50_000, "line 1, column"),
        (b'{"amounts": [1]} x', "line 1, column 18"),
    ],
)
def test_what_is_not_json_is_400_with_its_place(
    client: DescribedClient, body: bytes, place: str
) -> None:
    status, text = _sent(client, body)
    assert status == 400
    assert place in text


def test_half_a_surrogate_pair_is_400(client: DescribedClient) -> None:
    status, _ = _sent(client, b'{"\\ud83d": 1}')
    assert status == 400


def test_a_name_given_twice_is_refused_with_its_pointer(client: DescribedClient) -> None:
    status, text = _sent(client, b'{"amounts": [1], "amounts": [2]}')
    assert status == 422
    assert '"/amounts"' in text


@pytest.mark.parametrize("body", [b"[]", b"null", b"3", b'"x"'])
def test_another_value_than_an_object_is_refused(client: DescribedClient, body: bytes) -> None:
    status, text = _sent(client, body)
    assert status == 422
    assert '"pointer":""' in text


def test_a_number_of_a_thousand_digits_is_refused_as_too_large(client: DescribedClient) -> None:
    status, text = _sent(client, b'{"amounts": [' + b"9" * 10_000 + b"]}")
    assert status == 422
    assert "10^15" in text
