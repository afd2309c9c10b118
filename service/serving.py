"""Run the service: the embedded store, if one is wanted, and gunicorn as a supervised child.

The parent holds the store and no requests; so the store starts first and ends last, and a worker
that goes mad takes neither along.
"""

from __future__ import annotations

import errno
import http.client
import logging
import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from pathlib import Path
from types import FrameType

import gunicorn

import service
from service.admin_key import keep_a_key, key_file
from service.ready import get_ready
from service.settings import Settings
from service.store.embedded import EmbeddedStore
from service.store.tether import tethered

log = logging.getLogger(__name__)

APP = "service.app:create_app()"
KEEP_ALIVE = 75  # seconds; longer than the 60 that common proxies keep a connection
SPARE = 4  # threads
# glibc gives each thread a heap of its own and keeps what was freed. That made a worker grow
# several times as large as what it uses; Python's lock lets threads share one heap. Large arrays go
# back to the system at once. Whoever runs us may say otherwise.
MEMORY = {
    "MALLOC_ARENA_MAX": "1",
    "MALLOC_MMAP_THRESHOLD_": str(1 << 20),
    "MALLOC_TRIM_THRESHOLD_": str(16 << 20),
}
_STOP_SIGNALS = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)


class ServingError(Exception):
    """The service could not start, or ended by itself; ``args[0]`` says why."""


@dataclass(frozen=True)
class Running:
    """A service that answers.

    Attributes
    ----------
    url : str
        Its address for callers on this machine.
    admin_key : str or None
        The key of the settings or of the data folder.
    key_file : Path or None
        Where the key is kept, if it is not from the settings.
    """

    url: str
    admin_key: str | None
    key_file: Path | None


def serve(settings: Settings, on_ready: Callable[[Running], None], app: str = APP) -> None:
    """Serve until SIGINT, SIGTERM or SIGHUP; then end running requests, and the store last.

    A second signal ends running requests at once. Call it from the main thread.

    Parameters
    ----------
    settings : Settings
        Handed to the workers through their environment.
    on_ready : callable
        Called once, when the service answers.
    app : str
        The WSGI application, in gunicorn's notation.

    Raises
    ------
    ServingError
        If the address cannot be had or the web server ends by itself.
    StoreError
        If the embedded store cannot be started.
    """
    with _signals(_interrupt):
        try:
            with ExitStack() as running:
                _check_address(settings)
                log.info("getting ready; the first start on a machine compiles, for half a minute")
                get_ready()  # here, so that no worker is late for it, and all find it done
                url, key, file = settings.redis_url, settings.admin_key, None
                if url is None:
                    url = running.enter_context(EmbeddedStore(settings.data)).url
                    running.callback(_ignore_signals)  # while the store writes its data out
                    if key is None:
                        key, file = keep_a_key(settings.data), key_file(settings.data)
                server = running.enter_context(_web_server(settings, url, key, app))
                address = local_url(settings)
                _wait_until_it_answers(server, settings)
                on_ready(Running(address, key, file))
                raise ServingError(_ended(server.wait()))
        except KeyboardInterrupt:
            log.info("stopped")


def local_url(settings: Settings) -> str:
    """Return the service's address for callers on its own machine."""
    host, port = settings.address
    host = {"0.0.0.0": "127.0.0.1", "::": "::1"}.get(host, host)
    return f"http://[{host}]:{port}" if ":" in host else f"http://{host}:{port}"


@contextmanager
def _signals(handler: Callable[[int, FrameType | None], None]) -> Iterator[None]:
    former = {number: signal.signal(number, handler) for number in _STOP_SIGNALS}
    try:
        yield
    finally:
        for number, was in former.items():
            signal.signal(number, was)


def _interrupt(number: int, frame: FrameType | None) -> None:
    raise KeyboardInterrupt


def _ignore_signals() -> None:
    for number in _STOP_SIGNALS:
        signal.signal(number, signal.SIG_IGN)


def _check_address(settings: Settings) -> None:
    """Refuse in one line what gunicorn would try five times, after the store has started."""
    host, port = settings.address
    try:
        (family, kind, protocol, _, address), *_ = socket.getaddrinfo(
            host, port, type=socket.SOCK_STREAM, flags=socket.AI_PASSIVE
        )
        with socket.socket(family, kind, protocol) as trial:
            trial.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
            trial.bind(address)
    except OSError as error:
        if error.errno == errno.EADDRINUSE:
            reason = "is in use: stop what listens there, or set TALLYWARD_BIND to another"
        else:
            reason = f"cannot be used ({error.strerror}): set TALLYWARD_BIND to another"
        raise ServingError(f"the address {settings.bind} {reason}") from error


@contextmanager
def _web_server(
    settings: Settings, store_url: str, admin_key: str | None, app: str
) -> Iterator[subprocess.Popen[bytes]]:
    """Run gunicorn; at the end stop it, gracefully first."""
    environment = {
        **MEMORY,
        **os.environ,
        "TALLYWARD_REDIS_URL": store_url,
        "TALLYWARD_DATA": str(settings.data.absolute()),
    }
    if admin_key is not None:
        environment["TALLYWARD_ADMIN_KEY"] = admin_key  # arguments can be read by everyone
    server = subprocess.Popen(
        tethered(_command(settings, app)),
        env=environment,
        stdin=subprocess.DEVNULL,
        start_new_session=True,  # Ctrl-C is for us
    )
    try:
        yield server
    finally:

        def hurry(number: int, frame: FrameType | None) -> None:
            server.send_signal(signal.SIGQUIT)

        with _signals(hurry):
            server.terminate()
            try:
                server.wait(settings.timeout + 10)
            except subprocess.TimeoutExpired:
                log.error("the web server did not end in time: killed")
                server.kill()
                server.wait()


def _command(settings: Settings, app: str) -> list[str]:
    options = {
        "bind": settings.bind,
        "worker-class": "service.web.worker.Worker",
        "workers": settings.workers,
        "threads": _threads(settings),
        # A connection holds at most 64 KiB until its request has a thread. With the store's and
        # the logs' files they stay below the 1024 that many systems allow a process to open.
        "worker-connections": 512,
        # Who comes when all workers have as many waits in the kernel, where it costs us nothing,
        # but unseen and without an end; so not gunicorn's 2048.
        "backlog": 512,
        "timeout": settings.timeout,
        "graceful-timeout": settings.timeout,
        "keep-alive": KEEP_ALIVE,
        "max-requests": 0,  # a worker is never restarted for its age
        "log-level": settings.log_level,
        "name": "tallyward",
        # Ours must be found before another package `service` in the folder we were started from.
        "chdir": Path(service.__file__).parents[1],
    }
    if os.access("/dev/shm", os.W_OK):
        options["worker-tmp-dir"] = "/dev/shm"  # a slow disk must not look like a hung worker
    command = [sys.executable, "-P", "-m", "gunicorn"]
    command += [f"--{name}={value}" for name, value in options.items()]
    if gunicorn.version_info >= (25, 1):  # it would be shared by all services of this user
        command.append("--no-control-socket")
    return [*command, app]


def _threads(settings: Settings) -> int:
    """Return threads for all who are let in or wait for it; the spare ones refuse and say health.

    So no request waits for a thread in gunicorn, whose queue has no bound in time.
    """
    return settings.max_posting + settings.threads + 2 * settings.max_waiting + SPARE


def _wait_until_it_answers(server: subprocess.Popen[bytes], settings: Settings) -> None:
    url = local_url(settings).removeprefix("http://")
    while server.poll() is None:
        line = http.client.HTTPConnection(url, timeout=1)
        try:
            line.request("GET", "/health/live")
            line.getresponse().read()
            return
        except (OSError, http.client.HTTPException):
            time.sleep(0.05)
        finally:
            line.close()
    raise ServingError(_ended(server.returncode))


def _ended(status: int) -> str:
    how = f"by signal {-status}" if status < 0 else f"with status {status}"
    return f"the web server ended by itself, {how}; its messages are above"
