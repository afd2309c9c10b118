"""The way by columns and the way by rows are one: same verdict, same batch."""

from __future__ import annotations

import json

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from service.batches.columns import Doubt, Request, batch_of
from service.batches.document import parse
from service.batches.errors import Invalid, TooLarge, Unreadable
from service.batches.limits import Defaults, Limits
from service.batches.read import read_batch
from service.batches.rowcheck import findings
from service.batches.rows import typed_rows, unrepeated
from tests.batches.conftest import KEY, NOW

REQUEST = Request(Limits(), Defaults("EUR"), NOW, KEY, "retry-1")

# Values as JSON text, so that floats, escapes and literals are spelled as a sender may.
GOOD = {
    "merchant": ['"a"', '"harbour-books"', '"A.b_c:d@e+f-9"', '"\\u0061"', '"' + "x" * 64 + '"'],
    "amount": ["0", "1", "1999", "-500", "-0", "1000000000000000", '"5"', '"19.99"', '"-0.5"',
               '"0.05"', '"-0.00"'],
    "currency": ['"EUR"', '"USD"', '"JPY"', '"KWD"'],
    "flow": ['"sale"', '"refund"', '"payout"', '"_x-9"'],
    "at": ['"2026-11-30T12:00:00Z"', '"2026-11-30T11:59:59.123Z"', '"2026-11-30T12:05:00Z"',
           '"2026-11-30T13:00:00+01:00"', '"1970-01-01T00:00:00Z"', '"2024-02-29t00:00:00.5z"'],
    "id": ['"a"', '"pay-000001"', '" "', '"\\"\\\\\\/"', '"\\u0022"', '"{[,:]}"',
           '"' + "~" * 64 + '"'],
    "category": ['"5942"', '"0000"'],
    "source": ['"log-1"', '"log-2"', '"\\\\"'],
    "offset": ["0", "7", "9007199254740991", "-0"],
}  # fmt: skip
BAD = {
    "merchant": ['""', '"-a"', '"a b"', '"ü"', '"' + "x" * 65 + '"', '"a\\n"', '"\\ud800"', "7"],
    "amount": ["1.5", "1e3", "1000000000000001", "-9223372036854775808", "99999999999999999999",
               "9" * 5000, '"1.999"', '"1e3"', '".5"', '"05"', '""', '"５"', "true", "[1]",
               '"10000000000000000"', "1e999"],
    "currency": ['"XAU"', '"XXX"', '"eur"', '"ZZZ"', '""', "978"],
    "flow": ['"SALE"', '""', '"seventeen-letters"', '"a\\u0000"', "1"],
    "at": ['"2026-11-30T12:05:00.001Z"', '"2026-02-30T00:00:00Z"', '"2026-11-30T24:00:00Z"',
           '"2026-11-30T23:59:60Z"', '"1969-12-31T23:59:59Z"', '"2101-01-01T00:00:00Z"',
           '"2026-11-30"', '"2026-11-30T12:00:00"', "1796040000"],
    "id": ['""', '"' + "x" * 65 + '"', '"\\t"', '"é"', '"\\u0000"', '"\\u007f"', "5"],
    "category": ['"594"', '"59420"', '"５942"', '"a942"', "5942"],
    "source": ['""', '"' + "x" * 65 + '"', '"\\n"', "1"],
    "offset": ["-1", "9007199254740992", "99999999999999999999", "1.0", '"1"', "true"],
}  # fmt: skip


@st.composite
def members(draw):
    """Return the members of one row, as (name, JSON text), mostly valid."""
    wrong = draw(st.sampled_from([None] * 12 + [*BAD, "unknown", "twice", "missing", "null"]))
    names = ["merchant", "amount"]
    names += [name for name in ("currency", "flow", "at", "id", "category")
              if name == wrong or draw(st.booleans())]  # fmt: skip
    if wrong in ("source", "offset") or draw(st.booleans()):
        names += ["source", "offset"]
    row = [
        (name, draw(st.sampled_from(BAD[name] if name == wrong else GOOD[name]))) for name in names
    ]
    amount = dict(row)["amount"]
    if wrong is None and amount.lstrip('"').startswith("-") and draw(st.booleans()):
        row = [(name, text) for name, text in row if name != "flow"]
    if wrong == "unknown":
        row.append((draw(st.sampled_from(["tip", "", "a/b", "_schema", "Amount"])), "1"))
    elif wrong == "twice":
        row.append(draw(st.sampled_from(row)))
    elif wrong == "missing":
        row.remove(draw(st.sampled_from(row)))
    elif wrong == "null":
        row[draw(st.integers(0, len(row) - 1))] = (row[0][0], "null")
    return draw(st.permutations(row))


def text_of(row):
    return "{" + ", ".join(f"{json.dumps(name)}: {text}" for name, text in row) + "}"


def by_columns(body, ndjson=False):
    rows = typed_rows(body, ndjson=ndjson)
    if rows is None:
        return None
    try:
        batch, presence = batch_of(rows, REQUEST)
    except Doubt:
        return None
    given = unrepeated(body, ndjson=ndjson, names=presence.names, texts=presence.texts)
    return batch if given else None


def settings_of(**more):
    return {
        "ndjson": False, "limits": REQUEST.limits, "defaults": REQUEST.defaults, "now": NOW,
        "ident_key": KEY, "idempotency_key": "retry-1", "skip_invalid": True,
    } | more  # fmt: skip


def same(one, other, sent):
    assert other.sent == sent
    for name in ("streams", "ids", "sources", "categories", "exactly_once"):
        assert getattr(one, name) == getattr(other, name), name
    for name in ("stream", "amount", "at", "ident", "unverified", "source", "offset"):
        column, expected = getattr(other, name), getattr(one, name)
        assert column.dtype == expected.dtype
        np.testing.assert_array_equal(column, expected, err_msg=name)


@settings(max_examples=400, deadline=None)
@given(st.lists(members(), max_size=25))
def test_same_verdict_and_same_batch(rows):
    texts = [text_of(row) for row in rows]
    body = ('{"transactions": [' + ", ".join(texts) + "]}").encode()
    found = [findings(row, now=NOW, default_currency="EUR") for row in parse(body)["transactions"]]
    lines = "\n".join(texts).encode()
    fast = by_columns(body)
    assert (fast is not None) == (not any(found))
    assert (by_columns(lines, ndjson=True) is not None) == (fast is not None)
    good = [text for text, wrong in zip(texts, found, strict=True) if not wrong]
    # Valid rows alone go by columns; with a broken one behind them, by rows.
    alone = by_columns(('{"transactions": [' + ", ".join(good) + "]}").encode())
    assert alone is not None
    behind = ('{"transactions": [' + ", ".join([*good, "0"]) + "]}").encode()
    same(alone, read_batch(behind, **settings_of()), len(good) + 1)
    same(alone, read_batch("\n".join([*good, "0"]).encode(), **settings_of(ndjson=True)),
         len(good) + 1)  # fmt: skip
    # And whatever is sent, everything is accounted for.
    mixed = read_batch(body, **settings_of())
    assert mixed.amount.size == len(good)
    assert [r.index for r in mixed.rejected] == [i for i, wrong in enumerate(found) if wrong]
    if any(found):
        with pytest.raises(Invalid) as error:
            read_batch(body, **settings_of(skip_invalid=False))
        assert error.value.error_count == sum(map(len, found))


WHOLE = (
    '{"transactions": [{"merchant": "a", "amount": 1, "id": "x\\"y", "at": '
    '"2026-11-30T12:00:00Z"}, {"merchant": "b", "amount": "19.99", "source": "s", "offset": 0}]}'
)


@settings(max_examples=600, deadline=None)
@given(
    st.lists(
        st.tuples(
            st.integers(0, len(WHOLE)),
            st.integers(0, 3),
            st.sampled_from([*'{}[]":,\\ \n\r0159.-eE+az/~\x00\x7fü\ufeff', "NaN", "null", '"a"']),
        ),
        min_size=1,
        max_size=3,
    ),
    st.booleans(),
)
@example([(0, 0, "\ufeff")], False)
@example([(0, 0, "\ufeff\ufeff")], True)
def test_no_text_crashes_and_both_ways_read_the_same_json(edits, ndjson):
    text = WHOLE
    if ndjson:
        text = text[len('{"transactions": [') : -2].replace("}, {", "}\n{")
    for position, cut, put in edits:
        text = text[:position] + put + text[position + cut :]
    body = text.encode()
    fast = by_columns(body.removeprefix(b"\xef\xbb\xbf"), ndjson)
    try:
        batch = read_batch(body, **settings_of(ndjson=ndjson, skip_invalid=False))
    except (Unreadable, Invalid, TooLarge):
        assert fast is None
        return
    # What is taken is what a plain JSON reader sees.
    plain = body.removeprefix(b"\xef\xbb\xbf").decode()
    rows = (
        [json.loads(line) for line in plain.split("\n") if line.strip(" \t\r")]
        if ndjson
        else json.loads(plain)["transactions"]
    )
    assert batch.sent == len(rows) == len(batch.ids)
    assert batch.ids == [row.get("id") for row in rows]
    assert [batch.streams[i].merchant for i in batch.stream] == [row["merchant"] for row in rows]


@settings(max_examples=200, deadline=None)
@given(st.binary(max_size=60), st.booleans(), st.booleans())
def test_no_bytes_crash(body, ndjson, skip):
    try:
        batch = read_batch(body, **settings_of(ndjson=ndjson, skip_invalid=skip))
    except (Unreadable, Invalid):
        return
    assert batch.sent == len(batch.rejected)
