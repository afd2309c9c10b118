"""Markdown: tables, and the facts without which their figures say nothing."""

from __future__ import annotations

import itertools
import os
import platform
import re
import shlex
import subprocess
import sys
from collections.abc import Iterable, Sequence
from importlib.metadata import version
from pathlib import Path

from loadtests.contest import REPOSITORY
from service.store.embedded import find_server

PACKAGES = ["gunicorn", "flask", "msgspec", "numpy", "scipy", "redis", "hiredis", "marshmallow"]


def facts(name: str) -> str:
    """Return machine, versions and command line of a measurement."""
    gibibytes = os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") / 2**30
    about = {
        "command": f"`python -m loadtests.{name} {shlex.join(sys.argv[1:])}`".replace(" `", "`"),
        "commit": f"{_said('git', 'rev-parse', '--short', 'HEAD')}{_changed()}",
        "machine": f"{_processor()}, {os.cpu_count()} processors, {gibibytes:.0f} GiB, "
        f"Linux {platform.release()}; load {os.getloadavg()[0]:.1f} at the start",
        "Python": ", ".join(
            [platform.python_version(), *(f"{name} {version(name)}" for name in PACKAGES)]
        ),
        "store": _version(_said(str(find_server()), "--version")),
        "load generator": _version(_said("wrk", "--version")),
    }
    return "\n".join(f"- {key}: {value}" for key, value in about.items())


def show(heads: Sequence[str], rows: Iterable[Sequence[str]]) -> None:
    """Print a Markdown table whose first column is text, each row as soon as it is known."""
    for line in itertools.chain((heads, ["--", *["--:"] * (len(heads) - 1)]), rows):
        print(f"| {' | '.join(line)} |", flush=True)


def short(value: float) -> str:
    """Write a figure with three digits, or all of those before the point."""
    size = abs(value)
    decimals = 0 if size >= 100 else 1 if size >= 10 else 2 if size >= 1 else 3
    return f"{value:,.{decimals}f}"


def _processor() -> str:
    found = re.search(r"model name\s*: (.*)", Path("/proc/cpuinfo").read_text())
    return found[1] if found else platform.machine()


def _changed() -> str:
    return " with changes" if _said("git", "status", "--porcelain", "service", "schemas") else ""


def _said(*command: str) -> str:
    done = subprocess.run(command, cwd=REPOSITORY, capture_output=True, text=True)
    return done.stdout.strip()


def _version(text: str) -> str:
    return re.split(r" (?:sha=|\[|Copyright)", text.splitlines()[0] if text else "unknown")[0]
