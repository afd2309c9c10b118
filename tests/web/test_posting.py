"""A payment system posts: what is counted, once, and what it is told."""

from __future__ import annotations

import gzip
import json
from typing import Any

import pytest

from tests.web.business import WATCHFUL, fixed_price, ordinary, post, rows
from tests.web.described import KEYED, DescribedClient


def _counted(caller: DescribedClient) -> dict[str, int]:
    entries = caller.get("/v1/merchants").get_json()["merchants"]
    return {f"{e['merchant']} {e['flow']} {e['currency']}": e["count"] for e in entries}


def test_a_batch_is_counted_per_stream(caller: DescribedClient) -> None:
    sent = [
        *rows([1999, 250, 31_00]),
        {"merchant": "harbour-books", "amount": -500, "id": "back"},
        {"merchant": "harbour-books", "amount": "1999", "currency": "JPY", "id": "yen"},
        {"merchant": "fish", "amount": "12.50", "flow": "recurring", "id": "f"},
    ]
    receipt = post(caller, sent)
    assert receipt == {
        "accepted": 6,
        "duplicates": 0,
        "late": 0,
        "zero": 0,
        "unverified": 0,
        "rejected": [],
        "exactly_once": True,
        "durability": receipt["durability"],
        "alarms": [],
    }
    assert _counted(caller) == {
        "harbour-books sale EUR": 3,
        "harbour-books refund EUR": 1,
        "harbour-books sale JPY": 1,
        "fish recurring EUR": 1,
    }


def test_a_batch_sent_again_changes_nothing(caller: DescribedClient) -> None:
    sent = rows(ordinary(50))
    assert post(caller, sent)["accepted"] == 50
    again = post(caller, sent[20:] + rows([777], "fish"))
    assert (again["accepted"], again["duplicates"]) == (1, 30)
    assert _counted(caller)["harbour-books sale EUR"] == 50


def test_source_and_offset_identify_a_row(caller: DescribedClient) -> None:
    sent = [{"merchant": "fish", "amount": 100 + i, "source": "p-3", "offset": i} for i in range(9)]
    assert post(caller, sent)["accepted"] == 9
    assert post(caller, sent)["duplicates"] == 9


def test_an_idempotency_key_identifies_rows_by_position(caller: DescribedClient) -> None:
    body = {"transactions": [{"merchant": "fish", "amount": 100}] * 3}
    keyed = {**KEYED, "Idempotency-Key": "nightly 7"}
    first = caller.post("/v1/batches", json=body, headers=keyed).get_json()
    again = caller.post("/v1/batches", json=body, headers=keyed).get_json()
    assert (first["accepted"], first["exactly_once"]) == (3, True)
    assert (again["accepted"], again["duplicates"]) == (0, 3)
    body["transactions"].append({"merchant": "fish", "amount": 5})
    other = caller.post("/v1/batches", json=body, headers=keyed)
    assert other.status_code == 422
    assert other.get_json(force=True)["errors"][0]["header"] == "Idempotency-Key"
    assert _counted(caller) == {"fish sale EUR": 3}


def test_a_packed_body_has_the_same_digest_as_a_plain_one(caller: DescribedClient) -> None:
    body = json.dumps({"transactions": [{"merchant": "fish", "amount": 100}]}).encode()
    keyed = {**KEYED, "Idempotency-Key": "k"}
    packed = {**keyed, "Content-Encoding": "gzip"}
    kind = "application/json"
    first = caller.post("/v1/batches", data=body, content_type=kind, headers=keyed)
    again = caller.post("/v1/batches", data=gzip.compress(body), content_type=kind, headers=packed)
    assert (first.status_code, again.status_code) == (200, 200)
    assert again.get_json()["duplicates"] == 1


def test_rows_without_identity_are_counted_each_time_and_it_is_said(
    caller: DescribedClient,
) -> None:
    sent = [{"merchant": "fish", "amount": 100}]
    assert post(caller, sent)["exactly_once"] is False
    assert post(caller, sent)["accepted"] == 1
    assert _counted(caller) == {"fish sale EUR": 2}


def test_lines_are_counted_as_a_batch_is(caller: DescribedClient) -> None:
    lines = b"\n".join(json.dumps(row).encode() for row in rows(ordinary(30)))
    answer = caller.post(
        "/v1/batches",
        data=gzip.compress(lines),
        content_type="application/x-ndjson; charset=utf-8",
        headers={**KEYED, "Content-Encoding": "gzip"},
    )
    assert answer.get_json()["accepted"] == 30
    assert post(caller, rows(ordinary(30)))["duplicates"] == 30


def test_one_invalid_row_refuses_all(caller: DescribedClient) -> None:
    sent: list[dict[str, Any]] = [*rows([100, 200]), {"merchant": "fish", "amount": 1.5}]
    answer = caller.post("/v1/batches", json={"transactions": sent})
    assert answer.status_code == 422
    assert _counted(caller) == {}


def test_invalid_rows_are_left_out_when_asked(caller: DescribedClient) -> None:
    ahead = {"merchant": "fish", "amount": 1, "at": "2099-01-01T00:00:00Z", "id": "later"}
    sent: list[dict[str, Any]] = [*rows([100, 0]), {"amount": "x", "id": "bad"}, ahead]
    receipt = post(caller, sent, "?invalid=skip")
    assert (receipt["accepted"], receipt["zero"]) == (2, 1)
    assert [(r["index"], r["id"], r["retryable"]) for r in receipt["rejected"]] == [
        (2, "bad", False),
        (3, "later", True),
    ]
    assert receipt["rejected"][1]["pointer"] == "/transactions/3/at"
    total = receipt["accepted"] + receipt["duplicates"] + len(receipt["rejected"])
    assert total == len(sent)


def test_old_rows_are_late(caller: DescribedClient) -> None:
    receipt = post(caller, rows([100, 200], at="2020-02-29T12:00:00Z"), "?reply=merchants")
    assert (receipt["accepted"], receipt["late"]) == (2, 2)
    assert (receipt["merchants"][0]["count"], receipt["merchants"][0]["window_count"]) == (2, 0)


def test_the_reply_tells_as_much_as_is_asked(caller: DescribedClient) -> None:
    sent = rows(ordinary(300)) + rows(ordinary(20), "fish")
    entries = post(caller, sent, "?reply=merchants")["merchants"]
    assert [e["merchant"] for e in entries] == ["harbour-books", "fish"]
    assert entries[0]["count"] == 300
    assert entries[0]["score"] is not None
    assert entries[1]["score"] is None  # below minimum_count
    assert "views" not in entries[0]
    full = post(caller, rows([100], "fish", flow="refund"), "?reply=full")["merchants"]
    assert [(e["flow"], e["count"]) for e in full] == [("refund", 1)]
    assert full[0]["views"]["lead_digit"]["count"] == 1


def test_a_planted_price_raises_an_alarm_in_the_reply(caller: DescribedClient) -> None:
    caller.put("/v1/policies/standard", json=WATCHFUL)
    assert post(caller, rows(ordinary(500)))["alarms"] == []
    planted = rows(ordinary(500) + fixed_price(40))
    (alarm,) = post(caller, planted)["alarms"]
    assert (alarm["view"], alarm["cells"][0]) == ("lead_pair", "49")
    assert alarm["state"] == "open"
    assert 500 < alarm["count"] <= 540
    assert alarm["transactions_per_false_alarm"] == 1_000_000
    assert alarm["evidence"] >= 6
    assert "49" in alarm["explanation"]
    assert post(caller, planted)["alarms"] == []


def test_history_builds_tallies_and_stays_off_the_feed(caller: DescribedClient) -> None:
    caller.put("/v1/policies/standard", json=WATCHFUL)
    past = rows(ordinary(500) + fixed_price(40), at="2024-03-01T12:00:00Z")
    (alarm,) = post(caller, past, "?mode=history")["alarms"]
    assert alarm["historic"] is True
    assert caller.get("/v1/alarms").get_json()["alarms"] == []
    assert caller.get(f"/v1/alarms/{alarm['id']}").get_json()["historic"] is True


def test_an_empty_batch_is_a_batch(caller: DescribedClient) -> None:
    assert post(caller, [])["accepted"] == 0


@pytest.mark.parametrize("flow", ["authorisation", "chargeback", "test"])
def test_quiet_flows_are_tallied_and_raise_nothing(caller: DescribedClient, flow: str) -> None:
    caller.put("/v1/policies/standard", json=WATCHFUL)
    assert post(caller, rows(ordinary(500) + fixed_price(60), flow=flow))["alarms"] == []
    assert _counted(caller) == {f"harbour-books {flow} EUR": 560}
