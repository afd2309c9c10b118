"""Alarms as documents and in words: from real crossings, and from invented ones."""

from __future__ import annotations

import json
import math
import re

import numpy as np
import pytest

from schemas.alarm import Alarm
from service.detection.policy import Policy
from service.streams.alarms import alarm_document, crossing_document
from service.streams.explanation import explanation, percent
from service.streams.findings import Finding
from service.streams.fold import Crossing
from service.streams.record import HISTORIC, Stream
from tests.streams.test_fold import LAW, START, law_amounts, records, run, with_fraud

STREAM = Stream("harbour-books", "sale", "EUR")
NINE_14 = 1_796_030_040_000  # 2026-11-30T09:14:00Z
FIELDS = [
    *("id", "cursor", "merchant", "flow", "currency", "state", "historic"),
    *("raised_at", "count", "evidence", "transactions_per_false_alarm"),
    *("view", "pattern", "cells", "onset_count", "observed_share", "expected_share"),
    *("onset_at", "reference", "findings", "repeats", "severity"),
    *("excess_count", "excess_amount", "last_hit_at", "still_active", "explanation"),
    *("assignee", "decision"),
]


def finding(**changes) -> Finding:
    values = {
        "view": "lead_pair",
        "pattern": "cell",
        "cells": ("49",),
        "members": (48,),
        "weight": 0.9,
        "onset_row": 2072,
        "onset_at": NINE_14,
        "observed": 0.31,
        "expected": 0.00877392,
        "bound": 0.00965131,
        "reference": "law",
        "severity": 14.1,
        "hits": 6,
        "seen": 20,
        "spent": 29650.0,
    }
    return Finding(**{**values, **changes})


def crossing(ordinal: int = 0, findings=None, **changes) -> Crossing:
    values = {
        "slot": 0,
        "alarm": bytes(range(16)),
        "ordinal": ordinal,
        "record": 2100 + ordinal,
        "rows": 2091 + 20 * ordinal,
        "arrived": NINE_14 + 600_000 + ordinal,
        "at": NINE_14 + 540_000 + ordinal,
        "historic": False,
        "evidence": 6.0213,
        "threshold": 1e6,
        "severity": 14.12 * (ordinal + 1),
        "excess": 5.8 * (ordinal + 1),
        "excess_amount": 29650.0 * (ordinal + 1),
        "last_hit_at": NINE_14 + 540_000 + ordinal,
        "live": ordinal == 0,
        "findings": [finding()] if findings is None else findings,
    }
    return Crossing(**{**values, **changes})


def alarm(*crossings: Crossing, **options) -> dict:
    documents = [json.loads(json.dumps(crossing_document(c), allow_nan=False)) for c in crossings]
    found = alarm_document(documents[0]["alarm"], STREAM, documents, cursor="17-0", **options)
    assert Alarm().validate(found) == {}
    assert sorted(found) == sorted(FIELDS)
    return json.loads(json.dumps(found, allow_nan=False))


def said(
    found: Finding,
    exponent: int | None = 2,
    stream: Stream = STREAM,
    excess: float | None = 5.8,
    excess_amount: float | None = 29650.0,
) -> str:
    document = crossing_document(crossing(findings=[found]))["findings"][0]
    text = explanation(
        document,
        stream,
        excess=excess,
        excess_amount=excess_amount,
        exponent=exponent,
    )
    assert "not proof of fraud" in text
    assert len(re.findall(r"\.(?= |$)", text)) == 2  # two sentences
    assert "nan" not in text
    return text


def test_the_alarm_of_the_contract() -> None:
    found = alarm(crossing())
    assert found == {
        "id": "000102030405060708090a0b0c0d0e0f",
        "cursor": "17-0",
        "merchant": "harbour-books",
        "flow": "sale",
        "currency": "EUR",
        "state": "open",
        "historic": False,
        "raised_at": "2026-11-30T09:24:00.000Z",
        "count": 2091,
        "evidence": 6.02,
        "transactions_per_false_alarm": 1_000_000,
        "view": "lead_pair",
        "pattern": "cell",
        "cells": ["49"],
        "onset_count": 2072,
        "onset_at": "2026-11-30T09:14:00.000Z",
        "observed_share": 0.31,
        "expected_share": 0.00877392,
        "reference": "law",
        "findings": [
            {
                "view": "lead_pair",
                "pattern": "cell",
                "cells": ["49"],
                "onset_count": 2072,
                "observed_share": 0.31,
                "expected_share": 0.00877392,
            }
        ],
        "repeats": 0,
        "severity": 14.1,
        "excess_count": 5.8,
        "excess_amount": 29650,
        "last_hit_at": "2026-11-30T09:23:00.000Z",
        "still_active": True,
        "explanation": found["explanation"],
        "assignee": None,
        "decision": None,
    }


def test_a_cell_in_words() -> None:
    assert said(finding()) == (
        "Since 09:14 UTC on 30 November 2026, 31 % of the amounts begin with 49, where at most "
        "0.97 % is expected under the logarithmic law; that is about 6 amounts more than expected "
        "so far, worth about 296.50 EUR. The alarm itself chose the time from which this share is "
        "counted, so the share is biased upwards: it is a reason to look, not proof of fraud."
    )


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"view": "lead_digit", "cells": ("4",)}, "of the amounts begin with 4, where"),
        (
            {"view": "tail_pair", "cells": ("00",), "bound": 0.0105},
            "amounts end in 00, where at most 1.1 % is expected if endings are spread evenly",
        ),
        ({"cells": ("49", "48")}, "begin with 49 or 48, where"),
        ({"cells": ("49", "48", "47")}, "begin with 49, 48 or 47, where"),
        ({"cells": tuple("123456")}, "begin with 1, 2, 3, 4, 5 or 6, where"),
        ({"cells": tuple("12345678")}, "begin with 1, 2, 3, 4, 5 or one of 3 others, where"),
        (
            {"reference": "own", "bound": 0.023},
            "at most 2.3 % is expected in this merchant's own baseline",
        ),
        ({"reference": "category"}, "expected in this merchant's category"),
        (
            {"view": "tail_pair", "cells": ("00",), "reference": "own"},
            "expected in this merchant's own baseline",
        ),
        (
            {"pattern": "rare_cells", "cells": ("13", "71", "88", "90"), "reference": "own"},
            "begin with digits that were hardly used before, such as 13, 71 and 88, where",
        ),
        ({"onset_at": 0}, "Lately, 31 %"),
    ],
)
def test_other_cells_in_words(changes: dict, words: str) -> None:
    assert words in said(finding(**changes))


@pytest.mark.parametrize(
    ("excess", "amount", "words"),
    [
        (0.2, 990.0, "under the logarithmic law. The alarm"),
        (1.2, 5900.0, "about 1 amount more"),
        (12345.6, 1e9, "12,346 amounts more"),
    ],
)
def test_the_excess_in_words(excess: float, amount: float, words: str) -> None:
    assert words in said(finding(), excess=excess, excess_amount=amount)


def shape(**changes) -> Finding:
    values = {
        "pattern": "shape",
        "shape": "invented",
        "observed": math.nan,
        "cells": ("99", "98", "97", "96"),
    }
    return finding(**{**values, **changes})


def test_repeated_amounts_in_words() -> None:
    found = finding(view="repeat", cells=("3720", "5860"), reference="own", bound=0.02)
    text = said(found, excess=None, excess_amount=None)
    assert "31 % of the amounts repeat one of the 64 before them exactly" in text
    assert "such as 37.20 EUR and 58.60 EUR, where at most 2 % is expected" in text


def test_shapes_in_words() -> None:
    assert said(shape()) == (
        "Since 09:14 UTC on 30 November 2026, the first two digits of the amounts are spread more "
        "evenly than the logarithmic law has them, as invented numbers often are. The alarm itself "
        "chose that time and that shape: it is a reason to look, not proof of fraud."
    )
    assert "evenly than in this merchant's own baseline" in said(shape(reference="own"))
    moved = said(shape(shape="shifted", cells=("18", "19", "20", "17")))
    assert "moved as a whole away from the logarithmic law" in moved
    assert "begin with 18, 19 or 20." in moved
    own = said(shape(shape="shifted", reference="own"))
    assert "away from what is usual in this merchant's own baseline" in own


def test_money_is_written_in_the_currency_or_left_in_minor_units() -> None:
    yen = STREAM._replace(currency="JPY")
    assert "worth about 29,650 JPY." in said(finding(), 0, yen)
    assert "worth about 29.650 KWD." in said(finding(), 3, STREAM._replace(currency="KWD"))
    assert "worth about 29,650 minor units of EUR." in said(finding(), None)


@pytest.mark.parametrize(
    ("share", "text"),
    [
        (0.31, "31 %"),
        (0.009651, "0.97 %"),
        (1.0, "100 %"),
        (0.9991, "more than 99 %"),
        (0.0000123, "0.0012 %"),
        (0.05, "5 %"),
    ],
)
def test_percentages_have_two_digits(share: float, text: str) -> None:
    assert percent(share) == text


def test_a_shape_has_no_share_and_no_excess() -> None:
    nothing = {"excess": math.nan, "excess_amount": math.nan}
    found = alarm(crossing(findings=[shape(), finding(weight=0.1)], **nothing))
    assert (found["pattern"], found["observed_share"]) == ("shape", None)
    assert found["excess_count"] is found["excess_amount"] is None
    assert [f["pattern"] for f in found["findings"]] == ["shape", "cell"]


def test_further_crossings_add_to_one_alarm() -> None:
    tail = finding(view="tail_pair", cells=("00",), weight=0.4)
    later = finding(cells=("49", "48"), weight=0.6, onset_row=2092, observed=0.4)
    stronger = finding(view="tail_pair", cells=("00", "50"), weight=0.8, onset_row=2112)
    found = alarm(
        crossing(0, [finding(weight=0.6), tail]),
        crossing(1, [later]),
        crossing(2, [stronger, finding(view="lead_digit", cells=("4",), weight=0.1)]),
    )
    assert (found["count"], found["repeats"], found["severity"]) == (2091, 2, 42.4)
    assert (found["view"], found["cells"], found["onset_count"]) == ("lead_pair", ["49"], 2072)
    assert [(f["view"], f["cells"], f["onset_count"]) for f in found["findings"]] == [
        ("tail_pair", ["00", "50"], 2112),  # the strongest of the two about the tail pair
        ("lead_pair", ["49"], 2072),  # no stronger later, so the earlier onset stays
        ("lead_digit", ["4"], 2072),
    ]
    assert found["excess_count"] == 17.4  # as of the last crossing
    assert found["excess_amount"] == 3 * 29650
    assert "about 17 amounts more than expected so far" in found["explanation"]
    assert found["raised_at"] == "2026-11-30T09:24:00.000Z"
    assert found["last_hit_at"] == "2026-11-30T09:23:00.002Z"


def test_at_most_five_findings() -> None:
    views = ["lead_digit", "lead_pair", "tail_pair"]
    many = [
        finding(view=v, pattern=p, weight=0.01 * i, observed=0.1)
        for i, (v, p) in enumerate((v, p) for v in views for p in ("cell", "rare_cells", "shape"))
    ]
    found = alarm(crossing(findings=[finding(), *many]))
    assert len(found["findings"]) == 5


def test_historic_only_if_every_crossing_is() -> None:
    past = crossing(0, historic=True)
    assert alarm(past)["historic"]
    assert alarm(past, crossing(1, historic=True))["historic"]
    assert not alarm(past, crossing(1))["historic"]


def test_a_pattern_is_over_when_the_stream_went_on_long_enough_without_it() -> None:
    # The last crossing took 20 rows, so the longer of 3 x 20 and 100 rows decides.
    assert alarm(crossing(), rows=2091 + 100)["still_active"]
    assert not alarm(crossing(), rows=2091 + 101)["still_active"]
    slow = crossing(findings=[finding(onset_row=1092)])  # took 1000 rows
    assert alarm(slow, rows=2091 + 3000)["still_active"]
    assert not alarm(slow, rows=2091 + 3001)["still_active"]


def test_no_alarm_without_a_crossing() -> None:
    with pytest.raises(ValueError, match="crossing"):
        alarm_document("00", STREAM, [], cursor=None)


def test_a_real_cheat_from_first_row_to_case_file() -> None:
    rng = np.random.default_rng(51)
    amounts = with_fraud(rng, 1300, 1000, 0.3)
    _, crossings = run([records(amounts)], {1: LAW})
    assert len(crossings) > 3
    found = alarm(*crossings, exponent=2)
    assert (found["view"], found["cells"], found["repeats"]) == (
        "lead_pair",
        ["49"],
        len(crossings) - 1,
    )
    first, onset = crossings[0].rows, found["onset_count"]
    run_of = amounts[onset - 1 : first]
    hits = np.array([str(a).startswith("49") for a in run_of.tolist()])
    assert hits[0]
    assert hits[-1]
    assert found["observed_share"] == pytest.approx(hits.mean(), rel=1e-5)
    assert 980 <= onset <= first <= 1100
    bad = int((amounts[1000:] // 10_000 == 49).sum())
    assert found["excess_count"] == pytest.approx(bad, rel=0.1)
    assert found["excess_amount"] == pytest.approx(bad * 495_000, rel=0.1)
    assert found["id"] == crossings[0].alarm.hex()
    assert found["raised_at"].startswith("2026-09-22T")


def test_real_alarms_of_every_kind_make_documents() -> None:
    rng = np.random.default_rng(52)
    cheat = np.arange(3000) >= 1000
    round_off = law_amounts(rng, 3000)
    some = cheat & (rng.random(3000) < 0.3)
    round_off[some] = (round_off[some] // 100 + 10) * 100
    invented = law_amounts(rng, 3000)
    some = cheat & (rng.random(3000) < 0.6)
    invented[some] = rng.integers(10_000, 100_000, int(some.sum()))
    shop = rng.choice([199, 299, 499, 999, 1499, 2499], 3000)
    shop[cheat & (rng.random(3000) < 0.2)] = 5000
    quick = Policy(baseline_size=900, baseline_days=0)
    for amounts, policy, kinds in (
        (round_off, LAW, {("tail_pair", "cell", "law")}),
        (invented, LAW, {("lead_pair", "shape", "law")}),
        (shop, quick, {(v, "cell", "own") for v in ("lead_digit", "lead_pair", "tail_pair")}),
    ):
        log = records(amounts, flags=HISTORIC)
        _, crossings = run([log], {1: policy})
        found = alarm(*crossings, exponent=2)
        assert (found["view"], found["pattern"], found["reference"]) in kinds
        assert found["historic"]
        assert found["cells"]
        assert crossings[0].at > START
