"""What callers send, and what becomes of it."""

from __future__ import annotations

import json

import numpy as np
import pytest

from service.batches.batch import Rejection
from service.batches.errors import Invalid, TooLarge, Unreadable
from service.batches.identity import position_idents, row_idents
from service.batches.limits import Defaults, Limits
from service.streams.record import Stream
from tests.batches.conftest import KEY, NOW

ROW = {"merchant": "harbour-books", "amount": 1999}
DAY = 86_400_000


def refused(read, body, **settings):
    """Return what a body is refused for: pointer to detail, the count, all rejections."""
    with pytest.raises(Invalid) as error:
        read(body, **settings)
    rejections = error.value.rejections
    return {r.pointer: r.detail for r in rejections}, error.value.error_count, rejections


# --- what a valid row means


def test_example_of_the_contract(read):
    batch = read(
        [
            {
                "id": "7c1e-000017", "merchant": "harbour-books", "amount": 1999,
                "currency": "EUR", "flow": "sale", "at": "2026-11-30T12:00:00Z",
                "category": "5942",
            }
        ]
    )  # fmt: skip
    assert batch.sent == 1
    assert batch.streams == [Stream("harbour-books", "sale", "EUR")]
    assert batch.stream.tolist() == [0]
    assert batch.amount.tolist() == [1999]
    assert batch.at.tolist() == [NOW]
    assert batch.ident.tolist() == row_idents(["7c1e-000017"], KEY).tolist()
    assert batch.ids == ["7c1e-000017"]
    assert batch.categories == {"harbour-books": "5942"}
    assert batch.exactly_once
    assert batch.rejected == []
    assert batch.sources == []
    assert batch.source.tolist() == [-1]
    assert not batch.unverified.any()
    assert (batch.amount.dtype, batch.at.dtype, batch.ident.dtype) == (
        np.int64, np.int64, np.uint64,
    )  # fmt: skip


@pytest.mark.parametrize("ndjson", [False, True])
def test_defaults(read, ndjson):
    batch = read([ROW], ndjson=ndjson, defaults=Defaults("JPY", "payout"))
    assert batch.streams == [Stream("harbour-books", "payout", "JPY")]
    assert batch.at.tolist() == [NOW]
    assert batch.ident.tolist() == [0]
    assert not batch.exactly_once


def test_without_a_default_every_row_names_its_currency(read):
    errors, count, _ = refused(read, [ROW, ROW | {"currency": "EUR"}], defaults=Defaults(None))
    assert count == 1
    assert "no default" in errors["/transactions/0/currency"]
    assert read([ROW | {"currency": "EUR"}], defaults=Defaults(None)).sent == 1


def test_negative_amount_without_flow_is_a_refund(read):
    batch = read([ROW, ROW | {"amount": -500}, ROW | {"amount": "-5.00"}, ROW | {"amount": 0}])
    assert [batch.streams[i].flow for i in batch.stream] == ["sale", "refund", "refund", "sale"]
    assert batch.amount.tolist() == [1999, 500, 500, 0]


@pytest.mark.parametrize("amount", [-500, "-5.00", -(10**15)])
@pytest.mark.parametrize("flow", ["sale", "refund"])
def test_negative_amount_with_a_flow_is_an_error(read, amount, flow):
    errors, count, _ = refused(read, [ROW, ROW | {"amount": amount, "flow": flow}])
    assert count == 1
    assert "no minus sign" in errors["/transactions/1/amount"]


def test_minus_nothing_is_nothing(read):
    batch = read(b'{"transactions": [{"merchant": "a", "amount": -0, "flow": "sale"}]}')
    assert batch.amount.tolist() == [0]
    assert read([ROW | {"amount": "-0.00", "flow": "sale"}]).amount.tolist() == [0]


def test_decimal_strings_follow_the_currency(read):
    rows = [
        ROW | {"amount": amount, "currency": currency}
        for amount, currency in [("19.99", "EUR"), ("19", "JPY"), ("1.5", "KWD"), (7, "EUR")]
    ]
    assert read(rows).amount.tolist() == [1999, 19, 1500, 7]
    assert read([ROW | {"amount": "19.9"}, ROW]).amount.tolist() == [1990, 1999]


@pytest.mark.parametrize(
    ("amount", "currency", "reason"),
    [
        (19.99, "EUR", "Ambiguous"),
        (1999.0, "EUR", "Ambiguous"),
        ("19.999", "EUR", "at most 2 decimals"),
        ("19.9", "JPY", "at most 0 decimals"),
        ("1e3", "EUR", "no leading zeros"),
        (" 5", "EUR", "spaces"),
        ("+5", "EUR", "plus sign"),
        (".5", "EUR", "both sides"),
        (True, "EUR", "minor units"),
        (None, "EUR", "null"),
        ([1], "EUR", "minor units"),
        (10**15 + 1, "EUR", "10^15"),
        (-(10**15) - 1, "EUR", "10^15"),
        (10**30, "EUR", "10^15"),
        (-(2**63), "EUR", "10^15"),
        ("10000000000000.01", "EUR", "10^15"),
    ],
)
def test_amounts_that_are_refused(read, amount, currency, reason):
    rows = [ROW, ROW | {"amount": amount, "currency": currency}]
    errors, count, _ = refused(read, rows)
    assert count == 1
    assert reason in errors["/transactions/1/amount"]


def test_floats_of_every_spelling_are_refused(read):
    for spelling in (b"1e3", b"1E3", b"1.0", b"-0.0", b"1e400", b"1e-400"):
        body = b'{"transactions": [{"merchant": "a", "amount": ' + spelling + b"}]}"
        assert "Ambiguous" in refused(read, body)[0]["/transactions/0/amount"]


def test_an_integer_of_thousands_of_digits_is_too_large(read):
    for sign in (b"", b"-"):
        body = b'{"transactions": [{"merchant": "a", "amount": ' + sign + b"9" * 9999 + b"}]}"
        assert "10^15" in refused(read, body)[0]["/transactions/0/amount"]


def test_currencies_without_minor_unit_or_unknown(read):
    errors, count, _ = refused(read, [ROW | {"currency": c} for c in ("XAU", "ZZZ", "eur", "")])
    assert count == 4
    assert "XAU has none" in errors["/transactions/0/currency"]
    assert "ISO 4217" in errors["/transactions/1/currency"]
    assert "capital" in errors["/transactions/2/currency"]
    assert "capital" in errors["/transactions/3/currency"]


def test_streams_in_order_of_appearance(read):
    rows = [
        {"merchant": m, "amount": 5, "flow": f, "currency": c}
        for m, f, c in [
            ("b", "sale", "EUR"), ("a", "sale", "EUR"), ("b", "sale", "EUR"),
            ("b", "payout", "EUR"), ("b", "sale", "USD"), ("a", "sale", "EUR"),
        ]
    ]  # fmt: skip
    batch = read(rows)
    assert batch.stream.tolist() == [0, 1, 0, 2, 3, 1]
    assert batch.streams == [
        ("b", "sale", "EUR"), ("a", "sale", "EUR"), ("b", "payout", "EUR"), ("b", "sale", "USD"),
    ]  # fmt: skip


def test_last_category_given_stays(read):
    rows = [
        {"merchant": m, "amount": 5} | ({"category": c} if c else {})
        for m, c in [("a", "5942"), ("b", None), ("a", "5411"), ("a", None)]
    ]
    assert read(rows).categories == {"a": "5411"}
    errors, _, _ = refused(read, [ROW | {"category": c} for c in ("594", "59a2", "５942", 5942)])
    assert len(errors) == 4


def test_event_times(read):
    batch = read(
        [ROW | {"at": at} for at in ("2026-11-30T12:05:00Z", "2026-11-30T13:00:00.250+01:00")]
        + [ROW]
    )
    assert (batch.at - NOW).tolist() == [300_000, 250, 0]


def test_a_time_ahead_may_be_sent_again(read):
    _, count, rejections = refused(read, [ROW | {"at": "2026-11-30T12:05:00.001Z"}])
    assert count == 1
    assert rejections[0].retryable
    assert "5 minutes" in rejections[0].detail
    _, _, rejections = refused(read, [ROW | {"at": "2101-01-01T00:00:00Z"}])
    assert not rejections[0].retryable


def test_a_time_ahead_in_a_source_cannot_come_later(read):
    row = ROW | {"at": "2026-11-30T12:06:00Z", "source": "till-1", "offset": 7}
    _, _, rejections = refused(read, [row])
    assert not rejections[0].retryable


# --- identity


def test_identity_best_first(read):
    rows = [
        ROW | {"id": "a", "source": "log-1", "offset": 0},
        ROW | {"source": "log-2", "offset": 2**53 - 1},
        ROW | {"id": "a"},
        ROW,
        ROW | {"id": "b", "source": "log-1", "offset": 7},
    ]
    batch = read(rows, idempotency_key="retry-1")
    assert batch.exactly_once
    assert batch.ident.tolist() == [
        0, 0, int(row_idents(["a"], KEY)[0]),
        int(position_idents("retry-1", np.array([3]), KEY)[0]), 0,
    ]  # fmt: skip
    assert batch.sources == ["log-1", "log-2"]
    assert batch.source.tolist() == [0, 1, -1, -1, 0]
    assert batch.offset.tolist() == [0, 2**53 - 1, 0, 0, 7]
    assert batch.ids == ["a", None, "a", None, "b"]
    without = read(rows)
    assert not without.exactly_once
    assert without.ident.tolist()[3] == 0


@pytest.mark.parametrize("more", [{"source": "log"}, {"offset": 3}])
def test_source_and_offset_go_together(read, more):
    errors, count, _ = refused(read, [ROW, ROW | more])
    assert count == 1
    missing = "offset" if "source" in more else "source"
    assert "required together" in errors[f"/transactions/1/{missing}"]


@pytest.mark.parametrize("offset", [-1, 2**53, 2**64, 1.0, "1", True, None])
def test_offsets_that_are_refused(read, offset):
    errors, count, _ = refused(read, [ROW | {"source": "log", "offset": offset}])
    assert count == 1
    assert "/transactions/0/offset" in errors


@pytest.mark.parametrize("label", ["", "x" * 65, "tab\t", "nul\0", "ü", "del\x7f", "\ud800", 5])
@pytest.mark.parametrize("name", ["id", "source"])
def test_labels_are_printable_ascii(read, name, label):
    more = {name: label} | ({"offset": 1} if name == "source" else {})
    errors, count, _ = refused(read, [ROW | more])
    assert count == 1
    assert f"/transactions/0/{name}" in errors


def test_labels_at_their_limits(read):
    printable = "".join(map(chr, range(32, 127)))
    for label in (printable[:64], printable[-64:], " ", "~"):
        batch = read([ROW | {"id": label, "source": label, "offset": 1}, ROW | {"id": label}])
        assert batch.ids == [label, label]
        assert batch.sources == [label]


def test_positions_count_rows_left_out_and_not_blank_lines(read):
    good, bad = json.dumps(ROW), json.dumps(ROW | {"amount": 1.5})
    body = f"\n{good}\n\n{bad}\n  \n{good}\n".encode()
    batch = read(body, ndjson=True, skip_invalid=True, idempotency_key="k")
    assert batch.sent == 3
    assert batch.rejected[0].pointer == "/transactions/1/amount"
    assert batch.ident.tolist() == position_idents("k", np.array([0, 2]), KEY).tolist()


def test_unverified_are_rows_known_by_id_alone_and_older_than_the_horizon(read):
    old, edge = "2026-11-22T11:59:59.999Z", "2026-11-22T12:00:00Z"
    batch = read(
        [
            ROW | {"id": "a", "at": old},
            ROW | {"id": "b", "at": edge},
            ROW | {"at": old},
            ROW | {"id": "c", "at": old, "source": "log", "offset": 1},
            ROW | {"id": "d"},
        ],
        idempotency_key="k",
    )
    assert batch.unverified.tolist() == [True, False, False, False, False]
    later = read([ROW | {"id": "a", "at": old}], limits=Limits(horizon_ms=9 * DAY))
    assert not later.unverified.any()


# --- the document


@pytest.mark.parametrize("ndjson", [False, True])
def test_no_rows(read, ndjson):
    batch = read([], ndjson=ndjson)
    assert batch.sent == 0
    assert batch.streams == []
    assert batch.amount.size == batch.ident.size == batch.at.size == 0
    assert batch.exactly_once


def test_spaces_escapes_and_byte_order_mark(read):
    body = (
        b'\xef\xbb\xbf \r\n{ "transactions" :\t[ {"\\u0061mount": 5, "merchant": "\\u0061",'
        b' "id": "\\"\\\\\\/{[,:"} ] } \n'
    )
    batch = read(body)
    assert batch.ids == ['"\\/{[,:']
    assert batch.streams[0].merchant == "a"
    assert read(b"\xef\xbb\xbf" + json.dumps(ROW).encode(), ndjson=True).sent == 1


@pytest.mark.parametrize(
    ("body", "line", "column"),
    [
        (b"", 1, 1),
        (b"{", 1, 2),
        (b'{"transactions": [\n  {"merchant": "a", "amount": 1},\n  {"merchant": \n]}', 4, 1),
        (b'{"transactions": []} x', 1, 22),
        (b'{"transactions": [,]}', 1, 19),
        (b'{"transactions": [1 2]}', 1, 21),
        (b"{'transactions': []}", 1, 2),
        (b'{"transactions": [{"merchant": "a", "amount": 01}]}', 1, 48),
        (b'{"transactions": [\n{"merchant": "a", "amount": NaN}]}', 2, 29),
        (b'{"transactions": [{"merchant": "NaN", "amount": -Infinity}]}', 1, 49),
        (b'{"transactions": [{"merchant": "a\x00"}]}', 1, 34),
        (b'{"transactions": ["a\nb"]}', 1, 21),
        (b'{"transactions": []}\x00', 1, 21),
        (b'{"\xc3\xa9\xff": 1}', 1, 4),
        (b'{"transactions": \n["\xed\xa0\x80"]}', 2, 3),
        ('{"transactions": []}'.encode("utf-16"), 1, 1),
        ('{"é": 1, "ü" 2}'.encode(), 1, 14),
    ],
)
@pytest.mark.parametrize("skip", [False, True])
def test_text_that_is_no_json_says_where(read, body, line, column, skip):
    with pytest.raises(Unreadable) as error:
        read(body, skip_invalid=skip)
    assert (error.value.line, error.value.column) == (line, column)


@pytest.mark.parametrize(
    "body",
    [
        b"[" * 100_000,
        b'{"transactions": ' + b"[" * 100_000,
        b'{"transactions": [{"merchant": ' + b'{"a":' * 100_000,
        b'{"transactions": ' + b"[" * 100_000 + b"]" * 100_000 + b"}",
    ],
)
def test_deep_nesting_is_unreadable_and_crashes_nothing(read, body):
    with pytest.raises(Unreadable) as error:
        read(body)
    assert error.value.line == 1
    assert 100 < (error.value.column or 0) < 1000
    with pytest.raises(Unreadable):
        read(body, ndjson=True)


def test_nesting_that_can_be_read_is_a_wrong_value(read):
    body = b'{"transactions": [{"amount": 1, "merchant": ' + b"[" * 90 + b"]" * 90 + b"}]}"
    assert "string" in refused(read, body)[0]["/transactions/0/merchant"]


@pytest.mark.parametrize(
    ("body", "pointer"),
    [
        (b"[]", ""),
        (b"null", ""),
        (b'"text"', ""),
        (b"{}", "/transactions"),
        (b'{"transactions": null}', "/transactions"),
        (b'{"transactions": {}}', "/transactions"),
        (b'{"transactions": [], "transactions": []}', "/transactions"),
        (b'{"transactions": [], "a/b~c": 1}', "/a~1b~0c"),
        (b'{"transactions": [], "\\ud800": 1}', "/\\ud800"),
    ],
)
@pytest.mark.parametrize("skip", [False, True])
def test_envelopes_that_are_refused(read, body, pointer, skip):
    errors, count, rejections = refused(read, body, skip_invalid=skip)
    assert list(errors) == [pointer]
    assert count == 1
    assert rejections[0].index == -1
    pointer.encode()


@pytest.mark.parametrize("row", [1, "text", None, [], True, 1.5])
def test_rows_that_are_no_objects(read, row):
    errors, _, _ = refused(read, [ROW, row])
    assert errors == {"/transactions/1": "Expected an object."}


def test_a_field_given_twice_is_refused(read):
    body = (
        b'{"transactions": [{"merchant": "a", "amount": 1},'
        b' {"merchant": "a", "amount": 1, "amount": 1}]}'
    )
    errors, count, _ = refused(read, body)
    assert errors == {"/transactions/1/amount": "Expected the field only once."}
    assert count == 1
    escaped = b'{"merchant": "a", "amount": 1, "\\u0061mount": 2, "id": "\\"\\""}'
    assert "/transactions/0/amount" in refused(read, escaped, ndjson=True)[0]


def test_every_invalid_field_of_every_row(read):
    rows = [
        {"merchant": "-a", "amount": 1.5, "currency": "XXX", "flow": "SALE", "at": "now",
         "id": "", "category": "x", "source": "", "offset": -1, "tip": 3, "a/b": 1, "_schema": 2},
        ROW,
        {"amount": "-1.999", "currency": "EUR", "flow": "sale", "offset": 1},
        {"merchant": None, "amount": "-5", "flow": "!", "currency": "EURO"},
    ]  # fmt: skip
    errors, count, rejections = refused(read, rows)
    expected = {
        0: {"merchant", "amount", "currency", "flow", "at", "id", "category", "source", "offset",
            "tip", "a~1b", "_schema"},
        2: {"merchant", "amount", "source"},
        3: {"merchant", "flow", "amount", "currency"},
    }  # fmt: skip
    assert set(errors) == {
        f"/transactions/{row}/{name}" for row, names in expected.items() for name in names
    }
    assert count == len(rejections) == len(errors) + 1  # row 2: sign and decimals of the amount


def test_pointers_stay_printable_and_short(read):
    name = "x" * 1000
    body = json.dumps(ROW | {"\ud800~/": 1, name: 2, "": 3}).encode()
    errors, count, _ = refused(read, body, ndjson=True)
    assert count == 3
    assert set(errors) == {
        "/transactions/0/\\ud800~0~1", "/transactions/0/" + "x" * 64 + "…", "/transactions/0/",
    }  # fmt: skip


def test_a_hundred_errors_are_listed_and_all_counted(read):
    errors, count, rejections = refused(read, [{"amount": 1, "a": 1, "b": 2}] * 70)
    assert count == 210
    assert len(rejections) == len(errors) == 100
    assert rejections[-1].pointer.startswith("/transactions/33/")


# --- NDJSON


@pytest.mark.parametrize("end", ["\n", "\r\n", " \n", "\n\n", "\n \t\r\n"])
@pytest.mark.parametrize("last", [False, True])
def test_lines_may_end_as_they_like(read, end, last):
    rows = [ROW | {"id": str(i)} for i in range(3)]
    body = (end.join(map(json.dumps, rows)) + (end if last else "")).encode()
    assert read(body, ndjson=True).ids == ["0", "1", "2"]


def test_one_transaction_a_line(read):
    row = json.dumps(ROW)
    for body in (
        row + row,
        row + " " + row,
        row + "\r" + row,
        '{"merchant": "a",\n"amount": 1}',
        f'{row}{{"merchant":\n"a", "amount": 1}}',
        f'{{"amount": 1,\n"merchant": "a"}}{row}',
    ):
        with pytest.raises(Unreadable):
            read(body.encode(), ndjson=True)
        assert len(read(body.encode(), ndjson=True, skip_invalid=True).rejected) >= 1


def test_a_line_that_is_no_json_says_where(read):
    body = b'\n{"merchant": "a", "amount": 1}\r\n\n  {"merchant" "a"}\n'
    with pytest.raises(Unreadable) as error:
        read(body, ndjson=True)
    assert (error.value.line, error.value.column) == (4, 15)
    batch = read(body, ndjson=True, skip_invalid=True)
    assert batch.sent == 2
    assert [r.pointer for r in batch.rejected] == ["/transactions/1"]
    assert "line 4, column 15" in batch.rejected[0].detail


def test_no_line_can_block_the_others(read):
    broken = [b"\xff", b"[" * 100_000, b"NaN", b"{", b'"\x00"', b"\x00", b"]", b"1", b"null"]
    good = json.dumps(ROW | {"id": "good"}).encode()
    batch = read(good + b"\n" + b"\n".join(broken) + b"\n" + good, ndjson=True, skip_invalid=True)
    assert batch.ids == ["good", "good"]
    assert batch.sent == 2 + len(broken)
    assert [r.index for r in batch.rejected] == list(range(1, 1 + len(broken)))


# --- leaving rows out


def test_skip_takes_the_valid_rows_and_lists_one_entry_for_each_other(read):
    rows = [
        ROW | {"id": "a"},
        ROW | {"id": "b", "amount": 1.5},
        ROW | {"id": "c", "at": "2026-12-01T00:00:00Z"},
        ROW | {"id": "d", "at": "2026-12-01T00:00:00Z", "category": "x"},
        ROW | {"id": ""},
        ROW | {"id": "e"},
    ]
    batch = read(rows, skip_invalid=True)
    assert batch.ids == ["a", "e"]
    assert batch.sent == 6 == batch.amount.size + len(batch.rejected)
    assert [(r.index, r.id, r.pointer, r.retryable) for r in batch.rejected] == [
        (1, "b", "/transactions/1/amount", False),
        (2, "c", "/transactions/2/at", True),
        (3, "d", "/transactions/3/category", False),
        (4, None, "/transactions/4/id", False),
    ]
    assert "Also at: Expected a time" in batch.rejected[2].detail


def test_skip_with_nothing_valid(read):
    batch = read([1, 2], skip_invalid=True)
    assert batch.sent == 2
    assert batch.amount.size == 0
    assert batch.rejected[0] == Rejection(0, None, "/transactions/0", "Expected an object.")


# --- limits


@pytest.mark.parametrize("ndjson", [False, True])
@pytest.mark.parametrize("last", [ROW, {"amount": None}])
def test_too_many_rows(read, ndjson, last):
    limits = Limits(max_rows=10)
    assert read([ROW] * 10, ndjson=ndjson, limits=limits).sent == 10
    with pytest.raises(TooLarge, match="at most 10 transactions") as error:
        read([ROW] * 10 + [last], ndjson=ndjson, limits=limits)
    assert (error.value.limit_name, error.value.limit) == ("max_rows", 10)


def test_too_many_streams(read):
    rows = [ROW | {"merchant": f"m{i}"} for i in range(10)]
    assert len(read(rows, limits=Limits(max_streams=10)).streams) == 10
    with pytest.raises(TooLarge) as error:
        read(rows, limits=Limits(max_streams=9))
    assert error.value.limit_name == "max_streams"


def test_a_flood_of_tiny_values_is_refused_unread(read):
    for body in (
        b'{"transactions": [' + b"[]," * 4_000_000 + b"1]}",
        b'{"transactions": [{"merchant": [' + b"{}," * 4_000_000 + b"1]}]}",
    ):
        with pytest.raises(TooLarge) as error:
            read(body, limits=Limits(max_rows=100))
        assert error.value.limit_name == "max_rows"


def test_a_large_batch_full_of_structure_in_strings_is_taken(read):
    rows = [ROW | {"id": "{[,:" * 16, "source": "," * 64, "offset": i} for i in range(5000)]
    batch = read(rows)
    assert batch.sent == 5000
    assert len(json.dumps(rows)) > 1 << 20
