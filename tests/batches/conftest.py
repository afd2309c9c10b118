"""Bodies and the settings they are read with."""

from __future__ import annotations

import json
from collections.abc import Callable
from typing import Any

import pytest

from service.batches.batch import Batch
from service.batches.limits import Defaults, Limits
from service.batches.read import read_batch

NOW = 1_796_040_000_000  # 2026-11-30T12:00:00Z
KEY = (0x0123456789ABCDEF, 0xFEDCBA9876543210)


@pytest.fixture(scope="session")
def read() -> Callable[..., Batch]:
    """Read a body, given as bytes or as rows, with settings that a test may change."""

    def run(body: bytes | list[Any], **changes: Any) -> Batch:
        settings: dict[str, Any] = {
            "ndjson": False,
            "limits": Limits(),
            "defaults": Defaults("EUR"),
            "now": NOW,
            "ident_key": KEY,
            "idempotency_key": None,
            "skip_invalid": False,
        }
        settings |= changes
        if not isinstance(body, bytes):
            if settings["ndjson"]:
                body = "\n".join(json.dumps(row) for row in body).encode()
            else:
                body = json.dumps({"transactions": body}).encode()
        return read_batch(body, **settings)

    return run
