"""A store, a line to it and the service behind: kept running while episodes come and go."""

from __future__ import annotations

import contextlib
import os
import random
import shutil
import signal
import subprocess
import tempfile
import time
from collections.abc import Iterator
from contextlib import ExitStack
from pathlib import Path
from typing import Any

import redis

from loadtests.faulty.archive import cut_off_torn_end
from loadtests.faulty.callers import Caller
from loadtests.faulty.line import Line
from loadtests.faulty.plan import POLICIES, SHOPS, merchant_of
from service.store.catalogue import FRESH_SECONDS
from service.store.keys import Partition
from tests.processes import eventually, free_port
from tests.scenarios.running import Service, serving

PARTITIONS = 4
STORE_TIMEOUT = "0.3"


def in_order(folder: Path) -> list[Path]:
    """Return append-only files, the base before what was appended since."""
    files = folder.glob("appendonly.aof.*.aof")
    return sorted(files, key=lambda f: ("base" not in f.name, int(f.name.split(".")[2])))


class Server:
    """One store server with a folder of its own, all of its file in plain commands."""

    def __init__(self, folder: Path, binary: Path) -> None:
        folder.mkdir(parents=True, exist_ok=True)
        self.folder, self.binary, self.port = folder, binary, free_port()
        self.process: subprocess.Popen[bytes] | None = None
        self.client = redis.Redis(port=self.port, socket_timeout=30, protocol=2)

    def start(self, *, append_only: bool = True, fsync: str = "everysec") -> None:
        """Start it on what its folder holds and wait until it answers."""
        for file in self.append_only_files[-1:]:
            cut_off_torn_end(file)
        options = {
            "port": str(self.port),
            "bind": "127.0.0.1",
            "save": "",
            "appendonly": "yes" if append_only else "no",
            "appendfsync": fsync,
            "aof-use-rdb-preamble": "no",
            "auto-aof-rewrite-percentage": "0",
            "aof-load-truncated": "yes",
            "maxmemory-policy": "noeviction",
            "repl-diskless-sync-delay": "0",
            "repl-timeout": "5",
            "repl-ping-replica-period": "1",
        }
        command = [str(self.binary), *(part for k, v in options.items() for part in (f"--{k}", v))]
        with open(self.folder / "server.log", "ab") as log:
            self.process = subprocess.Popen(command, cwd=self.folder, stdout=log, stderr=log)
        eventually(self._answers, "an answer of the store")

    def _answers(self) -> bool:
        assert self.process is not None
        assert self.process.poll() is None, (self.folder / "server.log").read_text()[-2000:]
        with contextlib.suppress(redis.RedisError):
            return bool(self.client.ping())
        return False

    def kill(self) -> None:
        assert self.process is not None
        self.client.connection_pool.disconnect()
        self.process.kill()
        self.process.wait()

    @property
    def append_only_files(self) -> list[Path]:
        """The files of commands, oldest first."""
        return in_order(self.folder / "appendonlydir")

    def rewritten(self) -> bool:
        """Tell whether its append-only file is complete and handed to the operating system."""
        info: Any = self.client.info("persistence")
        return (
            not info["aof_rewrite_in_progress"]
            and not info["aof_rewrite_scheduled"]
            and info["aof_last_bgrewrite_status"] == "ok"
            and info.get("aof_buffer_length", 1) == 0
        )


class House:
    """What the episodes of one service have in common.

    Attributes
    ----------
    server : Server
        The one that the line leads to.
    earlier : list of Path
        Files of commands that came before those of the server's own.
    furniture : list of (path, document)
        What is put to the service at its start, and again if its store comes back empty: the
        policies, and those of the merchants of all episodes to come.
    """

    def __init__(self, folder: Path, binary: Path, episodes: int = 1) -> None:
        self.folder, self.binary = folder, binary
        self.earlier: list[Path] = []
        self.fsync = "everysec"
        self.furniture = [(f"/v1/policies/{name}", policy) for name, policy in POLICIES.items()]
        self.prefixes = [f"h{n}." for n in range(episodes)]
        for prefix in reversed(self.prefixes):
            for i, (_, policy, *_) in enumerate(SHOPS):
                merchant = merchant_of(prefix, i)
                self.furniture.append((f"/v1/merchants/{merchant}", {"policy": policy}))
        self._servers = 0
        self._running = ExitStack()

    def __enter__(self) -> House:
        with ExitStack() as starting:
            self.server = self.new_server()
            starting.callback(lambda: self.server.kill())
            self.server.start()
            self.line = Line(self.server.port)
            starting.callback(self.line.close)
            self.service: Service = starting.enter_context(
                serving(
                    f"redis://127.0.0.1:{self.line.port}",
                    self.folder,
                    STORE_TIMEOUT=STORE_TIMEOUT,
                    PARTITIONS=str(PARTITIONS),
                    LOG_LEVEL="info",
                )
            )
            self.furnish()
            time.sleep(FRESH_SECONDS + 0.1)  # until the other worker must ask again
            self._running = starting.pop_all()
        return self

    def __exit__(self, *about: object) -> None:
        self._running.close()

    def new_server(self) -> Server:
        self._servers += 1
        return Server(self.folder / f"store-{self._servers}", self.binary)

    def furnish(self) -> None:
        """Put everything in its place, however often the service has to be asked."""
        caller = Caller(self.service.port, 3.0)
        for path, document in self.furniture:
            eventually(lambda p=path, d=document: caller.put(p, d), f"a 200 for {path}")
        caller.hang_up()

    def keep_durability(self, fsync: str) -> None:
        self.fsync = fsync
        self.server.client.config_set("appendfsync", fsync)

    # -- what goes wrong with servers and workers ----------------------------------------------

    def kill_store(self) -> None:
        """End the store in the midst of everything and start it on what it had written.

        With ``everysec`` a server holds writes back while an earlier fsync lasts, and answers
        nevertheless; so it is made to hold still until all that it answered is written.
        """
        if self.fsync == "everysec":
            self.server.client.client_pause(60_000, all=False)
            eventually(self.server.rewritten, "an append-only file that is handed over")
        self.kill_store_at_once()

    def kill_store_at_once(self) -> None:
        self.server.kill()
        self.server.start(fsync=self.fsync)

    def lose_power(self, kept: int, share: float) -> None:
        """End the store; of what it wrote since its file had ``kept`` bytes take a share away."""
        self.server.kill()
        last = self.server.append_only_files[-1]
        size = last.stat().st_size
        os.truncate(last, size - int(share * (size - kept)))
        self.server.start(fsync=self.fsync)

    def leave_only_a_snapshot(self) -> None:
        """Take a snapshot, and write nothing down from then on."""
        client = self.server.client
        client.client_pause(60_000, all=False)  # nothing may be written between the two
        client.save()
        client.config_set("appendonly", "no")
        client.client_unpause()
        kept = Path(tempfile.mkdtemp(prefix="kept-", dir=self.folder))
        shutil.copytree(self.server.folder / "appendonlydir", kept, dirs_exist_ok=True)
        self.earlier += in_order(kept)

    def fall_back_on_the_snapshot(self) -> None:
        self.server.kill()
        shutil.rmtree(self.server.folder / "appendonlydir")
        self.server.start(append_only=False, fsync=self.fsync)
        self.server.client.config_set("appendonly", "yes")
        eventually(self.server.rewritten, "a complete append-only file")

    def come_back_empty(self) -> None:
        self.server.kill()
        shutil.rmtree(self.server.folder)
        self.earlier.clear()
        port = self.server.port
        self.server.folder.mkdir()
        self.server.start(fsync=self.fsync)
        assert self.server.port == port

    @contextlib.contextmanager
    def replica(self) -> Iterator[tuple[Server, Line]]:
        """Run a replica of the store, by a line of its own; it is the store if it was promoted."""
        link = Line(self.server.port)
        server = self.new_server()
        try:
            server.start(fsync=self.fsync)
            server.client.replicaof("127.0.0.1", link.port)

            def follows() -> bool:
                info: Any = server.client.info("replication")
                return info["master_link_status"] == "up" and server.rewritten()

            eventually(follows, "a replica that follows")
            yield server, link
        finally:
            link.close()
            if server is not self.server:
                server.kill()

    def promote(self, server: Server) -> None:
        server.client.replicaof("NO", "ONE")
        former, self.server = self.server, server
        self.line.lead_to(server.port)
        former.kill()
        self.earlier.clear()

    def kill_worker(self, chance: random.Random) -> None:
        workers = self.service.workers
        if workers:
            with contextlib.suppress(ProcessLookupError):
                os.kill(chance.choice(sorted(workers)), signal.SIGKILL)

    # -- calm ------------------------------------------------------------------------------------

    def settle(self) -> None:
        """Wait until the sweep has nothing left to do.

        It leaves a call alone for some seconds, and a partition as long as a lease of a dead
        worker lasts: both are made old here, which changes nothing but the waiting.
        """
        partitions = [Partition(i) for i in range(PARTITIONS)]
        client = self.server.client
        client.delete(*(p.lease for p in partitions))

        def settled() -> bool:
            left = 0
            for p in partitions:
                calls: Any = client.zrange(p.pending, 0, -1)
                if calls:
                    client.zadd(p.pending, dict.fromkeys(calls, 1), xx=True)
                left += len(calls) + client.hlen(p.calls) + client.hlen(p.outbox)
                left += client.hlen(p.dirty)
            return not left

        eventually(settled, "a sweep that has nothing left to do")
        for p in partitions:
            held: Any = client.hgetall(p.quarantine)
            assert not held, f"in quarantine: {held}"
