"""Contestants: applications that take the same batches, each with a store of its own.

All of them run as `tallyward serve` would run them: the same gunicorn with the same settings, over
a real store whose append-only file is flushed every second. Run as a program, this module is that
server for one application.
"""

from __future__ import annotations

import contextlib
import http.client
import itertools
import json
import os
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import redis

from loadtests.wrk import Run, Stock, drive
from service import serving
from service.settings import PREFIX, Settings
from service.store.embedded import EmbeddedStore
from service.store.keys import Partition
from service.store.tether import tethered
from tests.processes import children, free_port

REPOSITORY = Path(__file__).parents[1]
KEY = "the-key-of-these-measurements-0123456789"
TICKS = os.sysconf("SC_CLK_TCK")
WORKER_CLASS = "LOADTESTS_WORKER_CLASS"

PARTITIONS = Settings().partitions

TALLYWARD = serving.APP
FLOOR = "loadtests.floor:create_app()"
PLAIN_SCIPY = "loadtests.plain:create_app('scipy')"
PLAIN = "loadtests.plain:create_app('own')"


class Server:
    """A running application and its store."""

    def __init__(self, process: subprocess.Popen[str], port: int, store_url: str) -> None:
        self.process = process
        self.port = port
        self.store = redis.Redis.from_url(store_url)

    @property
    def workers(self) -> list[int]:
        """Process ids of gunicorn's workers."""
        return [worker for child in children(self.process.pid) for worker in children(child)]

    def post(self, stock: Stock, query: str = "", connections: int = 8, **how: Any) -> Run:
        """Drive this server; see `loadtests.wrk.drive`."""
        url = f"http://127.0.0.1:{self.port}/v1/batches{query}"
        return drive(url, stock, connections=connections, key=KEY, **how)

    def worked(self) -> list[float]:
        """Return the processor time of each worker so far, in seconds."""
        return [process_cpu(worker) for worker in self.workers]

    def stored(self) -> float:
        """Return that of the store and the children that rewrite its file, once they are done."""
        while self.store.info("persistence")["aof_rewrite_in_progress"]:
            time.sleep(0.02)
        said = self.store.info("cpu")
        parts = ("user", "sys", "user_children", "sys_children")
        return sum(float(said[f"used_cpu_{part}"]) for part in parts)

    def get(self, path: str) -> Any:
        """Return the document of a 200."""
        line = http.client.HTTPConnection("127.0.0.1", self.port, timeout=60)
        with contextlib.closing(line):
            line.request("GET", path, headers={"Authorization": f"Bearer {KEY}"})
            answer = line.getresponse()
            text = answer.read().decode()
        if answer.status != 200:
            raise RuntimeError(f"{path}: {answer.status} {text}")
        return json.loads(text)

    def settle(self) -> None:
        """Wait until the service's sweeps have nothing left to do."""
        parts = [Partition(number) for number in range(PARTITIONS)]
        while self.store.exists(*(key for part in parts for key in (part.dirty, part.pending))):
            time.sleep(0.05)


def process_cpu(pid: int) -> float:
    """Return the time that all threads of a process have used, in seconds."""
    fields = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
    return (int(fields[11]) + int(fields[12])) / TICKS


@contextlib.contextmanager
def store(folder: Path) -> Iterator[str]:
    """Run a store as the service's embedded one, and yield its address."""
    with EmbeddedStore(folder) as server:
        yield server.url


@contextlib.contextmanager
def running(
    app: str, store_url: str, *, worker_class: str = "", **settings: object
) -> Iterator[Server]:
    """Run an application over a store.

    Parameters
    ----------
    app : str
        In gunicorn's notation.
    store_url : str
    worker_class : str
        Of gunicorn; by default that of `tallyward serve`.
    **settings
        Of Tallyward, in lower case without prefix; the others have their defaults.
    """
    port = free_port()
    chosen = {
        "bind": f"127.0.0.1:{port}",
        "redis_url": store_url,
        "admin_key": KEY,
        "log_level": "warning",
        **settings,
    }
    environment = {k: v for k, v in os.environ.items() if not k.startswith(PREFIX)}
    environment |= {PREFIX + k.upper(): str(v) for k, v in chosen.items()}
    environment[WORKER_CLASS] = worker_class
    with tempfile.TemporaryFile("w+") as messages:
        process = subprocess.Popen(
            tethered([sys.executable, "-m", "loadtests.contest", app]),
            env=environment,
            cwd=REPOSITORY,
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=messages,
            text=True,
        )
        assert process.stdout is not None
        try:
            if not process.stdout.readline():
                raise RuntimeError(f"{app} did not start")
            server = Server(process, port, store_url)
            with contextlib.closing(server.store):
                yield server
        finally:
            process.send_signal(signal.SIGTERM)
            process.wait()
            process.stdout.close()
            messages.seek(0)
            for line in itertools.islice(messages, 20):
                print(f"{app} said: {line}", end="", file=sys.stderr)


def main(app: str) -> None:
    """Serve one application as `tallyward serve` does, and say when it answers."""
    if chosen := os.environ.get(WORKER_CLASS):
        command = serving._command
        serving._command = lambda settings, app: [
            *command(settings, app)[:-1],
            f"--worker-class={chosen}",  # the last one counts
            app,
        ]
    serving.serve(
        Settings.from_environment(os.environ), lambda running: print(running.url, flush=True), app
    )


if __name__ == "__main__":
    main(sys.argv[1])
