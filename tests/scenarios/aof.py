"""The logs as they were written, read from the store's append-only file.

A log forgets records once they are in a snapshot; the file has every write since the store began.
"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import numpy as np

from service.store.keys import Partition
from service.streams.record import HEADER, RECORD, Records


def commands(folder: Path) -> Iterator[list[bytes]]:
    """Yield the write commands of a store, oldest first."""
    for file in sorted((folder / "appendonlydir").glob("*.incr.aof")):
        with open(file, "rb") as stream:
            while line := stream.readline():
                assert line[:1] == b"*", line
                yield [_part(stream) for _ in range(int(line[1:]))]


def _part(stream: object) -> bytes:
    size = int(stream.readline()[1:])  # type: ignore[attr-defined]
    part: bytes = stream.read(size + 2)[:-2]  # type: ignore[attr-defined]
    return part


def whole_logs(folder: Path, partitions: int) -> dict[str, tuple[int, Records]]:
    """Return every log as if it had never been trimmed: its incarnation and all its records.

    Fails if a record was ever written over by another, or left out.
    """
    prefixes = {Partition(i).log("").encode() for i in range(partitions)}
    found: dict[str, dict[int, bytes]] = {}
    incarnations: dict[str, int] = {}
    held: dict[str, int] = {}  # row number after the last one in the log
    for command in commands(folder):
        name, key = command[0].upper(), command[1] if len(command) > 1 else b""
        prefix = key[: key.find(b"log/") + 4]
        if prefix not in prefixes or name not in (b"SET", b"APPEND"):
            continue
        path, value = key[len(prefix) :].decode(), command[2]
        if name == b"SET":
            header = np.frombuffer(value[: HEADER.itemsize], HEADER)[0]
            assert incarnations.setdefault(path, int(header["incarnation"])) == int(
                header["incarnation"]
            )
            first, value = int(header["base"]), value[HEADER.itemsize :]
        else:
            first = held[path]
        assert len(value) % RECORD.itemsize == 0
        for i in range(len(value) // RECORD.itemsize):
            record = value[i * RECORD.itemsize : (i + 1) * RECORD.itemsize]
            assert found.setdefault(path, {}).setdefault(first + i, record) == record
        held[path] = first + len(value) // RECORD.itemsize
    out = {}
    for path, records in found.items():
        assert sorted(records) == list(range(len(records)))
        joined = b"".join(records[i] for i in range(len(records)))
        out[path] = incarnations[path], np.frombuffer(joined, RECORD)
    return out
