"""Keys, tenants and roles."""

from __future__ import annotations

import dataclasses
import re

import pytest
from flask import Flask

from service.web.keyring import ROLES, Keyring, Principal, digest_of, keyring
from service.web.parts import Parts
from tests.web.described import KEY, KEYED, DescribedClient


def test_the_administrators_key_has_every_role_in_tenant_main() -> None:
    assert keyring(KEY).find(KEY) == Principal("main", None, frozenset(ROLES))


@pytest.mark.parametrize("key", ["", KEY[:-1], KEY + "x", KEY.upper(), "\xe9", "\udce9"])
def test_no_other_key_is_found(key: str) -> None:
    assert keyring(KEY).find(key) is None


@pytest.mark.parametrize("admin_key", [None, ""])
def test_without_keys_nobody_is_found(admin_key: str | None) -> None:
    assert keyring(admin_key).find("") is None


def test_a_ring_holds_digests_only() -> None:
    with pytest.raises(ValueError, match="32 bytes"):
        Keyring().hang(b"plain key", Principal("main", None, frozenset()))
    assert KEY not in repr(vars(keyring(KEY)))


@pytest.mark.parametrize(
    "headers",
    [
        {},
        {"Authorization": ""},
        {"Authorization": "Bearer"},
        {"Authorization": "Bearer "},
        {"Authorization": f"Basic {KEY}"},
        {"Authorization": KEY},
    ],
)
def test_without_a_key_the_answer_is_401_and_a_challenge(
    client: DescribedClient, headers: dict[str, str]
) -> None:
    answer = client.post("/v1/checks", json={"amounts": [1]}, headers=headers)
    assert answer.status_code == 401
    assert answer.headers["WWW-Authenticate"] == 'Bearer realm="tallyward"'


@pytest.mark.parametrize("key", ["wrong", KEY + "x", "x" * 100_000])
def test_an_unknown_key_is_401_and_called_invalid(client: DescribedClient, key: str) -> None:
    answer = client.get("/v1/policies", headers={"Authorization": f"Bearer {key}"})
    assert answer.status_code == 401
    assert 'error="invalid_token"' in answer.headers["WWW-Authenticate"]


def test_the_scheme_is_read_in_any_case(client: DescribedClient) -> None:
    headers = {"Authorization": f"bearer  {KEY}"}
    assert client.post("/v1/checks", json={"amounts": [1]}, headers=headers).status_code == 200


def test_a_key_is_asked_for_before_anything_is_read(client: DescribedClient) -> None:
    answer = client.post("/v1/checks", data=b"{", headers={})
    assert answer.status_code == 401


def test_every_operation_wants_the_role_that_the_document_names(
    app: Flask, client: DescribedClient
) -> None:
    asked = 0
    parts: Parts = app.extensions["tallyward"]
    for path, operations in client.document["paths"].items():
        for method, operation in operations.items():
            if not isinstance(operation, dict) or "security" not in operation:
                continue
            (role,) = operation["security"][0]["key"]
            ring = Keyring()
            others = frozenset(ROLES) - {role}
            ring.hang(digest_of("nearly"), Principal("main", "ann", others))
            app.extensions["tallyward"] = dataclasses.replace(parts, keyring=ring)
            target = re.sub(r"\{[a-z_]+\}", "name", path)
            headers = {"Authorization": "Bearer nearly"}
            answer = client.open(target, method=method.upper(), headers=headers)
            assert answer.status_code == 403, (method, path)
            assert role in answer.get_json(force=True)["detail"]
            assert f'scope="{role}"' in answer.headers["WWW-Authenticate"]
            asked += 1
    assert asked >= 10


def test_health_and_the_document_need_no_key(client: DescribedClient) -> None:
    assert client.get("/health/live", headers={}).status_code == 200
    assert client.get("/v1/openapi.json", headers={}).status_code == 200
    assert KEYED["Authorization"].endswith(KEY)


def test_readiness_is_the_worst_of_the_checks(client: DescribedClient) -> None:
    answer = client.get("/health/ready", headers={})
    assert answer.status_code == 503
    assert answer.get_json()["status"] == "fail"
    assert [check["status"] for check in answer.get_json()["checks"]] == ["warn", "fail"]
