"""Doing several things at a time."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from typing import Any


def run_together(jobs: list[Callable[[], Any]]) -> list[Any]:
    """Run every job in a thread of its own; return what they return, or raise what one raised."""
    with ThreadPoolExecutor(len(jobs)) as pool:
        return [one.result() for one in [pool.submit(job) for job in jobs]]
