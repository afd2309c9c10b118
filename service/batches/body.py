"""From the bytes of a request to the bytes of its document, within bounds."""

from __future__ import annotations

import zlib

from service.batches.errors import TooLarge, UnknownEncoding, Unreadable
from service.batches.limits import Limits

_CHUNK = 64 << 10
_MAX_MEMBERS = 1024  # an empty member costs its sender 20 bytes and us a new inflater


def expand(body: bytes, encoding: str | None, limits: Limits) -> bytes:
    """Undo ``Content-Encoding`` without ever holding more than the limit allows.

    Parameters
    ----------
    body : bytes
        As received.
    encoding : str or None
        Value of the header: ``gzip``, ``x-gzip``, ``identity`` or nothing, in any case.
    limits : Limits
        ``max_body`` bounds what was sent, ``max_expanded`` what it inflates to.

    Returns
    -------
    bytes
        The document.

    Raises
    ------
    TooLarge
        If either bound is passed.
    UnknownEncoding
        For any other encoding.
    Unreadable
        If the gzip is truncated, corrupt, or followed by something else (RFC 1952).
    """
    if len(body) > limits.max_body:
        raise TooLarge(
            "max_body", limits.max_body, f"the body may have at most {limits.max_body} bytes"
        )
    name = (encoding or "identity").strip().lower()
    if name in ("gzip", "x-gzip"):
        return _inflate(body, limits.max_expanded)
    if name not in ("identity", ""):
        raise UnknownEncoding("Content-Encoding may be gzip or identity")
    if len(body) > limits.max_expanded:
        raise _too_large(limits.max_expanded)
    return body


def _too_large(limit: int) -> TooLarge:
    return TooLarge("max_expanded", limit, f"the decompressed body may have at most {limit} bytes")


def _inflate(body: bytes, limit: int) -> bytes:
    """Inflate all members; input goes in by chunks, so that leftovers copied are small."""
    parts: list[bytes] = []
    room = limit
    view = memoryview(body)
    position = 0
    members = 0
    while position < len(body) or members == 0:
        members += 1
        if members > _MAX_MEMBERS:
            raise Unreadable(f"the gzip has more than {_MAX_MEMBERS} members")
        inflater = zlib.decompressobj(wbits=16 + zlib.MAX_WBITS)
        start = position
        while not inflater.eof:
            chunk = inflater.unconsumed_tail or view[position : position + _CHUNK]
            if not inflater.unconsumed_tail:
                position += len(chunk)
            if not len(chunk):
                raise Unreadable("the gzip is truncated")
            try:
                part = inflater.decompress(chunk, room + 1)
            except zlib.error as error:
                what = "corrupt" if start == 0 else "corrupt or followed by something else"
                raise Unreadable(f"the gzip is {what}") from error
            room -= len(part)
            if room < 0:
                raise _too_large(limit)
            parts.append(part)
        position -= len(inflater.unused_data)
    return b"".join(parts)
