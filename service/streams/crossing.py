"""What a crossing does: it refutes the law, raises an alarm, or adds to the one that is open."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from typing import Any

import numpy as np

from service.digits.views import WATCHED_VIEWS
from service.streams import record
from service.streams.findings import LIMIT, REPEAT, Finding, findings
from service.streams.rules import AllRules
from service.streams.state import NO_VIEW, REFUTED_BY_BANK, States, is_learning, restart


@dataclass(frozen=True)
class Crossing:
    """The evidence of a stream reached its threshold.

    Attributes
    ----------
    slot : int
    alarm : bytes
        Id of the alarm that this crossing raised or that absorbed it.
    ordinal : int
        0 for the crossing that raised the alarm, then 1, 2, ... .
    record : int
        Row number of the record in the log.
    rows : int
        The stream's rows with an amount, this one included.
    arrived, at : int
        Times of the row, ms since 1970 UTC.
    historic : bool
    evidence : float
        log10 of the weighted sum of the detectors.
    threshold : float
        Transactions per false alarm.
    severity : float
        Log-likelihood gathered since onset, over all crossings of the alarm.
    excess, excess_amount : float
        Rows and minor units in the alarm's cells, since its onset, beyond what is expected there;
        NaN for a shape, and for repeated amounts.
    last_hit_at : int
        Event time of the last row in the alarm's cells.
    live : bool
        Whether it is the first crossing of its alarm that is not historic.
    findings : list of Finding
        Strongest first.
    """

    slot: int
    alarm: bytes
    ordinal: int
    record: int
    rows: int
    arrived: int
    at: int
    historic: bool
    evidence: float
    threshold: float
    severity: float
    excess: float
    excess_amount: float
    last_hit_at: int
    live: bool
    findings: list[Finding]


def cross(
    state: States,
    rules: AllRules,
    s: int,
    row: Any,
    evidence: float,
    name: bytes,
) -> Crossing | None:
    """Handle a stream's crossing; its detectors start again from zero.

    Parameters
    ----------
    s : int
        Slot of the stream; the state is as of the row that crossed.
    row : one record of ``RECORD``
    evidence : float
        Weighted sum of the detectors at it.
    name : bytes
        Unique name of the stream.

    Returns
    -------
    Crossing or None
        None where nothing is alarmed: while the stream is learning, and in flows that raise none.
    """
    crossing = None
    state["crossed_row"][s] = state["rows"][s]
    if is_learning(state[s]):
        _refute(state, rules, s)
    elif rules["watching"][s]:
        crossing = _alarm(state, rules[s], s, row, evidence, name)
    restart(state, s)
    return crossing


def _refute(state: States, rules: AllRules, s: int) -> None:
    """Note which view's baseline rows would have raised an alarm under the law."""
    sums = state["sums"][s].sum(axis=1) * rules["active"][s]
    sums[1] += float((state["shape"][s] * rules["shapes"][s]).sum())
    strongest = int(np.argmax(sums))
    state["refuted"][s, strongest] |= REFUTED_BY_BANK
    rules["active"][s, strongest] = 0
    if strongest == 1:
        rules["shapes"][s] = 0


def _alarm(
    state: States, rules: np.void, s: int, row: Any, evidence: float, name: bytes
) -> Crossing:
    limits = list(zip(rules["low"].tolist(), rules["high"].tolist(), strict=True))
    found = findings(
        state[s], rules["tolerance"], rules["active"], rules["shapes"], rules["joint"], limits
    )
    number, at = int(state["records"][s]) - 1, int(record.at(row))
    historic = bool(row["flags"] & record.HISTORIC)
    if not state["alarm_crossings"][s]:
        state["alarm"][s] = _alarm_id(name, int(state["incarnation"][s]), number, row)
        _open(state, s, found[0], at)
    ordinal = int(state["alarm_crossings"][s])
    live = not historic and not state["alarm_live"][s]
    state["alarm_crossings"][s] = ordinal + 1
    state["crossings"][s] += 1
    state["alarm_severity"][s] += max(f.severity for f in found)
    state["alarm_live"][s] |= not historic
    excess, amount = _excess(state[s])
    return Crossing(
        slot=s,
        alarm=bytes(state["alarm"][s]).ljust(16, b"\0"),
        ordinal=ordinal,
        record=number,
        rows=int(state["rows"][s]),
        arrived=int(record.arrived(row)),
        at=at,
        historic=historic,
        evidence=float(np.log10(evidence)),
        threshold=float(rules["threshold"]),
        severity=float(state["alarm_severity"][s]),
        excess=excess,
        excess_amount=amount,
        last_hit_at=int(state["alarm_hit_at"][s]),
        live=live,
        findings=found,
    )


def _open(state: States, s: int, top: Finding, at: int) -> None:
    """Begin to count what goes on in the cells of a new alarm, from its onset."""
    state["alarm_severity"][s] = 0.0
    state["alarm_live"][s] = 0
    without = top.view in (LIMIT, REPEAT)
    state["alarm_view"][s] = NO_VIEW if without else WATCHED_VIEWS.index(top.view)
    state["alarm_low"][s], state["alarm_high"][s] = top.low, top.high
    state["cell"]["alarmed"][s] = 0
    state["cell"]["alarmed"][s, list(top.members)] = 1
    state["alarm_share"][s] = top.expected
    state["alarm_hits"][s] = top.hits
    state["alarm_spent"][s] = top.spent
    state["alarm_seen"][s] = top.seen
    state["alarm_hit_at"][s] = at
    state["alarm_shape"][s] = top.pattern == "shape" or top.view == REPEAT


def _excess(state: States) -> tuple[float, float]:
    """Return rows and minor units beyond what is expected in the alarm's cells."""
    if state["alarm_shape"]:
        return float("nan"), float("nan")
    hits = float(state["alarm_hits"])
    excess = max(hits - float(state["alarm_share"]) * float(state["alarm_seen"]), 0.0)
    return excess, excess * float(state["alarm_spent"]) / hits if hits else 0.0


def _alarm_id(name: bytes, incarnation: int, number: int, row: np.void) -> bytes:
    digest = hashlib.blake2b(digest_size=16, person=b"tallyward alarm")
    digest.update(name + b"\0" + incarnation.to_bytes(8, "little") + number.to_bytes(8, "little"))
    digest.update(row.tobytes())
    return digest.digest()
