"""Workers over a real and empty store."""

from __future__ import annotations

from collections.abc import Callable, Iterator

import pytest
import redis

from service.store.connection import connect
from service.store.logs import Logs
from service.tallies import Tallies
from tests.store.workers import HORIZON, hiring


@pytest.fixture
def client(fresh_store: str) -> Iterator[redis.Redis]:
    client = connect(fresh_store, 5)
    yield client
    client.close()


@pytest.fixture
def logs(client: redis.Redis) -> Logs:
    return Logs(client, 3, HORIZON)


@pytest.fixture
def hire(fresh_store: str) -> Iterator[Callable[[], Tallies]]:
    """Return a function that starts one more worker on the same store."""
    with hiring(fresh_store) as hire:
        yield hire


@pytest.fixture
def tallies(hire: Callable[[], Tallies]) -> Tallies:
    return hire()
