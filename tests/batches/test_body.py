from __future__ import annotations

import gzip
import tracemalloc
import zlib

import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.batches.body import expand
from service.batches.errors import TooLarge, UnknownEncoding, Unreadable
from service.batches.limits import Limits

LIMITS = Limits(max_body=1 << 20, max_expanded=2 << 20)


@pytest.mark.parametrize("encoding", [None, "", "identity", " Identity "])
def test_plain_bodies_stay_as_they_are(encoding):
    assert expand(b'{"transactions": []}', encoding, LIMITS) == b'{"transactions": []}'


@pytest.mark.parametrize("encoding", ["gzip", "x-gzip", " GZIP "])
def test_gzip_is_undone(encoding):
    assert expand(gzip.compress(b"payments" * 1000), encoding, LIMITS) == b"payments" * 1000


@given(st.lists(st.binary(max_size=2000), min_size=1, max_size=6), st.integers(0, 9))
def test_members_follow_each_other(parts, level):
    body = b"".join(gzip.compress(part, level) for part in parts)
    assert expand(body, "gzip", LIMITS) == b"".join(parts)


def test_a_long_body_in_one_member():
    text = bytes(range(256)) * 8192
    assert expand(gzip.compress(text, 0), "gzip", Limits()) == text


@pytest.mark.parametrize("encoding", ["br", "deflate", "zstd", "gzip, gzip", "gzip, identity"])
def test_other_encodings_are_refused(encoding):
    with pytest.raises(UnknownEncoding, match="gzip or identity"):
        expand(b"", encoding, LIMITS)


def test_limits_hold_to_the_byte():
    limits = Limits(max_body=1000, max_expanded=1000)
    assert len(expand(b"x" * 1000, None, limits)) == 1000
    assert len(expand(gzip.compress(b"x" * 1000), "gzip", limits)) == 1000
    with pytest.raises(TooLarge) as plain:
        expand(b"x" * 1001, None, limits)
    assert (plain.value.limit_name, plain.value.limit) == ("max_body", 1000)
    with pytest.raises(TooLarge) as inflated:
        expand(gzip.compress(b"x" * 1001), "gzip", limits)
    assert (inflated.value.limit_name, inflated.value.limit) == ("max_expanded", 1000)
    with pytest.raises(TooLarge):
        expand(gzip.compress(b"x" * 600) * 2, "gzip", limits)
    with pytest.raises(TooLarge):
        expand(b"x" * 900, None, Limits(max_body=1000, max_expanded=800))


def test_a_bomb_never_takes_more_than_the_limit():
    bomb = gzip.compress(b"\0" * (64 << 20), 9)
    assert len(bomb) < LIMITS.max_body
    tracemalloc.start()
    try:
        with pytest.raises(TooLarge):
            expand(bomb, "gzip", LIMITS)
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert peak < 3 * LIMITS.max_expanded


def test_a_bomb_of_empty_members_is_refused():
    with pytest.raises(Unreadable, match="members"):
        expand(gzip.compress(b"") * 5000, "gzip", LIMITS)


WHOLE = gzip.compress(b'{"transactions": []}' * 50, mtime=0)


@pytest.mark.parametrize("length", [0, 1, 5, 10, len(WHOLE) // 2, len(WHOLE) - 8, len(WHOLE) - 1])
def test_truncated_gzip_says_so(length):
    with pytest.raises(Unreadable, match="truncated") as error:
        expand(WHOLE[:length], "gzip", LIMITS)
    assert error.value.line is None


@pytest.mark.parametrize("after", [b"\0", b"garbage", b"{}", b"\x1f", b"\x1f\x8b\x08"])
def test_what_follows_a_member_must_be_one(after):
    with pytest.raises(Unreadable, match=r"gzip is (truncated|corrupt or followed)"):
        expand(WHOLE + after, "gzip", LIMITS)


@pytest.mark.parametrize(
    "body", [b'{"transactions": []}', zlib.compress(b"{}"), b"\x1f\x8b\x07" + b"\0" * 30]
)
def test_what_is_no_gzip_says_so(body):
    with pytest.raises(Unreadable, match="corrupt"):
        expand(body, "gzip", LIMITS)


@given(st.integers(0, len(WHOLE) - 1), st.integers(1, 255))
def test_a_changed_byte_never_passes_as_another_text(position, change):
    body = bytearray(WHOLE)
    body[position] ^= change
    try:
        text = expand(bytes(body), "gzip", LIMITS)
    except (Unreadable, TooLarge):
        return
    assert text == b'{"transactions": []}' * 50  # header fields without a checksum
