"""What goes wrong, by name. Each fault is over when its function returns."""

from __future__ import annotations

import random
import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from loadtests.faulty.callers import Poster, Progress
from loadtests.faulty.house import House, Server
from loadtests.faulty.line import Break, Line
from loadtests.faulty.plan import Plan


@dataclass
class Scene:
    """What a fault may act on."""

    house: House
    plan: Plan
    progress: Progress
    chance: random.Random
    replica: tuple[Server, Line] | None
    strict: bool

    def meanwhile(self, low: int, high: int) -> None:
        """Let some more batches through."""
        self.progress.wait_for(len(self.progress.done) + self.chance.randint(low, high))

    def pause(self) -> None:
        time.sleep(self.chance.uniform(0.05, 0.6))


Fault = Callable[[Scene], None]


def kill_store(s: Scene) -> None:
    s.house.kill_store()


def kill_store_at_once(s: Scene) -> None:
    """Whatever it answered and has not written yet is lost, unless it writes before it answers."""
    s.meanwhile(3, 15)
    s.house.kill_store_at_once()


def fill_memory(s: Scene) -> None:
    client = s.house.server.client
    info: Any = client.info("memory")
    client.config_set("maxmemory", info["used_memory"] + s.chance.choice([-1000, 2000, 40_000]))
    s.pause()
    client.config_set("maxmemory", 0)


def pause_clients(s: Scene) -> None:
    s.house.server.client.client_pause(int(s.chance.uniform(100, 900)), all=s.chance.random() < 0.5)
    s.pause()


def flush_scripts(s: Scene) -> None:
    for _ in range(s.chance.randint(1, 5)):
        s.house.server.client.script_flush()
        time.sleep(0.02)


def kill_clients(s: Scene) -> None:
    for _ in range(s.chance.randint(1, 5)):
        s.house.server.client.client_kill_filter(_type="normal", skipme=True)
        time.sleep(0.02)


def cut_line(s: Scene) -> None:
    s.house.line.cut()
    s.pause()
    s.house.line.mend()


def hold_line(s: Scene) -> None:
    """What was said comes through after the service has given up on it."""
    s.house.line.hold()
    s.pause()
    s.house.line.mend()


def slow_line(s: Scene) -> None:
    s.house.line.delay = s.chance.choice([0.01, 0.05, 0.2])
    s.pause()
    s.house.line.mend()


def break_requests(s: Scene) -> None:
    for _ in range(s.chance.randint(1, 4)):
        s.house.line.break_next(Break("request", s.chance.random()))


def break_replies(s: Scene) -> None:
    """Twice as often as not before the first byte: the service does not know what was done."""
    for _ in range(s.chance.randint(1, 4)):
        s.house.line.break_next(Break("reply", s.chance.choice([0.0, 0.0, s.chance.random()])))


def kill_worker(s: Scene) -> None:
    s.house.kill_worker(s.chance)


def replay(s: Scene) -> None:
    """Send some old batches again."""
    done = [
        b
        for b in s.progress.done
        if b.identity in ("id", "key") or (b.identity == "source" and s.strict)
    ]
    chosen = s.chance.sample(done, min(len(done), 5))
    poster = Poster(s.house.service.port, chosen, s.progress, f"replay {s.chance.random()}")
    for batch in chosen:
        poster.insist(batch)
        s.progress.tell(replayed=1)
    poster.caller.hang_up()


def promote_replica(s: Scene) -> None:
    assert s.replica is not None
    server, link = s.replica
    link.cut()
    s.meanwhile(3, 15)
    s.house.promote(server)


def lose_power(s: Scene) -> None:
    kept = s.house.server.append_only_files[-1].stat().st_size
    s.meanwhile(3, 15)
    s.house.lose_power(kept, s.chance.uniform(0.2, 1.0))


def fall_back_on_snapshot(s: Scene) -> None:
    s.house.leave_only_a_snapshot()
    s.meanwhile(3, 15)
    s.house.fall_back_on_the_snapshot()


def come_back_empty(s: Scene) -> None:
    """The policies are gone, too; whoever runs the service puts them back."""
    s.house.come_back_empty()
    s.house.furnish()


OF_THE_STORE: dict[str, Fault] = {
    "store killed": kill_store,
    "memory full": fill_memory,
    "clients paused": pause_clients,
    "scripts flushed": flush_scripts,
    "clients killed": kill_clients,
}
OF_THE_PATH: dict[str, Fault] = {
    "line cut": cut_line,
    "line held": hold_line,
    "line slow": slow_line,
    "requests broken": break_requests,
    "replies broken": break_replies,
    "worker killed": kill_worker,
    "batches replayed": replay,
}
LOSSES: dict[str, Fault] = {
    "replica promoted": promote_replica,
    "power lost": lose_power,
    "only a snapshot": fall_back_on_snapshot,
    "killed at once": kill_store_at_once,
    "came back empty": come_back_empty,
}
