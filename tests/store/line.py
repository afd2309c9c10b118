"""A bad line to a store: it takes what is sent and can lose the answer."""

from __future__ import annotations

import contextlib
import select
import socket
import threading
from collections.abc import Callable
from pathlib import Path
from urllib.parse import unquote, urlsplit


class BadLine:
    """Forwards one Unix socket to another; hangs up instead of answering what holds ``losing``.

    It does so ``times`` times, on a connection each, and calls ``then`` before the last.
    """

    def __init__(self, path: Path, url: str) -> None:
        self.url = f"unix://{path}"
        self.losing = b""
        self.times = 1
        self.then: Callable[[], object] = lambda: None
        self.lost = 0
        self._store = unquote(urlsplit(url).path)
        self._listener = socket.socket(socket.AF_UNIX)
        self._listener.bind(str(path))
        self._listener.listen()
        self._accepting = threading.Thread(target=self._accept, daemon=True)

    def __enter__(self) -> BadLine:
        self._accepting.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._listener.shutdown(socket.SHUT_RDWR)
        self._listener.close()
        self._accepting.join()

    def _accept(self) -> None:
        with contextlib.suppress(OSError):
            while True:
                caller, _ = self._listener.accept()
                threading.Thread(target=self._forward, args=(caller,), daemon=True).start()

    def _forward(self, caller: socket.socket) -> None:
        with caller, socket.socket(socket.AF_UNIX) as store, contextlib.suppress(OSError):
            store.connect(self._store)
            doomed = False
            while True:
                for end in select.select([caller, store], [], [])[0]:
                    said = end.recv(1 << 20)
                    if not said:
                        return
                    if end is caller:
                        doomed |= bool(self.losing) and self.losing in said
                        store.sendall(said)
                    elif doomed:
                        self.lost += 1
                        self.times -= 1
                        if not self.times:
                            self.losing, self.times = b"", 1
                            self.then()
                        return
                    else:
                        caller.sendall(said)
