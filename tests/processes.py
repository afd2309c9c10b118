"""Other processes: their ports and children, whether they live, and waiting for what they do."""

from __future__ import annotations

import contextlib
import socket
import time
from collections.abc import Callable
from pathlib import Path

PATIENCE = 120.0  # seconds; only ends a hopeless wait


def eventually(holds: Callable[[], object], what: str) -> None:
    """Wait for something another process does; fail when it never comes."""
    limit = time.monotonic() + PATIENCE
    while not holds():
        assert time.monotonic() < limit, f"never: {what}"
        time.sleep(0.01)


def alive(pid: int) -> bool:
    with contextlib.suppress(OSError):
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0] != "Z"
    return False


def free_port() -> int:
    with socket.socket() as trial:
        trial.bind(("127.0.0.1", 0))
        return trial.getsockname()[1]


def children(pid: int) -> list[int]:
    """Return the children of all its threads."""
    lists = [file.read_text() for file in Path(f"/proc/{pid}/task").glob("*/children")]
    return [int(child) for child in " ".join(lists).split()]
