"""Connections to the store, without surprises, and what kind of store answers.

The client's own retries are off: a script that timed out may have been applied, and only the
caller can ask again in a way that is not counted twice. A connection on which anything went wrong
is closed, never used again.
"""

from __future__ import annotations

import sys
from dataclasses import dataclass
from typing import Any, Literal
from urllib.parse import urlsplit

import redis
import redis.exceptions
from redis.backoff import NoBackoff
from redis.connection import BlockingConnectionPool
from redis.retry import Retry

from service.store.errors import NotSent, StoreError, surely_not_applied

Durability = Literal["none", "everysec", "always", "unknown"]

SCHEMES = ("redis", "rediss", "unix")


class CarefulPool(BlockingConnectionPool):
    """A bounded pool that says when nothing was sent, and keeps no connection after an error.

    Attributes
    ----------
    made : int
        How often a connection was made: what is at its other end may be another server each time.
    """

    made = 0

    def get_connection(self, command_name: Any = None, *keys: Any, **options: Any) -> Any:
        """Return a connection that is up.

        Raises
        ------
        NotSent
            If none can be had; then no command has gone out.
        """
        pool: Any = super()  # the client leaves these methods without types
        try:
            return pool.get_connection()
        except (redis.exceptions.ConnectionError, redis.exceptions.TimeoutError, OSError) as error:
            if surely_not_applied(error):  # and says more precisely why
                raise
            raise NotSent(str(error)) from error

    def release(self, connection: Any) -> None:
        """Take a connection back; close it first if an exception is on its way.

        The client gives connections back in a ``finally``. It closes them itself after time-outs
        and resets, but not, say, where a reply in the middle of a pipeline could not be parsed:
        the next user would read the replies that are left.
        """
        if sys.exc_info()[0] is not None:
            connection.disconnect()
        pool: Any = super()
        pool.release(connection)


def connect(url: str, timeout: float, connections: int = 64) -> redis.Redis:
    """Return a client of one store server; connects only when first used.

    Parameters
    ----------
    url : str
        ``redis://``, ``rediss://`` or ``unix://``.
    timeout : float
        Seconds for connecting, for each read and write, and to wait for a free connection.
    connections : int
        Most connections at a time, at least the number of threads that use the client.

    Returns
    -------
    redis.Redis
        Replies are bytes. Safe to share between threads and across a fork.

    Raises
    ------
    StoreError
        If the address cannot be used; its text never holds a password.
    """
    scheme = urlsplit(url).scheme
    if scheme == "redis+cluster":
        raise StoreError(
            "clusters (redis+cluster://) are not supported yet: give one server by redis://, "
            "rediss:// or unix://"
        )
    if scheme not in SCHEMES:
        raise StoreError(
            f"the store's address must begin with redis://, rediss:// or unix://, got {scheme!r}"
        )
    try:
        pool = CarefulPool.from_url(url, max_connections=connections, timeout=timeout)
    except (ValueError, TypeError) as error:
        raise StoreError(f"the store's address cannot be read ({type(error).__name__})") from None

    def greet(connection: Any) -> None:
        pool.made += 1
        connection.on_connect()

    # Set afterwards, as options in the address would win over arguments.
    pool.connection_kwargs.update(
        socket_timeout=timeout,
        socket_connect_timeout=timeout,
        retry=Retry(NoBackoff(), 0),
        retry_on_timeout=False,
        retry_on_error=[],
        health_check_interval=0,
        decode_responses=False,
        redis_connect_func=greet,
        protocol=2,  # the same replies, and no server pushes, from every version of the client
    )
    if scheme != "unix":
        pool.connection_kwargs["socket_keepalive"] = True
    client = redis.Redis(connection_pool=pool)
    client.auto_close_connection_pool = True
    return client


@dataclass(frozen=True)
class StoreFacts:
    """What a store server says about itself.

    Attributes
    ----------
    server : str
        ``redis`` or ``valkey``.
    version : str
        Its own version, e.g. ``7.0.15``.
    run_id : str
        Random at each start of the server.
    role : str
        ``master`` or ``slave``, in the server's words.
    replicas : int
        Connected replicas.
    clustered : bool
        Whether it is a node of a cluster.
    durability : {'none', 'everysec', 'always', 'unknown'}
        What survives a crash of the machine: ``none`` also where only snapshots are taken or the
        operating system decides when to write; ``unknown`` where the server does not tell.
    persisting : bool
        False if the last write of the append-only file or snapshot failed.
    loading : bool
        Whether it still reads its file.
    maxmemory_policy : str
        Must be ``noeviction``, or tallies may vanish; ``unknown`` where the server does not tell.
    used_memory, maxmemory : int
        Bytes; ``maxmemory`` 0 means no limit.
    """

    server: str
    version: str
    run_id: str
    role: str
    replicas: int
    clustered: bool
    durability: Durability
    persisting: bool
    loading: bool
    maxmemory_policy: str
    used_memory: int
    maxmemory: int


def inspect(client: redis.Redis) -> StoreFacts:
    """Ask a server for what the service depends on.

    Parameters
    ----------
    client : redis.Redis
        From `connect`.

    Returns
    -------
    StoreFacts

    Raises
    ------
    redis.exceptions.RedisError
        If it does not answer ``INFO``. A forbidden ``CONFIG`` is not an error.
    """
    info: Any = client.info()
    try:
        config: Any = client.config_get("append*")
    except redis.exceptions.ResponseError:  # hosted servers forbid it
        config = {}
    valkey = info.get("server_name") == "valkey"
    return StoreFacts(
        server="valkey" if valkey else "redis",
        version=str(info["valkey_version" if valkey else "redis_version"]),
        run_id=str(info.get("run_id", "")),
        role=str(info.get("role", "unknown")),
        replicas=int(info.get("connected_slaves", 0)),
        clustered=bool(info.get("cluster_enabled", 0)),
        durability=_durability(bool(info.get("aof_enabled", 0)), config),
        persisting=info.get("aof_last_write_status", "ok") == "ok"
        and info.get("rdb_last_bgsave_status", "ok") == "ok",
        loading=bool(info.get("loading", 0)),
        maxmemory_policy=str(info.get("maxmemory_policy", "unknown")),
        used_memory=int(info.get("used_memory", 0)),
        maxmemory=int(info.get("maxmemory", 0)),
    )


def _durability(append_only: bool, config: dict[Any, Any]) -> Durability:
    if not append_only:
        return "none"
    fsync = config.get("appendfsync", config.get(b"appendfsync"))
    said = fsync.decode() if isinstance(fsync, bytes) else fsync
    match said:
        case "always":
            return "always"
        case "everysec":
            return "everysec"
        case "no":
            return "none"
        case _:
            return "unknown"
