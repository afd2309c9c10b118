from __future__ import annotations

from datetime import UTC, datetime, timedelta, timezone

import pytest
from hypothesis import given
from hypothesis import strategies as st

from schemas.transaction import END_MS, instant
from service.batches.instants import instants

PAD = ["2026-11-30T12:00:00Z"] * 20  # enough rows for the way by columns


def both(text):
    """Read a text alone and in a column, and hold one against the other."""
    values, ok = instants([*PAD, text])
    assert ok[:-1].all()
    (alone,), (alone_ok,) = instants([text])
    assert bool(ok[-1]) == bool(alone_ok)
    if not ok[-1]:
        with pytest.raises(ValueError, match=r"."):
            instant(text)
        return None
    assert int(values[-1]) == int(alone) == instant(text)
    return int(values[-1])


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("1970-01-01T00:00:00Z", 0),
        ("1970-01-01T00:00:00.001Z", 1),
        # RFC 3339 §5.8, the examples
        ("1985-04-12T23:20:50.52Z", 482196050520),
        ("1996-12-19T16:39:57-08:00", 851042397000),
        ("1996-12-20T00:39:57Z", 851042397000),
        ("2000-02-29T23:59:59.999Z", 951868799999),
        ("2026-11-30T12:00:00.123456789Z", 1796040000123),
        ("2026-11-30t12:00:00z", 1796040000000),
        ("2026-11-30T12:00:00+00:00", 1796040000000),
        ("2026-11-30T12:00:00-00:00", 1796040000000),
        ("2026-11-30T17:45:00+05:45", 1796040000000),
        ("1970-01-01T00:30:00+00:30", 0),
        ("1969-12-31T23:30:00-00:30", 0),
        ("2100-12-31T23:59:59.999Z", END_MS - 1),
        ("2101-01-01T00:59:59+01:00", END_MS - 1000),
    ],
)
def test_times_are_exact(text, expected):
    assert both(text) == expected


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ("2026-02-30T12:00:00Z", "no such day"),
        ("2026-02-29T12:00:00Z", "no such day"),
        ("2100-02-29T12:00:00Z", "no such day"),
        ("2026-04-31T12:00:00Z", "no such day"),
        ("2026-13-01T12:00:00Z", "no such day"),
        ("2026-00-10T12:00:00Z", "no such day"),
        ("2026-01-00T12:00:00Z", "no such day"),
        ("2026-01-32T12:00:00.000Z", "no such day"),
        ("2026-11-30T24:00:00Z", "time of day"),
        ("2026-11-30T23:60:00Z", "time of day"),
        ("2026-11-30T23:59:61Z", "time of day"),
        ("1990-12-31T23:59:60Z", "Leap seconds"),  # RFC 3339 §5.8
        ("1990-12-31T15:59:60-08:00", "Leap seconds"),
        ("1969-12-31T23:59:59Z", "1970"),
        ("1969-12-31T23:59:59.999Z", "1970"),
        ("1970-01-01T00:30:00+00:31", "1970"),
        ("0000-01-01T00:00:00Z", "1970"),
        ("0001-01-01T00:00:00+23:59", "1970"),
        ("9999-12-31T23:59:59-23:59", "2100"),
        ("2101-01-01T00:00:00Z", "2100"),
        ("2100-12-31T23:30:00-00:30", "2100"),
        ("2026-11-30T12:00:00+24:00", "offset"),
        ("2026-11-30T12:00:00+01:60", "offset"),
    ],
)
def test_times_that_do_not_exist_say_why(text, reason):
    assert both(text) is None
    with pytest.raises(ValueError, match=reason):
        instant(text)


@pytest.mark.parametrize(
    "text",
    [
        "", "2026-11-30", "2026-11-30T12:00:00", "2026-11-30 12:00:00Z", "2026-11-30T12:00Z",
        "20261130T120000Z", "2026-11-30T12:00:00.Z", "2026-11-30T12:00:00,123Z",
        "2026-11-30T12:00:00+0100", "2026-11-30T12:00:00+01", "2026-W49-1T12:00:00Z",
        "+026-11-30T12:00:00Z", "2026-1-30T12:00:000Z", "2026-11-30T12:00:00 Z", "1796040000",
        "2026-11-30T12:00:00Z ", " 2026-11-30T12:00:00Z", "2026-11-30T12:00:00Z\n",
        "2026-11-30T12:00:00.12aZ", "2026-11-30T12:00:00.1234x6Z", "2026/11/30T12:00:00Z",
        "２026-11-30T12:00:00Z", "2026-11-30T1２:00:00Z", "2026-11-30T12:00:00.١23Z",
        "2026-11-30T12:00:00." + "1" * 100 + "Z", "2026-11-30T12:00:00.123\x00", "\x00" * 20,
    ],
)  # fmt: skip
def test_other_shapes_are_refused(text):
    assert both(text) is None


@given(
    st.lists(
        st.one_of(
            st.builds(
                lambda moment, places, zone: (
                    f"{moment.astimezone(timezone(timedelta(minutes=zone))):%Y-%m-%dT%H:%M:%S}"
                    + (f".{moment.microsecond:06d}000"[: places + 1] if places else "")
                    + ("Z" if zone == 0 else f"{'-' if zone < 0 else '+'}"
                       f"{abs(zone) // 60:02d}:{abs(zone) % 60:02d}")
                ),
                st.datetimes(
                    datetime(1971, 1, 1), datetime(2100, 1, 1), timezones=st.just(UTC)
                ),
                st.integers(0, 9),
                st.sampled_from([0, 0, 60, -480, 345]),
            ),
            st.text("0123456789-T:.Z", min_size=18, max_size=25),
            st.from_regex(r"[12][09]\d\d-[01]\d-[0-3]\dT[0-2]\d:[0-6]\d:[0-6]\d(\.\d{3})?Z\Z"),
        ),
        min_size=17,
        max_size=40,
    )
)  # fmt: skip
def test_column_agrees_with_one_by_one(texts):
    values, ok = instants(texts)
    for text, value, good in zip(texts, values.tolist(), ok.tolist(), strict=True):
        try:
            expected = instant(text)
        except ValueError:
            assert not good
            continue
        assert good
        assert value == expected
        # and the standard library, as far as it reads RFC 3339 (it keeps microseconds)
        elapsed = datetime.fromisoformat(text) - datetime(1970, 1, 1, tzinfo=UTC)
        assert value == elapsed // timedelta(milliseconds=1)


def test_every_day_of_the_calendar():
    start = datetime(1970, 1, 1, tzinfo=UTC)
    days = [start + timedelta(days=i) for i in range(END_MS // 86_400_000)]
    values, ok = instants([f"{day:%Y-%m-%d}T00:00:00Z" for day in days])
    assert ok.all()
    assert values.tolist() == [86_400_000 * i for i in range(len(days))]


def test_no_day_that_there_is_not():
    texts = [
        f"{year}-{month:02d}-{day:02d}T00:00:00Z"
        for year in range(1970, 2101)
        for month in range(14)
        for day in range(33)
    ]
    assert int(instants(texts)[1].sum()) == END_MS // 86_400_000


def test_no_rows():
    values, ok = instants([])
    assert values.size == ok.size == 0
