"""The line to a caller: when a request is here, and when it comes too slowly."""

from __future__ import annotations

import socket
import threading
from collections.abc import Iterator

import pytest

from service.web import line as module
from service.web.line import EARLY, Line, whole
from tests.processes import PATIENCE

GET = b"GET / HTTP/1.1\r\nHost: a\r\n\r\n"
POST = b"POST / HTTP/1.1\r\ncontent-LENGTH:  3 \r\nHost: a\r\n\r\n"
CHUNKED = b"POST / HTTP/1.1\r\nTransfer-Encoding: chunked\r\n\r\n"


@pytest.mark.parametrize(
    "early",
    [
        GET,
        POST + b"abc",
        POST + b"abcGET",
        CHUNKED + b"3\r\nabc\r\n0\r\n\r\n",
        POST.replace(b"3 ", b"three"),  # nothing to wait for
    ],
)
def test_a_request_that_is_here(early: bytes) -> None:
    assert whole(early)
    assert not whole(early[: early.index(b"\r\n\r\n") + 3])


@pytest.mark.parametrize(
    "early",
    [b"", GET[:-1], POST, POST + b"ab", CHUNKED, CHUNKED + b"3\r\nabc\r\n", b"\n\n"],
)
def test_a_request_of_which_more_comes(early: bytes) -> None:
    assert not whole(early)


@pytest.fixture
def ends() -> Iterator[tuple[Line, socket.socket]]:
    ours, theirs = socket.socketpair()
    with Line(ours, PATIENCE) as line, theirs:
        line.setblocking(False)
        yield line, theirs


def test_a_request_is_gathered_from_pieces_of_any_size(
    ends: tuple[Line, socket.socket],
) -> None:
    line, caller = ends
    for i in range(len(POST)):
        assert not line.gather()
        caller.send(POST[i : i + 1])
    assert not line.gather()
    assert line.has_head()
    caller.send(b"abc")
    assert line.gather()
    assert bytes(line.early) == POST + b"abc"


def test_a_body_that_comes_when_asked_for_is_not_waited_for(
    ends: tuple[Line, socket.socket],
) -> None:
    line, caller = ends
    caller.send(POST.replace(b"Host: a", b"Expect: 100-continue"))
    assert line.gather()
    assert not line.entire


def test_the_answer_is_the_last_one_if_some_of_the_request_was_left(
    ends: tuple[Line, socket.socket],
) -> None:
    line, caller = ends
    said: list[str] = []
    line.last = lambda: said.append("the last")
    caller.send(POST + b"abc")
    assert line.gather()
    line.answer()
    assert not said
    line.entire = False
    line.answer()
    assert said == ["the last"]


def test_no_more_is_gathered_than_a_caller_may_make_us_hold(
    ends: tuple[Line, socket.socket],
) -> None:
    line, caller = ends
    sender = threading.Thread(target=caller.sendall, args=(b"x" * (3 * EARLY),))
    sender.start()
    while not line.gather():
        pass
    assert len(line.early) == EARLY
    assert not line.has_head()
    while line.discard(9 * EARLY) and sender.is_alive():
        pass
    sender.join()


def test_who_hangs_up_is_not_waited_for(ends: tuple[Line, socket.socket]) -> None:
    line, caller = ends
    caller.send(b"GET")
    caller.close()
    assert not line.gather()
    assert line.gather()
    assert not line.discard(EARLY)


def test_a_body_that_does_not_come_is_late() -> None:
    ours, theirs = socket.socketpair()
    with Line(ours, 0.1) as line, theirs:
        line.begin()
        line.allow(lambda: False)
        theirs.send(b"a")
        assert line.recv(10) == b"a"
        with pytest.raises(TimeoutError):
            line.recv(10)
        assert line.late()
        theirs.send(b"b")
        line.allow(lambda: False)  # it has had its time
        with pytest.raises(TimeoutError):
            line.recv(10)
        line.rest()
        line.begin()
        line.allow(lambda: False)
        assert line.recv(10) == b"b"


def test_a_slow_body_is_waited_for_only_while_nobody_else_waits(
    ends: tuple[Line, socket.socket], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(module, "GRACE", 0.1)
    line, caller = ends
    line.setblocking(True)
    line.begin()
    crowd = threading.Event()
    line.allow(crowd.is_set)
    caller.send(b"a")
    assert line.recv(10) == b"a"
    threading.Timer(0.2, crowd.set).start()
    with pytest.raises(TimeoutError):  # long before its time is over
        line.recv(10)
    crowd.clear()
    assert not line.late()


def test_an_answer_that_is_not_taken_is_given_up() -> None:
    ours, theirs = socket.socketpair()
    with Line(ours, 0.1) as line, theirs:
        line.setblocking(True)
        with pytest.raises(TimeoutError):
            line.sendall(b"x" * (64 << 20))
