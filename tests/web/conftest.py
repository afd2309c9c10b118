"""The web on its own: views whose answers need no store, or that meet a store that fails."""

from __future__ import annotations

from collections.abc import Sequence

import pytest
from flask import Flask

from service.app import create_app
from service.settings import Settings
from service.tallies import Document, Posted, Tallies, Unavailable
from tests.web.described import KEY, DescribedClient, described_client


class Absent(Tallies):
    """Tallies whose store is away."""

    durability = "everysec"

    def __init__(self) -> None:
        """Open nothing."""

    def policies(self, tenant: str) -> dict[str, Document]:
        """Fail as a store does that does not answer."""
        error = Unavailable("The store does not answer; nothing was read.")
        error.retry_after = 7
        raise error

    def ident_key(self) -> tuple[int, int]:
        """Return what a worker would remember."""
        return 1, 2

    def post(self, *args: object, **kwargs: object) -> Posted:
        """Fail as a store does that answered in part."""
        raise Unavailable("Of 2 partitions, 1 was applied; send the same batch again.")

    def checks(self) -> Sequence[Document]:
        """Say so."""
        return [
            {"name": "clock", "status": "warn", "detail": "It is 2 s behind the store's."},
            {"name": "store", "status": "fail", "detail": "It does not answer."},
        ]

    def merchants(self, tenant: str, **kwargs: object) -> list[Document]:
        """Fail as code does that nobody foresaw."""
        raise RuntimeError("secret-host:6379 has a bug")


@pytest.fixture
def app() -> Flask:
    return create_app(Settings(admin_key=KEY, max_body=100_000), Absent())


@pytest.fixture
def client(app: Flask) -> DescribedClient:
    return described_client(app)


@pytest.fixture
def served(fresh_store: str) -> Flask:
    """The service over a real and empty store."""
    settings = Settings(admin_key=KEY, redis_url=fresh_store, partitions=2)
    return create_app(settings, Tallies(settings))


@pytest.fixture
def caller(served: Flask) -> DescribedClient:
    return described_client(served)
