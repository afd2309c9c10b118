"""How many requests run at once, how many may wait for that and how long; the rest come later."""

from __future__ import annotations

import threading
from collections import deque

from flask import Response, after_this_request, g

from service.web.problems import Problem


class Admission:
    """Places for requests, and a bounded queue for them, first come, first served.

    Parameters
    ----------
    places : int
        Requests that hold a place at a time, at least 1.
    waiting : int
        Requests that may wait for one, at least 0.
    seconds : float
        How long each may wait.
    """

    def __init__(self, places: int, waiting: int, seconds: float) -> None:
        self._free = places
        self._waiting = waiting
        self._seconds = seconds
        self._queue: deque[threading.Event] = deque()
        self._lock = threading.Lock()

    def enter(self) -> None:
        """Take a place, waiting for it if need be; to be given back by `leave`.

        Raises
        ------
        Problem
            503 if too many wait already, or none became free in time.
        """
        with self._lock:
            if self._free:  # then nobody waits: a place left goes to the first who does
                self._free -= 1
                return
            if len(self._queue) >= self._waiting:
                raise Problem(503, "Too many requests wait already; send the same again later.")
            turn = threading.Event()
            self._queue.append(turn)
        if turn.wait(self._seconds):
            return
        with self._lock:
            if turn.is_set():  # at the last moment
                return
            self._queue.remove(turn)
        raise Problem(503, "No place became free in time; send the same again later.")

    def leave(self) -> None:
        """Give a place back, or on to the first who waits."""
        with self._lock:
            if self._queue:
                self._queue.popleft().set()
            else:
                self._free += 1

    def crowded(self) -> bool:
        """Return whether anyone waits."""
        return bool(self._queue)


def admit(admission: Admission) -> None:
    """Let the current request in, for as long as it lasts.

    The place is held until the answer is sent: what it holds in memory, and the thread that a
    caller who is slow to take it holds, are counted too.

    Raises
    ------
    Problem
        503, before any of the request's body is read.
    """
    admission.enter()
    g.admission = admission

    @after_this_request
    def _(response: Response) -> Response:
        response.call_on_close(admission.leave)
        return response
