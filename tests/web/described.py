"""A client that holds every response against the OpenAPI document of the service it talks to."""

from __future__ import annotations

import copy
import re
from typing import Any

from flask import Flask
from flask.testing import FlaskClient
from jsonschema import Draft202012Validator
from werkzeug.test import TestResponse

KEY = "k3y-of-the-tests-with-32-characters"
KEYED = {"Authorization": f"Bearer {KEY}"}


class DescribedClient(FlaskClient):
    """Fails when a response's status, type or body is not what the document says.

    Objects may hold only described fields, although the document leaves answers open.
    """

    document: dict[str, Any]

    def open(self, *args: Any, **kwargs: Any) -> TestResponse:
        """Send a request with the tests' key, unless it brings headers of its own."""
        kwargs.setdefault("headers", KEYED)
        kwargs.setdefault("buffered", True)  # close what is answered, as a server does
        response = super().open(*args, **kwargs)
        check_response(self.document, response)
        return response


def described_client(app: Flask) -> DescribedClient:
    """Return a client of an app that knows the app's document."""
    client = DescribedClient(app)
    client.document = {"paths": {}}
    answer = client.get("/v1/openapi.json")
    assert answer.status_code == 200
    client.document = answer.get_json()
    return client


def check_response(document: dict[str, Any], response: TestResponse) -> None:
    """Assert that a response is described."""
    if response.request.method == "OPTIONS":
        return
    found = _operation(document, response.request.path, response.request.method)
    if found is None:
        assert response.status_code in (404, 405) or not document["paths"]
        return
    said = found["responses"].get(str(response.status_code)) or found["responses"]["default"]
    said = _resolved(document, said)
    kinds = said.get("content", {})
    assert response.mimetype in kinds, f"{response.mimetype} is not described"
    for name in said.get("headers", {}):
        if name == "X-Request-Id" or response.status_code >= 400:
            assert name in response.headers
    if response.mimetype.endswith("json") and response.request.method != "HEAD":
        schema = closed(document, kinds[response.mimetype]["schema"])
        errors = [
            f"{error.json_path}: {error.message[:300]}"
            for error in Draft202012Validator(schema).iter_errors(response.get_json(force=True))
        ]
        assert not errors, errors[:5]


def closed(document: dict[str, Any], schema: dict[str, Any]) -> dict[str, Any]:
    """Return a schema of the document in which objects hold described fields only."""
    components = copy.deepcopy(document["components"])
    for one in components["schemas"].values():
        if one.get("type") == "object" and "properties" in one:
            one["additionalProperties"] = False
    return {**schema, "components": components}


def _resolved(document: dict[str, Any], said: dict[str, Any]) -> dict[str, Any]:
    if "$ref" not in said:
        return said
    _, *steps = said["$ref"].split("/")
    found: Any = document
    for step in steps:
        found = found[step]
    return found  # type: ignore[no-any-return]


def _operation(document: dict[str, Any], path: str, method: str) -> dict[str, Any] | None:
    verb = {"HEAD": "get"}.get(method, method.lower())
    templates = sorted(document["paths"], key=lambda template: template.count("{"))
    for template in templates:
        if re.fullmatch(re.sub(r"\{[a-z_]+\}", "[^/]+", template), path):
            return document["paths"][template].get(verb)  # type: ignore[no-any-return]
    return None
