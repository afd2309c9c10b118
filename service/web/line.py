"""The line to a caller: what has come of a request, and how long to wait for the rest."""

from __future__ import annotations

import errno
import math
import re
import select
import socket
import time
from collections.abc import Callable

EARLY = 64 << 10
"""Bytes of a request that are taken in before a thread is lent to it; no head may be longer."""

GRACE = 1.0
"""Seconds that the rest of a body may take while others wait ..."""
PACE = 256 << 10
"""... and one more for as many bytes as this."""

_LOOK = 0.25  # seconds between two looks at whether others wait

_END = b"\r\n\r\n"
_EXPECT = re.compile(rb"\r\nexpect[ \t]*:", re.IGNORECASE)
_CHUNKED = re.compile(rb"\r\ntransfer-encoding[ \t]*:", re.IGNORECASE)
_LENGTH = re.compile(rb"\r\ncontent-length:[ \t]*([0-9]{1,18})[ \t]*\r\n", re.IGNORECASE)


class Line(socket.socket):
    """A connection that never keeps a thread waiting for longer than the caller was allowed.

    Parameters
    ----------
    connection : socket
        Is taken over.
    seconds : float
        How long one reading or writing may block.

    Attributes
    ----------
    early : bytearray
        What the main loop has taken in of the request, at most `EARLY` bytes.
    due : float
        When the request must be here, by `time.monotonic`; infinity between requests.
    since : float
        When the request, or the pause between two, began.
    entire : bool
        Whether the request is here to its end.
    last : callable
        Says that the connection ends with the present answer.
    """

    def __init__(self, connection: socket.socket, seconds: float) -> None:
        super().__init__(fileno=connection.detach())
        self._seconds = seconds
        self.early = bytearray()
        self.due = math.inf
        self.since = 0.0
        self.entire = False
        self.last: Callable[[], object] = lambda: None
        self._began = 0.0
        self._came = 0
        self._crowded: Callable[[], bool] | None = None

    def setblocking(self, flag: bool) -> None:
        """Block, if at all, for so many seconds as are allowed."""
        self.settimeout(self._seconds if flag else 0)

    def begin(self) -> None:
        """Expect a request from now on."""
        self.since = time.monotonic()
        self.due = self.since + self._seconds

    def rest(self) -> None:
        """Be between two requests."""
        self.since = time.monotonic()
        self.due, self._crowded = math.inf, None

    def gather(self) -> bool:
        """Take in what has come; return whether there is more to do than to wait."""
        try:
            part = super().recv(EARLY - len(self.early))
        except BlockingIOError:
            part = None
        except OSError:  # whoever reads on will meet it again
            return True
        self.early += part or b""
        self.entire = whole(self.early)
        return part == b"" or len(self.early) >= EARLY or self.entire or _asks(self.early)

    def discard(self, most: int) -> bool:
        """Pass over what has come; return whether more may come, up to ``most`` bytes in all."""
        try:
            part = super().recv(EARLY)
        except BlockingIOError:
            return True
        except OSError:
            return False
        self._came += len(part)
        return part != b"" and self._came <= most

    def has_head(self) -> bool:
        """Return whether a request's head is here."""
        return _END in self.early

    def allow(self, crowded: Callable[[], bool]) -> None:
        """Allow the rest of a body its time from now, and less while others wait, if they do."""
        self._began, self._came = time.monotonic(), 0
        self._crowded = crowded
        if self.due > self._began:  # else it has had its time
            self.due = self._began + self._seconds

    def answer(self) -> None:
        """Say with the answer that it is the last one, if a body was left that did not come yet.

        What comes of it afterwards must not be taken for the next request, nor waited for.
        """
        if not self.entire:
            self.last()

    def late(self) -> bool:
        """Return whether the caller's time is over."""
        return self._left() <= 0

    def _left(self) -> float:
        due = self.due
        if self._crowded is not None and self._crowded():
            due = min(due, self._began + GRACE + self._came / PACE)
        return due - time.monotonic()

    def recv(self, size: int, flags: int = 0) -> bytes:
        """Return what comes next.

        Raises
        ------
        TimeoutError
            If it does not come in the time that is left.
        """
        ready = select.poll()
        ready.register(self, select.POLLIN)
        while (left := self._left()) > 0:
            if ready.poll(min(left, _LOOK) * 1000):
                part = super().recv(size, flags)
                self._came += len(part)
                return part
        # Anyone may cause it as often as they like: gunicorn's log has no trace of a reset.
        raise TimeoutError(errno.ECONNRESET, "the request comes too slowly")


def whole(early: bytes | bytearray) -> bool:
    """Tell whether a request is here to its end.

    Only a hint when to lend a thread: what a request is, gunicorn's parser decides.
    """
    end = early.find(_END)
    if end < 0:
        return False
    head = early[: end + 2]
    if _CHUNKED.search(head):
        return early.endswith(b"0" + _END)
    length = _LENGTH.search(head)
    return length is None or len(early) - end - len(_END) >= int(length[1])


def _asks(early: bytearray) -> bool:
    """Tell whether the body comes only when it is asked for."""
    end = early.find(_END)
    return end >= 0 and _EXPECT.search(early, 0, end + 2) is not None
