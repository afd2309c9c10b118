"""A line to a store that can be cut, held up, slowed, and broken in the middle of a word."""

from __future__ import annotations

import contextlib
import select
import socket
import struct
import threading
import time
from dataclasses import dataclass
from typing import Literal

RESET = struct.pack("ii", 1, 0)  # SO_LINGER: end with a reset, not a farewell


@dataclass(frozen=True)
class Break:
    """One break: of the next request that holds ``about``, or of the reply to it."""

    side: Literal["request", "reply"]
    share: float  # of what was sent that still gets through
    about: bytes = b"EVALSHA"


class Line:
    """Forwards a port of its own to ``target``, another port of this machine."""

    def __init__(self, target: int) -> None:
        self.target = target
        self.delay = 0.0  # seconds, each way
        self.broken = 0
        self._cut = False
        self._flowing = threading.Event()
        self._flowing.set()
        self._breaks: list[Break] = []
        self._lock = threading.Lock()
        self._ends: set[socket.socket] = set()
        self._listener = socket.create_server(("127.0.0.1", 0))
        self.port: int = self._listener.getsockname()[1]
        threading.Thread(target=self._accept, daemon=True).start()

    def close(self) -> None:
        self.mend()
        with contextlib.suppress(OSError):
            self._listener.shutdown(socket.SHUT_RDWR)
        self._listener.close()
        self.hang_up()

    def hang_up(self) -> None:
        """Reset every connection, whatever is under way on it."""
        with self._lock:
            for end in self._ends:
                with contextlib.suppress(OSError):
                    end.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, RESET)
                    end.shutdown(socket.SHUT_RDWR)

    def cut(self) -> None:
        """Let nobody through."""
        self._cut = True
        self.hang_up()

    def hold(self) -> None:
        """Keep what is said from now on; it comes through late, when the line is mended."""
        self._flowing.clear()

    def mend(self) -> None:
        self._cut, self.delay = False, 0.0
        self._flowing.set()

    def break_next(self, broken: Break) -> None:
        with self._lock:
            self._breaks.append(broken)

    def forget_breaks(self) -> None:
        with self._lock:
            self._breaks.clear()

    def lead_to(self, target: int) -> None:
        """Lead to another server from now on."""
        self.target = target
        self.hang_up()

    def _accept(self) -> None:
        with contextlib.suppress(OSError):
            while True:
                caller, _ = self._listener.accept()
                threading.Thread(target=self._forward, args=(caller,), daemon=True).start()

    def _forward(self, caller: socket.socket) -> None:
        with caller, contextlib.suppress(OSError):
            if self._cut:
                return
            with socket.create_connection(("127.0.0.1", self.target)) as store:
                with self._lock:
                    self._ends |= {caller, store}
                try:
                    self._talk(caller, store)
                finally:
                    with self._lock:
                        self._ends -= {caller, store}

    def _talk(self, caller: socket.socket, store: socket.socket) -> None:
        doomed: Break | None = None
        for end in (caller, store):
            end.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        while True:
            for end in select.select([caller, store], [], [])[0]:
                said = end.recv(1 << 20)
                if not said:
                    return
                self._flowing.wait()
                if self.delay:
                    time.sleep(self.delay)
                if end is caller:
                    doomed = self._take_break(said) or doomed
                side, other = ("request", store) if end is caller else ("reply", caller)
                if doomed is not None and doomed.side == side:
                    other.sendall(said[: int(len(said) * doomed.share)])
                    self.broken += 1
                    for broken in (caller, store):
                        broken.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, RESET)
                    return
                other.sendall(said)

    def _take_break(self, said: bytes) -> Break | None:
        if not self._breaks:
            return None
        with self._lock:
            for broken in self._breaks:
                if broken.about in said:
                    self._breaks.remove(broken)
                    return broken
        return None
