"""An analyst reads: the listing, one stream, its digits, its rows."""

from __future__ import annotations

import csv
import io
import re
from typing import Any

import pytest

from tests.web.business import ordinary, post, rows
from tests.web.described import KEYED, DescribedClient


def test_the_listing_is_walked_by_its_links(caller: DescribedClient) -> None:
    for i in range(7):
        post(caller, rows(ordinary(10 + i), f"shop-{i}"))
    target = "/v1/merchants?sort=count&limit=3&search=SHOP"
    seen: list[str] = []
    for _ in range(5):
        answer = caller.get(target)
        body = answer.get_json()
        seen += [e["merchant"] for e in body["merchants"]]
        link = answer.headers.get("Link")
        assert (link is None) == (body["next"] is None)
        if link is None:
            break
        found = re.fullmatch(r'<([^>]+)>; rel="next"', link)
        assert found
        target = found[1]
    assert seen == [f"shop-{i}" for i in (6, 5, 4, 3, 2, 1, 0)]


def test_a_cursor_that_was_never_given_out_is_422(caller: DescribedClient) -> None:
    answer = caller.get("/v1/merchants?cursor=AAAA")
    assert answer.status_code == 422
    assert answer.get_json(force=True)["errors"][0]["parameter"] == "cursor"


def test_one_stream_in_full(caller: DescribedClient) -> None:
    post(caller, rows(ordinary(400), category="5942"))
    found = caller.get("/v1/merchants/harbour-books").get_json()
    assert (found["count"], found["category"], found["policy"]) == (400, "5942", "standard")
    assert set(found["views"]) == {
        "lead_digit",
        "second_digit",
        "lead_pair",
        "tail_pair",
        "circle",
    }
    assert "mad" not in found["views"]["lead_digit"]
    assert found["guarantee"]["reason"]


def test_all_measures_come_with_their_warning(caller: DescribedClient) -> None:
    amounts = ordinary(400)
    post(caller, rows(amounts))
    found = caller.get("/v1/merchants/harbour-books?measures=all").get_json()
    checked = caller.post("/v1/checks", json={"amounts": amounts}).get_json()
    assert "one look" in found["warning"]
    for view in ("lead_digit", "second_digit", "lead_pair", "tail_pair"):
        ours, theirs = found["views"][view], checked["views"][view]
        assert ours["count"] == theirs["count"]
        chi_square = theirs["chi_square"]["statistic"]
        assert ours["chi_square"]["statistic"] == pytest.approx(chi_square, rel=1e-5)
        assert ours["largest_z"]["cell"] == theirs["largest_z"]["cell"]
    assert found["circle"]["spread"] == pytest.approx(checked["circle"]["spread"], rel=1e-5)


def test_flow_and_currency_choose_the_stream(caller: DescribedClient) -> None:
    post(caller, rows(ordinary(20)) + rows([5] * 30, currency="JPY", flow="sale"))
    post(caller, [{**row, "id": f"r{i}"} for i, row in enumerate(rows([-100] * 4))])

    def count(query: str) -> Any:
        return caller.get(f"/v1/merchants/harbour-books{query}").get_json()

    post(
        caller,
        [
            {"merchant": "harbour-books", "amount": 7, "currency": "JPY", "id": f"y{i}"}
            for i in range(30)
        ],
    )
    busiest = count("")
    assert (busiest["currency"], busiest["flow"]) == ("JPY", "sale")
    assert count("?currency=EUR")["count"] == 20
    assert count("?flow=refund")["count"] == 4


@pytest.mark.parametrize(
    "path",
    [
        "/v1/merchants/nobody",
        "/v1/merchants/harbour-books?flow=payout",
        "/v1/merchants/harbour-books?currency=USD",
        "/v1/merchants/nobody/digits",
        "/v1/merchants/nobody/rows",
        "/v1/merchants/%20",
        "/v1/merchants/a*b/rows",
        "/v1/alarms/nothing",
        "/v1/policies/nothing",
    ],
)
def test_what_is_not_there_is_404(caller: DescribedClient, path: str) -> None:
    post(caller, rows([100]))
    answer = caller.get(path)
    assert answer.status_code == 404
    detail = answer.get_json(force=True)["detail"]
    assert detail[0].isupper()
    assert detail.endswith(".")


@pytest.mark.parametrize("view", ["lead_digit", "second_digit", "lead_pair", "tail_pair"])
@pytest.mark.parametrize("span", ["window", "lifetime"])
def test_digits_are_counted_cell_by_cell(caller: DescribedClient, view: str, span: str) -> None:
    amounts = ordinary(200)
    post(caller, rows(amounts))
    target = f"/v1/merchants/harbour-books/digits?view={view}&span={span}"
    found = caller.get(target).get_json()

    def read(amount: int) -> str | None:
        text = str(amount)
        return {
            "lead_digit": text[0],
            "second_digit": text[1],
            "lead_pair": text[:2],
            "tail_pair": text[-2:] if amount >= 1000 else None,
        }[view]

    digits = [d for d in map(read, amounts) if d is not None]
    assert found["count"] == len(digits)
    assert {c["cell"]: c["count"] for c in found["cells"] if c["count"]} == {
        d: digits.count(d) for d in digits
    }
    assert sum(c["expected"] for c in found["cells"]) == pytest.approx(1, abs=1e-4)
    for cell in found["cells"]:
        assert cell["low"] <= cell["share"] <= cell["high"]


def test_digits_are_a_table_for_those_who_ask(caller: DescribedClient) -> None:
    post(caller, rows([1999, 250, 3100]))
    target = "/v1/merchants/harbour-books/digits?span=lifetime"
    answer = caller.get(target, headers={**KEYED, "Accept": "text/csv"})
    assert answer.mimetype == "text/csv"
    assert "Accept" in answer.headers["Vary"]
    table = list(csv.DictReader(io.StringIO(answer.get_data(as_text=True))))
    document = caller.get(target, headers={**KEYED, "Accept": "application/json, */*"}).get_json()
    assert [row["cell"] for row in table] == [str(d) for d in range(1, 10)]
    for row, cell in zip(table, document["cells"], strict=True):
        assert {k: v and float(v) for k, v in row.items()} == {
            k: "" if v is None else float(v) for k, v in cell.items()
        }


def test_the_circle_has_no_cells(caller: DescribedClient) -> None:
    post(caller, rows([1999]))
    assert caller.get("/v1/merchants/harbour-books/digits?view=circle").status_code == 422


def test_the_last_rows_are_kept_as_sent(caller: DescribedClient) -> None:
    post(caller, rows([1999, 250], at="2025-11-30T12:00:00.250+01:00"))
    assert caller.get("/v1/merchants/harbour-books/rows").get_json()["rows"] == [
        {
            "id": "harbour-books-000000",
            "amount": 1999,
            "currency": "EUR",
            "at": "2025-11-30T11:00:00.250Z",
        },
        {
            "id": "harbour-books-000001",
            "amount": 250,
            "currency": "EUR",
            "at": "2025-11-30T11:00:00.250Z",
        },
    ]


def test_standing_and_category_filter_the_listing(caller: DescribedClient) -> None:
    post(caller, rows([100], category="5942") + rows([100], "fish", category="5422"))
    listed = caller.get("/v1/merchants?category=5422").get_json()["merchants"]
    assert [(e["merchant"], e["category"]) for e in listed] == [("fish", "5422")]
    assert caller.get("/v1/merchants?standing=alarmed").get_json()["merchants"] == []
    assert len(caller.get("/v1/merchants?standing=learning").get_json()["merchants"]) == 2
