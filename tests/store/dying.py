"""A worker that is killed at one step of posting: ``python -m tests.store.dying URL STEP``."""

from __future__ import annotations

import os
import signal
import sys
from operator import attrgetter

from tests.store.workers import one_price, post, worker


def die(*args: object, **kwargs: object) -> None:
    """End as a process does that is out of memory."""
    os.kill(os.getpid(), signal.SIGKILL)


def main(url: str, step: str) -> None:
    """Post rows that raise an alarm, and die where ``step``, as ``judge.judge``, begins."""
    tallies = worker(url)
    part, method = step.split(".")
    assert callable(attrgetter(step)(tallies))
    setattr(getattr(tallies, part), method, die)
    post(tallies, one_price("dying"))


if __name__ == "__main__":
    main(*sys.argv[1:])
