"""The document is valid, complete and says what must be said."""

from __future__ import annotations

import re
from typing import Any

from flask import Flask
from openapi_spec_validator import validate

from service.web.keyring import ROLES
from tests.web.described import DescribedClient

# The words of the promise, from the contract of the API.
PROMISE = (
    "if, given everything earlier in the stream, the probability of each cell never exceeds its "
    "stated bound, the expected number of alarms in any n transactions is at most n ÷ "
    "transactions_per_false_alarm, restarts included. With a learned baseline this holds with the "
    "stated confidence per stream, for baseline rows that represent the stream's ordinary "
    "business."
)


def _operations(document: dict[str, Any]) -> list[tuple[str, str, dict[str, Any]]]:
    return [
        (path, method, operation)
        for path, methods in document["paths"].items()
        for method, operation in methods.items()
        if method in ("get", "put", "post", "patch", "delete")
    ]


def _schemas(node: Any) -> list[dict[str, Any]]:
    found = []
    if isinstance(node, dict):
        if isinstance(node.get("properties"), dict):
            found.append(node)
        for inner in node.values():
            found += _schemas(inner)
    elif isinstance(node, list):
        for inner in node:
            found += _schemas(inner)
    return found


def test_the_document_is_valid_openapi_3_1(client: DescribedClient) -> None:
    assert client.document["openapi"].startswith("3.1")
    validate(client.document)


def test_the_promise_is_made_in_its_exact_words(client: DescribedClient) -> None:
    text = " ".join(client.document["info"]["description"].split())
    assert PROMISE in text
    assert "reason to look, never proof of fraud" in text
    for caution in ("person review", "lawful grounds", "local law", "card schemes", "protection"):
        assert caution in text


def test_every_route_is_described_and_nothing_else(app: Flask, client: DescribedClient) -> None:
    served = {
        (re.sub(r"<(?:[a-z]+:)?([a-z_]+)>", r"{\1}", rule.rule), method.lower())
        for rule in app.url_map.iter_rules()
        for method in rule.methods or ()
        if method not in ("HEAD", "OPTIONS")
    }
    assert served == {(path, method) for path, method, _ in _operations(client.document)}


def test_every_operation_names_its_role_errors_and_id(client: DescribedClient) -> None:
    ids = set()
    for path, _, operation in _operations(client.document):
        assert operation["summary"], path
        ids.add(operation["operationId"])
        responses = operation["responses"]
        assert "default" in responses
        if path.startswith("/v1/") and path != "/v1/openapi.json":
            (use,) = operation["security"]
            (role,) = use["key"]
            assert role in ROLES
            assert f"`{role}`" in operation["description"]
            assert {"401", "403"} <= set(responses)
        else:
            assert "security" not in operation
        if "requestBody" in operation:
            assert {"400", "413", "415", "422"} <= set(responses), path
        if operation.get("parameters"):
            assert "422" in responses, path
    assert len(ids) == len(_operations(client.document))


def test_every_problem_is_problem_json_with_a_request_id(client: DescribedClient) -> None:
    responses = client.document["components"]["responses"]
    assert len(responses) >= 8
    for response in responses.values():
        assert list(response["content"]) == ["application/problem+json"]
        assert "X-Request-Id" in response["headers"]
    assert "Retry-After" in responses["SERVICE_UNAVAILABLE"]["headers"]
    assert "WWW-Authenticate" in responses["UNAUTHORIZED"]["headers"]


def test_every_request_body_refuses_unknown_fields(client: DescribedClient) -> None:
    schemas = client.document["components"]["schemas"]
    bodies = [
        kind["schema"]["$ref"].rsplit("/", 1)[1]
        for _, _, operation in _operations(client.document)
        for kind in operation.get("requestBody", {}).get("content", {}).values()
        if "$ref" in kind["schema"]
    ]
    assert bodies
    for name in bodies:
        assert schemas[name]["additionalProperties"] is False, name


def test_no_schema_is_without_fields(client: DescribedClient) -> None:
    schemas = client.document["components"]["schemas"]
    assert len(_schemas(schemas)) >= 15
    for name, schema in schemas.items():
        if schema.get("type") == "object":
            assert schema.get("properties"), name
