"""Identities: known for the horizon whatever the clock and the settings do, in little memory."""

from __future__ import annotations

import time

import pytest

from service.store.keys import path
from service.store.logs import Logs
from service.streams.record import HEADER, Stream
from tests.store.batches import NOW, batch
from tests.store.workers import HORIZON, compact, named

ROOM = 512
"""Members up to which a server with its own settings keeps a set of integers as an array."""


LONG = 32
"""Rows from which on a stream's idents are in sets."""
DAY = 86_400


def post(logs: Logs, ids, *, idents=None, amounts=None) -> list[bool]:
    rows = batch(["a"] * len(ids), amounts or [1999] * len(ids), ids=ids, idents=idents)
    calls = logs.calls("main", rows, [1], now=NOW, historic=False)
    return logs.append(calls, rows).taken.tolist()


def seen(logs: Logs) -> str:
    partition = logs.partition("main", "a")
    return f"{partition.tag}seen/{path('main', Stream('a', 'sale', 'EUR'))}"


def groups(logs: Logs) -> list[tuple[int, int, int]]:
    """Return when each group of sets goes, its level, and at which row it was begun."""
    index = (logs.client.get(seen(logs)) or b"")[HEADER.itemsize :]
    cells = [index[i : i + 19] for i in range(0, len(index), 19)]
    return [(int(c[8:18]), int(c[18:]), int.from_bytes(c[:8], "little")) for c in cells]


def sets(client) -> list[bytes]:
    return [k for k in client.keys("*seen/*") if client.type(k) == b"set"]


def wait_for_epoch(client, number: int, horizon: int) -> None:
    while client.time()[0] // horizon < number:
        time.sleep(0.02)


def test_ids_of_earlier_epochs_are_known(client) -> None:
    logs = Logs(client, 3, horizon_s=1)
    known = named("a", 0, LONG)
    assert all(post(logs, known))
    for i in range(3):
        epoch = client.time()[0] + 1
        wait_for_epoch(client, epoch, 1)
        assert post(logs, [*known, f"x{i}"]) == [False] * len(known) + [True]
        known.append(f"x{i}")
    assert len(groups(logs)) > 1
    assert len(sets(client)) > 1


@pytest.mark.parametrize("horizon", [60, HORIZON])
def test_ids_go_late_rather_than_early(client, horizon: int) -> None:
    logs = Logs(client, 3, horizon)
    post(logs, named("a", 0, LONG))
    post(logs, ["b"])
    post(logs, named("c", 0, 1000), idents=[10**18 + i * 997 for i in range(1000)])
    now = client.time()[0]
    keys = client.keys("*seen/*")
    assert len(keys) == 1 + 1 + 10  # an index, and groups of two levels
    for key in keys:
        assert now + horizon < client.expiretime(key) <= now + 2 * horizon + DAY


def test_an_epoch_that_is_gone_is_forgotten(client) -> None:
    logs = Logs(client, 3, HORIZON)
    now = client.time()[0]
    post(logs, named("a", 0, LONG))
    gone, other = (bytes(8) + b"%010d%d" % group for group in [(now - 1, 2), (now + 100, 1)])
    client.set(seen(logs), client.getrange(seen(logs), 0, 31) + other + gone)
    post(logs, ["new"])
    assert [level for _, level, _ in groups(logs)] == [1, 1]  # begun as large as the one before
    assert groups(logs)[1][0] == now + 100
    assert post(logs, ["new"]) == [False]


@pytest.mark.parametrize("days", [1, 7, 9, 90])
def test_ids_outlive_a_change_of_the_horizon(client, days: int) -> None:
    logs = Logs(client, 3, HORIZON)
    many = named("a", 0, LONG)
    post(logs, many)
    post(logs, ["b"])
    changed = Logs(client, 3, days * 86_400)
    assert post(changed, [*many, "b", "c"]) == [False] * LONG + [False, True]
    assert post(logs, [*many, "b", "c", "d"]) == [False] * LONG + [False, False, True]
    for i in range(3):
        assert post(changed, [f"x{i}", f"y{i}", "d"]) == [True, True, False]
        assert post(logs, [f"x{i}", f"y{i}", f"z{i}"]) == [False, False, True]
    assert len(groups(logs)) == len({goes for goes, _, _ in groups(logs)}) <= 2


@pytest.mark.parametrize(("first", "then"), [(100, 250), (400, 1), (3000, 4000), (399, 8000)])
def test_ids_are_kept_as_arrays_of_integers(client, first: int, then: int) -> None:
    client.config_set("set-max-intset-entries", ROOM)
    logs = Logs(client, 3, HORIZON)
    ids = named("a", 0, first + then)
    idents = [10**18 + (i * 0x9E3779B97F4A7C15) % 2**62 for i in range(first + then)]
    post(logs, ids[:first], idents=idents[:first])
    for i in range(first, first + then, 1000):
        assert all(post(logs, ids[i : i + 1000], idents=idents[i : i + 1000]))
    assert {client.object("encoding", key) for key in sets(client)} == {b"intset"}
    assert sum(client.scard(key) for key in sets(client)) == first + then
    assert not any(post(logs, ids, idents=idents))


@pytest.mark.parametrize("asked", [1, 15])
def test_a_short_log_knows_its_ids(logs: Logs, client, asked: int) -> None:
    idents = [2**62 + i * 257 for i in range(asked)]
    ids = named("a", 0, asked)
    assert all(post(logs, ids, idents=idents))
    assert not sets(client)
    assert post(logs, ids, idents=idents) == [False] * asked
    others = [2**61 + i for i in range(asked)]
    assert all(post(logs, ids, idents=others, amounts=idents))
    assert not any(post(logs, ids, idents=others))
    assert not sets(client)


@pytest.mark.parametrize("asked", [1, 29, 40])
def test_an_ident_is_no_other_bytes_of_a_log(logs: Logs, asked: int) -> None:
    """An amount, or the end of one field with the beginning of the next, is not an ident."""
    ident = 2**62 + 12345
    fillers = [2**61 + i for i in range(asked - 1)]
    post(logs, ["other"], idents=[2**61 - 1], amounts=[ident])
    torn = int.from_bytes(ident.to_bytes(8, "little")[4:] + b"\1\2\3\4", "little")
    half = int.from_bytes(b"\1\2\3\4" + ident.to_bytes(8, "little")[:4], "little")
    post(logs, ["torn"], idents=[torn], amounts=[half])
    taken = post(logs, named("a", 0, asked), idents=[ident, *fillers])
    assert taken == [True] * asked


def log_of(logs: Logs) -> bytes:
    return logs.client.get(seen(logs).replace("seen/", "log/")) or b""


@pytest.mark.parametrize("known", [True, False])
def test_the_copy_of_a_header_is_the_header(logs: Logs, client, known: bool) -> None:
    def rows(first: int, n: int) -> list[str | None]:
        return list(named("a", first, n)) if known else [None] * n

    for first, n in [(0, LONG - 1), (100, 1), (200, 150), (400, 1)]:
        assert all(post(logs, rows(first, n)))
        assert bool(client.exists(seen(logs))) == (first > 0)
        if first == 200:
            assert compact(logs, "a")
        if first:
            assert client.getrange(seen(logs), 0, 31) == log_of(logs)[:32]


@pytest.mark.parametrize("size", [LONG, 500])
def test_an_index_that_has_expired_is_made_again(logs: Logs, client, size: int) -> None:
    post(logs, named("a", 0, size))
    assert compact(logs, "a")
    for key in client.keys("*seen/*"):  # all go together, at the latest time of any
        client.delete(key)
    assert post(logs, ["new"]) == [True]
    assert client.getrange(seen(logs), 0, 31) == log_of(logs)[:32]
    assert post(logs, ["new", "newer"]) == [False, True]
    assert [began for _, _, began in groups(logs)] == [size]


def test_an_append_to_a_torn_log_is_cold_and_tears_it_no_further(logs: Logs, client) -> None:
    post(logs, named("a", 0, 100))
    key = seen(logs).replace("seen/", "log/")
    client.set(key, log_of(logs)[:-5])
    rows = batch(["a"], [1999], ids=["b"])
    done = logs.append(logs.calls("main", rows, [1], now=NOW, historic=False), rows)
    assert done.cold[0].log == log_of(logs)
    assert len(log_of(logs)) % 32 == 27
