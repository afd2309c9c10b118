"""What a row is recognised by: a keyed 63-bit hash of its id, or of its place in a request.

Each 8-byte word of an id is mixed on its own under its own secret key, with the 64-bit finaliser
of MurmurHash3 (Appleby, public domain; its constants cited from memory), the mixed words are
added, and the sum is mixed again. Two ids that differ in one word can only meet in the last step,
which loses 0.16 bits; others meet by chance. The key makes that chance independent of the ids.

The hash is mapped to integers of exactly 19 decimal digits, 10**18 to 2**63 - 1, so that a Redis
set keeps them as integers and their width tells nothing.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache
from hashlib import blake2b
from typing import Any

import numpy as np
import numpy.typing as npt

from service.digits.compiled import compiled

Words = npt.NDArray[np.uint64]

LOWEST = 10**18
HIGHEST = 2**63 - 1
MAX_ID = 64
"""Longest id, in characters."""

_WORDS = MAX_ID // 8
_MASK = 2**64 - 1
_GOLDEN = 0x9E3779B97F4A7C15  # odd, near 2**64 / golden ratio; spreads small numbers
_ROW, _POSITION = 1, 2  # domains
_CONSTANTS = (
    np.uint64(0xFF51AFD7ED558CCD),
    np.uint64(0xC4CEB9FE1A85EC53),
    np.uint64(LOWEST),
    np.uint64(HIGHEST + 1 - LOWEST),
)
"""Of the finaliser, and of what its words are mapped to."""


def row_idents(ids: Sequence[str], key: tuple[int, int]) -> Words:
    """Return the identities of rows that have an ``id``.

    Parameters
    ----------
    ids : sequence of str, length n
        1 to 64 ASCII characters without NUL each.
    key : tuple of two int
        Random, 64 bits each; kept secret and for as long as identities are.

    Returns
    -------
    uint64 array (n,)
        10**18 to 2**63 - 1, the same for the same id and key in whatever company.

    Raises
    ------
    ValueError
        If an id is longer than 64 characters or not ASCII.
    """
    lengths = np.fromiter(map(len, ids), np.int64, len(ids))
    if lengths.size and int(lengths.max()) > MAX_ID:
        raise ValueError(f"ids have at most {MAX_ID} characters, got {int(lengths.max())}")
    joined = np.frombuffer("".join(ids).encode("ascii"), np.uint8)
    idents = np.empty(len(ids), np.uint64)
    _row_idents(joined, lengths, _keys(key, _ROW), _zeros(key), idents, *_CONSTANTS)
    return idents


def position_idents(
    idempotency_key: str, positions: npt.NDArray[np.int64], key: tuple[int, int]
) -> Words:
    """Return the identities of rows known only by their place in a request.

    Parameters
    ----------
    idempotency_key : str
        The request's ``Idempotency-Key``, of any length.
    positions : int64 array (n,)
        Places in the request, from 0.
    key : tuple of two int
        As in `row_idents`; the two kinds share no structure.

    Returns
    -------
    uint64 array (n,)
        10**18 to 2**63 - 1.
    """
    secret = b"".join((part & _MASK).to_bytes(8, "little") for part in key)
    digest = blake2b(
        idempotency_key.encode("utf-8", "surrogatepass"), digest_size=8, key=secret
    ).digest()
    base = np.frombuffer(digest, dtype="<u8").astype(np.uint64)
    keys = _keys(key, _POSITION)
    sums = _mix(positions.astype(np.uint64) ^ keys[0]) + base
    idents = np.empty_like(sums)
    _finish(sums, idents, keys[_WORDS], *_CONSTANTS)
    return idents


@lru_cache(maxsize=8)
def _zeros(key: tuple[int, int]) -> Words:
    """Return what the words from each place on come to when they are zero.

    An id's words beyond the longest id of its batch are not hashed, but added from here.
    """
    mixed = _mix(_keys(key, _ROW)[:_WORDS])
    return np.array([mixed[used:].sum(dtype=np.uint64) for used in range(_WORDS + 1)])


@lru_cache(maxsize=16)
def _keys(key: tuple[int, int], domain: int) -> Words:
    """Return one key for each word and one for the sum; different in each domain."""
    first, second = key
    steps = [(first + _GOLDEN * (domain * 16 + place)) & _MASK for place in range(_WORDS)]
    steps.append((second + _GOLDEN * domain) & _MASK)
    keys = _mix(np.array(steps, dtype=np.uint64) ^ np.uint64(second & _MASK))
    keys.flags.writeable = False  # shared by all callers
    return keys


def _mix(words: Words) -> Words:
    """Return each word through the 64-bit finaliser of MurmurHash3, a bijection."""
    mixed = np.empty_like(words)
    _mix_all(words, mixed, *_CONSTANTS[:2])
    return mixed


@compiled
def _mixed(word: Any, first: Any, second: Any) -> Any:
    shift = np.uint64(33)
    word ^= word >> shift
    word *= first
    word ^= word >> shift
    word *= second
    return word ^ (word >> shift)


@compiled
def _decimal(word: Any, lowest: Any, width: Any) -> Any:
    """Return ``LOWEST + floor(word * width / 2**64)``: every value has 2 or 3 words behind it.

    A remainder would pile the words left over onto the low end instead.
    """
    half, low_half = np.uint64(32), np.uint64(0xFFFFFFFF)
    high, low = width >> half, width & low_half
    word_high, word_low = word >> half, word & low_half
    middle = word_high * low + ((word_low * low) >> half)
    other = word_low * high + (middle & low_half)
    return lowest + word_high * high + (middle >> half) + (other >> half)


@compiled
def _mix_all(words: Any, mixed: Any, first: Any, second: Any) -> None:
    for i in range(len(words)):
        mixed[i] = _mixed(words[i], first, second)


@compiled
def _row_idents(
    joined: Any,
    lengths: Any,
    keys: Any,
    zeros: Any,
    idents: Any,
    first: Any,
    second: Any,
    lowest: Any,
    width: Any,
) -> None:
    at = 0
    for i in range(len(lengths)):
        end, words, total = at + lengths[i], 0, np.uint64(0)
        while at < end:
            word = np.uint64(0)
            for b in range(min(8, end - at)):
                word |= np.uint64(joined[at + b]) << np.uint64(8 * b)
            total += _mixed(word ^ keys[words], first, second)
            words += 1
            at += 8
        at = end
        total += zeros[words]
        mixed = _mixed(total ^ keys[len(keys) - 1], first, second)
        idents[i] = _decimal(mixed, lowest, width)


@compiled
def _finish(
    sums: Any, idents: Any, last: Any, first: Any, second: Any, lowest: Any, width: Any
) -> None:
    for i in range(len(sums)):
        idents[i] = _decimal(_mixed(sums[i] ^ last, first, second), lowest, width)
