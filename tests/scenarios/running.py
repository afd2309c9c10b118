"""A service as callers meet it: gunicorn with two workers behind a socket, over a real store."""

from __future__ import annotations

import contextlib
import http.client
import json
import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from service.serving import KEEP_ALIVE
from service.store.connection import connect
from tests.processes import PATIENCE, children, eventually, free_port

REPOSITORY = Path(__file__).parents[2]
KEY = "the-key-of-these-scenarios-0123456789"


@dataclass(frozen=True)
class Answer:
    """A response as it came over the wire."""

    status: int
    headers: http.client.HTTPMessage
    text: str

    @property
    def document(self) -> Any:
        return json.loads(self.text)


class Service:
    """A running service, spoken to over kept-alive connections, one per thread."""

    def __init__(self, port: int, store_url: str, process: subprocess.Popen[str]) -> None:
        self.port = port
        self.store_url = store_url
        self.process = process
        self._lines = threading.local()
        self._opened: list[http.client.HTTPConnection] = []

    @property
    def url(self) -> str:
        return f"http://127.0.0.1:{self.port}"

    @property
    def workers(self) -> list[int]:
        """Process ids of the workers, the grandchildren of `tallyward serve` (Linux)."""
        return [worker for child in children(self.process.pid) for worker in children(child)]

    def send(
        self,
        method: str,
        path: str,
        body: bytes | None = None,
        headers: Mapping[str, str] | None = None,
    ) -> Answer:
        """Send one request with the admin key; headers given replace it."""
        line: http.client.HTTPConnection | None = getattr(self._lines, "line", None)
        if line is None:
            line = http.client.HTTPConnection("127.0.0.1", self.port, timeout=PATIENCE)
            self._lines.line = line
            self._opened.append(line)
        elif time.monotonic() > self._lines.until:
            line.close()  # the service may have, too; it opens again at the next request
        self._lines.until = time.monotonic() + KEEP_ALIVE / 2
        with_key = {"Authorization": f"Bearer {KEY}", **(headers or {})}
        try:
            line.request(method, path, body, with_key)
            response = line.getresponse()
            return Answer(response.status, response.headers, response.read().decode())
        except BaseException:
            line.close()  # it opens again at the next request
            raise

    def get(self, path: str) -> Any:
        """Return the document of a 200."""
        answer = self.send("GET", path)
        assert answer.status == 200, answer.text
        return answer.document

    def put(self, path: str, document: Any) -> Any:
        answer = self.send_json("PUT", path, document)
        assert answer.status == 200, answer.text
        return answer.document

    def send_json(self, method: str, path: str, document: Any) -> Answer:
        body = json.dumps(document).encode()
        return self.send(method, path, body, {"Content-Type": "application/json"})

    def post(self, rows: list[dict[str, Any]], query: str = "") -> Any:
        """Post a batch that must be taken whole, and return its receipt."""
        answer = self.send_json("POST", f"/v1/batches{query}", {"transactions": rows})
        assert answer.status == 200, answer.text
        receipt = answer.document
        assert receipt["accepted"] + receipt["duplicates"] == len(rows)
        return receipt

    def reconnect(self) -> None:
        """Let any worker take this thread's next request; a connection stays with one."""
        line: http.client.HTTPConnection | None = getattr(self._lines, "line", None)
        if line is not None:
            line.close()

    def hang_up(self) -> None:
        for line in self._opened:
            line.close()


@contextlib.contextmanager
def serving(store_url: str, folder: Path, **settings: str) -> Iterator[Service]:
    """Run the service over a store: `tallyward serve`, two workers, on a free port."""
    port = free_port()
    environment = {
        **os.environ,
        "TALLYWARD_BIND": f"127.0.0.1:{port}",
        "TALLYWARD_REDIS_URL": store_url,
        "TALLYWARD_ADMIN_KEY": KEY,
        "TALLYWARD_WORKERS": "2",
        "TALLYWARD_THREADS": "6",
        "TALLYWARD_SWEEP_SECONDS": "0.3",
        "TALLYWARD_LOG_LEVEL": "warning",
        **{f"TALLYWARD_{name}": value for name, value in settings.items()},
    }
    with open(folder / "service.log", "ab") as log:
        process = subprocess.Popen(
            [sys.executable, "-m", "service.cli", "serve"],
            env=environment,
            cwd=REPOSITORY,
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=log,
            text=True,
        )
    assert process.stdout is not None
    service = Service(port, store_url, process)
    try:
        ready = process.stdout.readline()
        assert service.url in ready, (folder / "service.log").read_text()
        yield service
    finally:
        service.hang_up()
        process.send_signal(signal.SIGTERM)
        process.wait()
        process.stdout.close()


class StoreServer:
    """A store server that the service does not look after, so that it stays down when killed.

    Every write is on disk before it is answered, so that what survives is what was answered.
    """

    def __init__(self, folder: Path, binary: Path) -> None:
        folder.mkdir(exist_ok=True)
        self.folder, self.binary = folder, binary
        self.url = f"unix://{folder}/store.sock"
        self.process: subprocess.Popen[bytes] | None = None

    def start(self) -> None:
        """Start it on what its file holds, and wait until it answers."""
        options = {
            "port": "0",
            "unixsocket": str(self.folder / "store.sock"),
            "appendonly": "yes",
            "appendfsync": "always",
            "save": "",
            "maxmemory-policy": "noeviction",
        }
        command = [str(self.binary), *(p for k, v in options.items() for p in (f"--{k}", v))]
        with open(self.folder / "server.log", "ab") as log:
            self.process = subprocess.Popen(command, cwd=self.folder, stdout=log, stderr=log)
        eventually(self._answers, "an answer of the store")

    def kill(self) -> None:
        """End it as a power cut would."""
        assert self.process is not None
        self.process.kill()
        self.process.wait()

    def _answers(self) -> bool:
        client = connect(self.url, timeout=5.0)
        with contextlib.closing(client), contextlib.suppress(Exception):
            return bool(client.ping())
        return False
