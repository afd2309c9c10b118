"""Every record that the logs took, in their order, from a store's files of commands."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from pathlib import Path

import numpy as np

from service.store.keys import Partition
from service.streams.record import HEADER, RECORD, Records


def commands(file: Path) -> Iterator[list[bytes]]:
    """Yield the write commands of an append-only file, oldest first."""
    data, at = file.read_bytes(), 0
    while at < len(data):
        end = data.index(b"\r\n", at)
        if data[at : at + 1] == b"#":  # an annotation
            at = end + 2
            continue
        assert data[at : at + 1] == b"*", data[at : at + 40]
        parts, count = [], int(data[at + 1 : end])
        at = end + 2
        for _ in range(count):
            end = data.index(b"\r\n", at)
            size = int(data[at + 1 : end])
            parts.append(data[end + 2 : end + 2 + size])
            at = end + 2 + size + 2
        yield parts


def whole_logs(
    files: Sequence[Path], partitions: int, prefix: str
) -> dict[str, tuple[int, Records]]:
    """Return logs as if they had never been trimmed: incarnation and all records, by path.

    Parameters
    ----------
    files : sequence of Path
        In the order of writing; what follows a file goes on from what it led to.
    prefix : str
        Of the paths wanted.

    Fails if a record was ever written over by another, or left out.
    """
    tags = [Partition(i).log("").encode() for i in range(partitions)]
    wanted = tuple(tag + prefix.encode() for tag in tags)
    found: dict[str, dict[int, bytes]] = {}
    incarnations: dict[str, int] = {}
    held: dict[str, int] = {}  # row number after the last one in the log
    for file in files:
        for command in commands(file):
            name = command[0].upper()
            if name not in (b"SET", b"APPEND") or not command[1].startswith(wanted):
                continue
            path, value = command[1].partition(b"log/")[2].decode(), command[2]
            if name == b"SET":
                header = np.frombuffer(value[: HEADER.itemsize], HEADER)[0]
                incarnation = int(header["incarnation"])
                assert incarnations.setdefault(path, incarnation) == incarnation
                first, value = int(header["base"]), value[HEADER.itemsize :]
            else:
                first = held[path]
            assert len(value) % RECORD.itemsize == 0
            records = found.setdefault(path, {})
            for i in range(len(value) // RECORD.itemsize):
                record = value[i * RECORD.itemsize : (i + 1) * RECORD.itemsize]
                before = records.setdefault(first + i, record)
                assert before == record, f"record {first + i} of {path} was written over"
            held[path] = first + len(value) // RECORD.itemsize
    out = {}
    for path, records in found.items():
        assert sorted(records) == list(range(held[path])), f"records of {path} are missing"
        joined = b"".join(records[i] for i in range(len(records)))
        out[path] = incarnations[path], np.frombuffer(joined, RECORD)
    return out
