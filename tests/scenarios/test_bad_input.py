"""What cannot be counted is refused with its place and reason, and nothing else changes."""

from __future__ import annotations

import gzip
import json
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from typing import Any

import pytest

from service.settings import Settings
from tests.scenarios.running import Answer, Service

Row = dict[str, Any]

GOOD: Row = {"merchant": "careful", "amount": 1999, "currency": "EUR", "id": "good-1"}
JSON, LINES = "application/json", "application/x-ndjson"


@pytest.fixture(scope="module", autouse=True)
def first(business: Any) -> None:
    """Somebody is counted already, so that a change would show."""
    business.service.post([{**GOOD, "id": f"before-{i}"} for i in range(20)])


@pytest.fixture(autouse=True)
def nothing_changes(service: Service) -> Iterator[None]:
    """Compare everything that is counted before with everything that is counted after."""
    before = everything(service)
    yield
    assert everything(service) == before


def everything(service: Service) -> list[tuple[Any, ...]]:
    listed = service.get("/v1/merchants?limit=1000&sort=count")
    assert listed["next"] is None
    return sorted(
        (e["merchant"], e["flow"], e["currency"], e["count"], e["zero"], e["updated"])
        for e in listed["merchants"]
    )


def send(
    service: Service, body: bytes, kind: str = JSON, query: str = "", **headers: str
) -> Answer:
    named = {name.replace("_", "-"): value for name, value in headers.items()}
    return service.send("POST", f"/v1/batches{query}", body, {"Content-Type": kind, **named})


def batch(*rows: Any) -> bytes:
    return json.dumps({"transactions": rows}).encode()


def problem(answer: Answer, status: int) -> dict[str, Any]:
    """Return the details of a refusal, whose form is that of RFC 9457."""
    assert answer.status == status, answer.text
    assert answer.headers["Content-Type"] == "application/problem+json"
    assert answer.headers["X-Request-Id"]
    found: dict[str, Any] = answer.document
    assert {"type", "title", "status", "detail"} <= found.keys()
    assert found["status"] == status
    return found


@pytest.mark.parametrize(
    ("body", "kind", "place"),
    [
        (b'{"transactions": [', JSON, "line 1, column 19"),
        (b'{"transactions":\n\n [{"merchant": "a", "amount": 1,}]}', JSON, "line 3, column"),
        (json.dumps(GOOD).encode() + b'\n{"merchant": "a" "amount": 1}\n', LINES, "line 2, column"),
        (b"", JSON, ""),
        (b'{"transactions": [{"merchant": "caf\xe9", "amount": 1}]}', JSON, ""),
    ],
)
def test_unreadable_bodies_are_400_with_their_place(
    service: Service, body: bytes, kind: str, place: str
) -> None:
    assert place in problem(send(service, body, kind), 400)["detail"]
    if kind == JSON:  # no row can be told from another
        problem(send(service, body, kind, "?invalid=skip"), 400)


def test_torn_gzip_is_400(service: Service) -> None:
    packed = gzip.compress(batch(GOOD))
    for body in (packed[:-6], batch(GOOD)):
        problem(send(service, body, Content_Encoding="gzip"), 400)


def test_bodies_that_are_too_large_are_413_with_the_limit(service: Service) -> None:
    limits = Settings()
    bomb = gzip.compress(b" " * (limits.max_expanded + 1), compresslevel=1)
    found = problem(send(service, bomb, Content_Encoding="gzip"), 413)
    assert str(limits.max_expanded) in found["detail"].replace(",", "")
    many = batch(*[{**GOOD, "id": f"many-{i}"} for i in range(limits.max_rows + 1)])
    assert str(limits.max_rows) in problem(send(service, many), 413)["detail"].replace(",", "")


@pytest.mark.parametrize(
    ("kind", "headers"),
    [("text/csv", {}), ("application/xml", {}), (JSON, {"Content_Encoding": "br"})],
)
def test_other_types_are_415(service: Service, kind: str, headers: dict[str, str]) -> None:
    problem(send(service, batch(GOOD), kind, **headers), 415)


def ahead() -> str:
    return (datetime.now(UTC) + timedelta(hours=1)).isoformat()


FAULTS: list[tuple[str, dict[str, Any]]] = [
    ("amount", {"amount": 19.99}),  # a float is ambiguous
    ("amount", {"amount": "19.999"}),  # more places than cents
    ("amount", {"amount": "1,999.00"}),
    ("amount", {"amount": 10**15 + 1}),
    ("amount", {"amount": -5, "flow": "sale"}),
    ("amount", {"amount": True}),
    ("amount", {"amount": None}),
    ("merchant", {"merchant": ""}),
    ("merchant", {"merchant": "a/b"}),
    ("merchant", {"merchant": "x" * 65}),
    ("currency", {"currency": "ABC"}),
    ("flow", {"flow": "Sale!"}),
    ("category", {"category": "59"}),
    ("at", {"at": "yesterday"}),
    ("at", {"at": "2026-11-30T12:00:00"}),  # no offset
    ("id", {"id": "caf\xe9"}),
    ("id", {"id": "x" * 65}),
    ("offset", {"source": "till", "offset": -1}),
    ("colour", {"colour": "red"}),
]


def test_every_invalid_row_is_422_with_its_pointer(service: Service) -> None:
    rows = [GOOD]
    for _, fault in FAULTS:
        rows += [{**GOOD, **fault}, GOOD]
    found = problem(send(service, batch(*rows)), 422)
    assert [e["pointer"] for e in found["errors"]] == [
        f"/transactions/{2 * i + 1}/{name}" for i, (name, _) in enumerate(FAULTS)
    ]
    assert found["error_count"] == len(FAULTS)
    assert all(e["detail"] for e in found["errors"])
    lines = b"\n".join(json.dumps(row).encode() for row in rows)
    found = problem(send(service, lines, LINES), 422)
    assert found["error_count"] == len(FAULTS)


def test_future_and_missing_fields_are_422(service: Service) -> None:
    rows = [{**GOOD, "at": ahead()}, {"merchant": "careful"}, {"amount": 5}, 7, None]
    found = problem(send(service, batch(*rows)), 422)
    assert [e["pointer"] for e in found["errors"]] == [
        "/transactions/0/at",
        "/transactions/1/amount",
        "/transactions/2/merchant",
        "/transactions/3",
        "/transactions/4",
    ]


@pytest.mark.parametrize("body", [b"[]", b"7", b'{"transactions": 7}', b'{"rows": []}', b"{}"])
def test_other_documents_are_422(service: Service, body: bytes) -> None:
    problem(send(service, body), 422)


def test_hundred_errors_are_listed_and_all_are_counted(service: Service) -> None:
    found = problem(send(service, batch(*[{**GOOD, "amount": "x"}] * 333)), 422)
    assert (len(found["errors"]), found["error_count"]) == (100, 333)


def test_wrong_parameters_and_keys_are_refused(service: Service) -> None:
    for query in ("?invalid=maybe", "?mode=replay", "?reply=all", "?skip=1"):
        (error,) = problem(send(service, batch(GOOD), query=query), 422)["errors"]
        assert error["parameter"] == query[1:].split("=")[0]
    problem(send(service, batch(GOOD), Authorization="Bearer wrong"), 401)
    problem(service.send("GET", "/v1/merchants", headers={"Authorization": ""}), 401)
    problem(service.send("GET", "/v1/batches"), 405)
    problem(service.send("GET", "/v1/nothing"), 404)
    problem(service.send("GET", "/v1/merchants/nobody-ever"), 404)
    problem(service.send("GET", "/v1/merchants/careful?flow=refund"), 404)
    problem(service.send("GET", "/v1/merchants/careful/digits?view=circle"), 422)
    problem(service.send("GET", "/v1/alarms?after=never"), 422)


def test_invalid_rows_are_listed_when_asked_to_skip(service: Service) -> None:
    """All rows here were counted before or are wrong, so that still nothing may change."""
    known = {**GOOD, "id": "before-3"}
    rows = [known, *({**GOOD, **fault} for _, fault in FAULTS), {**GOOD, "at": ahead()}, known]
    answer = send(service, batch(*rows), query="?invalid=skip")
    assert answer.status == 200
    receipt = answer.document
    assert (receipt["accepted"], receipt["duplicates"]) == (0, 2)
    assert receipt["accepted"] + receipt["duplicates"] + len(receipt["rejected"]) == len(rows)
    names = [*(name for name, _ in FAULTS), "at"]
    assert [(r["index"], r["pointer"]) for r in receipt["rejected"]] == [
        (i + 1, f"/transactions/{i + 1}/{name}") for i, name in enumerate(names)
    ]
    assert [r["retryable"] for r in receipt["rejected"]] == [False] * len(FAULTS) + [True]
    assert receipt["rejected"][0]["id"] == "good-1"
    assert all(r["detail"] for r in receipt["rejected"])
    lines = json.dumps(known).encode() + b'\n{"merchant": "a" "amount": 1}\n'
    receipt = send(service, lines, LINES, "?invalid=skip").document
    assert (receipt["accepted"], receipt["duplicates"]) == (0, 1)
    (broken,) = receipt["rejected"]
    assert (broken["index"], broken["id"], broken["retryable"]) == (1, None, False)
    assert "line 2, column" in broken["detail"]


def test_key_with_another_body_is_422(service: Service) -> None:
    """The first body holds nothing but rows that are known."""
    headers = {"Idempotency_Key": "bad-input-1"}
    known = batch({**GOOD, "id": "before-1"})
    assert send(service, known, **headers).document["duplicates"] == 1
    found = problem(send(service, batch({"merchant": "careful", "amount": 5}), **headers), 422)
    assert [e["header"] for e in found["errors"]] == ["Idempotency-Key"]
