"""Policies: versions are for ever, and no worker goes back to older ones."""

from __future__ import annotations

import threading
from collections.abc import Iterator

import pytest

from service.detection.policy import Policy
from service.store import catalogue as module
from service.store.catalogue import MAX_VERSION, Catalogue
from service.store.connection import connect
from service.store.errors import Conflict, Unknown


@pytest.fixture
def catalogue(client) -> Catalogue:
    return Catalogue(client)


@pytest.fixture
def other(fresh_store: str) -> Iterator[Catalogue]:
    with connect(fresh_store, 5) as client:
        yield Catalogue(client)


@pytest.fixture
def long_memory(monkeypatch) -> None:
    monkeypatch.setattr(module, "FRESH_SECONDS", 3600)


def test_there_is_a_standard_policy(catalogue: Catalogue) -> None:
    known = catalogue.of("main")
    assert known.by_version == {1: Policy()}
    assert known.versions_for(["a", "b"]) == [1, 1]


def test_a_new_version_leaves_the_old_as_it_was(catalogue: Catalogue) -> None:
    first = catalogue.put("main", "standard", {"tolerance": 0.1})
    second = catalogue.put("main", "standard", {"views": ["tail_pair"], "flows": ["sale"]})
    assert (first.version, second.version) == (2, 3)
    known = catalogue.of("main", fresh=True)
    assert known.by_version == {1: Policy(), 2: first, 3: second}
    assert second.views == ("tail_pair",)
    assert known.versions_for(["a"]) == [3]
    assert catalogue.of("hill").by_version == {1: Policy()}


def test_racing_changes_get_versions_of_their_own(catalogue: Catalogue, fresh_store: str) -> None:
    made: list[Policy] = []

    def put(name: str) -> None:
        with connect(fresh_store, 5) as client:
            for _ in range(20):
                made.append(Catalogue(client).put("main", name, {"minimum_count": len(made)}))

    threads = [threading.Thread(target=put, args=(name,)) for name in ("a", "b", "c")]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert sorted(p.version for p in made) == list(range(2, 62))
    assert catalogue.of("main", fresh=True).by_version == {
        1: Policy(),
        **{p.version: p for p in made},
    }


@pytest.mark.usefixtures("long_memory")
def test_a_worker_knows_at_once_what_it_changed_itself(catalogue: Catalogue) -> None:
    catalogue.of("main")
    catalogue.put("main", "strict", {"reference": "law"})
    assert catalogue.of("main").newest == {"standard": 1, "strict": 2}
    catalogue.assign("main", "fish", "strict")
    assert catalogue.of("main").versions_for(["fish", "cake"]) == [2, 1]
    catalogue.assign("main", "fish", "standard")
    assert catalogue.of("main").assigned == {}


def test_changes_of_other_workers_are_seen(
    catalogue: Catalogue, other: Catalogue, monkeypatch
) -> None:
    monkeypatch.setattr(module, "FRESH_SECONDS", 3600)
    catalogue.of("main")
    other.put("main", "strict", {})
    other.assign("main", "fish", "strict")
    assert catalogue.of("main").newest == {"standard": 1}
    assert catalogue.of("main", fresh=True).version_for("fish") == 2
    other.assign("main", "fish", "standard")
    monkeypatch.setattr(module, "FRESH_SECONDS", -1)
    assert catalogue.of("main").version_for("fish") == 1


@pytest.mark.usefixtures("long_memory")
def test_a_slow_thread_does_not_bring_back_older_policies(
    catalogue: Catalogue, other: Catalogue, monkeypatch
) -> None:
    read, go_on = threading.Event(), threading.Event()
    load = catalogue._load

    def slow(keys):
        policies = load(keys)
        if threading.current_thread() is thread:
            read.set()
            go_on.wait(60)
        return policies

    monkeypatch.setattr(catalogue, "_load", slow)
    thread = threading.Thread(target=catalogue.of, args=("main",))
    thread.start()
    read.wait(60)
    other.put("main", "strict", {})
    assert "strict" in catalogue.of("main", fresh=True).newest
    go_on.set()
    thread.join()
    assert "strict" in catalogue.of("main").newest


def test_only_policies_that_are_there_are_assigned(catalogue: Catalogue) -> None:
    with pytest.raises(Unknown, match=r"no policy 'strict'; there are standard"):
        catalogue.assign("main", "fish", "strict")
    assert catalogue.of("main", fresh=True).assigned == {}


def test_a_tenant_can_use_up_its_versions(catalogue: Catalogue) -> None:
    catalogue.put("main", "a", {})
    (counter,) = catalogue.client.keys("*counter")
    catalogue.client.hset(counter, "last", MAX_VERSION - 2)
    assert catalogue.put("main", "b", {}).version == MAX_VERSION
    with pytest.raises(Conflict, match="none is left"):
        catalogue.put("main", "c", {})
    assert set(catalogue.of("main", fresh=True).newest) == {"standard", "a", "b"}


def test_settings_of_later_versions_are_left_out(catalogue: Catalogue) -> None:
    catalogue.put("main", "a", {"tolerance": 0.2})
    catalogue.client.hset("{tw/main}versions", "2", '{"name":"a","version":2,"colour":"red"}')
    catalogue.client.set("{tw/main}revision", "other")
    assert catalogue.of("main", fresh=True).by_version[2] == Policy(name="a", version=2)
