"""What the alarms are worth, held against the truth that only an invented town can know."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

from service.demo.scenario import Cheat

Alarm = dict[str, Any]
"""An alarm as the API gives it."""


@dataclass(frozen=True)
class Verdict:
    """Alarms and cheats, matched.

    Attributes
    ----------
    caught : tuple of (Cheat, Alarm)
        Cheats with the first alarm raised about their stream after they began.
    missed : tuple of Cheat
        Cheats without one.
    mistaken : tuple of Alarm
        Alarms about honest streams, or about a cheat's stream while it was still honest.
    """

    caught: tuple[tuple[Cheat, Alarm], ...]
    missed: tuple[Cheat, ...]
    mistaken: tuple[Alarm, ...]


def judge(cheats: Sequence[Cheat], alarms: Iterable[Alarm]) -> Verdict:
    """Match alarms with the truth.

    Parameters
    ----------
    cheats : sequence of Cheat
        The truth.
    alarms : iterable of Alarm
        In the order raised. ``count`` is the number of rows in the stream when it was raised.
    """
    truth = {(cheat.merchant, cheat.flow, cheat.currency): cheat for cheat in cheats}
    caught: dict[str, tuple[Cheat, Alarm]] = {}
    mistaken = []
    for alarm in alarms:
        cheat = truth.get((alarm["merchant"], alarm["flow"], alarm["currency"]))
        if cheat is None or alarm["count"] <= cheat.row:
            mistaken.append(alarm)
        else:
            caught.setdefault(cheat.merchant, (cheat, alarm))
    missed = tuple(cheat for cheat in cheats if cheat.merchant not in caught)
    return Verdict(tuple(caught.values()), missed, tuple(mistaken))
