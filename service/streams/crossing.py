"""What a crossing does: it refutes the law, raises an alarm, or adds to the one that is open."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from service.detection.cells import CELLS
from service.digits.significand import IntArray
from service.digits.views import WATCHED_VIEWS
from service.streams.findings import LIMIT, REPEAT, Finding, findings
from service.streams.rows import Rows
from service.streams.rules import Rules
from service.streams.state import NO_VIEW, REFUTED_BY_BANK, States, is_learning, restart

FEW_CROSSINGS = 16
"""Crossings of one alarm that are all told; after them it is looked at every ``PAUSE_ROWS``."""

PAUSE_ROWS = 128
"""Rows that an alarm which has crossed often rests between crossings: one that crosses every five
rows says nothing new each time, and would cost as much as a thousand other streams."""


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


def paused(state: States, rules: Rules, part: Rows, number: IntArray) -> npt.NDArray[np.bool_]:
    """Return which rows may not cross; ``number`` are the rows' numbers within their streams.

    A stream rests after a crossing if it raises no alarms, or if its open alarm has crossed often.
    An alarm of history does not rest from the first live row that would bring it to the feed.
    """
    slot = part.slot
    told = part.historic | (state["alarm_live"][slot] > 0)
    often = (state["alarm_crossings"][slot] >= FEW_CROSSINGS) & told
    crossed = state["crossed_row"][slot]
    rests = (crossed > 0) & (number - crossed < PAUSE_ROWS)
    return np.asarray(rests & (often | ~rules.watching[slot]))


def cross(
    state: States,
    rules: Rules,
    part: Rows,
    i: int,
    evidence: float,
    names: Sequence[bytes],
) -> Crossing | None:
    """Handle the crossing at one row of a pass; detectors start again from zero.

    Parameters
    ----------
    i : int
        Index of the row in ``part``; the state is as of that row.
    evidence : float
        Weighted sum of the detectors at it.
    names : sequence of bytes
        Unique names of the streams.

    Returns
    -------
    Crossing or None
        None where nothing is alarmed: while the stream is learning, and in flows that raise none.
    """
    s = int(part.slot[i])
    crossing = None
    state["crossed_row"][s] = state["rows"][s]
    if is_learning(state[s]):
        _refute(state, rules, s)
    elif rules.watching[s]:
        crossing = _alarm(state, rules, part, i, evidence, names[s])
    restart(state, s, int(part.at[i]))
    return crossing


def follow(
    state: States,
    part: Rows,
    rows: IntArray,
    hit_row: IntArray,
    hit_key: IntArray,
    clock: IntArray,
) -> None:
    """Count what goes on in the cells of open alarms.

    Parameters
    ----------
    rows : int64 array
        Rows of ``part`` that were consumed.
    hit_row, hit_key : int64 arrays (h,)
        Row in ``part`` and ``slot * 224 + cell`` of the hits of the pass.
    clock : int64 array (n, 3)
        Rows of the pass seen by each view.
    """
    open_ = np.flatnonzero(state["alarm_crossings"] > 0)
    if not open_.size:
        return
    slot, cell = hit_key // CELLS, hit_key % CELLS
    mine = state["alarm_cells"][slot, cell] > 0
    low, high = state["alarm_low"][part.slot], state["alarm_high"][part.slot]
    below = rows[((part.amount >= low) & (part.amount < high))[rows]]
    row = np.concatenate([hit_row[mine], below])
    slot = part.slot[row]
    n = len(state)
    seen = np.concatenate([clock, np.bincount(part.slot[rows], minlength=n)[:, None]], axis=1)
    state["alarm_hits"] += np.bincount(slot, minlength=n)
    state["alarm_spent"] += np.bincount(slot, part.amount[row], minlength=n)
    state["alarm_seen"][open_] += seen[open_, state["alarm_view"][open_]]
    last = np.full(n, -1, np.int64)
    np.maximum.at(last, slot, row)
    state["alarm_hit_at"] = np.where(last >= 0, part.at[last], state["alarm_hit_at"])


def _refute(state: States, rules: Rules, s: int) -> None:
    """Note which view's baseline rows would have raised an alarm under the law."""
    sums = state["sums"][s].sum(axis=1) * rules.active[s]
    sums[1] += float((state["shape"][s] * rules.shapes[s]).sum())
    strongest = int(np.argmax(sums))
    state["refuted"][s, strongest] |= REFUTED_BY_BANK
    rules.active[s, strongest] = 0
    if strongest == 1:
        rules.shapes[s] = 0


def _alarm(
    state: States, rules: Rules, part: Rows, i: int, evidence: float, name: bytes
) -> Crossing:
    s = int(part.slot[i])
    limits = list(zip(rules.low[s].tolist(), rules.high[s].tolist(), strict=True))
    found = findings(
        state[s], rules.tolerance[s], rules.active[s], rules.shapes[s], rules.joint[s], limits
    )
    number = int(part.number[i])
    historic = bool(part.historic[i])
    if not state["alarm_crossings"][s]:
        state["alarm"][s] = _alarm_id(name, int(state["incarnation"][s]), number, part.raw[i])
        _open(state, s, found[0], int(part.at[i]))
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
        arrived=int(part.arrived[i]),
        at=int(part.at[i]),
        historic=historic,
        evidence=float(np.log10(evidence)),
        threshold=float(rules.threshold[s]),
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
    state["alarm_cells"][s] = 0
    state["alarm_cells"][s, list(top.members)] = 1
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


def _alarm_id(name: bytes, incarnation: int, number: int, raw: np.void) -> bytes:
    digest = hashlib.blake2b(digest_size=16, person=b"tallyward alarm")
    digest.update(name + b"\0" + incarnation.to_bytes(8, "little") + number.to_bytes(8, "little"))
    digest.update(raw.tobytes())
    return digest.digest()
