"""What the scenarios run against: one service per store server, shared and never emptied.

Scenarios keep apart by the names of their merchants and policies. All policies are there from the
start, since a worker may go by those of a second ago.
"""

from __future__ import annotations

import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest

from service.store.catalogue import FRESH_SECONDS
from service.store.embedded import EmbeddedStore
from tests.scenarios.running import Service, serving

POLICIES = {
    "by-law": {"reference": "law"},
    "law-in-silence": {"reference": "law", "flows": ["test"]},
    "at-once": {"baseline_days": 0},
    "by-own": {"reference": "own", "baseline_size": 300, "baseline_days": 0},
}
CHEATS = [f"feed-{i}" for i in range(24)]
ASSIGNED = {
    "law-in-silence": [
        f"cities-{continent}" for continent in ("AF", "AN", "AS", "EU", "NA", "OC", "SA")
    ],
    "by-law": [
        "small-towns",
        *(f"cut-law-{i}" for i in range(4)),
        *CHEATS,
        "raced-cheat",
    ],
    "at-once": ["powers-of-2", "fibonacci", *(f"cut-auto-{i}" for i in range(4))],
    "by-own": [f"cut-own-{i}" for i in range(4)],
}


@dataclass(frozen=True)
class Business:
    """A running service and the folder of its store."""

    service: Service
    store_folder: Path


@pytest.fixture(scope="session")
def business(store_binary: Path, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Business]:
    folder = tmp_path_factory.mktemp("business")
    with (
        EmbeddedStore(folder / "store", store_binary) as store,
        serving(store.url, folder) as service,
    ):
        for policy, merchants in ASSIGNED.items():
            service.put(f"/v1/policies/{policy}", POLICIES[policy])
            for merchant in merchants:
                service.put(f"/v1/merchants/{merchant}", {"policy": policy})
        time.sleep(FRESH_SECONDS + 0.2)  # until the other worker must ask again
        yield Business(service, folder / "store")


@pytest.fixture
def service(business: Business) -> Service:
    return business.service
