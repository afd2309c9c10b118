"""Drive a service by wrk, a load generator in a process of its own, over kept connections."""

from __future__ import annotations

import json
import shutil
import subprocess
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

SCRIPT = Path(__file__).with_name("wrk.lua")
LONGEST = 3600  # seconds; the script itself ends every run that works


class LoadError(RuntimeError):
    """A run that measured something else than what it was meant to."""


class Stock:
    """A file of bodies, each of which is sent once."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self.offset = 0
        self.left = 0

    def fill(self, batches: Iterable[bytes]) -> None:
        """Put new bodies in place of what is left."""
        self.offset = self.left = 0
        with open(self.path, "wb") as file:
            for body in batches:
                file.write(b"%d\n" % len(body) + body)
                self.left += 1


@dataclass(frozen=True)
class Run:
    """What one run did.

    Attributes
    ----------
    batches, rows : int
        Sent, and all of them accepted.
    seconds : float
        From the first request to the last answer.
    p50, p99 : float
        Latency in ms, as wrk gives it: for an answer that took more than twice the mean interval,
        the requests that a caller at a steady pace would have had to hold back count too.
    """

    batches: int
    rows: int
    seconds: float
    p50: float
    p99: float

    @property
    def rate(self) -> float:
        """Rows a second."""
        return self.rows / self.seconds


def drive(
    url: str,
    stock: Stock,
    *,
    connections: int,
    key: str,
    seconds: float = 0.0,
    again: bool = False,
    wanted: str = "",
) -> Run:
    """Post bodies of a stock.

    Parameters
    ----------
    url : str
        With path and query.
    stock : Stock
    connections : int
        Each has one request under way at a time.
    key : str
        Sent as a bearer.
    seconds : float
        No body is begun later; 0: when all are used up.
    again : bool
        Whether to begin anew at the end of the stock.
    wanted : str
        What every answer must hold.

    Raises
    ------
    LoadError
        If an answer was not 200 or not as wanted, a row was a duplicate, or a connection broke.
    """
    program = shutil.which("wrk")
    if program is None:
        raise LoadError("wrk was not found: install it (Debian: apt install wrk)")
    command = [program, "-t1", f"-c{connections}", f"-d{LONGEST}s", "--timeout=60s"]
    command += ["-H", f"Authorization: Bearer {key}", "-H", "Content-Type: application/json"]
    command += ["-s", str(SCRIPT), url, "--", str(stock.path), str(stock.offset), str(seconds)]
    command += ["again" if again else "once", wanted]
    done = subprocess.run(command, capture_output=True, text=True, timeout=LONGEST + 60)
    try:
        told = json.loads(done.stdout.splitlines()[-1])
    except (IndexError, ValueError) as error:
        raise LoadError(f"wrk failed: {done.stdout}{done.stderr}") from error
    wrong = told["refused"] or told["duplicates"] or told["socket_errors"]
    if wrong or told["answered"] != told["sent"] or not told["sent"]:
        raise LoadError(f"not every batch was taken: {told}")
    stock.offset = told["offset"]
    stock.left -= told["sent"]
    return Run(told["answered"], told["accepted"], told["seconds"], told["p50"], told["p99"])
