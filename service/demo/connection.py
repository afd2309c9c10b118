"""One kept-alive HTTP connection to the service, which sends again where that is safe.

Everything the demo sends may be sent again: each row has a ``source`` and an ``offset``.
"""

from __future__ import annotations

import gzip
import http.client
import json
import time
from collections.abc import Callable
from types import TracebackType
from typing import Any, Self
from urllib.parse import urlsplit

ATTEMPTS = 10
LONGEST_WAIT = 30.0
"""Seconds; a longer ``Retry-After`` is cut to it."""
FIRST_WAIT = 0.25
"""Seconds; doubled after each attempt where the service names no time."""
PATIENCE = 60.0
"""Seconds to wait for an answer."""

_BUSY = (429, 503)
_LOST = (ConnectionError, TimeoutError, http.client.HTTPException)


class Refused(Exception):
    """The service said no, in a way that sending again would not change."""

    def __init__(self, status: int, reason: str) -> None:
        super().__init__(f"the service answered {status}: {reason}")
        self.status = status


class Unreachable(Exception):
    """No usable answer after every attempt."""


class Connection:
    """A connection with a key.

    Parameters
    ----------
    url : str
        Where the service is, e.g. ``http://127.0.0.1:8080``; a path before ``/v1`` is kept.
    key : str
        Key with the roles ``post`` and ``read``.
    sleep : callable
        Waits the given seconds between two attempts.

    Raises
    ------
    ValueError
        If ``url`` is not an http or https address.
    """

    def __init__(self, url: str, key: str, *, sleep: Callable[[float], None] = time.sleep) -> None:
        parts = urlsplit(url)
        if parts.scheme not in ("http", "https") or not parts.hostname:
            raise ValueError(f"not an http or https address: {url!r}")
        secure = parts.scheme == "https"
        kind = http.client.HTTPSConnection if secure else http.client.HTTPConnection
        self._http = kind(parts.hostname, parts.port, timeout=PATIENCE)
        self._prefix = parts.path.rstrip("/")
        self._headers = {"Authorization": f"Bearer {key}", "Accept": "application/json"}
        self._sleep = sleep

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._http.close()

    def get(self, path: str) -> Any:
        """Return the JSON document at a path such as ``/v1/alarms``; raises as ``post`` does."""
        return self._send("GET", path, None)

    def post(self, path: str, document: object) -> Any:
        """Send a JSON document, compressed, and return the one that answers it.

        Raises
        ------
        Refused
            For any answer but 2xx, 429 and 503.
        Unreachable
            When ``ATTEMPTS`` attempts met a lost connection, 429 or 503.
        """
        body = json.dumps(document, separators=(",", ":")).encode()
        return self._send("POST", path, gzip.compress(body, compresslevel=3, mtime=0))

    def _send(self, method: str, path: str, body: bytes | None) -> Any:
        headers = dict(self._headers)
        if body is not None:
            headers |= {"Content-Type": "application/json", "Content-Encoding": "gzip"}
        trouble, wait = "", 0.0
        for attempt in range(ATTEMPTS):
            if attempt:
                self._sleep(min(wait, LONGEST_WAIT))
            wait = FIRST_WAIT * 2**attempt
            try:
                self._http.request(method, self._prefix + path, body, headers)
                answer = self._http.getresponse()
                content = answer.read()
            except _LOST as error:
                self._http.close()  # it opens again at the next request
                trouble = f"{type(error).__name__}: {error}"
                continue
            if answer.status not in _BUSY:
                return _document(answer.status, content)
            trouble = f"{answer.status} {answer.reason}"
            asked = answer.headers.get("Retry-After", "")
            wait = float(asked) if asked.isdecimal() else wait
        raise Unreachable(f"gave up after {ATTEMPTS} attempts, the last one: {trouble}")


def _document(status: int, content: bytes) -> Any:
    """Return the JSON of a good answer; raise Refused with the words of a bad one."""
    try:
        document = json.loads(content)
    except ValueError:
        raise Refused(status, f"not JSON: {content[:200]!r}") from None
    if 200 <= status < 300:
        return document
    problem = document if isinstance(document, dict) else {}
    words = [str(problem.get("detail") or problem.get("title") or "no reason given")]
    words += [f"{e.get('pointer')}: {e.get('detail')}" for e in problem.get("errors", [])[:3]]
    raise Refused(status, "; ".join(words))
