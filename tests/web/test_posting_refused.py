"""Batches that are refused before anything is counted, and the words of it."""

from __future__ import annotations

import gzip
import io
import json
from typing import Any

import pytest
from flask import Flask
from werkzeug.test import EnvironBuilder, run_wsgi_app

from tests.web.described import KEYED, DescribedClient

GOOD = {"merchant": "harbour-books", "amount": 1999, "id": "7c1e-000017"}


def _post(client: DescribedClient, body: Any, query: str = "", **headers: str) -> tuple[int, Any]:
    data = body if isinstance(body, bytes) else json.dumps(body).encode()
    kind = headers.pop("Content_Type", "application/json")
    named = {name.replace("_", "-"): value for name, value in headers.items()}
    answer = client.post(
        f"/v1/batches{query}", data=data, content_type=kind, headers={**KEYED, **named}
    )
    return answer.status_code, answer.get_json(force=True)


def test_a_batch_that_was_applied_in_part_is_503(client: DescribedClient) -> None:
    status, problem = _post(client, {"transactions": [GOOD]})
    assert status == 503
    assert "send the same batch again" in problem["detail"]


@pytest.mark.parametrize("kind", ["text/plain", "application/xml", "", "application/jsonl"])
def test_other_content_types_are_415(client: DescribedClient, kind: str) -> None:
    status, problem = _post(client, {"transactions": [GOOD]}, Content_Type=kind)
    assert status == 415
    assert "application/x-ndjson" in problem["detail"]


def test_other_encodings_are_415(client: DescribedClient) -> None:
    assert _post(client, {"transactions": [GOOD]}, Content_Encoding="br")[0] == 415


@pytest.mark.parametrize("packed", [b"not gzip", gzip.compress(b"{}" * 1000)[:-9]])
def test_broken_gzip_is_400(client: DescribedClient, packed: bytes) -> None:
    assert _post(client, packed, Content_Encoding="gzip")[0] == 400


def test_a_body_that_unpacks_without_bound_is_413(client: DescribedClient) -> None:
    bomb = gzip.compress(b" " * (65 << 20))
    assert len(bomb) < 100_000
    status, problem = _post(client, bomb, Content_Encoding="gzip")
    assert status == 413
    assert str(64 << 20) in problem["detail"].replace(",", "")


def test_a_body_that_is_too_long_is_413_with_the_limit(client: DescribedClient) -> None:
    status, problem = _post(client, b" " * 100_001)
    assert status == 413
    assert "100,000" in problem["detail"]


def _raw(app: Flask, stream: object, **environ: object) -> tuple[str, bytes]:
    """Post NDJSON as a server hands it over: the stream ends where the body does."""
    made = EnvironBuilder(
        "/v1/batches", method="POST", content_type="application/x-ndjson", headers=KEYED
    ).get_environ()
    made.update({"wsgi.input": stream, "wsgi.input_terminated": True, **environ})
    body, status, _ = run_wsgi_app(app, made)
    return status, b"".join(body)


def test_a_body_without_a_length_is_not_cut_at_the_limit(app: Flask) -> None:
    line = json.dumps(GOOD).ljust(99).encode() + b"\n"
    status, text = _raw(app, io.BytesIO(line * 1001), HTTP_TRANSFER_ENCODING="chunked")
    assert status.startswith("413")
    assert b"100,000" in text
    status, _ = _raw(app, io.BytesIO(line * 1000), HTTP_TRANSFER_ENCODING="chunked")
    assert status.startswith("503")  # read, and refused by the absent store


def test_a_body_that_broke_off_at_a_lines_end_is_refused(app: Flask) -> None:
    line = json.dumps(GOOD).encode() + b"\n"
    status, text = _raw(app, io.BytesIO(line * 2), CONTENT_LENGTH=str(3 * len(line)))
    assert status.startswith("400")
    assert b"broke off" in text


@pytest.mark.parametrize(
    ("body", "line", "column"),
    [(b'{"transactions": [', 1, 19), (b'{"transactions":\n [{"merchant": NaN}]}', 2, 16)],
)
def test_unreadable_json_is_400_with_its_place(
    client: DescribedClient, body: bytes, line: int, column: int
) -> None:
    status, problem = _post(client, body)
    assert status == 400
    assert f"line {line}, column {column}" in problem["detail"]


def test_a_line_that_is_not_json_is_400_with_its_place(client: DescribedClient) -> None:
    body = json.dumps(GOOD).encode() + b"\n{]\n"
    status, problem = _post(client, body, Content_Type="application/x-ndjson")
    assert status == 400
    assert "line 2, column 2" in problem["detail"]


def test_invalid_rows_are_422_with_a_pointer_each(client: DescribedClient) -> None:
    rows = [GOOD, {**GOOD, "amount": 19.99}, {**GOOD, "colour": "red"}, {"amount": 1}]
    status, problem = _post(client, {"transactions": rows})
    assert status == 422
    assert [error["pointer"] for error in problem["errors"]] == [
        "/transactions/1/amount",
        "/transactions/2/colour",
        "/transactions/3/merchant",
    ]
    assert problem["error_count"] == 3


def test_a_thousand_faults_are_counted_and_a_hundred_listed(client: DescribedClient) -> None:
    status, problem = _post(client, {"transactions": [{"merchant": "a", "amount": "x"}] * 1000})
    assert status == 422
    assert (len(problem["errors"]), problem["error_count"]) == (100, 1000)


@pytest.mark.parametrize("key", ["", "x" * 129, "caf\xe9"])
def test_an_idempotency_key_is_printable_ascii(client: DescribedClient, key: str) -> None:
    status, problem = _post(client, {"transactions": [GOOD]}, Idempotency_Key=key)
    assert status == 422
    assert problem["errors"][0]["header"] == "Idempotency-Key"


@pytest.mark.parametrize(
    ("query", "parameter"),
    [
        ("?invalid=maybe", "invalid"),
        ("?mode=replay", "mode"),
        ("?reply=all", "reply"),
        ("?skip=1", "skip"),
    ],
)
def test_other_parameters_are_422(client: DescribedClient, query: str, parameter: str) -> None:
    status, problem = _post(client, {"transactions": [GOOD]}, query)
    assert status == 422
    assert [error["parameter"] for error in problem["errors"]] == [parameter]
