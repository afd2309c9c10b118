"""An operator sets policies, keeps tenants apart, and loses a store."""

from __future__ import annotations

import dataclasses

import pytest
from flask import Flask

from schemas.policy import defaults
from service.app import create_app
from service.settings import Settings, SettingsError
from service.store.embedded import EmbeddedStore
from service.tallies import Tallies
from service.web.keyring import ROLES, Keyring, Principal, digest_of
from tests.web.business import alarmed, post, rows
from tests.web.described import KEY, KEYED, DescribedClient, described_client


def test_the_standard_policy_is_there_from_the_start(caller: DescribedClient) -> None:
    (standard,) = caller.get("/v1/policies").get_json()["policies"]
    assert standard == {"name": "standard", "version": 1, **defaults()}
    assert caller.get("/v1/policies/standard").get_json() == standard


def test_a_policy_is_replaced_as_a_whole(caller: DescribedClient) -> None:
    made = caller.put("/v1/policies/strict", json={"tolerance": 0, "views": ["tail_pair"]})
    assert made.get_json() == {
        **defaults(),
        "name": "strict",
        "version": 2,
        "tolerance": 0,
        "views": ["tail_pair"],
    }
    again = caller.put("/v1/policies/strict", json={"flows": ["sale", "till-7"]}).get_json()
    assert again == {**defaults(), "name": "strict", "version": 3, "flows": ["sale", "till-7"]}
    names = [p["name"] for p in caller.get("/v1/policies").get_json()["policies"]]
    assert names == ["standard", "strict"]


@pytest.mark.parametrize("name", ["Strict", "a" * 33, "a.b", "%20"])
def test_a_policy_name_is_checked(caller: DescribedClient, name: str) -> None:
    answer = caller.put(f"/v1/policies/{name}", json={})
    assert answer.status_code == 422
    assert answer.get_json(force=True)["errors"][0]["parameter"] == "name"
    assert len(caller.get("/v1/policies").get_json()["policies"]) == 1


def test_a_merchant_is_given_a_policy_and_a_category(caller: DescribedClient) -> None:
    caller.put("/v1/policies/strict", json={"reference": "law"})
    given = caller.put("/v1/merchants/fish", json={"policy": "strict", "category": "5422"})
    assert given.get_json() == {"merchant": "fish", "policy": "strict", "category": "5422"}
    post(caller, rows([100, 200], "fish") + rows([100]))
    fish = caller.get("/v1/merchants/fish").get_json()
    assert (fish["policy"], fish["category"]) == ("strict", "5422")
    assert caller.get("/v1/merchants/harbour-books").get_json()["policy"] == "standard"
    back = caller.put("/v1/merchants/fish", json={"policy": "standard"}).get_json()
    assert back == {"merchant": "fish", "policy": "standard", "category": "5422"}


@pytest.mark.parametrize(
    ("body", "pointer"),
    [
        ({}, ""),
        ({"policy": "nothing"}, "/policy"),
        ({"policy": None}, "/policy"),
        ({"category": "59"}, "/category"),
        ({"colour": "red"}, "/colour"),
    ],
)
def test_other_assignments_are_refused(
    caller: DescribedClient, body: dict[str, str], pointer: str
) -> None:
    answer = caller.put("/v1/merchants/fish", json=body)
    assert answer.status_code == 422
    assert [e["pointer"] for e in answer.get_json(force=True)["errors"]] == [pointer]


def test_a_merchants_name_is_checked_before_it_is_given_anything(caller: DescribedClient) -> None:
    answer = caller.put("/v1/merchants/-x", json={"policy": "standard"})
    assert answer.status_code == 422
    assert answer.get_json(force=True)["errors"][0]["parameter"] == "merchant"


def test_tenants_do_not_see_each_other(served: Flask, caller: DescribedClient) -> None:
    alarm = alarmed(caller)
    caller.put("/v1/policies/secret", json={})
    cursor = caller.get("/v1/alarms").get_json()["next"]
    parts = served.extensions["tallyward"]
    ring = Keyring()
    ring.hang(digest_of(KEY), Principal("main", None, frozenset(ROLES)))
    ring.hang(digest_of("other"), Principal("hill", "ann", frozenset(ROLES)))
    served.extensions["tallyward"] = dataclasses.replace(parts, keyring=ring)
    other = {"Authorization": "Bearer other"}
    assert caller.get("/v1/merchants", headers=other).get_json()["merchants"] == []
    assert caller.get("/v1/alarms", headers=other).get_json()["alarms"] == []
    assert caller.get(f"/v1/alarms?after={cursor}", headers=other).get_json()["alarms"] == []
    for path in (
        f"/v1/alarms/{alarm['id']}",
        "/v1/merchants/harbour-books",
        "/v1/merchants/harbour-books/rows",
        "/v1/merchants/harbour-books/digits",
        "/v1/policies/secret",
    ):
        assert caller.get(path).status_code == 200, path
        assert caller.get(path, headers=other).status_code == 404, path
    # The same names and ids are other streams and other rows there.
    again = {"transactions": rows([1999])}
    posted = caller.post("/v1/batches", json=again, headers=other).get_json()
    assert (posted["accepted"], posted["duplicates"]) == (1, 0)
    mine = caller.get("/v1/merchants", headers=KEYED).get_json()["merchants"]
    assert [e["count"] for e in mine] == [540]


def test_a_store_that_serves_is_ready(caller: DescribedClient) -> None:
    answer = caller.get("/health/ready", headers={})
    assert answer.status_code == 200
    checks = {check["name"]: check["status"] for check in answer.get_json()["checks"]}
    assert checks["store"] == "pass"
    assert answer.get_json()["status"] in ("pass", "warn")


def test_a_store_that_is_gone_is_503_and_not_ready(lone_store: EmbeddedStore) -> None:
    settings = Settings(admin_key=KEY, redis_url=lone_store.url)
    client = described_client(create_app(settings, Tallies(settings)))
    assert post(client, rows([100]))["accepted"] == 1
    lone_store.stop()
    for answer in (
        client.post("/v1/batches", json={"transactions": rows([200], "fish")}),
        client.get("/v1/merchants"),
        client.get("/v1/merchants/harbour-books"),
        client.get("/v1/alarms"),
        client.get("/v1/policies"),
        client.put("/v1/policies/strict", json={}),
    ):
        assert answer.status_code == 503
        assert int(answer.headers["Retry-After"]) >= 1
    ready = client.get("/health/ready")
    assert (ready.status_code, ready.get_json()["status"]) == (503, "fail")
    assert client.get("/health/live").status_code == 200


def test_without_a_store_the_app_says_what_to_set() -> None:
    with pytest.raises(SettingsError, match="TALLYWARD_REDIS_URL"):
        create_app(Settings(admin_key=KEY))
