"""Every error is a problem document that says what to do, and nothing internal."""

from __future__ import annotations

import logging
import re

import pytest

from service.web.problems import LISTED, faults
from tests.web.described import KEYED, DescribedClient


def test_an_unknown_path_is_a_problem(client: DescribedClient) -> None:
    answer = client.get("/v1/nothing")
    assert answer.status_code == 404
    assert answer.mimetype == "application/problem+json"
    assert answer.get_json(force=True) == {
        "type": "about:blank",
        "title": "Not Found",
        "status": 404,
        "detail": "Nothing is found at this path.",
    }


def test_a_wrong_method_names_the_right_ones(client: DescribedClient) -> None:
    answer = client.delete("/v1/policies/standard")
    assert answer.status_code == 405
    assert {"GET", "PUT"} <= set(re.split(", *", answer.headers["Allow"]))
    assert answer.get_json(force=True)["status"] == 405


def test_paths_are_not_repaired_by_redirects(client: DescribedClient) -> None:
    assert client.get("/v1//policies").status_code == 404
    assert client.get("/v1/policies/").status_code == 404


def test_a_large_body_is_refused_with_the_limit(client: DescribedClient) -> None:
    answer = client.post("/v1/checks", data=b" " * 100_001, content_type="application/json")
    assert answer.status_code == 413
    assert "100,000 bytes" in answer.get_json(force=True)["detail"]


def test_a_body_of_another_type_is_refused(client: DescribedClient) -> None:
    answer = client.post("/v1/checks", data=b"amounts=1", content_type="text/plain")
    assert answer.status_code == 415
    encoded = client.post(
        "/v1/checks",
        data=b"{}",
        content_type="application/json",
        headers={**KEYED, "Content-Encoding": "br"},
    )
    assert encoded.status_code == 415


def test_an_absent_store_says_when_to_come_back(client: DescribedClient) -> None:
    answer = client.get("/v1/policies")
    assert answer.status_code == 503
    assert answer.headers["Retry-After"] == "7"
    assert answer.get_json(force=True)["detail"].startswith("The store does not answer")


def test_an_unforeseen_fault_is_logged_and_not_told(
    client: DescribedClient, caplog: pytest.LogCaptureFixture
) -> None:
    with caplog.at_level(logging.ERROR):
        answer = client.get("/v1/merchants", headers={**KEYED, "X-Request-Id": "till 7"})
    assert answer.status_code == 500
    assert "secret-host" not in answer.get_data(as_text=True)
    assert "till 7" in answer.get_json(force=True)["detail"]
    (record,) = caplog.records
    assert "till 7" in record.getMessage()
    assert "secret-host" in caplog.text


@pytest.mark.parametrize("given", ["a", "0" * 128, "with space ~"])
def test_the_callers_request_id_comes_back(client: DescribedClient, given: str) -> None:
    answer = client.get("/health/live", headers={"X-Request-Id": given})
    assert answer.headers["X-Request-Id"] == given


@pytest.mark.parametrize("given", ["", "0" * 129, "caf\xe9", "tab\there"])
def test_other_request_ids_are_replaced(client: DescribedClient, given: str) -> None:
    first = client.get("/health/live", headers={"X-Request-Id": given})
    second = client.get("/v1/nothing", headers={"X-Request-Id": given})
    ids = {first.headers["X-Request-Id"], second.headers["X-Request-Id"]}
    assert len(ids) == 2
    assert given not in ids
    assert all(re.fullmatch("[0-9a-f]{24}", one) for one in ids)


def test_responses_are_neither_sniffed_nor_stored(client: DescribedClient) -> None:
    for answer in (client.get("/health/live"), client.get("/v1/nothing")):
        assert answer.headers["X-Content-Type-Options"] == "nosniff"
        assert answer.headers["Cache-Control"] == "no-store"


def test_at_most_a_hundred_faults_are_listed_and_all_are_counted(client: DescribedClient) -> None:
    answer = client.post("/v1/checks", json={"amounts": [-1] * 250})
    assert answer.status_code == 422
    problem = answer.get_json(force=True)
    assert len(problem["errors"]) == LISTED == 100
    assert problem["error_count"] == 250
    assert [e["pointer"] for e in problem["errors"]] == [f"/amounts/{i}" for i in range(100)]


def test_pointers_escape_what_rfc_6901_reserves(client: DescribedClient) -> None:
    # RFC 6901, section 3: ~ is written ~0 and / is written ~1.
    answer = client.put("/v1/policies/x", json={"a/b~c": 1})
    assert answer.get_json(force=True)["errors"] == [
        {"pointer": "/a~1b~0c", "detail": "Unknown field."}
    ]


def test_faults_of_a_whole_object_point_at_the_object() -> None:
    messages = {"a": {0: {"_schema": ["x"]}, 1: ["y", "z"]}}
    assert list(faults(messages)) == [("/a/0", "x"), ("/a/1", "y"), ("/a/1", "z")]


def test_a_parameter_is_named_where_it_is_at_fault(client: DescribedClient) -> None:
    answer = client.get("/v1/merchants?limit=0&colour=red&sort=size")
    assert answer.status_code == 422
    named = {e["parameter"] for e in answer.get_json(force=True)["errors"]}
    assert named == {"limit", "colour", "sort"}


def test_a_parameter_given_twice_is_refused(client: DescribedClient) -> None:
    answer = client.get("/v1/merchants?limit=1&limit=2")
    assert answer.status_code == 422
    assert answer.get_json(force=True)["errors"][0]["parameter"] == "limit"


def test_head_and_options_are_answered(client: DescribedClient) -> None:
    head = client.head("/health/live")
    assert (head.status_code, head.get_data()) == (200, b"")
    options = client.options("/v1/checks", headers={})
    assert options.status_code == 200
    assert "POST" in options.headers["Allow"]
