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

import numpy as np
import numpy.typing as npt

Words = npt.NDArray[np.uint64]

LOWEST = 10**18
HIGHEST = 2**63 - 1
MAX_ID = 64
"""Longest id, in characters."""

_WORDS = MAX_ID // 8
_MASK = 2**64 - 1
_GOLDEN = 0x9E3779B97F4A7C15  # odd, near 2**64 / golden ratio; spreads small numbers
_ROW, _POSITION = 1, 2  # domains
_LOW_HALF = np.uint64(0xFFFFFFFF)
_32, _33 = np.uint64(32), np.uint64(33)
_FIRST, _SECOND = np.uint64(0xFF51AFD7ED558CCD), np.uint64(0xC4CEB9FE1A85EC53)


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
    lengths = set(map(len, ids))
    if not lengths:
        return np.zeros(0, dtype=np.uint64)
    longest = max(lengths)
    if longest > MAX_ID:
        raise ValueError(f"ids have at most {MAX_ID} characters, got {longest}")
    used = max(1, -(-longest // 8))
    if len(lengths) == 1:
        padded = np.zeros((len(ids), used * 8), dtype=np.uint8)
        joined = np.frombuffer("".join(ids).encode("ascii"), dtype=np.uint8)
        padded[:, :longest] = joined.reshape(len(ids), longest)
    else:
        padded = np.array(ids, dtype=f"S{used * 8}").view(np.uint8).reshape(len(ids), used * 8)
    words = np.ascontiguousarray(padded.view("<u8").T.astype(np.uint64, copy=False))
    keys = _keys(key, _ROW)
    mixed = _mix(words ^ keys[:used, None]).sum(axis=0, dtype=np.uint64)
    mixed += _zeros(key)[used]
    return _decimal(_mix(np.bitwise_xor(mixed, keys[_WORDS])))


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
    mixed = _mix(positions.astype(np.uint64) ^ keys[0]) + base
    return _decimal(_mix(mixed ^ keys[_WORDS]))


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
    mixed = words ^ (words >> _33)
    mixed *= _FIRST
    mixed ^= mixed >> _33
    mixed *= _SECOND
    mixed ^= mixed >> _33
    return mixed


def _decimal(words: Words) -> Words:
    """Return ``LOWEST + floor(word * width / 2**64)``: every value has 2 or 3 words behind it.

    A remainder would pile the words left over onto the low end instead.
    """
    width = HIGHEST + 1 - LOWEST
    high, low = np.uint64(width >> 32), np.uint64(width & 0xFFFFFFFF)
    word_high, word_low = words >> _32, words & _LOW_HALF
    middle = word_high * low + ((word_low * low) >> _32)
    other = word_low * high + (middle & _LOW_HALF)
    above = word_high * high + (middle >> _32) + (other >> _32)
    return np.asarray(above + np.uint64(LOWEST))
