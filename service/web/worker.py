"""gunicorn's threaded worker, whose threads slow callers cannot hold.

The plain one lends a thread to every connection. Measured with version 27: as many callers as
there are threads keep everyone else out, for 5 s by saying nothing, without end by half a head or
half a body; and each refused caller who does not hang up stops the main loop for 2 s, so that a
dozen of them have the worker replaced. gunicorn has no setting against it and advises a proxy that
buffers requests. Here the main loop does the waiting: a thread is lent when a request is here, or
64 KiB of it, and what is left of a body has a deadline.
"""

from __future__ import annotations

import math
import os
import socket
import time
from collections import deque
from concurrent.futures import Future
from functools import partial
from selectors import EVENT_READ
from typing import Any

from gunicorn.workers.gthread import ThreadWorker

from service.settings import Settings
from service.web.line import Line

LINGER = 5.0
"""Seconds in which a caller who was refused may end what it is sending, to read why."""


class Worker(ThreadWorker):  # type: ignore[misc]
    """The worker of the service.

    Every connection (gunicorn's ``TConn``) is with a thread, kept alive, or in one of two queues
    of the main loop: pending, for more of a request, or lingering, for the caller's end.
    """

    def init_process(self) -> None:
        """Begin, in the worker's own process."""
        self.settings = Settings.from_environment(os.environ)
        self.lingering: deque[Any] = deque()
        super().init_process()

    def enqueue_req(self, conn: Any) -> None:
        """Lend a thread to a request that is here, and wait for one that is not."""
        if not isinstance(conn.sock, Line):
            conn.sock = Line(conn.sock, self.settings.caller_timeout)
            conn.init()
        line = conn.sock
        line.setblocking(False)
        if line.due == math.inf:
            line.begin()
            line.early += conn.parser.unreader.take_buffered()
        if line.gather() or line.late():
            self._lend(conn)
        else:
            self.pending_conns.append(conn)
            self.poller.register(line, EVENT_READ, partial(self.on_pending_socket_readable, conn))

    def _lend(self, conn: Any) -> None:
        if not conn.sock.has_head():  # and never will: it is too long, or the caller hung up
            self._linger(conn)
            return
        conn.parser.unreader.unread(bytes(conn.sock.early))
        conn.sock.early.clear()
        conn.data_ready = True
        super().enqueue_req(conn)

    def handle_request(self, req: Any, conn: Any) -> Any:
        """Answer a request, unless the caller does not take the answer in time."""
        conn.sock.last = req.force_close
        try:
            return super().handle_request(req, conn)
        except TimeoutError:
            return False

    def _keepalive_after(self, conn: Any, keepalive: Any) -> bool:
        conn.sock.due = 0.0  # what has not come of a body that nobody read is not waited for
        return bool(super()._keepalive_after(conn, keepalive))

    def finish_request(self, conn: Any, fs: Future[Any]) -> None:
        """Keep the connection for the next request, or let the caller end it."""
        if fs.cancelled() or fs.exception() or fs.result():
            conn.sock.rest()
            super().finish_request(conn, fs)
        else:
            self._linger(conn)

    def _linger(self, conn: Any) -> None:
        """Say that nothing more comes, and pass over what is still sent (RFC 9112, 9.6)."""
        try:
            conn.sock.shutdown(socket.SHUT_WR)
        except OSError:
            self._hang_up(conn)
            return
        conn.sock.setblocking(False)
        conn.sock.due = time.monotonic() + LINGER
        self.lingering.append(conn)
        self.poller.register(conn.sock, EVENT_READ, partial(self._pass_over, conn))

    def _pass_over(self, conn: Any, line: Line) -> None:
        if not line.discard(self.settings.max_body):
            self._forget(self.lingering, conn)
            self._hang_up(conn)

    def murder_pending(self) -> None:
        """See to those who let us wait too long, and make room when there is none."""
        now = time.monotonic()
        for conn in [c for c in self.pending_conns if c.sock.due <= now]:
            self._forget(self.pending_conns, conn)
            self._lend(conn)  # to be told so: reading on fails at once
        while self.lingering and self.lingering[0].sock.due <= now:
            self._drop(self.lingering)
        # Who has been idle the longest gives way: all taken, the kernel would let nobody in.
        while self.nr_conns >= self.worker_connections:
            idle = [q for q in (self.lingering, self.pending_conns, self.keepalived_conns) if q]
            if not idle:
                break
            self._drop(min(idle, key=lambda conns: conns[0].sock.since))

    def _drop(self, conns: deque[Any]) -> None:
        conn = conns[0]
        self._forget(conns, conn)
        self._hang_up(conn)

    def _forget(self, conns: deque[Any], conn: Any) -> None:
        self.poller.unregister(conn.sock)
        conns.remove(conn)

    def _hang_up(self, conn: Any) -> None:
        self.nr_conns -= 1
        conn.close()
