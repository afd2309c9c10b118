"""Lua scripts as resources, and pipelines that bring a script along when the server lost it."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from importlib.resources import files
from typing import Any

import redis
from hiredis import pack_command
from redis.exceptions import NoScriptError, RedisError, ResponseError

Argument = str | bytes | int
Command = tuple[Argument, ...]


@dataclass(frozen=True)
class Script:
    """One script of ``scripts/``; its header says what its keys, arguments and reply are."""

    source: bytes
    sha: str

    @classmethod
    def named(cls, name: str, *functions: str) -> Script:
        """Read a script from the package, with the functions of other files put before it."""
        folder = files("service.store").joinpath("scripts")
        first, rest = folder.joinpath(f"{name}.lua").read_bytes().split(b"\n", 1)  # "#!lua"
        shared = [folder.joinpath(f"{other}.lua").read_bytes() for other in functions]
        source = b"\n".join([first, *shared, rest])
        return cls(source, hashlib.sha1(source, usedforsecurity=False).hexdigest())

    def call(self, keys: Sequence[str], arguments: Sequence[Argument]) -> Command:
        """Return the command that runs the script by its digest."""
        return ("EVALSHA", self.sha, len(keys), *keys, *arguments)


APPEND = Script.named("append", "seen")
COMPACT = Script.named("compact")
PUBLISH = Script.named("publish")
SETTLE = Script.named("settle")

_SOURCES = {s.sha: s.source for s in (APPEND, COMPACT, PUBLISH, SETTLE)}

Reply = Any


def run(client: redis.Redis, groups: Sequence[Sequence[Command]]) -> list[list[Reply]]:
    """Send groups of commands in one round trip and return their replies, group by group.

    An error of one command takes the place of its reply. A group whose script the server did not
    know is sent again with the source; the other groups are not touched.

    Raises
    ------
    redis.exceptions.RedisError
        If the connection fails; whether commands were applied is then unknown unless
        `errors.surely_not_applied` says so.
    """
    replies = _send(client, groups)
    lost = [i for i, group in enumerate(replies) if any(_lost(r) for r in group)]
    if lost:
        again = _send(client, [[_with_source(c) for c in groups[i]] for i in lost])
        for i, group in zip(lost, again, strict=True):
            replies[i] = group
    return replies


def _send(client: redis.Redis, groups: Sequence[Sequence[Command]]) -> list[list[Reply]]:
    """Do what the client's pipeline does, without its bookkeeping."""
    pool: Any = client.connection_pool
    connection = pool.get_connection()
    try:
        pack: Any = pack_command
        packed = b"".join([pack(command) for group in groups for command in group])
        connection.send_packed_command([packed])
        return [[_reply(client, connection, command) for command in group] for group in groups]
    finally:
        pool.release(connection)


def _reply(client: Any, connection: Any, command: Command) -> Reply:
    try:
        return client.parse_response(connection, command[0])
    except ResponseError as error:
        return error


def _lost(reply: Reply) -> bool:
    return isinstance(reply, NoScriptError)


def _with_source(command: Command) -> Command:
    if command[0] != "EVALSHA":
        return command
    return ("EVAL", _SOURCES[str(command[1])], *command[2:])


def first_error(replies: Sequence[Reply]) -> RedisError | None:
    """Return the first error among replies."""
    return next((r for r in replies if isinstance(r, RedisError)), None)
