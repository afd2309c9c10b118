from __future__ import annotations

import random
import string

import numpy as np
import pytest
from scipy import stats

from service.batches.identity import HIGHEST, LOWEST, position_idents, row_idents

KEYS = [(0x0123456789ABCDEF, 0xFEDCBA9876543210), (0, 0), (2**64 - 1, 1)]
N = 200_000


def _last_byte():
    """Ids that differ in one character only, at each place, or only in length."""
    printable = [chr(code) for code in range(32, 127)]
    stem = "a" * 64
    swapped = {stem[:i] + c + stem[i + 1 :] for i in range(64) for c in printable}
    lengths = {c * n for c in printable for n in range(1, 65)}
    return sorted(swapped | lengths)


def _two_words():
    """Counters in two places at once, eight bytes apart, which a sum of words might cancel."""
    return [f"{i:04d}....{j:04d}....{(i + j) % 10_000:04d}" for i in range(450) for j in range(444)]


FAMILIES = {
    "decimal counter": [f"pay-{i:06d}" for i in range(N)],
    "counter of growing length": [str(i) for i in range(N)],
    "hex counter": [f"{i:016x}" for i in range(N)],
    "counter at the front": [f"{i:08d}-2026-11-30-harbour-books-till-1" for i in range(N)],
    "counter astride two words": [f"order-{i:06d}" for i in range(N)],
    "one place or length": _last_byte(),
    "two words": _two_words(),
    "trailing padding": ["x" * n + " " * m for n in range(1, 33) for m in range(32)],
}


@pytest.mark.parametrize("key", KEYS)
@pytest.mark.parametrize("family", FAMILIES)
def test_structured_ids_do_not_collide(family, key):
    ids = FAMILIES[family]
    assert len(set(ids)) == len(ids)
    idents = row_idents(ids, key)
    assert np.unique(idents).size == len(ids)
    assert int(idents.min()) >= LOWEST
    assert int(idents.max()) <= HIGHEST
    assert {len(str(ident)) for ident in idents[:1000].tolist()} == {19}


@pytest.mark.parametrize("family", [name for name, ids in FAMILIES.items() if len(ids) > 50_000])
def test_structure_of_ids_does_not_show(family):
    idents = row_idents(FAMILIES[family], KEYS[0])
    # Low bits are fair coins; 40 of them at 5 sigma, which chance passes once in 40 000 runs.
    bits = (idents[:, None] >> np.arange(40, dtype=np.uint64)) & np.uint64(1)
    share = bits.mean(axis=0)
    assert np.abs(share - 0.5).max() < 5 * 0.5 / np.sqrt(idents.size)
    # High to low, the values are spread evenly over the range.
    place = (idents - np.uint64(LOWEST)).astype(np.float64) / (HIGHEST + 1 - LOWEST)
    counts = np.histogram(place, bins=256, range=(0, 1))[0]
    assert stats.chisquare(counts).pvalue > 1e-6
    # Neighbours are not alike: differences of successive values are even too.
    step = np.diff(place) % 1.0
    assert stats.chisquare(np.histogram(step, bins=256, range=(0, 1))[0]).pvalue > 1e-6


def test_each_changed_character_changes_half_of_the_bits():
    stem = "harbour-books-000017"
    rows = [stem] + [stem[:i] + chr(ord(stem[i]) ^ 1) + stem[i + 1 :] for i in range(len(stem))]
    changed = []
    for round_ in range(200):
        idents = row_idents(rows, (round_ * 7919 + 1, round_ * 104729 + 3))
        changed += [int(other ^ idents[0]).bit_count() for other in idents[1:]]
    # 63 bits; the top few are not fair, as the range begins at 10**18
    assert 30 < np.mean(changed) < 33
    assert min(changed) > 8


def test_ident_is_the_same_in_whatever_company():
    ids = ["a", "pay-000001", "x" * 64, "y" * 33, "12345678", "123456789", "a "]
    together = row_idents(ids, KEYS[0])
    alone = [int(row_idents([one], KEYS[0])[0]) for one in ids]
    assert together.tolist() == alone


def test_another_key_gives_other_idents():
    ids = [f"pay-{i}" for i in range(1000)]
    seen = {ident for key in KEYS for ident in row_idents(ids, key).tolist()}
    halves = {ident for key in [(1, 2), (1, 3), (2, 2)] for ident in row_idents(ids, key).tolist()}
    assert len(seen) == len(halves) == 3000


def test_ids_and_positions_are_separate_domains():
    keys = [f"k{i}" for i in range(200)]
    positions = np.arange(1000, dtype=np.int64)
    idents = np.concatenate([position_idents(key, positions, KEYS[0]) for key in keys])
    assert np.unique(idents).size == 200_000
    rows = row_idents([*keys, *map(str, range(1000))], KEYS[0])
    assert not np.isin(rows, idents).any()
    assert int(idents.min()) >= LOWEST
    assert int(idents.max()) <= HIGHEST
    place = (idents - np.uint64(LOWEST)).astype(np.float64) / (HIGHEST + 1 - LOWEST)
    assert stats.chisquare(np.histogram(place, bins=256, range=(0, 1))[0]).pvalue > 1e-6


def test_positions_stand_for_themselves():
    whole = position_idents("retry-1", np.arange(10, dtype=np.int64), KEYS[0])
    part = position_idents("retry-1", np.array([3, 7], dtype=np.int64), KEYS[0])
    assert part.tolist() == [whole[3], whole[7]]
    assert not np.isin(position_idents("retry-2", np.arange(10), KEYS[0]), whole).any()


def test_random_ids_of_all_lengths_do_not_collide():
    rng = random.Random(20261130)
    letters = string.ascii_letters + string.digits + "-_ "
    ids = {"".join(rng.choices(letters, k=rng.randint(4, 64))) for _ in range(50_000)}
    assert np.unique(row_idents(sorted(ids), KEYS[0])).size == len(ids)


def test_nothing_and_too_long():
    assert row_idents([], KEYS[0]).size == 0
    with pytest.raises(ValueError, match="at most 64"):
        row_idents(["x" * 65], KEYS[0])
    with pytest.raises(ValueError, match="ascii"):
        row_idents(["ü"], KEYS[0])
