"""What merchants sell in these tests, and how it is posted."""

from __future__ import annotations

from typing import Any

import numpy as np

from tests.web.described import DescribedClient

WATCHFUL = {"reference": "law", "transactions_per_false_alarm": 1_000_000}
"""Settings under which a stream is watched from its first row on."""


def ordinary(n: int, seed: int = 1) -> list[int]:
    """Return amounts that follow the law: 1.00 to 99 999.99, even on the circle."""
    random = np.random.default_rng(seed)
    return [int(a) for a in 10 ** random.uniform(2, 7, n)]


def fixed_price(n: int, seed: int = 2) -> list[int]:
    """Return amounts from 49.00 to 49.99."""
    return [int(a) for a in np.random.default_rng(seed).integers(4900, 5000, n)]


def rows(amounts: list[int], merchant: str = "harbour-books", **more: Any) -> list[dict[str, Any]]:
    """Return transactions with ids that go by merchant and position."""
    return [
        {"id": f"{merchant}-{i:06d}", "merchant": merchant, "amount": a, **more}
        for i, a in enumerate(amounts)
    ]


def post(client: DescribedClient, sent: list[dict[str, Any]], query: str = "") -> dict[str, Any]:
    """Post a batch that must be taken, and return its receipt."""
    answer = client.post(f"/v1/batches{query}", json={"transactions": sent})
    assert answer.status_code == 200, answer.get_data(as_text=True)
    return answer.get_json()  # type: ignore[no-any-return]


def alarmed(client: DescribedClient, merchant: str = "harbour-books") -> dict[str, Any]:
    """Post ordinary business, then one price again and again, and return the alarm."""
    client.put("/v1/policies/standard", json=WATCHFUL)
    receipt = post(client, rows(ordinary(500) + fixed_price(40), merchant))
    assert len(receipt["alarms"]) == 1
    return receipt["alarms"][0]  # type: ignore[no-any-return]
