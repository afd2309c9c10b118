"""Exactly once under faults: many episodes against a real service and store, from one seed.

Every choice of an episode follows from its seed; what the threads make of it does not. A failing
seed is run again by ``--seed N --episodes 1``.
"""

from __future__ import annotations

import argparse
import shutil
import signal
import sys
import tempfile
import time
import traceback
from collections import Counter
from contextlib import ExitStack
from pathlib import Path

from loadtests.faulty.episode import STRICT, Outcome, Script, play
from loadtests.faulty.faults import LOSSES
from loadtests.faulty.house import House
from service.store.embedded import find_server

EPISODES_A_HOUSE = 8


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--episodes", type=int, default=200)
    parser.add_argument("--seed", type=int, default=1, help="of the first episode")
    parser.add_argument("--rows", type=int, default=2000, help="rows an episode")
    parser.add_argument("--without", action="append", default=[], choices=sorted(LOSSES))
    parser.add_argument("--server", choices=["path", "wheel"], help="default: whichever is there")
    options = parser.parse_args()
    signal.signal(signal.SIGTERM, lambda *_: sys.exit(143))  # servers end with us
    binary = find_server(options.server)
    began, total = time.monotonic(), Summary()
    house: House | None = None
    with ExitStack() as running:
        for i in range(options.episodes):
            script = Script.of(options.seed + i, options.rows, options.without)
            print(f"seed {script.seed}: {script}", flush=True)
            if house is None or not house.prefixes:
                running.close()
                if house is not None:
                    shutil.rmtree(house.folder)
                folder = Path(tempfile.mkdtemp(prefix="tallyward-faults-"))
                house = running.enter_context(House(folder, binary, EPISODES_A_HOUSE))
            start = time.monotonic()
            try:
                total.add(script, play(house, script))
            except Exception:
                total.failed.append(script.seed)
                print(f"FAILED: seed {script.seed}: {script}", flush=True)
                traceback.print_exc()
                print(f"again: --seed {script.seed} --episodes 1 --rows {options.rows}")
                print(f"folder: {house.folder}", flush=True)
                house = None  # the next episode gets a sound one; this folder is kept
            print(f"  {time.monotonic() - start:.1f} s", flush=True)
    if house is not None:
        shutil.rmtree(house.folder)
    print(total.table(time.monotonic() - began))
    return 1 if total.failed else 0


class Summary:
    """What all episodes came to."""

    def __init__(self) -> None:
        self.episodes: Counter[str] = Counter()
        self.counts: Counter[str] = Counter()
        self.faults: Counter[str] = Counter()
        self.lost: dict[str, Counter[str]] = {}
        self.seen_twice = 0
        self.failed: list[int] = []

    def add(self, script: Script, outcome: Outcome) -> None:
        setting = script.loss or f"{STRICT}, {script.fsync}"
        self.episodes[setting] += 1
        self.counts += outcome.counts
        self.faults += outcome.faults
        self.lost.setdefault(setting, Counter()).update(outcome.lost)
        self.seen_twice += outcome.seen_twice

    def table(self, seconds: float) -> str:
        lines = ["", "| fault | times |", "|---|---|"]
        lines += [f"| {name} | {n} |" for name, n in sorted(self.faults.items())]
        lines += [
            "",
            "| setting | episodes | acknowledged rows lost, by identity |",
            "|---|---|---|",
        ]
        for setting, n in sorted(self.episodes.items()):
            lost = ", ".join(f"{k} {v}" for k, v in sorted(self.lost[setting].items()) if v)
            lines.append(f"| {setting} | {n} | {lost or 'none'} |")
        lines += ["", "| counted | |", "|---|---|"]
        lines += [f"| {name} | {n} |" for name, n in sorted(self.counts.items())]
        lines.append(f"| alarms told again to a follower after a loss | {self.seen_twice} |")
        passed = sum(self.episodes.values())
        lines += ["", f"{passed} episodes held, {len(self.failed)} failed, in {seconds:.0f} s"]
        lines += [f"failed seeds: {', '.join(map(str, self.failed))}"] if self.failed else []
        return "\n".join(lines)


if __name__ == "__main__":
    sys.exit(main())
