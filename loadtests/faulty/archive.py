"""Every record that the logs took, in their order, from a store's files of commands."""

from __future__ import annotations

import contextlib
import os
from collections.abc import Iterator, Sequence
from pathlib import Path

import numpy as np

from service.store.keys import Partition
from service.streams.record import HEADER, RECORD, Records


def commands(file: Path) -> Iterator[list[bytes]]:
    """Yield the write commands of an append-only file, oldest first."""
    for _, command in _placed(file.read_bytes()):
        yield command


def cut_off_torn_end(file: Path) -> None:
    """Take an unfinished command or transaction off a file, as ``redis-check-aof --fix`` does.

    Redis 7.0 leaves the beginning of a torn transaction in its file, and does it at a later start.
    """
    data = file.read_bytes()
    whole, open_ = 0, False
    for end, command in _placed(data):
        name = command[0].upper()
        open_ = (open_ or name == b"MULTI") and name != b"EXEC"
        whole = whole if open_ else end
    if whole < len(data):
        os.truncate(file, whole)


def _placed(data: bytes) -> Iterator[tuple[int, list[bytes]]]:
    """Yield whole commands and where each ends."""
    at = 0
    with contextlib.suppress(_Torn):
        while at < len(data):
            count, at = _number(data, at, b"*")
            parts = []
            for _ in range(count):
                size, at = _number(data, at, b"$")
                parts.append(data[at : at + size])
                at += size + 2
            if at > len(data):
                return
            yield at, parts


class _Torn(Exception):
    """The file ends within a number."""


def _number(data: bytes, at: int, mark: bytes) -> tuple[int, int]:
    end = data.find(b"\r\n", at)
    if end < 0 or at >= len(data):
        raise _Torn
    assert data[at : at + 1] == mark, data[at : at + 40]
    return int(data[at + 1 : end]), end + 2


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
