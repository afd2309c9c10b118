"""Does a worker's memory stay flat? Posts at full rate for a while, bad and slow callers included.

A service of its own runs over a store of its own. Posters use every kind of identity over
kept-alive connections; readers read; others send what must be refused, too much, or too slowly.
The resident memory of each worker and of the store is sampled; a worker must not grow by more than
a bound between the first and the last tenth (medians) of what follows the warm-up. The store grows
with what it has to remember and is only shown.
"""

from __future__ import annotations

import argparse
import contextlib
import gzip
import http.client
import itertools
import json
import os
import secrets
import signal
import socket
import subprocess
import sys
import tempfile
import threading
import time
from collections import Counter
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import NamedTuple

import numpy as np

from service.store.embedded import EmbeddedStore, find_server

KEY = secrets.token_urlsafe(32)
IDENTITIES = ("id", "offset", "key", "none")
SIZES = (1, 10, 100, 1000)
MERCHANTS = 500
BLOCKS = 10
WARM_UP = 0.2  # of the whole time
CALLER_TIMEOUT = 5  # seconds; so that slow callers come and go
JSON = "application/json"
MIB = 1 << 20


class Sample(NamedTuple):
    at: float  # seconds since the start
    workers: dict[int, int]  # process id to resident bytes
    store: int
    rows: int


class Soak:
    """What is going on, counted."""

    def __init__(self, port: int) -> None:
        self.port = port
        self.over = threading.Event()
        self.answers: Counter[tuple[str, str]] = Counter()
        self.rows = 0
        self._lock = threading.Lock()

    def told(self, kind: str, answer: str, rows: int = 0) -> None:
        with self._lock:
            self.answers[kind, answer] += 1
            self.rows += rows

    def connect(self) -> http.client.HTTPConnection:
        return http.client.HTTPConnection("127.0.0.1", self.port, timeout=120)

    def lines(self) -> socket.socket:
        return socket.create_connection(("127.0.0.1", self.port), timeout=120)


def batch(rng: np.random.Generator, poster: int, number: int, kind: str) -> list[dict]:
    n = int(rng.choice(SIZES)) if number else max(SIZES)
    # The first batch touches every stream: what a worker keeps of each is there from the start.
    merchants = rng.zipf(1.3, n) % MERCHANTS if number else np.arange(n) % MERCHANTS
    amounts = (10 ** rng.uniform(2, 6, n)).astype(int)
    rows = [
        {"merchant": f"merchant-{m:03d}", "amount": int(a), "category": "5942"}
        for m, a in zip(merchants, amounts, strict=True)
    ]
    for i, row in enumerate(rows):
        if i % 7 == 0 if number else i < MERCHANTS:
            row["amount"] = -row["amount"]
        if kind == "id":
            row["id"] = f"{poster}-{number:07d}-{i:04d}"
        elif kind == "offset":
            row |= {"source": f"till-{poster}", "offset": number * max(SIZES) + i}
    return rows


def post(soak: Soak, poster: int) -> None:
    """Post without a pause; every fiftieth batch again, and again what is told to come later."""
    rng = np.random.default_rng(poster)
    kind = IDENTITIES[poster % len(IDENTITIES)]
    line = soak.connect()
    for number in itertools.count():
        rows = batch(rng, poster, number, kind)
        headers = {"Authorization": f"Bearer {KEY}", "Content-Type": JSON}
        if kind == "key":
            headers["Idempotency-Key"] = f"{poster}-{number}"
        body = json.dumps({"transactions": rows}).encode()
        if number % 3 == 0:
            body = gzip.compress(body, compresslevel=1)
            headers["Content-Encoding"] = "gzip"
        reply = ("alarms", "alarms", "merchants", "full")[number % 4 if len(rows) < 100 else 0]
        left = 2 if number % 50 == 0 else 1
        while left and not soak.over.is_set():
            line.request("POST", f"/v1/batches?reply={reply}", body, headers)
            answer = line.getresponse()
            answer.read()
            soak.told(f"post by {kind}", str(answer.status), len(rows) * (answer.status == 200))
            if answer.status == 503:
                soak.over.wait(float(answer.headers["Retry-After"]))
            else:
                left -= 1
        if soak.over.is_set():
            line.close()
            return


def read(soak: Soak) -> None:
    line = soak.connect()
    paths = (
        "/v1/merchants?limit=100",
        "/v1/merchants/merchant-001",
        "/v1/merchants/merchant-001/rows",
        "/v1/merchants/merchant-002/digits?view=lead_pair&span=lifetime",
        "/v1/alarms?limit=10",
        "/v1/alarms?wait=1&merchant=nobody",
        "/health/ready",
        "/v1/openapi.json",
    )
    for path in itertools.cycle(paths):
        line.request("GET", path, headers={"Authorization": f"Bearer {KEY}"})
        answer = line.getresponse()
        answer.read()
        soak.told("read", str(answer.status))
        if soak.over.wait(0.05):
            line.close()
            return


BOMB = gzip.compress(b" " * (200 * MIB))
DEEP = b'{"transactions": ' + b"[" * 1_000_000
WIDE = b'{"transactions": [' + b"[]," * 2_000_000 + b"[]]}"
MANY = gzip.compress(
    json.dumps(
        {
            "transactions": [
                {"merchant": "m" * 64, "amount": 1, "id": f"{i:064d}"} for i in range(50_000)
            ]
        }
    ).encode()
)
FAULTY = json.dumps({"transactions": [{"merchant": "a", "amount": 1.5, "id": "é"}] * 5000}).encode()

BAD: dict[str, tuple[bytes, dict[str, str]]] = {
    "bomb": (BOMB, {"Content-Encoding": "gzip"}),
    "deep": (DEEP, {}),
    "wide": (WIDE, {}),
    "50 000 rows": (MANY, {"Content-Encoding": "gzip"}),
    "faulty rows": (FAULTY, {}),
    "too long": (b" " * (17 * MIB), {}),
    "no key": (FAULTY, {"Authorization": "Bearer none"}),
    "other type": (FAULTY, {"Content-Type": "text/csv"}),
    "torn gzip": (BOMB[:-9], {"Content-Encoding": "gzip"}),
}
FINE = {"post": {"200", "503"}, "read": {"200", "404", "503"}}  # 404 before the first post
REFUSED = {"400", "401", "408", "413", "415", "422", "503"}


def offend(soak: Soak) -> None:
    """Send what must be refused."""
    for name, (body, more) in itertools.cycle(BAD.items()):
        headers = {"Authorization": f"Bearer {KEY}", "Content-Type": JSON, **more}
        line = soak.connect()
        try:
            line.request("POST", "/v1/batches", body, headers)
            answer = line.getresponse()
            answer.read()
            soak.told(f"bad: {name}", str(answer.status))
        except OSError as error:  # refused before it was sent
            soak.told(f"bad: {name}", type(error).__name__)
        line.close()
        if soak.over.wait(0.2):
            return


def head(length: int) -> bytes:
    return (
        f"POST /v1/batches HTTP/1.1\r\nHost: here\r\nAuthorization: Bearer {KEY}\r\n"
        f"Content-Type: {JSON}\r\nContent-Length: {length}\r\n\r\n"
    ).encode()


SLOW = {
    "half a head": head(9)[:50],
    "half a body": head(1000) + b"{",
    "half a long body": head(10 * MIB) + b" " * MIB,
    "answers not taken": b"GET /v1/openapi.json HTTP/1.1\r\nHost: here\r\n\r\n" * 100,
}


def dawdle(soak: Soak) -> None:
    """Send halves, byte by byte afterwards, and take no answer before hanging up."""
    for name, said in itertools.cycle(SLOW.items()):
        with contextlib.suppress(OSError), soak.lines() as line:
            line.sendall(said)
            for _ in range(2 * CALLER_TIMEOUT):
                if soak.over.wait(0.5):
                    return
                line.send(b" ")
        soak.told(f"slow: {name}", "hung up")


def resident(pid: int, name: str = "VmRSS") -> int:
    """Return a process's resident memory in bytes (Linux); ``VmHWM`` is its peak."""
    for line in Path(f"/proc/{pid}/status").read_text().splitlines():
        if line.startswith(f"{name}:"):
            return int(line.split()[1]) << 10
    raise ProcessLookupError(pid)


def children(pid: int) -> list[int]:
    lists = [file.read_text() for file in Path(f"/proc/{pid}/task").glob("*/children")]
    return [int(child) for child in " ".join(lists).split()]


@contextlib.contextmanager
def serving(store_url: str, port: int, workers: int) -> Iterator[subprocess.Popen[str]]:
    environment = {
        **os.environ,
        "TALLYWARD_BIND": f"127.0.0.1:{port}",
        "TALLYWARD_REDIS_URL": store_url,
        "TALLYWARD_ADMIN_KEY": KEY,
        "TALLYWARD_WORKERS": str(workers),
        "TALLYWARD_CALLER_TIMEOUT": str(CALLER_TIMEOUT),
        "TALLYWARD_LOG_LEVEL": "warning",
    }
    service = subprocess.Popen(
        [sys.executable, "-m", "service.cli", "serve"],
        env=environment,
        stdout=subprocess.PIPE,
        text=True,
    )
    assert service.stdout is not None
    try:
        if "listens" not in service.stdout.readline():
            raise SystemExit("the service did not start; its messages are above")
        yield service
    finally:
        service.send_signal(signal.SIGTERM)
        service.wait()
        service.stdout.close()


def slope(at: np.ndarray, values: np.ndarray) -> tuple[float, float]:
    """Return the slope of the medians of blocks, and its standard error.

    Single samples depend on each other, and would make the error look smaller than it is; means
    would go by how many bombs were in the air.
    """
    blocks = np.array_split(np.arange(len(at)), BLOCKS)
    t = np.array([at[b].mean() for b in blocks])
    v = np.array([np.median(values[b]) for b in blocks])
    t -= t.mean()
    found = float(t @ v / (t @ t))
    rest = v - v.mean() - found * t
    return found, float(np.sqrt(rest @ rest / (BLOCKS - 2) / (t @ t)))


def watch(soak: Soak, service: int, store: int, seconds: float) -> list[Sample]:
    """Sample until the time is over; print about twenty lines of it."""
    (gunicorn,) = children(service)
    began = time.monotonic()
    samples: list[Sample] = []
    every = max(0.2, min(5.0, seconds / 300))
    told = 0.0
    while (at := time.monotonic() - began) < seconds:
        workers = {pid: resident(pid) for pid in children(gunicorn)}
        samples.append(Sample(at, workers, resident(store), soak.rows))
        if at >= told:
            told += seconds / 20
            shown = "".join(f"{size / MIB:10.1f}" for size in workers.values())
            print(
                f"{at / 60:8.1f}{soak.rows:14,d}{samples[-1].store / MIB:10.1f}{shown}", flush=True
            )
        time.sleep(every)
    return samples


def judge(soak: Soak, samples: list[Sample], bound: float) -> bool:
    """Print what came out, and return whether it is good."""
    good = True
    kept = [s for s in samples if s.at >= WARM_UP * samples[-1].at]
    at = np.array([s.at for s in kept]) / 3600
    print(
        f"\n{'':20s}{'first':>8s}{'last':>8s}{'growth':>8s}{'peak':>8s}{'MiB/h':>10s}{'± s.e.':>9s}"
    )
    for pid in samples[0].workers:
        values = np.array([s.workers.get(pid, np.nan) for s in kept]) / MIB
        if np.isnan(values).any():
            print(f"worker {pid} was replaced")
            good = False
            continue
        tenth = max(1, len(values) // BLOCKS)
        first, last = np.median(values[:tenth]), np.median(values[-tenth:])
        rate, error = slope(at, values)
        peak = resident(pid, "VmHWM") / MIB
        print(
            f"worker {pid:<13d}{first:8.1f}{last:8.1f}{last - first:8.1f}{peak:8.1f}"
            f"{rate:10.1f}{error:9.1f}"
        )
        good &= bool(last - first <= bound)
    stored = np.array([s.store for s in kept]) / MIB
    rate, error = slope(at, stored)
    print(
        f"{'store':20s}{stored[0]:8.1f}{stored[-1]:8.1f}{stored[-1] - stored[0]:8.1f}{'':8s}"
        f"{rate:10.1f}{error:9.1f}"
    )
    print(f"\n{soak.rows:,} rows taken, {soak.rows / samples[-1].at:,.0f} a second")
    for (kind, answer), count in sorted(soak.answers.items()):
        fine = answer in FINE.get(kind.split()[0], REFUSED) or not answer.isdigit()
        print(f"{kind:28s}{answer:>24s}{count:10,d}{'' if fine else '   unexpected'}")
        good &= fine
    print(
        f"\n{'Flat' if good else 'NOT flat, or not as expected'} (bound: {bound:g} MiB a worker)."
    )
    return good


def run(job: Callable[..., None], soak: Soak, *given: int) -> threading.Thread:
    """Start a caller; one that meets a closed connection begins anew."""

    def again() -> None:
        while not soak.over.is_set():
            try:
                job(soak, *given)
            except (OSError, http.client.HTTPException) as error:
                soak.told(f"hung up: {job.__name__}", type(error).__name__)
                soak.over.wait(0.1)

    thread = threading.Thread(target=again)
    thread.start()
    return thread


def main() -> None:
    """Run for so many minutes; exit with 1 if a worker grew."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--minutes", type=float, default=30)
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--posters", type=int, default=8)
    parser.add_argument("--bound", type=float, default=16, help="MiB that a worker may grow by")
    parser.add_argument("--store", choices=("path", "wheel"), default="path")
    parser.add_argument("--without", nargs="*", default=[], choices=("read", "offend", "dawdle"))
    given = parser.parse_args()
    with socket.socket() as trial:
        trial.bind(("127.0.0.1", 0))
        port = trial.getsockname()[1]
    with (
        tempfile.TemporaryDirectory() as folder,
        EmbeddedStore(Path(folder) / "store", find_server(given.store)) as store,
        serving(store.url, port, given.workers) as service,
    ):
        soak = Soak(port)
        print(f"{'minutes':>8s}{'rows':>14s}{'store':>10s}   each worker (MiB resident)")
        jobs = [j for j in (read, offend, *[dawdle] * 6) if j.__name__ not in given.without]
        callers = [run(job, soak) for job in jobs]
        callers += [run(post, soak, i) for i in range(given.posters)]
        try:
            samples = watch(soak, service.pid, store.pid, given.minutes * 60)
            good = judge(soak, samples, given.bound)
        finally:
            soak.over.set()
            for caller in callers:
                caller.join()
    sys.exit(0 if good else 1)


if __name__ == "__main__":
    main()
